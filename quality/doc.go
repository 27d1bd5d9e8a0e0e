// Package quality measures a run: how far the head moved from volume to
// volume, how much the signal changed, and how it stands above its noise.
//
// It takes arrays and numbers and gives arrays and numbers back; it knows
// neither files nor JSON. A series is volume-major: voxel v of volume t is
// data[t*nv+v], and inside a volume v = x + nx*(y + ny*z). What each figure is
// called, its unit, its definition and its source are declared once, in the
// table behind [Define]; sidecars and help are made from there.
//
// # Methods
//
//   - [FramewiseDisplacement]: FD_t = |dx|+|dy|+|dz| + r (|da|+|db|+|dg|),
//     backward differences, turns in radian, r = 50 mm: Power et al. 2012,
//     NeuroImage 59(3):2142-2154. FD depends on the point that the turns are
//     quoted about: one degree is 0.87 mm about the centre and 1.75 mm, for
//     the same motion, about a point 50 mm away.
//   - [RMSDeviation]: the root mean square distance between two places of the
//     same head, over a solid ball: Jenkinson 1999, technical report TR99MJ1.
//     Unlike FD it does not depend on how a pose is written down.
//   - [DVARS]: the root mean square over the head of x_t - x_(t-1): Smyser et
//     al. 2010, Cerebral Cortex 20(12):2852-2862; Power et al. 2012. Here in
//     percent of the mean over head and volumes, so no other scaling is implied.
//   - [TSNR]: temporal mean over temporal standard deviation (n-1), without
//     detrending: Krueger and Glover 2001, Magnetic Resonance in Medicine
//     46:631-637.
//   - [SliceSpikes]: our own score, defined beside the function.
//
// # Guarantees
//
//  1. The result has the same bits for any number of workers and on every
//     architecture: pieces of work are independent outputs, sums inside a piece
//     run in index order (in blocks of a fixed length, then over the blocks in
//     order), and no product is fused with a sum.
//  2. Inputs are not changed.
//  3. Sums are in float64.
//  4. What is undefined is NaN (0 in the map of [TSNR], whose voxels are
//     always finite), never a number that could be taken for a measurement.
//  5. A slice of the wrong length is a mistake of the calling code and panics;
//     no value in the data does.
//
// # Incomplete
//
// Ghosting, drift and the standardised DVARS are not here yet.
package quality
