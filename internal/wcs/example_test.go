package wcs_test

import (
	"fmt"

	"nightsift/internal/wcs"
)

func ExampleNewTAN() {
	// A frame of 2048 x 2048 pixels of 0.36 arcsec, north up and east left.
	w, err := wcs.NewTAN(1024.5, 1024.5, 150.1, 2.2, [2][2]float64{{-1e-4, 0}, {0, 1e-4}})
	if err != nil {
		fmt.Println(err)
		return
	}
	ra, dec, err := w.PixelToSky(1, 1)
	fmt.Printf("%.6f %.6f %v\n", ra, dec, err)
	_, _, err = w.SkyToPixel(330, 0)
	fmt.Println(err)
	// Output:
	// 150.202418 2.097647 <nil>
	// wcs: position is outside the projection
}
