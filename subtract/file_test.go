package subtract

import (
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
)

// TestOriginsInTheHeader: a reader of the file sees which values are estimates.
func TestOriginsInTheHeader(t *testing.T) {
	f := frame.New("a", frame.NewImage(4, 4))
	f.Meta.Gain, f.Meta.ReadNoise, f.Meta.Saturation = 1.503718265514, 6.25, 60000
	f.Meta.Origin = map[string]string{"gain": "estimated: ± 0.12, noise against level up to 4.2e+04 count", "read_noise": "RON"}
	h := &fits.Header{}
	frameCards(h, f)
	for key, want := range map[string]string{"GAIN": "[electron/count] estimate, see COMMENT", "RDNOISE": "[electron] from RON", "SATURATE": "[count]"} {
		if c, _ := h.Get(key); c.Comment != want {
			t.Errorf("%s has the comment %q, want %q", key, c.Comment, want)
		}
	}
	comments := ""
	for _, c := range h.Cards() {
		if c.Key == "COMMENT" {
			comments += c.Comment
		}
	}
	if !strings.Contains(comments, "GAIN is an estimate: +- 0.12, noise against level") || strings.Contains(comments, "RDNOISE") {
		t.Errorf("COMMENT %q", comments)
	}
}
