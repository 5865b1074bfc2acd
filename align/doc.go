// Package align is the first stage: it finds a new frame's stars in the
// reference, fits the geometry between the two, and brings the reference onto
// the new frame's pixel grid.
//
// # Method
//
// Stars are matched by geometric hashing: triangles of neighbouring bright
// stars are compared by the ratios of their sides, which do not change with
// shift, rotation, mirroring and scale (Groth 1986, AJ 91, 1244; Valdes et al.
// 1995, PASP 107, 1119). Each pair of alike triangles proposes a similarity
// transform; the proposal is verified by the other stars, grown outwards from
// the triangle (Fischler & Bolles 1981, CACM 24, 381), and accepted only if the
// number of coincidences is far above what chance gives with as many proposals.
// Where both frames have world coordinates that agree to some tens of pixels,
// they replace the hashing, but not the verification.
//
// A polynomial in Legendre form maps new pixels to reference pixels. Its order
// is chosen by cross-validation, its weights are the stars' centroid errors
// with an added floor that is estimated from the residuals.
//
// The reference is resampled by quintic B-splines (Unser, Aldroubi & Eden 1993,
// IEEE Trans. Signal Process. 41, 821), or, where a new pixel is longer than 1.1
// of its own, by a widened Lanczos kernel of three lobes (Duchon 1979, J. Appl.
// Meteor. 18, 1016), and multiplied by the ratio of pixel areas, so that the
// counts of a source are conserved. The new frame itself is never resampled: it
// is the shallower of the two and keeps its white noise.
//
// # Coordinates
//
// All positions are FITS pixel coordinates: (1,1) is the centre of the first
// pixel. Transforms map positions on the new frame to positions on the
// reference.
package align
