package slicetime

import (
	"math"

	"evenkeel/internal/detmath"
)

// What stands beyond the ends of a series.
//
// Interpolation at the first and last volumes needs samples that were never
// taken. Here they are predicted by an autoregression fitted to the series
// itself, x[t] = a_1 x[t-1] + ... + a_q x[t-q], by least squares on the errors
// of forward and backward prediction together, with one set of coefficients:
// the modified covariance method (Nuttall 1976, NUSC TR 5303; Ulrych, Clayton
// 1976, Phys. Earth Planet. Inter. 12:188-200; fast form and discussion Marple
// 1980, IEEE Trans. ASSP 28(4):441-454; all from memory).
//
// The method does not promise a stable predictor. Two things keep it in bounds:
//   - a ridge of 1e-2 of the mean diagonal, which also bounds the condition
//     number of the normal equations by 100 q + 1;
//   - every predicted sample is held within predictionLimit times the largest
//     sample of the series (line removed) before it feeds the next, so that even
//     a growing mode ends at a level of the series' own size.
const (
	arOrder = 8
	// arRidge is the share of the mean diagonal added to the diagonal.
	arRidge = 1e-2
	// predictionLimit: no head tissue is expected to leave the range it kept
	// during the whole run by more than its own width just after it. A pure tone
	// sampled off its peaks may rightly exceed its largest sample by a factor
	// of at most sqrt 2 (at half the Nyquist frequency, samples at +-45 degrees).
	predictionLimit = 2
	// extension is how many samples are predicted on each side.
	extension = 32
	// arLeast is the shortest series an autoregression is fitted to: at 20
	// samples, 24 equations for 8 coefficients. Shorter ones are extended by odd
	// reflection, f(-k) = 2 f(0) - f(k), which needs no fit.
	arLeast = 20
)

// extensionFor is the number of samples added on each side of n.
func extensionFor(n int) int {
	if n >= arLeast {
		return extension
	}
	return min(extension, n-1) // odd reflection has no more to reflect
}

// taperFor is the half cosine that leads the outer half of e added samples to
// zero, outwards: weights of sample e/2 (rounded up) to e-1 beyond the end.
func taperFor(e int) []float64 {
	w := make([]float64, e/2)
	for i := range w {
		w[i] = 0.5 + float64(0.5*detmath.Cos(math.Pi*float64(i+1)/float64(len(w)+1)))
	}
	return w
}

// arScratch holds the normal equations of one batch.
type arScratch struct {
	phi   [arOrder + 1][arOrder + 1]lanes // i <= j
	lower [arOrder][arOrder]lanes         // unit lower triangle of L D L', D on its diagonal
	coef  [arOrder]lanes
}

// extend fills the e samples on each side of x[e:e+n], which holds residuals
// about a line, and tapers them.
func (p *plan) extend(x []lanes, s *arScratch) {
	e, n := p.ext, p.n
	if n < arLeast {
		for k := 1; k <= e; k++ {
			first, last := &x[e], &x[e+n-1]
			in, in2 := &x[e+k], &x[e+n-1-k]
			out, out2 := &x[e-k], &x[e+n-1+k]
			for l := range out {
				out[l] = float64(2*first[l]) - in[l]
				out2[l] = float64(2*last[l]) - in2[l]
			}
		}
	} else {
		limit := largest(x[e : e+n])
		for l := range limit {
			limit[l] *= predictionLimit
		}
		s.fit(x[e : e+n])
		s.predict(x, e, n, &limit)
	}
	inner := e - len(p.taper)
	for i, w := range p.taper {
		out, out2 := &x[e-1-inner-i], &x[e+n+inner+i]
		for l := range out {
			out[l] *= w
			out2[l] *= w
		}
	}
}

func largest(x []lanes) (m lanes) {
	for t := range x {
		for l, v := range x[t] {
			// A comparison, not max: a NaN lane must not be spread or slow others.
			if v = math.Abs(v); v > m[l] {
				m[l] = v
			}
		}
	}
	return m
}

// dot is sum_t a[t] b[t] for every lane, in the order of t.
func dot(a, b []lanes) lanes {
	var s0, s1, s2, s3, s4, s5, s6, s7 float64
	b = b[:len(a)]
	for i := range a {
		p, q := &a[i], &b[i]
		s0 += float64(p[0] * q[0])
		s1 += float64(p[1] * q[1])
		s2 += float64(p[2] * q[2])
		s3 += float64(p[3] * q[3])
		s4 += float64(p[4] * q[4])
		s5 += float64(p[5] * q[5])
		s6 += float64(p[6] * q[6])
		s7 += float64(p[7] * q[7])
	}
	return lanes{s0, s1, s2, s3, s4, s5, s6, s7}
}

