// Package evenkeel is the root of a command-line program that turns raw
// echo-planar (EPI) BOLD runs of a BIDS dataset into series in which every voxel
// refers to one instant and one head position. The program is cmd/evenkeel.
//
// Which package holds which method:
//
//	slicetime   moving slices to one instant: Fourier phase shift, windowed sinc
//	realign     head motion: estimation by Gauss-Newton, B-spline resampling
//	quality     framewise displacement, RMS deviation, DVARS, tSNR, slice spikes
//	phantom     an analytic head that moves, sampled slice by slice
//
// and which keeps the files straight:
//
//	nifti       images
//	dataset     the BIDS tree and the names in it
//	sidecar     what the scanner said, checked
//	provenance  the record of a run, and its audit
//	fault       every reason for refusing or warning, declared once
//	pipeline    plans, runs, publishing, exit status
//
// The promise to users is the command line and the files; the Go API may change.
package evenkeel
