package report

import (
	"bytes"
	"encoding/base64"
	"encoding/xml"
	"fmt"
	"image/png"
	"io"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/frame"
)

// candidate is a point source in the middle of its stamps, over a flat sky.
func candidate(id, frameName string, kind detect.Kind, probability, significance float64) detect.Candidate {
	const n = detect.StampSize
	c := detect.Candidate{ID: id, Frame: frameName, X: 120.25, Y: 40.5, RA: 148.21, Dec: -8.43, Flux: 1000, FluxErr: 50,
		Mag: 19.1, MagErr: 0.05, Significance: significance, RealProbability: probability, Kind: kind,
		ReferenceDistance: math.NaN(), ReferenceMag: math.NaN(), Flags: frame.CosmicRay}
	for _, plane := range []*[]float32{&c.StampNew, &c.StampReference, &c.StampDifference} {
		*plane = make([]float32, n*n)
		for i := range *plane {
			(*plane)[i] = float32(i%7) - 3
		}
	}
	sign := float32(math.Copysign(1, significance))
	for _, d := range []int{-1, 0, 1} {
		for _, e := range []int{-1, 0, 1} {
			c.StampDifference[(n/2+d)*n+n/2+e] = 200 * sign
		}
	}
	c.StampNew[0] = float32(math.NaN()) // outside the frame: lower left
	return c
}

func input() Input {
	searched, aside := catalog.NewFrameRecord("mr-101-01", catalog.Searched), catalog.NewFrameRecord("mr-<102>-02", catalog.SetAside)
	searched.Width, searched.Height, searched.MidMJD, searched.FWHM, searched.Candidates = 400, 300, 61466.5, 3.4, 3
	aside.Reason, aside.Detail = frame.ProblemNoMatch, `found <nothing> & "more"`
	return Input{Title: `Marrow & Ridge`, Version: "9.9", Frames: []catalog.FrameRecord{searched, aside}, Candidates: []detect.Candidate{
		candidate("low", "mr-101-01", detect.CosmicRay, 0.01, 40),
		candidate("second", "mr-101-01", detect.NewSource, 0.9, 9),
		candidate("first", "mr-101-01", detect.Faded, 0.97, -12),
	}}
}

func render(t *testing.T, in Input) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "report.html")
	if err := Write(path, in); err != nil {
		t.Fatal(err)
	}
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return string(data)
}

func TestPageHoldsEverythingAndNeedsNothing(t *testing.T) {
	text := render(t, input())
	for _, want := range []string{"Marrow &amp; Ridge", "mr-101-01", "mr-&lt;102&gt;-02", "no match: found &lt;nothing&gt; &amp; &#34;more&#34;",
		"set aside", "p = 0.970", "−12.0 σ", "09:52:50.40", "nightsift 9.9", "2027-03-02 12:00:00", `viewBox="0 0 400 300"`, "cosmic_ray"} {
		if !strings.Contains(text, want) && !strings.Contains(text, strings.ReplaceAll(want, "−", "-")) {
			t.Errorf("%q is missing", want)
		}
	}
	if a, b, c := strings.Index(text, ">first<"), strings.Index(text, ">second<"), strings.Index(text, ">low<"); a < 0 || b < a || c < b {
		t.Errorf("the candidates are not in order of probability: at %d, %d, %d", a, b, c)
	}
	if detail := strings.Index(text, "<details>"); detail < strings.Index(text, ">second<") || detail > strings.Index(text, ">low<") {
		t.Error("the improbable candidate is not among the less probable")
	}
	// Nothing is fetched from elsewhere.
	for _, m := range regexp.MustCompile(`(?i)(src|href|url)\s*[=(]\s*["']?([^"')\s>]*)`).FindAllStringSubmatch(text, -1) {
		if !strings.HasPrefix(m[2], "data:image/png;base64,") {
			t.Errorf("the page refers to %s", m[0])
		}
	}
	if n := strings.Count(text, "data:image/png"); n != 9 {
		t.Errorf("found %d pictures, expected 9", n)
	}
	// Every element is closed: the markup is read as strict XML but for the
	// elements that HTML leaves open.
	d := xml.NewDecoder(strings.NewReader(text))
	d.Strict, d.AutoClose, d.Entity = false, xml.HTMLAutoClose, xml.HTMLEntity
	depth := 0
	for {
		token, err := d.Token()
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		switch token.(type) {
		case xml.StartElement:
			depth++
		case xml.EndElement:
			depth--
		}
	}
	if depth != 0 {
		t.Errorf("%d elements are left open", depth)
	}
}

func TestStampsShowLightAndItsLoss(t *testing.T) {
	for _, c := range []detect.Candidate{candidate("plus", "f", detect.NewSource, 0.9, 9), candidate("minus", "f", detect.Faded, 0.9, -9)} {
		n, _, d, err := Pictures(&c)
		if err != nil {
			t.Fatal(err)
		}
		at := func(uri string, x, y int) (r, g, b uint32) {
			data, err := base64.StdEncoding.DecodeString(strings.TrimPrefix(uri, "data:image/png;base64,"))
			if err != nil {
				t.Fatal(err)
			}
			img, err := png.Decode(bytes.NewReader(data))
			if err != nil {
				t.Fatal(err)
			}
			if s := img.Bounds().Size(); s.X != detect.StampSize || s.Y != detect.StampSize {
				t.Fatalf("the picture is %v px", s)
			}
			r, g, b, _ = img.At(x, y).RGBA()
			return r, g, b
		}
		r, _, b := at(d, detect.StampSize/2, detect.StampSize/2)
		if (r > b) != (c.Significance > 0) {
			t.Errorf("%s: the middle of the difference has red %d, blue %d", c.ID, r, b)
		}
		// Row 1 of the stamp is at the bottom.
		r, g, b := at(n, 0, detect.StampSize-1)
		if [3]uint32{r >> 8, g >> 8, b >> 8} != [3]uint32{uint32(noData.R), uint32(noData.G), uint32(noData.B)} {
			t.Errorf("%s: the pixel without data is drawn as %d %d %d", c.ID, r>>8, g>>8, b>>8)
		}
	}
}

func TestUglyInput(t *testing.T) {
	if text := render(t, Input{Title: "empty"}); !strings.Contains(text, "no frames") {
		t.Error("an empty run is not said to be empty")
	}
	n := math.NaN()
	bare := detect.Candidate{ID: "bare", X: n, Y: n, RA: n, Dec: n, Flux: n, FluxErr: n, Mag: n, MagErr: n, Significance: n, RealProbability: n}
	flat := candidate("flat", "mr-101-01", detect.Dipole, 0.8, 5)
	for i := range flat.StampNew {
		flat.StampNew[i], flat.StampReference[i], flat.StampDifference[i] = float32(n), 5, 0
	}
	in := input()
	in.Candidates = append(in.Candidates, bare, flat)
	if text := render(t, in); !strings.Contains(text, "bare") || strings.Contains(text, "NaN%") {
		t.Error("candidates without values are not shown")
	}
	// The page stays bounded.
	for i := range 2 * mostCards {
		in.Candidates = append(in.Candidates, candidate(fmt.Sprint(i), "mr-101-01", detect.NewSource, 0.6, 6))
	}
	text := render(t, in)
	if cards := strings.Count(text, `<section class="card"`); cards != mostCards+2 {
		t.Errorf("found %d cards, expected %d", cards, mostCards+2)
	}
	if !strings.Contains(text, fmt.Sprintf("%d more of probability", 2*mostCards+3-mostCards)) {
		t.Error("the candidates left out are not counted")
	}
}