// at returns phi(i, j), which is symmetric.
func (s *arScratch) at(i, j int) *lanes { return &s.phi[min(i, j)][max(i, j)] }

// normal returns C(i, j) = phi(i, j) + phi(q-i, q-j).
func (s *arScratch) normal(i, j int) (c lanes) {
	u, v := s.at(i, j), s.at(arOrder-i, arOrder-j)
	for l := range c {
		c[l] = u[l] + v[l]
	}
	return c
}

// fit solves for the coefficients of the series x.
//
// With phi(i,j) = sum_{t=q}^{n-1} x[t-i] x[t-j], forward and backward errors
// together give sum_j C(i,j) a_j = C(i,0), C(i,j) = phi(i,j) + phi(q-i,q-j)
// (Marple 1980). Only phi(0,j) is summed; the others follow from
// phi(i+1,j+1) = phi(i,j) + x[q-1-i] x[q-1-j] - x[n-1-i] x[n-1-j].
func (s *arScratch) fit(x []lanes) {
	const q = arOrder
	n := len(x)
	for j := 0; j <= q; j++ {
		s.phi[0][j] = dot(x[q:], x[q-j:n-j])
	}
	for i := range q {
		for j := i; j < q; j++ {
			to, from := &s.phi[i+1][j+1], &s.phi[i][j]
			a, b := &x[q-1-i], &x[q-1-j]
			c, d := &x[n-1-i], &x[n-1-j]
			for l := range to {
				to[l] = (from[l] + float64(a[l]*b[l])) - float64(c[l]*d[l])
			}
		}
	}
	var ridge lanes
	for i := 1; i <= q; i++ {
		c := s.normal(i, i)
		for l := range ridge {
			ridge[l] += c[l]
		}
	}
	for l := range ridge {
		ridge[l] *= arRidge / q
		if !(ridge[l] > 0) {
			ridge[l] = 1 // all residuals zero: the coefficients come out zero
		}
	}
	// L D L' of the 8 x 8 system, row by row. Until its row is done lower[i][k]
	// holds L_ik D_k; afterwards L_ik, with D_i on the diagonal. coef carries the
	// forward substitution.
	for i := range q {
		for j := range i {
			c := s.normal(i+1, j+1)
			for k := range j {
				a, b := &s.lower[i][k], &s.lower[j][k]
				for l := range c {
					c[l] -= float64(a[l] * b[l])
				}
			}
			s.lower[i][j] = c
		}
		d, c := s.normal(i+1, i+1), s.normal(i+1, 0)
		for l := range d {
			d[l] += ridge[l]
		}
		for k := range i {
			a, dk, b := &s.lower[i][k], &s.lower[k][k], &s.coef[k]
			for l := range d {
				ld := a[l]
				a[l] = ld / dk[l]
				d[l] -= float64(ld * a[l])
				c[l] -= float64(a[l] * b[l])
			}
		}
		s.lower[i][i], s.coef[i] = d, c
	}
	for i := q - 1; i >= 0; i-- {
		c, d := &s.coef[i], &s.lower[i][i]
		for l := range c {
			c[l] /= d[l]
		}
		for k := i + 1; k < q; k++ {
			a, b := &s.lower[k][i], &s.coef[k]
			for l := range c {
				c[l] -= float64(a[l] * b[l])
			}
		}
	}
}

// predict writes e samples on each side of x[e:e+n], each held within limit.
func (s *arScratch) predict(x []lanes, e, n int, limit *lanes) {
	for h := range e {
		forward := x[e+n+h-arOrder : e+n+h+1]
		backward := x[e-1-h : e-h+arOrder]
		var f, b lanes
		for k := range s.coef {
			a := &s.coef[k]
			u, v := &forward[arOrder-1-k], &backward[1+k]
			for l := range a {
				f[l] += float64(a[l] * u[l])
				b[l] += float64(a[l] * v[l])
			}
		}
		for l := range f {
			forward[arOrder][l] = max(-limit[l], min(limit[l], f[l]))
			backward[0][l] = max(-limit[l], min(limit[l], b[l]))
		}
	}
}
