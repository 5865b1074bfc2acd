// Package wcs maps pixels to the sky and back.
package wcs

// WCS is a celestial world coordinate system.
type WCS struct{}
