package slicetime

import (
	"math"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
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
	arOrder = kernel.MostOrder
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

// extend fills the e samples on each side of x[e:e+n], which holds residuals about a
// line, the largest of them top, and tapers them.
func (p *plan) extend(x []lanes, top *lanes, ar *kernel.Autoregression) {
	e, n := p.ext, p.n
	ar.Fit(x[e:e+n], p.order, p.ridge)
	ar.Outward(x[:n+2*e], n, limitOf(top))
	inner := e - len(p.taper)
	for i, w := range p.taper {
		out, out2 := &x[e-1-inner-i], &x[e+n+inner+i]
		for l := range out {
			out[l] *= w
			out2[l] *= w
		}
	}
}

// limitOf is what predictions are held within.
func limitOf(top *lanes) *lanes {
	for l := range top {
		top[l] *= predictionLimit
	}
	return top
}
