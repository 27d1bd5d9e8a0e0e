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
	// arFull is the shortest series that is given the full order and the plain
	// ridge: 24 equations for 8 coefficients.
	arFull = 20
)

// predictor returns the order and the ridge for series of n samples.
//
// Below arFull both bend to what so few samples can tell: the order is a third
// of n, so that at least four equations stand for each coefficient, and the
// ridge grows as (arFull/n)^2. Chosen by simulation over n = 4 to 24, six shifts
// of up to half a sample, white noise, and BOLD-like series with none, half and
// all of their own SD in noise. What was compared, worst shift, end volumes:
//   - Odd reflection, f(-k) = 2 f(0) - f(k), needs no fit and errs by 0.14 of the
//     SD of a signal without noise at any n, less than this rule at 10 volumes
//     or fewer (0.42 at 4 and 5, 0.23 at 6, 0.15 at 10); but it makes the end
//     volume's noise 1.9 times what it was, and with noise of half the signal's
//     SD it errs more than this rule at every n (0.74 to 0.79 for 0.55 to 0.65).
//   - Orders n/4: noise times 1.0 at 6 and 7 volumes, where this rule has 1.09
//     and 1.08, but twice its error (0.41 and 0.38 for 0.23 and 0.19) in a signal
//     without noise; elsewhere the same within 0.03.
//   - Orders 2n/5 and n/2: too few equations; noise times up to 1.2 and 1.3.
//   - Ridges 1e-2 (arFull/n)^p: noise times 1.11, 1.10, 1.09 and 1.07 at n = 6
//     for p = 0 to 3, the last at a fifth more error in the signal than p = 2.
//   - Zero residual beyond the ends, and coefficients drawn towards those of a
//     band of fixed width: more error in the signal at the same noise.
//   - Reflection coefficients by Burg's method (1975; from memory) at order n/3:
//     the same noise, a third to a half less error in a noise-free signal from
//     14 volumes on. Not taken: longer series would have to follow it.
func predictor(n int) (order int, ridge float64) {
	if n >= arFull {
		return arOrder, arRidge
	}
	short := float64(arFull) / float64(n)
	return max(1, min(arOrder, n/3)), arRidge * float64(short*short)
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

// arScratch holds the normal equations of one batch; the orders of short series
// leave part of it unused.
type arScratch struct {
	phi   [arOrder + 1][arOrder + 1]lanes // i <= j
	lower [arOrder][arOrder]lanes         // unit lower triangle of L D L', D on its diagonal
	coef  [arOrder]lanes
}

// extend fills the e samples on each side of x[e:e+n], which holds residuals
// about a line, and tapers them.
func (p *plan) extend(x []lanes, s *arScratch) {
	e, n := p.ext, p.n
	limit := largest(x[e : e+n])
	for l := range limit {
		limit[l] *= predictionLimit
	}
	s.fit(x[e:e+n], p.order, p.ridge)
	s.predict(x, e, n, p.order, &limit)
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
func (s *arScratch) normal(q, i, j int) (c lanes) {
	u, v := s.at(i, j), s.at(q-i, q-j)
	for l := range c {
		c[l] = u[l] + v[l]
	}
	return c
}

// fit solves for the q coefficients of the series x, n > 2 q samples long.
//
// With phi(i,j) = sum_{t=q}^{n-1} x[t-i] x[t-j], forward and backward errors
// together give sum_j C(i,j) a_j = C(i,0), C(i,j) = phi(i,j) + phi(q-i,q-j)
// (Marple 1980). Only phi(0,j) is summed; the others follow from
// phi(i+1,j+1) = phi(i,j) + x[q-1-i] x[q-1-j] - x[n-1-i] x[n-1-j].
func (s *arScratch) fit(x []lanes, q int, share float64) {
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
		c := s.normal(q, i, i)
		for l := range ridge {
			ridge[l] += c[l]
		}
	}
	for l := range ridge {
		ridge[l] *= share / float64(q)
		if !(ridge[l] > 0) {
			ridge[l] = 1 // all residuals zero: the coefficients come out zero
		}
	}
	// L D L' of the q x q system, row by row. Until its row is done lower[i][k]
	// holds L_ik D_k; afterwards L_ik, with D_i on the diagonal. coef carries the
	// forward substitution.
	for i := range q {
		for j := range i {
			c := s.normal(q, i+1, j+1)
			for k := range j {
				a, b := &s.lower[i][k], &s.lower[j][k]
				for l := range c {
					c[l] -= float64(a[l] * b[l])
				}
			}
			s.lower[i][j] = c
		}
		d, c := s.normal(q, i+1, i+1), s.normal(q, i+1, 0)
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
func (s *arScratch) predict(x []lanes, e, n, q int, limit *lanes) {
	for h := range e {
		forward := x[e+n+h-q : e+n+h+1]
		backward := x[e-1-h : e-h+q]
		var f, b lanes
		for k := range q {
			a := &s.coef[k]
			u, v := &forward[q-1-k], &backward[1+k]
			for l := range a {
				f[l] += float64(a[l] * u[l])
				b[l] += float64(a[l] * v[l])
			}
		}
		for l := range f {
			forward[q][l] = max(-limit[l], min(limit[l], f[l]))
			backward[0][l] = max(-limit[l], min(limit[l], b[l]))
		}
	}
}

// forward writes e samples after x[:n], each held within limit.
func (s *arScratch) forward(x []lanes, n, e, q int, limit *lanes) {
	for h := range e {
		past := x[n+h-q : n+h+1]
		var f lanes
		for k := range q {
			a, u := &s.coef[k], &past[q-1-k]
			for l := range a {
				f[l] += float64(a[l] * u[l])
			}
		}
		for l := range f {
			past[q][l] = max(-limit[l], min(limit[l], f[l]))
		}
	}
}
