package slicetime

import (
	"math"

	"evenkeel/internal/detmath"
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

// laneCount series are worked on side by side. Eight float64 are one cache line.
const laneCount = 8

// lanes holds one sample of laneCount series.
type lanes [laneCount]float64

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
	z = z[:2*f.m]
	for i := range f.stages {
		s := &f.stages[i]
		switch s.radix {
		case 4:
			s.forward4(z)
		case 3:
			s.forward3(z)
		default:
			s.forward2(z)
		}
	}
}

// inverse computes z[n] = sum_k X[k] exp(+2 pi i k n/m) in place from bins in
// the order that forward leaves.
func (f *fft) inverse(z []lanes) {
	z = z[:2*f.m]
	for i := len(f.stages) - 1; i >= 0; i-- {
		s := &f.stages[i]
		switch s.radix {
		case 4:
			s.inverse4(z)
		case 3:
			s.inverse3(z)
		default:
			s.inverse2(z)
		}
	}
}

func (s *stage) forward2(z []lanes) {
	q := s.size / 2
	for j := range q {
		wr, wi := s.twiddle[2*j], s.twiddle[2*j+1]
		for b := j; 2*b < len(z); b += s.size {
			ar, ai := &z[2*b], &z[2*b+1]
			br, bi := &z[2*(b+q)], &z[2*(b+q)+1]
			for l := range ar {
				xr, xi := ar[l]-br[l], ai[l]-bi[l]
				ar[l] += br[l]
				ai[l] += bi[l]
				br[l] = float64(xr*wr) - float64(xi*wi)
				bi[l] = float64(xr*wi) + float64(xi*wr)
			}
		}
	}
}

func (s *stage) inverse2(z []lanes) {
	q := s.size / 2
	for j := range q {
		wr, wi := s.twiddle[2*j], -s.twiddle[2*j+1]
		for b := j; 2*b < len(z); b += s.size {
			ar, ai := &z[2*b], &z[2*b+1]
			br, bi := &z[2*(b+q)], &z[2*(b+q)+1]
			for l := range ar {
				xr := float64(br[l]*wr) - float64(bi[l]*wi)
				xi := float64(br[l]*wi) + float64(bi[l]*wr)
				br[l] = ar[l] - xr
				bi[l] = ai[l] - xi
				ar[l] += xr
				ai[l] += xi
			}
		}
	}
}

// sin60 is the sine of 60 degrees, sqrt(3)/2 (OEIS A010527).
const sin60 = 0.86602540378443864676372317075293618

func (s *stage) forward3(z []lanes) {
	q := s.size / 3
	for j := range q {
		w := s.twiddle[4*j : 4*j+4 : 4*j+4]
		w1r, w1i, w2r, w2i := w[0], w[1], w[2], w[3]
		for at := j; 2*at < len(z); at += s.size {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			for l := range ar {
				sr, si := br[l]+cr[l], bi[l]+ci[l]
				dr, di := float64((br[l]-cr[l])*sin60), float64((bi[l]-ci[l])*sin60)
				hr, hi := ar[l]-float64(0.5*sr), ai[l]-float64(0.5*si)
				ar[l] += sr
				ai[l] += si
				// b' = h - i d, c' = h + i d
				xr, xi := hr+di, hi-dr
				br[l] = float64(xr*w1r) - float64(xi*w1i)
				bi[l] = float64(xr*w1i) + float64(xi*w1r)
				xr, xi = hr-di, hi+dr
				cr[l] = float64(xr*w2r) - float64(xi*w2i)
				ci[l] = float64(xr*w2i) + float64(xi*w2r)
			}
		}
	}
}

func (s *stage) inverse3(z []lanes) {
	q := s.size / 3
	for j := range q {
		w := s.twiddle[4*j : 4*j+4 : 4*j+4]
		w1r, w1i, w2r, w2i := w[0], -w[1], w[2], -w[3]
		for at := j; 2*at < len(z); at += s.size {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			for l := range ar {
				pr := float64(br[l]*w1r) - float64(bi[l]*w1i)
				pi := float64(br[l]*w1i) + float64(bi[l]*w1r)
				qr := float64(cr[l]*w2r) - float64(ci[l]*w2i)
				qi := float64(cr[l]*w2i) + float64(ci[l]*w2r)
				sr, si := pr+qr, pi+qi
				dr, di := float64((pr-qr)*sin60), float64((pi-qi)*sin60)
				hr, hi := ar[l]-float64(0.5*sr), ai[l]-float64(0.5*si)
				ar[l] += sr
				ai[l] += si
				// b = h + i d, c = h - i d
				br[l], bi[l] = hr-di, hi+dr
				cr[l], ci[l] = hr+di, hi-dr
			}
		}
	}
}

