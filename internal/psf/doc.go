// Package psf learns how a point of light is spread over the pixels of a
// frame, and how that changes over the field.
//
// # The model
//
// The pixel values of a star of flux F at (x0,y0) are F·P(x-x0, y-y0; x0,y0)
// plus sky. P is the effective point spread function: the light that one pixel
// gathers, so the pixel's own area is part of it (Anderson & King 2000, PASP
// 112, 1360). It has two parts,
//
//	P = (E + R) / (1 + net flux of R),
//
// E is an elliptical profile integrated over the pixel. Its shape matrix S(x,y)
// [px²] is a polynomial in position of order 0 to 3; with q² = uᵀ S⁻¹ u,
//
//	E = f(q) / √det S,   f ∝ (1+q²)^(-β) · exp(Σ c_k N_k(ln(1+q²/q_h²))).
//
// The first factor is Moffat's profile (Moffat 1969, A&A 3, 455) and the second
// a radial spline which beyond about 4 FWHM is a power law, so that the light
// outside any stamp counts. q_h is where the Moffat profile falls to one half. β and the c_k hold for the whole frame.
//
// R is what an elliptical profile cannot express: a quadratic B-spline on a
// grid of nodes FWHM/5 apart, integrated over the pixel in closed form, with
// terms in position of order 0 to 2. It is shrunk towards zero by a prior whose
// strength, like all orders, is chosen by prediction of stars left out of the
// fit; with few stars it vanishes.
//
// # Normalisation
//
// The sum of P over all pixels of the plane is 1: light beyond a rendered stamp
// counts. Fluxes measured with P are total fluxes.
//
// # Convention
//
// Positions are FITS pixel coordinates: (1,1) is the centre of the first pixel.
// A stamp has an odd size; its pixel (i,j), 0-based, is at offset
// (i-(size-1)/2, j-(size-1)/2) from the stamp's centre.
package psf
