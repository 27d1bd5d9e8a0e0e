package phantom

import (
	"fmt"
	"math"
	"testing"
)

func TestPairsAreStandardNormal(t *testing.T) {
	const n = 400000
	g := newNoise(5, 0, 0)
	var m [5]float64
	var cross float64
	beyond := 0
	for range n {
		a, b := g.pair()
		for _, v := range [2]float64{a, b} {
			p := 1.0
			for k := range m {
				m[k] += p / (2 * n)
				p *= v
			}
			if math.Abs(v) > 3 {
				beyond++
			}
		}
		cross += a * b / n
	}
	// Five standard errors, from the moments of the normal distribution: the
	// variance of the k-th sample moment is (mu_2k - mu_k^2)/N.
	se := func(v float64) float64 { return 5 * math.Sqrt(v/(2*n)) }
	near(t, "mean", m[1], 0, se(1))
	near(t, "variance", m[2], 1, se(2))
	near(t, "third moment", m[3], 0, se(15))
	near(t, "fourth moment", m[4], 3, se(96))
	near(t, "product", cross, 0, 5/math.Sqrt(n))
	p := math.Erfc(3 / math.Sqrt2)
	near(t, "share beyond 3 SD", float64(beyond)/(2*n), p, se(p))
}

// Moments of the Rician distribution: Rice 1944; for the background
// sqrt(pi/2) sigma and sqrt(2 - pi/2) sigma (Gudbjartsson, Patz 1995, MRM
// 34:910-914, eqs. 5-6 [numbers from memory]); at other ratios from scipy.
func TestRicianMoments(t *testing.T) {
	const n, sd = 400000, 9.0
	g := readGolden(t)
	near(t, "golden mean of the background", g.Rice[0].Mean, math.Sqrt(math.Pi/2), 1e-12)
	near(t, "golden SD of the background", g.Rice[0].SD, math.Sqrt(2-math.Pi/2), 1e-12)
	for i, c := range g.Rice {
		src := newNoise(17, i, 0)
		var s, q float64
		for range n {
			v := src.rician(c.Ratio*sd, sd)
			s += v / n
			q += v * v / n
		}
		got := math.Sqrt(q - s*s)
		// Five standard errors; that of an SD is below SD/sqrt(2n) times 1.1 for
		// a distribution whose kurtosis is within 0.25 of the normal one.
		near(t, fmt.Sprintf("mean at ratio %g", c.Ratio), s, c.Mean*sd, 5*c.SD*sd/math.Sqrt(n))
		near(t, fmt.Sprintf("SD at ratio %g", c.Ratio), got, c.SD*sd, 5.5*c.SD*sd/math.Sqrt(2*n))
	}
}

func TestSlicesDoNotShareNoise(t *testing.T) {
	const n = 20000
	draw := func(seed uint64, volume, slice int) []float64 {
		g := newNoise(seed, volume, slice)
		x := make([]float64, 2*n)
		for i := range n {
			x[2*i], x[2*i+1] = g.pair()
		}
		return x
	}
	a := draw(1, 3, 4)
	for _, at := range [][3]int{{1, 4, 3}, {1, 3, 5}, {1, 2, 4}, {2, 3, 4}, {0, 3, 4}, {1, 0, 0}} {
		b := draw(uint64(at[0]), at[1], at[2])
		for lag := range 3 {
			var r float64
			for i := lag; i < len(a); i++ {
				r += a[i] * b[i-lag] / (2 * n)
			}
			near(t, fmt.Sprintf("correlation with seed, volume, slice %v at lag %d", at, lag), r, 0, 5/math.Sqrt(2*n))
		}
	}
}
