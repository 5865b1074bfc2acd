// Package simulate invents a sky and photographs it, so that the pipeline can be
// scored against a truth it never saw.
//
// Every frame is rendered straight from the scene (stars, galaxies, new light)
// through its own camera: rotation, parity, pointing, scale, polynomial
// distortion, a point-spread function that is elongated and varies over the
// field, transparency, sky, detector faults and noise. No frame is ever made by
// resampling or convolving another one. The package shares no code with the
// pipeline's projections, point-spread functions, resampling or noise: an error
// there cannot cancel here. Only files are written through internal/fits.
//
// Everything follows from a seed: the same arguments give the same pixels.
//
// Positions are FITS pixel coordinates: (1,1) is the centre of the first pixel.
// Planes are in row order, pixel (x,y) is element (y-1)*Width+(x-1). Fluxes are
// counts of the frame they are given for. Angles are degrees unless an arcsecond
// is named.
package simulate
