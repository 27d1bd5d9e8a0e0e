// Package realign estimates and removes rigid head motion.
//
// # Conventions
//
// World space is RAS+ in mm. A [Pose] takes a point of the reference to where
// that point was in a volume; a [Grid] says where voxels lie in the world. A
// volume is a flat float32 slice, x fastest. Any affine will do: oblique,
// left-handed, anisotropic, slices along any axis.
//
// # Method of EstimateVolumes
//
//  1. A head mask is found in the reference (Otsu's threshold, the largest
//     connected piece, holes filled).
//
//  2. Coarse: each volume and the reference are smoothed by an isotropic
//     Gaussian of 8 mm, thinned out, and matched from the identity. Where the
//     match is poor, from a fan of starting turns as well; the best counts.
//     No volume starts from another volume's pose in this round, so results
//     depend neither on the order of the volumes nor on who computed what when.
//
//  3. Fine: both are smoothed by a Gaussian of about half the largest voxel
//     edge, isotropic in mm so that it commutes with rotation, and matched on the
//     reference's own voxels:
//
//     e(x) = V(M x) - (b.phi(x)) R(x),  phi = (1, X/80, Y/80, Z/80)
//
//     by Gauss-Newton on the pose M <- M exp(d) and the four gain coefficients
//     b (a polynomial of the first degree is one in scanner coordinates as well, where
//     receive coils stand still while the head moves), weighted by slice, by Tukey's
//     biweight and, in one more pass where it matters, by how much a voxel varies
//     of itself (variance.go). The derivatives are those of R at its voxels, whatever the
//     pose, so they are taken once; after the smoothing a quintic spline gives V
//     between its voxels all but exactly. First a quarter of the rows, then all.
//
//  4. For [Mean]: volumes judged aligned are mapped back and averaged, what they
//     see from near their field's edge weighing less, and every volume is matched
//     again to the average.
//
//  5. Each volume is judged: aligned, doubtful or lost, with the reason.
//     Volumes that are not aligned get another try from their neighbours' poses.
//
// Sources: the inverse compositional algorithm of image alignment after Baker and
// Matthews 2004, IJCV 56(3):221-255; biweight after Beaton and Tukey 1974, Technometrics 16:147-185
// (from memory); B-splines after Unser 1999, IEEE Signal Processing Magazine
// 16(6):22-38; threshold after Otsu 1979, IEEE Trans. SMC 9(1):62-66. Margins,
// smoothing and gain model were chosen by simulation; each constant carries its
// reason.
//
// # Method of EstimatePath and Joint
//
// See there; the prior is described in prior.go, the template's rebuilding in
// rebuild.go.
//
// # Guarantees
//
//  1. The same input gives the same bits for any number of workers and on any
//     machine.
//  2. Input volumes are never changed.
//  3. No volume is dropped: each has a pose, numeric and finite, and a state.
//  4. A shift and turn of the world by a rigid change of the affine changes the
//     poses only by that change of axes.
//
// # Incomplete
//
// A path needs at least half of the excitations to see the head past the margins:
// most slabs of eight slices and fewer keep one pose a volume. Motion locked to the
// repetition time is taken for misplaced slices. With voxels of 6 mm the path is
// further off than it expects (docs/accuracy.md).
package realign
