package slicetime

import (
	"math"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
)

// A circular delay of real series of 2m samples, through one complex transform
// of m points: z[j] = x[2j] + i x[2j+1] (the classical packing of a real series
// into one of half the length; Cooley, Lewis, Welch 1970, J. Sound Vib.
// 12:315-337, from memory). With a = Z[k] and b = conj(Z[m-k]),
//
//	E = (a + b)/2, O = (a - b)/(2i)        transforms of the even and odd samples
//	X[k] = E + w O, conj X[m-k] = E - w O  w = exp(-2 pi i k/(2m))
//
// The filter multiplies X[k] by H[k], and the same three steps backwards give
// Z'[k]. All of it is linear in a and b, so that Z'[k] = A[k] a + B[k] b with
// two complex tables that also carry the 1/m of the inverse transform.

// phaseShift moves series of 2m samples by a constant: y[n] = x(n + shift), circular.
type phaseShift struct {
	fft *fft
	// For every bin k: real and imaginary part of A[k], then of B[k].
	table []float64
}

// newPhaseShift prepares the shift (in samples, |shift| <= 0.5 in this package).
func newPhaseShift(f *fft, shift float64) *phaseShift {
	p := &phaseShift{fft: f, table: make([]float64, 4*f.m)}
	for k := range f.m {
		a := p.column(k, shift, 1)
		b := p.column(k, shift, -1)
		copy(p.table[4*k:], []float64{real(a), imag(a), real(b), imag(b)})
	}
	return p
}

// column is Z'[k] for a = 1, b = 0 (sign 1) or a = 0, b = 1 (sign -1).
func (p *phaseShift) column(k int, shift, sign float64) complex128 {
	m := p.fft.m
	n := float64(2 * m)
	// y(n) = x(n + s): X[k] exp(+2 pi i k s/N), the definition of the delay -s.
	h := unit(2 * math.Pi * float64(k) * shift / n)
	hMirror := unit(-2 * math.Pi * float64(m-k) * shift / n) // conj H[m-k]
	if k == 0 {
		// The mirror of bin 0 is the Nyquist bin m. For the result to stay real
		// its factor must be the real part, cos(pi s).
		hMirror = complex(detmath.Cos(math.Pi*shift), 0)
	}
	w := unit(-2 * math.Pi * float64(k) / n)
	e := complex(0.5, 0)
	o := complex(0, -0.5*sign) // (1/2i) times the sign of b in a - b
	wo := mul(w, o)
	y := mul(h, e+wo)
	yMirror := mul(hMirror, e-wo)
	e2 := scale(y+yMirror, 0.5)
	o2 := mul(scale(y-yMirror, 0.5), complex(real(w), -imag(w)))
	return scale(complex(real(e2)-imag(o2), imag(e2)+real(o2)), 1/float64(m))
}

// unit is exp(i angle).
func unit(angle float64) complex128 {
	sin, cos := detmath.Sincos(angle)
	return complex(cos, sin)
}

// mul multiplies without fusing; Go's own complex product may fuse.
func mul(a, b complex128) complex128 {
	return complex(float64(real(a)*real(b))-float64(imag(a)*imag(b)),
		float64(real(a)*imag(b))+float64(imag(a)*real(b)))
}

func scale(a complex128, by float64) complex128 {
	return complex(float64(real(a)*by), float64(imag(a)*by))
}

// apply shifts the 2m samples of x in place.
func (p *phaseShift) apply(x []lanes) {
	f := p.fft
	f.forward(x)
	own := func(k int) { // a bin that is its own mirror
		i := f.place[k]
		zr, zi := &x[2*i], &x[2*i+1]
		t := p.table[4*k : 4*k+4 : 4*k+4]
		ar, ai, br, bi := t[0], t[1], t[2], t[3]
		for l := range zr {
			r, s := zr[l], zi[l]
			zr[l] = (float64(ar*r) - float64(ai*s)) + (float64(br*r) + float64(bi*s))
			zi[l] = (float64(ar*s) + float64(ai*r)) + (float64(bi*r) - float64(br*s))
		}
	}
	own(0)
	if f.m%2 == 0 {
		own(f.m / 2)
	}
	kernel.Mirrored(x[:2*f.m], f.place, p.table)
	f.inverse(x)
}
