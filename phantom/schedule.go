package phantom

import "fmt"

// Slice schedules: seconds from the start of the volume by slice index, spread
// evenly over the repetition time tr (s). The n-th excitation is at n tr / shots.

// Sequential excites the slices in the order of their index (slice_code 1 of
// NIfTI-1: sequential increasing).
func Sequential(n int, tr float64) []float64 { return Multiband(n, 0, tr) }

// Interleaved excites slices 0, 2, 4, ... and then 1, 3, 5, ... (slice_code 3 of
// NIfTI-1: alternating increasing).
func Interleaved(n int, tr float64) []float64 { return Multiband(n, 1, tr) }

// Multiband excites factor slices at once: k, k+n/factor, k+2n/factor, ..., and
// the groups k in the order of Interleaved. n must be divisible by factor. As a
// convention of this package factor 0 gives one slice at a time in sequence.
func Multiband(n, factor int, tr float64) []float64 {
	sequential := factor == 0
	factor = max(factor, 1)
	if n < 0 || n%factor != 0 {
		panic(fmt.Sprintf("phantom: %d slices cannot be excited %d at a time", n, factor))
	}
	shots := n / factor
	t := make([]float64, n)
	for i := range t {
		k := i % shots
		at := k / 2
		if k%2 == 1 {
			at += (shots + 1) / 2
		}
		if sequential {
			at = k
		}
		t[i] = float64(at) * tr / float64(shots)
	}
	return t
}

// Reversed gives the schedule from the last slice to the first: what a sidecar
// list means under a negative SliceEncodingDirection.
func Reversed(times []float64) []float64 {
	r := make([]float64, len(times))
	for i, t := range times {
		r[len(times)-1-i] = t
	}
	return r
}
