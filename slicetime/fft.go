package slicetime

import (
	"math"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
)

// A batched complex discrete Fourier transform, our own because its bits must
// not depend on the machine (see internal/detmath for how).
//
// Rules of this file:
//   - Data is [sample][lane]: complex sample m of every lane stands at z[2m]
//     (real parts) and z[2m+1] (imaginary parts). Lanes never mix, so the bits
//     of one series do not depend on which others share its batch.
//   - Lengths are 2^a 3^b. The forward transform decimates in frequency
//     (Gentleman and Sande 1966) and leaves its bins in digit-reversed order;
//     the inverse decimates in time (Cooley and Tukey 1965) and takes them so.
//     A filter in between looks its place up in fft.place, and no reordering
//     pass is needed.
//   - Neither direction scales; the filter carries 1/m.

// laneCount series are worked on side by side.
const laneCount = kernel.LaneCount

// lanes holds one sample of laneCount series.
type lanes = kernel.Lanes

// fft is a plan for m complex points: read only once made, shared by workers.
type fft struct {
	m      int
	stages []stage
	place  []int // place[k] is where the forward transform leaves bin k
}

// stage is one pass: butterflies of the radix within blocks of size points.
type stage struct {
	radix, size int
	// cos and -sin of 2 pi i j/size for j < size/radix, i = 1..radix-1, in that nesting.
	twiddle []float64
}

// fftLength returns the smallest 2^a 3^b, b <= 2, not below n.
func fftLength(n int) int {
	best := 1
	for best < n {
		best *= 2
	}
	for _, odd := range []int{3, 9} {
		m := odd
		for m < n {
			m *= 2
		}
		best = min(best, m)
	}
	return best
}

// newFFT plans for m points, m = 2^a 3^b.
func newFFT(m int) *fft {
	f := &fft{m: m}
	for size := m; size > 1; {
		radix := 2
		switch {
		case size%3 == 0:
			radix = 3
		case size%4 == 0:
			radix = 4
		case size%2 != 0:
			panic("slicetime: transform length has a factor other than 2 and 3")
		}
		f.stages = append(f.stages, newStage(radix, size))
		size /= radix
	}
	f.place = make([]int, m)
	for p := range m {
		f.place[f.binAt(p)] = p
	}
	return f
}

func newStage(radix, size int) stage {
	s := stage{radix: radix, size: size}
	for j := range size / radix {
		for i := 1; i < radix; i++ {
			// i*j < size, so the angle lies inside one turn.
			sin, cos := detmath.Sincos(2 * math.Pi * float64(i*j) / float64(size))
			s.twiddle = append(s.twiddle, cos, -sin)
		}
	}
	return s
}

// binAt is the frequency that stands at position p after the forward stages:
// block i of a stage holds the bins that leave i when divided by the radix.
func (f *fft) binAt(p int) int {
	bin, weight := 0, 1
	for _, s := range f.stages {
		q := s.size / s.radix
		bin += weight * (p / q)
		weight *= s.radix
		p %= q
	}
	return bin
}

// forward computes X[k] = sum_n z[n] exp(-2 pi i k n/m) in place; bin k ends at place[k].
func (f *fft) forward(z []lanes) {
	for i := range f.stages {
		s := &f.stages[i]
		kernel.Butterflies(z[:2*f.m], s.radix, s.size/s.radix, s.twiddle, false)
	}
}

// inverse computes z[n] = sum_k X[k] exp(+2 pi i k n/m) in place from bins in
// the order that forward leaves.
func (f *fft) inverse(z []lanes) {
	for i := len(f.stages) - 1; i >= 0; i-- {
		s := &f.stages[i]
		kernel.Butterflies(z[:2*f.m], s.radix, s.size/s.radix, s.twiddle, true)
	}
}
