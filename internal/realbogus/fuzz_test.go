package realbogus

import (
	"encoding/json"
	"math"
	"testing"
)

// FuzzDecode: whatever is in a file, it is refused with an error or gives a
// model whose probabilities are numbers between 0 and 1.
func FuzzDecode(f *testing.F) {
	prior := Prior()
	good, err := prior.Encode()
	if err != nil {
		f.Fatal(err)
	}
	f.Add(good)
	f.Add(good[:len(good)/2])
	f.Add(shippedFile[:4000])
	f.Add([]byte(`{"format": 1}`))
	f.Fuzz(func(t *testing.T, data []byte) {
		m, err := Decode("fuzz", data)
		if err == nil {
			check(t, m)
		}
		// The same past the digest, which random changes would never pass.
		if m = unsigned(data); m == nil {
			return
		}
		signed, err := m.Encode()
		if err != nil {
			return
		}
		if m, err = Decode("fuzz", signed); err == nil {
			check(t, m)
		}
	})
}

func check(t *testing.T, m *Model) {
	var low, high Features
	for k := range low {
		low[k], high[k] = Descriptions[k].Low, Descriptions[k].High
	}
	for _, x := range []Features{{}, low, high} {
		if p := m.Probability(&x); !(p >= 0 && p <= 1) || math.IsNaN(p) {
			t.Fatalf("probability %g", p)
		}
	}
}

// unsigned reads a model without looking at its digest.
func unsigned(data []byte) *Model {
	var m Model
	if json.Unmarshal(data, &m) != nil {
		return nil
	}
	return &m
}
