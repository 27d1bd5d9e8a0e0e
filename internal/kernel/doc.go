// Package kernel holds the inner loops of resampling, matching and time
// correction, in float32 over rows of values, and in float64 where series in time are
// worked on, eight side by side: as AVX2 assembly, written by package gen, and as plain
// Go for every other processor.
//
// Both give the same bits for all inputs, NaN payloads apart: each file of kernels
// ends in the plain twin of its assembly, with the same lanes and the same order of
// sums, and products are rounded before they are added (no fused multiply-add:
// the conversions in float32(a*b) + c see to that under GOAMD64=v3 and on arm64
// too). So results hang on no processor, nor, but for [Gram], on how work is cut into
// calls.
//
// Which twin runs is decided once, by the processor; EVENKEEL_PLAIN=1 in the
// environment forces plain Go.
//
// Lengths and indices are the caller's duty: a wrong one panics, whichever twin
// runs. Kernels keep nothing, and any number may run at once on separate outputs.
package kernel

//go:generate go run ./gen -out .
