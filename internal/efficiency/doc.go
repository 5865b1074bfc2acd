// Package efficiency measures which part of the new sources on a frame a search
// finds, by putting artificial ones into it.
//
// Point sources are drawn with the frame's own point-spread function, gain and
// photon noise at random places, go through the stages, and are sought among the
// candidates. What comes back, against magnitude, is described by binomial
// intervals and by a smooth curve fitted by maximum likelihood, from which the
// magnitudes follow at which half and nine tenths of all sources are found.
//
// There are two ways. Full adds the sources to the pixels and repeats every
// stage. Shared takes what the search of the frame has solved, alignment,
// point-spread functions, kernel, background and noise model, and sends only the
// added light through the subtraction, which is linear in the new frame; score,
// detection, measurement and classification are done anew.
//
// Sources of the methods: injection of artificial stars, Stetson & Harris 1988,
// AJ 96, 909; intervals, Wilson 1927, J. Am. Stat. Assoc. 22, 209 and Clopper &
// Pearson 1934, Biometrika 26, 404, compared by Brown, Cai & DasGupta 2001,
// Stat. Sci. 16, 101; the curve is a probit or logit regression, Bliss 1934,
// Science 79, 38 and Berkson 1944, J. Am. Stat. Assoc. 39, 357, times a plateau.
package efficiency
