package survey

import (
	"math"

	"nightsift/catalog"
)

// AlertSettings say who and where the survey is, for alerts.
func (f *Folder) AlertSettings(version string) catalog.AlertSettings {
	c := &f.Config
	a := catalog.AlertSettings{Survey: c.Survey.Name, Version: version,
		Longitude: math.NaN(), Latitude: math.NaN(), Height: math.NaN()}
	if site, ok := c.site(); ok {
		a.Longitude, a.Latitude, a.Height = site.Longitude, site.Latitude, site.Height
	}
	return a
}
