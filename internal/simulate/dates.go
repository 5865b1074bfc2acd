package simulate

import (
	"fmt"
	"math"
)

// isoDate writes a Modified Julian Date as ISO 8601 with milliseconds
// (algorithm of Fliegel & Van Flandern 1968, CACM 11, 657).
func isoDate(mjd float64) string {
	day := math.Floor(mjd)
	ms := int(math.Round((mjd - day) * 86400000))
	if ms >= 86400000 {
		ms -= 86400000
		day++
	}
	l := int(day) + 2400001 + 68569
	n := 4 * l / 146097
	l -= (146097*n + 3) / 4
	i := 4000 * (l + 1) / 1461001
	l = l - 1461*i/4 + 31
	j := 80 * l / 2447
	d := l - 2447*j/80
	l = j / 11
	return fmt.Sprintf("%04d-%02d-%02dT%02d:%02d:%02d.%03d", 100*(n-49)+i+l, j+2-12*l, d,
		ms/3600000, ms/60000%60, ms/1000%60, ms%1000)
}
