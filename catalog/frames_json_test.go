package catalog

import (
	"encoding/json"
	"fmt"
	"math"
	"testing"
)

func TestFrameRecordSurvivesJSON(t *testing.T) {
	full := NewFrameRecord("2027-03-02/a \"b\"", SetAside)
	full.Reason, full.Detail = "no_match", "line\nbreak, ‘quotes’"
	full.MidMJD, full.Sky, full.Seconds = 61466.123456789012, 1e-17, 1.0/3
	full.StarsMatched, full.Candidates, full.Width = 7, 3, 1024
	full.Jacobian = [4]float64{0.6, 1e-4, -1e-4, 0.6}
	full.Inputs = []Input{{Role: "new", Name: "x.fits", Checksum: "ab"}}
	for _, want := range []FrameRecord{full, NewFrameRecord("bare", Failed)} {
		data, err := json.Marshal(want)
		if err != nil {
			t.Fatal(err)
		}
		got := FrameRecord{MidMJD: 5, Reason: "left over"}
		if err := json.Unmarshal(data, &got); err != nil {
			t.Fatal(err)
		}
		// NaN differs from itself; its text does not.
		if a, b := fmt.Sprintf("%#v", got), fmt.Sprintf("%#v", want); a != b {
			t.Errorf("found %s\nexpected %s", a, b)
		}
		if math.IsNaN(want.Sky) != math.IsNaN(got.Sky) {
			t.Error("an unknown number came back as another")
		}
	}
	var r FrameRecord
	if err := json.Unmarshal([]byte(`{"frame":"a","mid_mjd":"x"}`), &r); err == nil {
		t.Error("a text in a column of numbers was accepted")
	}
}
