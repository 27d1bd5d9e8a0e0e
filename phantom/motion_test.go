package phantom

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

func matrixNear(t rapid.TB, what string, got, want [16]float64, tolerance float64) {
	t.Helper()
	for i := range got {
		if !(math.Abs(got[i]-want[i]) <= tolerance) {
			t.Fatalf("%s: entry %d: got %.15g, want %.15g", what, i, got[i], want[i])
		}
	}
}

func TestRigidAgainstScipy(t *testing.T) {
	for _, c := range readGolden(t).Turns {
		m := Rigid([3]float64{}, c.XYZ, [3]float64{})
		for i, v := range c.Matrix {
			near(t, fmt.Sprintf("turn %v, entry %d", c.XYZ, i), m[4*(i/3)+i%3], v, rounding)
		}
	}
	// Written out: a quarter turn about z through (0, 50, 0) takes the origin to
	// (50, 50, 0), and the shift comes after it.
	x := Apply(Rigid([3]float64{1, 2, 3}, [3]float64{0, 0, math.Pi / 2}, [3]float64{0, 50, 0}), [3]float64{})
	for i, v := range [3]float64{51, 52, 3} {
		near(t, "quarter turn", x[i], v, 1e-13) // 50 mm times the unit roundoff, a few times
	}
}

func vector(size float64) *rapid.Generator[[3]float64] {
	return rapid.Custom(func(t *rapid.T) (v [3]float64) {
		for i := range v {
			v[i] = rapid.Float64Range(-size, size).Draw(t, "")
		}
		return v
	})
}

func TestRigidAlgebra(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		draw := func(n string) [16]float64 {
			return Rigid(vector(30).Draw(t, n+" shift"), vector(3).Draw(t, n+" turn"), vector(80).Draw(t, n+" centre"))
		}
		a, b := draw("a"), draw("b")
		x := vector(100).Draw(t, "x")
		if !isRigid(a) || !isRigid(Mul(a, b)) {
			t.Fatal("not rigid")
		}
		// Sums of terms up to 600 mm: some hundred units in their last place.
		const tol = 1e-11
		matrixNear(t, "a a^-1", Mul(a, Inverse(a)), Identity(), tol)
		matrixNear(t, "a^-1 a", Mul(Inverse(a), a), Identity(), tol)
		y, z := Apply(Mul(a, b), x), Apply(a, Apply(b, x))
		for i := range y {
			if math.Abs(y[i]-z[i]) > tol {
				t.Fatalf("(ab)x = %v, a(bx) = %v", y, z)
			}
		}
	})
	for _, m := range [][16]float64{
		{2, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1},           // scaled
		{-1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1},          // mirrored
		{1, 0, 0, math.NaN(), 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1},  // no number
		{1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0.1, 0, 1},         // projective
		{1, 1e-6, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1},        // sheared
		{1, 0, 0, math.Inf(1), 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1}, // infinite
		{1, 0, 0, 0, 0, math.NaN(), 0, 0, 0, 0, 1, 0, 0, 0, 0, 1},  // no number
	} {
		if isRigid(m) {
			t.Errorf("%v passes for rigid", m)
		}
	}
}

// The closed form of Jenkinson 1999 (TR99MJ1): a turn q about the centre of a
// ball of radius R displaces it by R sqrt(8/5) sin(q/2) root mean square, 0.883063
// mm for 1 degree and 80 mm.
func TestDisplacementAgainstBall(t *testing.T) {
	var ball [][3]float64
	const d = 4.0
	for z := -80.0; z <= 80; z += d {
		for y := -80.0; y <= 80; y += d {
			for x := -80.0; x <= 80; x += d {
				if x*x+y*y+z*z <= 80*80 {
					ball = append(ball, [3]float64{x, y, z})
				}
			}
		}
	}
	m := Rigid([3]float64{}, [3]float64{0, 0, math.Pi / 180}, [3]float64{})
	mean, rms := Displacement(m, Identity(), ball)
	near(t, "rms over the ball", rms, .883063, 0.004) // a grid of 4 mm fills the 80 mm ball to half a percent
	// The mean distance from the axis in a ball is 3 pi R / 16.
	near(t, "mean over the ball", mean, 2*math.Sin(math.Pi/360)*3*math.Pi*80/16, 0.004)
	mean, rms = Displacement(Rigid([3]float64{3, 4, 0}, [3]float64{}, [3]float64{}), Identity(), ball)
	near(t, "mean of a shift (3, 4, 0)", mean, 5, 1e-12)
	near(t, "rms of a shift (3, 4, 0)", rms, 5, 1e-12)
}

func TestMotionsStartAtIdentity(t *testing.T) {
	c := [3]float64{3, -20, -60}
	for name, m := range map[string]Motion{
		"walk":      Walk(1, 2, 0.05, 0.05, c),
		"breathing": Breathing(0.3, [3]float64{0, 0.1, 0.3}, [3]float64{0.01, 0, 0}, c),
		"jerk":      Jerk(Walk(2, 1, 0.02, 0.1, c), 10, [3]float64{1, 2, 3}, [3]float64{0.1, 0, 0}, c),
		"steps":     Steps([]Step{{5, [3]float64{1, 0, 0}, [3]float64{}}}, c),
		"composed":  Compose(nil, Walk(3, 1, 0.01, 0.1, c), Walk(4, 1, 0.01, 0.1, c)),
		"still":     Compose(),
	} {
		matrixNear(t, name, m(0), Identity(), 1e-12) // turns of at most 1e-17, arms of 60 mm
	}
}

