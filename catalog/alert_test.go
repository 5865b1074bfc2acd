package catalog

import (
	"bytes"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// An alert about an object obeys the rules of VOEvent, has its place, its
// detections and the warning that limits of the site come first.
func TestAlert(t *testing.T) {
	s := newStore(t)
	inv := survey(13, 6, 10, 0, 359.9999, -10)
	for i := range inv.frames {
		inv.frames[i].rec.SetWCS(pointing{ra: 359.9999, dec: -10, width: 2000, height: 1500}, 2000, 1500)
		inv.frames[i].rec.MagLimit5Sigma = 20
	}
	inv.frames[0].candidates = nil
	addAll(t, s, inv.frames)
	objects, err := s.Objects(ctx, ObjectQuery{MinNights: 2})
	if err != nil || len(objects) == 0 {
		t.Fatal(len(objects), err)
	}
	o := objects[0]
	settings := AlertSettings{Survey: "Marrow Ridge Survey", Date: "2031-03-05T01:02:03", Version: "0.1",
		Longitude: -70, Latitude: -30, Height: 2000}
	p, err := s.Alert(ctx, o.Founder, settings)
	if err != nil {
		t.Fatal(err)
	}
	var b, again bytes.Buffer
	if err := p.Encode(&b); err != nil {
		t.Fatal(err)
	}
	if p, err = s.Alert(ctx, o.Name, settings); err != nil {
		t.Fatal(err)
	}
	if err := p.Encode(&again); err != nil || !bytes.Equal(b.Bytes(), again.Bytes()) {
		t.Errorf("a second alert differs: %v", err)
	}
	path := filepath.Join(t.TempDir(), "alert.xml")
	if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
	outside.Command(t, "xmllint", "--noout", "--nonet", "--schema", "../internal/voevent/testdata/voevent20.xsd", path)
	for _, want := range []string{o.Name, "ivo://" + madeUpAuthority(s.cfg.Prefix) + "/new-objects#J", "last_missed", "safety", "operators come first", `role="observation"`} {
		if !strings.Contains(b.String(), want) {
			t.Errorf("the alert lacks %q", want)
		}
	}
	if got := strings.Count(b.String(), "<TR>"); got != o.Detections {
		t.Errorf("%d detections in the alert, want %d", got, o.Detections)
	}
	if math.Abs(p.Where.Error*3600-math.Hypot(o.RAErr, o.DecErr)) > 1e-12 || p.Where.TimeError != 30 {
		t.Errorf("errors: %g deg, %g s", p.Where.Error, p.Where.TimeError)
	}
	settings.Authority = "no/authority at all"
	if p, err = s.Alert(ctx, o.Name, settings); err != nil {
		t.Fatal(err)
	}
	if err := p.Encode(&b); err == nil {
		t.Error("a broken authority was accepted")
	}
	if err := s.SetState(ctx, o.Name, Remark{State: StateRejected, Author: "Ada", Time: at(1)}); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Alert(ctx, o.Name, settings); err == nil || !strings.Contains(err.Error(), "rejected") {
		t.Errorf("an alert about a rejected object: %v", err)
	}
	if _, err := s.Alert(ctx, "nobody", settings); err == nil {
		t.Error("an alert about nobody")
	}
}
