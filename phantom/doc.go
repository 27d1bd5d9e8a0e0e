// Package phantom invents a head, moves it, and scans it slice by slice, so
// that what the program recovers can be held against what is exactly true.
//
// Nothing is interpolated. The head is a formula ([Head.At]); a scan
// ([Scan.Simulate]) evaluates it at the place where each voxel of each slice
// was in the head at the instant that slice was excited:
//
//	x_head = M(t)^-1 A (i, j, k),  t = n TR + slice time
//	signal = Gain(t, x) Head(x_head) prod over blobs (1 + Amplitude g Course(t))
//	stored = |signal + complex Gaussian noise|
//
// with M the [Motion], A the scan's affine. Activation belongs to the head and
// moves with it; receive gain belongs to the scanner and does not.
//
// It is point-sampled with white noise: no slice profile, no distortion, no
// spin history. Figures found with it are lower bounds of what a scanner gives.
//
// # Same bytes everywhere
//
// Every slice of every volume has its own noise generator, seeded by (seed,
// volume, slice), and is written by one worker alone; all arithmetic that
// reaches a sample rounds each product explicitly and takes elementary
// functions from detmath. So bytes depend on the Scan alone, never on workers,
// machine or run.
//
// # What it must not know
//
// The package is the oracle of the estimation and resampling code and therefore
// imports none of it; its rigid maps ([Rigid], [Mul], [Inverse]) are its own.
// Only cohort.go, which writes the demo dataset, knows a file format.
package phantom
