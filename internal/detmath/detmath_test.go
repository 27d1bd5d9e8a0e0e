package detmath

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// The standard library is the oracle: its functions are good to about one unit
// in the last place (their documentation), so 4e-16 leaves two to ours.
const tolerance = 4e-16

func TestAgainstStandardLibrary(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	check := func(name string, got, want, scale float64) {
		t.Helper()
		if !(math.Abs(got-want) <= tolerance*scale) {
			t.Errorf("%s: got %.17g, want %.17g", name, got, want)
		}
	}
	for range 20000 {
		x := r.NormFloat64() * math.Pow(10, float64(r.IntN(5)-2))
		check("sin", Sin(x), math.Sin(x), 1)
		check("cos", Cos(x), math.Cos(x), 1)
		if math.Abs(x) < 700 {
			check("exp", Exp(x), math.Exp(x), 2*math.Exp(x))
		}
		check("log", Log(math.Abs(x)), math.Log(math.Abs(x)), max(1, math.Abs(math.Log(math.Abs(x)))))
		check("atan", Atan(x), math.Atan(x), 1.6)
		y := r.NormFloat64()
		check("atan2", Atan2(y, x), math.Atan2(y, x), 3.2)
		u := 2*r.Float64() - 1
		// math.Asin loses digits near 1 (it squares first), so the oracle is Atan2.
		check("asin", Asin(u), math.Atan2(u, math.Sqrt((1-u)*(1+u))), 1.6)
	}
	for _, u := range []float64{-1, 0, 1} {
		check("asin", Asin(u), math.Asin(u), 1.6)
	}
	if !math.IsNaN(Sin(1e7)) || !math.IsNaN(Asin(1.1)) || !math.IsNaN(Log(-1)) {
		t.Error("values outside the range must give NaN")
	}
}

// The split constants must add up to pi/2 and ln 2 far beyond double precision.
func TestSplitConstants(t *testing.T) {
	sum := func(v ...float64) *big.Float {
		s := new(big.Float).SetPrec(300)
		for _, x := range v {
			s.Add(s, new(big.Float).SetPrec(300).SetFloat64(x))
		}
		return s
	}
	// Digits from memory, checked against each other by the two independent sums.
	pio2, _, _ := big.ParseFloat("1.5707963267948966192313216916397514420985846996875529", 10, 300, big.ToNearestEven)
	ln2, _, _ := big.ParseFloat("0.6931471805599453094172321214581765680755001343602553", 10, 300, big.ToNearestEven)
	if d, _ := new(big.Float).Sub(sum(pio2a, pio2b, pio2c, pio2d), pio2).Float64(); math.Abs(d) > 1e-45 {
		t.Errorf("pi/2 off by %g", d)
	}
	if d, _ := new(big.Float).Sub(sum(ln2a, ln2b), ln2).Float64(); math.Abs(d) > 1e-25 {
		t.Errorf("ln 2 off by %g", d)
	}
}
