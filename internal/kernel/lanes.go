package kernel

import "math"

// LaneCount series are worked on side by side in float64: one cache line.
const LaneCount = 8

// Lanes is one sample of LaneCount series. Lanes never mix, so that the bits of one
// series do not depend on which others are worked on with it.
type Lanes [LaneCount]float64

// WidenLanes sets x[t] to the eight values at src[t*stride].
func WidenLanes(x []Lanes, src []float32, stride int) {
	if len(x) == 0 {
		return
	}
	check(stride >= 0 && (len(x)-1)*stride+LaneCount <= len(src), "rows past the end")
	if useAssembly {
		widenLanes(&x[0][0], &src[0], stride, len(x))
		return
	}
	widenLanesPlain(x, src, stride)
}

func widenLanesPlain(x []Lanes, src []float32, stride int) {
	for t := range x {
		to, from := &x[t], (*[LaneCount]float32)(src[t*stride:])
		for l, v := range from {
			to[l] = float64(v)
		}
	}
}

// NarrowLanes writes to the eight values at dst[t*stride], rounded to float32,
// the line at t plus r[t]: (level + slope ((t - middle) + shift)) + r[t]. What is
// past the range of float32 is held at its end.
func NarrowLanes(dst []float32, stride int, r []Lanes, level, slope *Lanes, middle, shift float64) {
	if len(r) == 0 {
		return
	}
	check(stride >= 0 && (len(r)-1)*stride+LaneCount <= len(dst), "rows past the end")
	if useAssembly {
		narrowLanes(&dst[0], stride, &r[0][0], len(r), &level[0], &slope[0], -middle, shift, &narrowBounds[0])
		return
	}
	narrowLanesPlain(dst, stride, r, level, slope, middle, shift)
}

// narrowBounds are the end of float32, the other end, and the step of time.
var narrowBounds = [3]float64{math.MaxFloat32, -math.MaxFloat32, 1}

func narrowLanesPlain(dst []float32, stride int, r []Lanes, level, slope *Lanes, middle, shift float64) {
	for t := range r {
		at := (float64(t) - middle) + shift
		to, from := (*[LaneCount]float32)(dst[t*stride:]), &r[t]
		for l := range to {
			v := (level[l] + float64(slope[l]*at)) + from[l]
			if v > math.MaxFloat32 {
				v = math.MaxFloat32
			}
			if v < -math.MaxFloat32 {
				v = -math.MaxFloat32
			}
			to[l] = float32(v)
		}
	}
}

// Line takes the least-squares line out of every lane of x. It sets level to the line's
// value at the middle, slope to its slope per sample, and top to the largest absolute
// value that is left, NaNs passed over.
func Line(x []Lanes, level, slope, top *Lanes) {
	n := float64(len(x))
	// sum (t-middle)^2 = n (n^2-1)/12.
	numbers := [4]float64{n, -((n - 1) / 2), n * (float64(n*n) - 1) / 12, 1}
	if useAssembly && len(x) > 0 {
		line(&x[0][0], len(x), &numbers[0], &level[0], &slope[0], &top[0])
		return
	}
	linePlain(x, &numbers, level, slope, top)
}

func linePlain(x []Lanes, numbers *[4]float64, level, slope, top *Lanes) {
	var sum Lanes
	for t := range x {
		for l, v := range x[t] {
			sum[l] += v
		}
	}
	for l := range level {
		level[l] = sum[l] / numbers[0]
	}
	// The level is taken out first so that the slope of a constant is rounding of
	// zero, not of a large number.
	sum = Lanes{}
	for t := range x {
		d := float64(t) + numbers[1]
		for l, v := range x[t] {
			sum[l] += float64((v - level[l]) * d)
		}
	}
	for l := range slope {
		slope[l] = sum[l] / numbers[2]
	}
	*top = Lanes{}
	for t := range x {
		d := float64(t) + numbers[1]
		r := &x[t]
		for l := range r {
			r[l] = (r[l] - level[l]) - float64(slope[l]*d)
			// A comparison, not max: a NaN must not be spread.
			if v := math.Abs(r[l]); v > top[l] {
				top[l] = v
			}
		}
	}
}

// SumLanes sets sum to the sum of w[k] x[k], in the order of k and from zero.
func SumLanes(sum *Lanes, w []float64, x []Lanes) {
	check(len(x) >= len(w), "fewer samples than weights")
	if useAssembly && len(w) > 0 {
		sumLanes(&sum[0], &w[0], &x[0][0], len(w))
		return
	}
	sumLanesPlain(sum, w, x)
}

func sumLanesPlain(sum *Lanes, w []float64, x []Lanes) {
	var s0, s1, s2, s3, s4, s5, s6, s7 float64 // in registers, which an array is not
	x = x[:len(w)]
	for k, f := range w {
		v := &x[k]
		s0 += float64(f * v[0])
		s1 += float64(f * v[1])
		s2 += float64(f * v[2])
		s3 += float64(f * v[3])
		s4 += float64(f * v[4])
		s5 += float64(f * v[5])
		s6 += float64(f * v[6])
		s7 += float64(f * v[7])
	}
	*sum = Lanes{s0, s1, s2, s3, s4, s5, s6, s7}
}

// MostOrder is the greatest order of an [Autoregression].
const MostOrder = 8