// coordinates undoes Rigid: shift about c, and small turns.
func coordinates(m [16]float64, c [3]float64) (p [6]float64) {
	x := Apply(m, c)
	for i := range 3 {
		p[i] = x[i] - c[i]
	}
	p[3] = math.Atan2(m[9], m[10])
	p[4] = -math.Asin(m[8])
	p[5] = math.Atan2(m[4], m[0])
	return p
}

func TestWalkHasTheSizeAndBandAskedFor(t *testing.T) {
	c := [3]float64{0, -20, -60}
	const shift, turn, fmax = 1.5, 0.02, 0.05
	w := Walk(7, shift, turn, fmax, c)
	const n = 40000
	var sum, square [6]float64
	for i := range n {
		for k, v := range coordinates(w(float64(i)*3.1), c) {
			sum[k] += v / n
			square[k] += v * v / n
		}
	}
	size := func(from int) float64 {
		var s float64
		for k := from; k < from+3; k++ {
			s += square[k] - sum[k]*sum[k]
		}
		return math.Sqrt(s)
	}
	// 124 000 s hold hundreds of periods of the slowest tone that matters.
	near(t, "rms shift", size(0), shift, 0.02*shift)
	near(t, "rms turn", size(3), turn, 0.02*turn)
	for k := range 6 {
		f := func(u float64) float64 { return coordinates(w(u), c)[k] }
		if l := leak(f, 1024, 2, fmax+5./2048); l > 1e-6 { // sidelobes as in TestTonesAreBandLimited
			t.Errorf("coordinate %d: share of power above %g Hz: %g", k, fmax, l)
		}
	}
	if Walk(7, shift, turn, fmax, c)(33) != w(33) {
		t.Error("the same seed walks differently")
	}
	if Walk(8, shift, turn, fmax, c)(33) == w(33) {
		t.Error("another seed walks the same way")
	}
}

func TestMovedTakesOneVolumeToAnother(t *testing.T) {
	s := sampleScan(2)
	x := [3]float64{12, -30, 25} // a point of the head
	a, b := Apply(s.Motion(s.Middle()), x), Apply(s.Motion(2*s.TR+s.Middle()), x)
	got := Apply(s.Moved(0, 2), a)
	for i := range got {
		near(t, "moved point", got[i], b[i], 1e-11)
	}
}

func TestJerkAndStepsAreSudden(t *testing.T) {
	c := [3]float64{1, 2, 3}
	base := Walk(5, 1, 0.02, 0.05, c)
	shift, turn := [3]float64{5, -3, 2}, [3]float64{0.1, 0.05, -0.1}
	j := Jerk(base, 41.2, shift, turn, c)
	matrixNear(t, "just before", j(math.Nextafter(41.2, 0)), base(math.Nextafter(41.2, 0)), 0)
	s := Rigid(shift, turn, c)
	for _, u := range []float64{41.2, 60} {
		matrixNear(t, "after", j(u), Mul(s, base(u)), 1e-12)
	}
	matrixNear(t, "jerk of a still head", Jerk(nil, 1, shift, turn, c)(2), s, 1e-12)
	two := Steps([]Step{{1, shift, turn}, {2, turn, [3]float64{0, 0, 0.2}}}, c)
	matrixNear(t, "two steps", two(2), Mul(Rigid(turn, [3]float64{0, 0, 0.2}, c), s), 1e-12)
	matrixNear(t, "one of two", two(1.5), s, 1e-12)
}

func TestBreathingSwings(t *testing.T) {
	c := [3]float64{0, 0, -60}
	shift, turn := [3]float64{0, 0.1, 0.3}, [3]float64{0.01, 0, 0}
	b := Breathing(0.25, shift, turn, c)
	matrixNear(t, "a quarter period", b(1), Rigid(shift, turn, c), 1e-12)
	matrixNear(t, "three quarters", b(3), Rigid([3]float64{0, -0.1, -0.3}, [3]float64{-0.01, 0, 0}, c), 1e-12)
	matrixNear(t, "half a period", b(2), Identity(), 1e-12)
}

func TestComposeLastActsFirst(t *testing.T) {
	a := Steps([]Step{{0, [3]float64{}, [3]float64{0, 0, math.Pi / 2}}}, [3]float64{})
	b := Steps([]Step{{0, [3]float64{10, 0, 0}, [3]float64{}}}, [3]float64{})
	x := Apply(Compose(a, b)(1), [3]float64{}) // shifted to x = 10, then turned to y = 10
	for i, v := range [3]float64{0, 10, 0} {
		near(t, "composed", x[i], v, 1e-13)
	}
}
