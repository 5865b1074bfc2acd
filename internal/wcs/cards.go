package wcs

import "fmt"

// Card is one header keyword; its value is a string, a float64 or an int.
type Card struct {
	Key     string
	Value   any
	Comment string
}

// Cards returns the keywords from which FromKeywords makes the same WCS again,
// in the CD form and in the header's own system. SIP terms that are zero are
// left out.
func (w *WCS) Cards() []Card {
	var cards []Card
	add := func(key string, value any, comment string) {
		cards = append(cards, Card{key, value, comment})
	}
	lon, lat := 1, 2
	if w.latFirst {
		lon, lat = 2, 1
	}
	heads := [2]string{"RA--", "DEC-"}
	if w.system.name == "GALACTIC" {
		heads = [2]string{"GLON", "GLAT"}
	}
	tail := "-" + w.Projection()
	if w.distortion != nil {
		tail += "-SIP"
	}
	add("WCSAXES", 2, "number of world axes")
	for i := 1; i <= 2; i++ {
		which := 0
		if i == lat {
			which = 1
		}
		add(fmt.Sprintf("CTYPE%d", i), heads[which]+tail, [2]string{"longitude", "latitude"}[which]+" and projection")
		add(fmt.Sprintf("CUNIT%d", i), "deg", "unit of the world coordinate")
		add(fmt.Sprintf("CRVAL%d", i), w.crval[which], "[deg] place of the reference pixel")
		add(fmt.Sprintf("CRPIX%d", i), w.crpix[i-1], "[pixel] reference pixel")
		for j := 1; j <= 2; j++ {
			add(fmt.Sprintf("CD%d_%d", i, j), w.cd[which][j-1], "[deg/pixel] from pixels to the plane")
		}
	}
	if w.system.name != "GALACTIC" {
		add("RADESYS", w.system.name, "celestial system")
	}
	if w.system.equinox != 0 {
		add("EQUINOX", w.system.equinox, "[yr] mean equator and equinox")
	}
	if w.fk4 != nil && w.system.epoch != w.system.equinox {
		add("MJD-OBS", mjdOfBesselian(w.system.epoch), "[d] time for which the turning FK4 is meant")
	}
	if w.lonpole != w.defaultLonpole() {
		add("LONPOLE", w.lonpole, "[deg] native longitude of the celestial pole")
	}
	if w.latpole != 90 {
		add("LATPOLE", w.latpole, "[deg] latitude of the native pole, if in doubt")
	}
	if standard := [2]float64{0, w.proj.theta}; w.reference != standard {
		if w.moved {
			add(fmt.Sprintf("PV%d_0", lon), 1, "the plane's origin is the reference point")
		}
		add(fmt.Sprintf("PV%d_1", lon), w.reference[0], "[deg] native longitude of the reference point")
		add(fmt.Sprintf("PV%d_2", lon), w.reference[1], "[deg] native latitude of the reference point")
	}
	zpx := w.Projection() == "ZPX"
	for m, v := range w.parameter.pv {
		if v != 0 && !zpx {
			add(fmt.Sprintf("PV%d_%d", lat, m), v, "projection parameter")
		}
	}
	if s := w.distortion; s != nil {
		sipCards(add, "A", &s.a)
		sipCards(add, "B", &s.b)
		if s.ap != nil && s.bp != nil {
			sipCards(add, "AP", s.ap)
			sipCards(add, "BP", s.bp)
		}
	}
	if zpx {
		for i, axis := range [2]int{lon, lat} {
			for n, text := range w.watCards(i == 1) {
				add(fmt.Sprintf("WAT%d_%03d", axis, n+1), text, "")
			}
		}
	} else if t := w.polynomial; t != nil {
		for i, axis := range [2]int{lon, lat} {
			f, radials := &t.lon, &t.lonRadial
			if i == 1 {
				f, radials = &t.lat, &t.latRadial
			}
			tpvTerms(func(m, p, q, radial int) {
				if i == 1 {
					p, q = q, p
				}
				v := f.c[p][q]
				if radial >= 0 {
					v = radials[radial]
				}
				if v != 0 || m == 1 {
					add(fmt.Sprintf("PV%d_%d", axis, m), v, "distortion in the plane")
				}
			})
		}
	}
	return cards
}

func sipCards(add func(string, any, string), prefix string, f *polynomial) {
	what := "[pixel] distortion"
	if len(prefix) == 2 {
		what = "[pixel] inverse distortion, approximate"
	}
	add(prefix+"_ORDER", f.order, "order of the polynomial")
	for p := 0; p <= f.order; p++ {
		for q := 0; p+q <= f.order; q++ {
			if v := f.c[p][q]; v != 0 {
				add(fmt.Sprintf("%s_%d_%d", prefix, p, q), v, what)
			}
		}
	}
}