func (s *stage) forward4(z []lanes) {
	q := s.size / 4
	for j := range q {
		w := s.twiddle[6*j : 6*j+6 : 6*j+6]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], w[1], w[2], w[3], w[4], w[5]
		for at := j; 2*at < len(z); at += s.size {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			dr, di := &z[2*(at+3*q)], &z[2*(at+3*q)+1]
			if j == 0 { // every twiddle is one
				for l := range ar {
					pr, pi := ar[l]+cr[l], ai[l]+ci[l]
					mr, mi := ar[l]-cr[l], ai[l]-ci[l]
					sr, si := br[l]+dr[l], bi[l]+di[l]
					tr, ti := br[l]-dr[l], bi[l]-di[l]
					ar[l], ai[l] = pr+sr, pi+si
					br[l], bi[l] = mr+ti, mi-tr
					cr[l], ci[l] = pr-sr, pi-si
					dr[l], di[l] = mr-ti, mi+tr
				}
				continue
			}
			for l := range ar {
				pr, pi := ar[l]+cr[l], ai[l]+ci[l]
				mr, mi := ar[l]-cr[l], ai[l]-ci[l]
				sr, si := br[l]+dr[l], bi[l]+di[l]
				tr, ti := br[l]-dr[l], bi[l]-di[l]
				ar[l], ai[l] = pr+sr, pi+si
				xr, xi := mr+ti, mi-tr // m - i t
				br[l] = float64(xr*w1r) - float64(xi*w1i)
				bi[l] = float64(xr*w1i) + float64(xi*w1r)
				xr, xi = pr-sr, pi-si
				cr[l] = float64(xr*w2r) - float64(xi*w2i)
				ci[l] = float64(xr*w2i) + float64(xi*w2r)
				xr, xi = mr-ti, mi+tr // m + i t
				dr[l] = float64(xr*w3r) - float64(xi*w3i)
				di[l] = float64(xr*w3i) + float64(xi*w3r)
			}
		}
	}
}

func (s *stage) inverse4(z []lanes) {
	q := s.size / 4
	for j := range q {
		w := s.twiddle[6*j : 6*j+6 : 6*j+6]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], -w[1], w[2], -w[3], w[4], -w[5]
		for at := j; 2*at < len(z); at += s.size {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			dr, di := &z[2*(at+3*q)], &z[2*(at+3*q)+1]
			if j == 0 {
				for l := range ar {
					pr, pi := ar[l]+cr[l], ai[l]+ci[l]
					mr, mi := ar[l]-cr[l], ai[l]-ci[l]
					sr, si := br[l]+dr[l], bi[l]+di[l]
					tr, ti := br[l]-dr[l], bi[l]-di[l]
					ar[l], ai[l] = pr+sr, pi+si
					br[l], bi[l] = mr-ti, mi+tr
					cr[l], ci[l] = pr-sr, pi-si
					dr[l], di[l] = mr+ti, mi-tr
				}
				continue
			}
			for l := range ar {
				xr := float64(br[l]*w1r) - float64(bi[l]*w1i)
				xi := float64(br[l]*w1i) + float64(bi[l]*w1r)
				yr := float64(cr[l]*w2r) - float64(ci[l]*w2i)
				yi := float64(cr[l]*w2i) + float64(ci[l]*w2r)
				vr := float64(dr[l]*w3r) - float64(di[l]*w3i)
				vi := float64(dr[l]*w3i) + float64(di[l]*w3r)
				pr, pi := ar[l]+yr, ai[l]+yi
				mr, mi := ar[l]-yr, ai[l]-yi
				sr, si := xr+vr, xi+vi
				tr, ti := xr-vr, xi-vi
				ar[l], ai[l] = pr+sr, pi+si
				br[l], bi[l] = mr-ti, mi+tr // m + i t
				cr[l], ci[l] = pr-sr, pi-si
				dr[l], di[l] = mr+ti, mi-tr // m - i t
			}
		}
	}
}
