// Package detmath holds elementary functions that give the same bits on every
// architecture and at every level of compiler optimisation.
//
// Go may fuse a product and a sum into one rounding (arm64, and amd64 with
// GOAMD64=v3), and the standard library has hand-written versions of some
// functions on some machines; both change last bits. Here every product that
// meets a sum is rounded explicitly, by the conversion float64(a*b), which the
// language specification says prevents fusing, and only + - * /, Sqrt, Floor
// and bit operations are used.
//
// Accuracy: a few units in the last place over the ranges that rigid motion,
// filters and phantoms need (tested against math/big and the standard library
// to 4e-16 relative, or absolute near zeros).
package detmath

import "math"

// Pi/2 in three parts of 33 bits each and a rest, so that n*part is exact for
// |n| < 2^20 (argument reduction after Cody and Waite 1980, Software Manual for
// the Elementary Functions). The parts are computed from math/big in the test.
const (
	pio2a = 1.57079632673412561417e+00
	pio2b = 6.07710050630396597660e-11
	pio2c = 2.02226624871116645580e-21
	pio2d = 8.47842766036889956997e-32
)

// reduce returns x - n*pi/2 in [-pi/4, pi/4] and n mod 4, for |x| < 1e6.
func reduce(x float64) (r float64, quadrant int) {
	n := math.Floor(float64(x*(2/math.Pi)) + 0.5)
	r = x - float64(n*pio2a)
	r -= float64(n * pio2b)
	r -= float64(n * pio2c)
	r -= float64(n * pio2d)
	return r, int(int64(n) & 3)
}

// sinSeries is the Taylor series of the sine; the first term left out is below
// 2e-19 for |r| <= pi/4.
func sinSeries(r float64) float64 {
	q := float64(r * r)
	s := 1.0
	for k := 17; k >= 3; k -= 2 {
		s = 1 - float64(float64(q*s)/float64(k*(k-1)))
	}
	return float64(r * s)
}

// cosSeries is the Taylor series of the cosine, likewise.
func cosSeries(r float64) float64 {
	q := float64(r * r)
	s := 1.0
	for k := 18; k >= 2; k -= 2 {
		s = 1 - float64(float64(q*s)/float64(k*(k-1)))
	}
	return s
}

// Sin returns the sine of x (rad). |x| must be below 1e6; NaN beyond.
func Sin(x float64) float64 { s, _ := Sincos(x); return s }

// Cos returns the cosine of x (rad). |x| must be below 1e6; NaN beyond.
func Cos(x float64) float64 { _, c := Sincos(x); return c }

// Sincos returns both. |x| must be below 1e6; NaN beyond.
func Sincos(x float64) (sin, cos float64) {
	if !(math.Abs(x) < 1e6) {
		return math.NaN(), math.NaN()
	}
	r, n := reduce(x)
	s, c := sinSeries(r), cosSeries(r)
	switch n {
	case 0:
		return s, c
	case 1:
		return c, -s
	case 2:
		return -s, -c
	}
	return -c, s
}

// ln 2 in a part of 32 bits and a rest.
const (
	ln2a = 6.93147180369123816490e-01
	ln2b = 1.90821492927058770002e-10
)

// Exp returns e to the x.
func Exp(x float64) float64 {
	switch {
	case math.IsNaN(x):
		return x
	case x > 709.78:
		return math.Inf(1)
	case x < -745.2:
		return 0
	}
	n := math.Floor(float64(x*(1/math.Ln2)) + 0.5)
	r := x - float64(n*ln2a)
	r -= float64(n * ln2b)
	// Taylor on |r| <= ln2/2: the term left out (r^15/15!) is below 1e-19.
	s := 1.0
	for k := 14; k >= 1; k-- {
		s = 1 + float64(float64(r*s)/float64(k))
	}
	return math.Ldexp(s, int(n))
}

// Log returns the natural logarithm of x.
func Log(x float64) float64 {
	switch {
	case math.IsNaN(x) || x < 0:
		return math.NaN()
	case x == 0:
		return math.Inf(-1)
	case math.IsInf(x, 1):
		return x
	}
	f, e := math.Frexp(x)
	if f < math.Sqrt2/2 {
		f *= 2
		e--
	}
	// ln f = 2 artanh((f-1)/(f+1)); |u| <= 0.1716, so u^24 < 5e-19.
	u := (f - 1) / (f + 1)
	q := float64(u * u)
	s := 0.0
	for k := 23; k >= 1; k -= 2 {
		s = 1/float64(k) + float64(q*s)
	}
	n := float64(e)
	return float64(n*ln2a) + (float64(2*float64(u*s)) + float64(n*ln2b))
}

// atanTable holds atan(i/16), filled from its own series below.
var atanTable = func() (t [17]float64) {
	for i := range t {
		t[i] = atanSlow(float64(i) / 16)
	}
	return t
}()

// atanSlow halves its argument until the series converges fast; used for the
// table only.
func atanSlow(x float64) float64 {
	n := 0
	for x > 0.05 {
		x /= 1 + math.Sqrt(1+float64(x*x)) // tan(a/2) = tan a / (1 + sec a)
		n++
	}
	return math.Ldexp(atanSeries(x), n)
}

func atanSeries(x float64) float64 {
	q := float64(x * x)
	s := 0.0
	for k := 15; k >= 1; k -= 2 {
		s = 1/float64(k) - float64(q*s)
	}
	return float64(x * s)
}

// Atan returns the arc tangent of x in [-pi/2, pi/2].
func Atan(x float64) float64 {
	switch {
	case math.IsNaN(x):
		return x
	case x < 0:
		return -Atan(-x)
	case x > 1:
		return math.Pi/2 - Atan(1/x)
	}
	i := int(math.Floor(float64(x*16) + 0.5))
	a := float64(i) / 16
	// atan x = atan a + atan((x-a)/(1+xa)), the rest below 1/32.
	return atanTable[i] + atanSeries((x-a)/(1+float64(x*a)))
}

// Atan2 returns the angle of the point (x, y) in (-pi, pi].
func Atan2(y, x float64) float64 {
	switch {
	case math.IsNaN(x) || math.IsNaN(y):
		return math.NaN()
	case x > 0:
		return Atan(y / x)
	case x < 0 && y >= 0:
		return Atan(y/x) + math.Pi
	case x < 0:
		return Atan(y/x) - math.Pi
	case y > 0:
		return math.Pi / 2
	case y < 0:
		return -math.Pi / 2
	}
	return 0
}

// Asin returns the arc sine of x; NaN outside [-1, 1].
func Asin(x float64) float64 {
	if !(math.Abs(x) <= 1) {
		return math.NaN()
	}
	return Atan2(x, math.Sqrt(float64((1-x)*(1+x))))
}