// Autoregression predicts series, x[t] = a_1 x[t-1] + ... + a_q x[t-q], every lane by
// coefficients of its own.
type Autoregression struct {
	order int
	phi   [MostOrder + 1][MostOrder + 1]Lanes // i <= j
	lower [MostOrder][MostOrder]Lanes         // unit lower triangle of L D L', D on its diagonal
	coef  [MostOrder]Lanes
}

// Fit finds the q coefficients of the series x, of more than 2q samples: those that
// make the sum of squared errors of forward and backward prediction least (modified
// covariance; Marple 1980, IEEE Trans. ASSP 28(4):441-454), with the given share of
// the mean diagonal of the normal equations added to the diagonal. Coefficients of a
// series of zeros are zero.
//
// With phi(i,j) = sum_{t=q}^{n-1} x[t-i] x[t-j] the equations are sum_j C(i,j) a_j =
// C(i,0), C(i,j) = phi(i,j) + phi(q-i,q-j). Only phi(0,j) is summed; the others follow
// from phi(i+1,j+1) = phi(i,j) + x[q-1-i] x[q-1-j] - x[n-1-i] x[n-1-j].
func (s *Autoregression) Fit(x []Lanes, q int, share float64) {
	n := len(x)
	check(q > 0 && q <= MostOrder && n > 2*q, "order out of range, or a series too short for it")
	s.order = q
	share /= float64(q)
	if useAssembly && q == MostOrder {
		lags(&s.phi[0][0][0], &x[q][0], n-q)
		solve(&s.phi[0][0][0], &x[0][0], &x[n-q][0], share)
		return
	}
	lagsPlain(s.phi[0][:q+1], x)
	s.solvePlain(x, share)
}

// lagsPlain sets phi[j] to the sum of x[t] x[t-j] for t from q on, in the order of t.
func lagsPlain(phi []Lanes, x []Lanes) {
	q := len(phi) - 1
	for j := range phi {
		var s0, s1, s2, s3, s4, s5, s6, s7 float64
		a, b := x[q:], x[q-j:]
		b = b[:len(a)]
		for t := range a {
			u, v := &a[t], &b[t]
			s0 += float64(u[0] * v[0])
			s1 += float64(u[1] * v[1])
			s2 += float64(u[2] * v[2])
			s3 += float64(u[3] * v[3])
			s4 += float64(u[4] * v[4])
			s5 += float64(u[5] * v[5])
			s6 += float64(u[6] * v[6])
			s7 += float64(u[7] * v[7])
		}
		phi[j] = Lanes{s0, s1, s2, s3, s4, s5, s6, s7}
	}
}

// at returns phi(i, j), which is symmetric.
func (s *Autoregression) at(i, j int) *Lanes { return &s.phi[min(i, j)][max(i, j)] }

// normal returns C(i, j).
func (s *Autoregression) normal(i, j int) (c Lanes) {
	u, v := s.at(i, j), s.at(s.order-i, s.order-j)
	for l := range c {
		c[l] = u[l] + v[l]
	}
	return c
}

func (s *Autoregression) solvePlain(x []Lanes, share float64) {
	n, q := len(x), s.order
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
	var ridge Lanes
	for i := 1; i <= q; i++ {
		c := s.normal(i, i)
		for l := range ridge {
			ridge[l] += c[l]
		}
	}
	for l := range ridge {
		ridge[l] *= share
		if !(ridge[l] > 0) {
			ridge[l] = 1 // all residuals zero: the coefficients come out zero
		}
	}
	// L D L' of the q x q system, row by row. Until its row is done lower[i][k]
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

// Forward writes to x[n], x[n+1] and so on what the samples before them predict, each
// held between -limit and limit before it feeds the next. limit must be no NaN.
func (s *Autoregression) Forward(x []Lanes, n int, limit *Lanes) {
	check(n >= s.order && n <= len(x), "fewer samples than the order")
	if useAssembly && s.order == MostOrder && n < len(x) {
		forward(&x[n][0], len(x)-n, &s.coef[0][0], &limit[0])
		return
	}
	s.forwardPlain(x, n, limit)
}

func (s *Autoregression) forwardPlain(x []Lanes, n int, limit *Lanes) {
	for t := n; t < len(x); t++ {
		var f Lanes
		for k := range s.order {
			a, u := &s.coef[k], &x[t-1-k]
			for l := range a {
				f[l] += float64(a[l] * u[l])
			}
		}
		for l := range f {
			x[t][l] = max(-limit[l], min(limit[l], f[l]))
		}
	}
}

// Outward is [Autoregression.Forward] past both ends of the n samples in the middle
// of x, of which an even number is to be predicted.
func (s *Autoregression) Outward(x []Lanes, n int, limit *Lanes) {
	e := (len(x) - n) / 2
	check(n >= s.order && e >= 0 && n+2*e == len(x), "fewer samples than the order, or not as many on each side")
	if useAssembly && s.order == MostOrder && e > 0 {
		outward(&x[e+n][0], &x[e-1][0], e, &s.coef[0][0], &limit[0])
		return
	}
	s.forwardPlain(x, e+n, limit)
	for t := e - 1; t >= 0; t-- {
		var f Lanes
		for k := range s.order {
			a, u := &s.coef[k], &x[t+1+k]
			for l := range a {
				f[l] += float64(a[l] * u[l])
			}
		}
		for l := range f {
			x[t][l] = max(-limit[l], min(limit[l], f[l]))
		}
	}
}
