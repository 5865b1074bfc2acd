// Package reference builds a deep reference from exposures of one field and
// filter.
//
// # Method
//
// Each frame is measured by itself: sky, noise, stars, defects. The best one
// gives the pixel grid, unless one is asked for, and the scale of fluxes; the
// others are registered to it by their stars and resampled (package align).
//
// The stack goes by tiles. In each, what every frame should show is predicted
// from the stack of all: its Fourier transform times the ratio of the frame's
// point-spread function to the stack's. A pixel is left out when it departs
// from this prediction by more than its noise, the photons of the source and
// the uncertainty of the prediction allow. A star's core therefore survives
// whatever the seeing did. Light that single pixels do not give away is found
// by the matched filter of the same residual, and left out over its whole
// profile. What was left out is replaced by the prediction, so that the
// point-spread function of the stack does not change from pixel to pixel.
//
// Two ways to add:
//
//   - mean: a weighted mean. The weights maximise the signal to noise of a point
//     source found with the stack's own point-spread function: with overlaps
//     G_ij = Σ P_i P_j and variances v_i the signal to noise squared is
//     (wᵀ G w)/(wᵀ V w), largest for the first eigenvector of V^-½ G V^-½. With
//     equal seeing these are the inverse variances.
//   - proper: proper coaddition (Zackay & Ofek 2017, ApJ 836, 188), which keeps
//     all information of frames of any seeing and has white noise:
//     R̂ = Σ P̂_j* M̂_j/v_j / sqrt(Σ |P̂_j|²/v_j).
//
// The signal to noise squared of proper coaddition is the trace of V^-½ G V^-½;
// that of the mean is its largest eigenvalue.
//
// # Conventions
//
// Counts of the result are those of the anchor, the frame that gave the scale.
// Sky is subtracted. The variance is that of the sky, with the power that the
// noise has at low frequencies; the photon noise of sources follows from the
// effective gain. Positions are FITS pixels: (1,1) is the centre of the first.
package reference
