package quality

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

func TestFramewiseDisplacementGolden(t *testing.T) {
	var g struct {
		Source string
		Cases  []struct {
			Name   string
			Radius float64
			Params [][]float64
			FD     []number
		}
	}
	golden(t, "fd.json", &g)
	if len(g.Cases) != 5 {
		t.Fatalf("%d cases", len(g.Cases))
	}
	for _, c := range g.Cases {
		near(t, c.Name, FramewiseDisplacement(c.Params, c.Radius), floats(c.FD), oracle)
	}
}

// A lost volume takes away its own value and the next one's, and no other.
func TestFramewiseDisplacementLost(t *testing.T) {
	row := func(x float64) []float64 { return []float64{x, 0, 0, 0, 0, 0} }
	got := FramewiseDisplacement([][]float64{row(0), row(1), nil, row(5), row(7), nil, nil, row(1)}, 50)
	nan := math.NaN()
	near(t, "lost", got, []float64{nan, 1, nan, nan, 2, nan, nan, nan}, 0)
	if n := len(FramewiseDisplacement(nil, 50)); n != 0 {
		t.Errorf("%d values for no volume", n)
	}
	mustPanic(t, "row of five", func() { FramewiseDisplacement([][]float64{row(0), make([]float64, 5)}, 50) })
}

func TestRMSDeviationGolden(t *testing.T) {
	var g struct {
		Source string
		Points int
		Cases  []struct {
			Name     string
			A, B     [16]float64
			Radius   float64
			Centre   [3]float64
			RMS      float64
			Drawn    float64
			Drawn_SE float64
		}
	}
	golden(t, "rms_deviation.json", &g)
	for _, c := range g.Cases {
		got := RMSDeviation(c.A, c.B, c.Centre, c.Radius)
		// 1e-12 mm absolute: 80 mm times a few roundings of matrix entries of
		// order 1 and of shifts of order 50 mm.
		if math.Abs(got-c.RMS) > 1e-12 {
			t.Errorf("%s: %.15g, expected %.15g", c.Name, got, c.RMS)
		}
		// Points drawn from the ball know nothing of the formula: 5 standard
		// errors of their mean.
		if math.Abs(got-c.Drawn) > 5*c.Drawn_SE {
			t.Errorf("%s: %.9g, but %.9g ± %.2g over drawn points", c.Name, got, c.Drawn, c.Drawn_SE)
		}
	}
}

// Worked by hand from the formula: R sqrt(8/5) sin(q/2).
func TestRMSDeviationByHand(t *testing.T) {
	for _, deg := range []float64{0.001, 1, 30, 179} {
		q := deg * math.Pi / 180
		c, s := math.Cos(q), math.Sin(q)
		turn := [16]float64{c, 0, s, 0, 0, 1, 0, 0, -s, 0, c, 0, 0, 0, 0, 1}
		want := 80 * math.Sqrt(8./5) * math.Sin(q/2)
		// The matrix itself holds the angle to 1e-16 absolute.
		if got := RMSDeviation(turn, eye, [3]float64{}, 80); math.Abs(got-want) > 1e-12 {
			t.Errorf("%g degree: %.15g, expected %.15g", deg, got, want)
		}
	}
	if got := RMSDeviation(eye, [16]float64{}, [3]float64{}, 80); !math.IsNaN(got) {
		t.Errorf("no inverse: %v", got)
	}
}

var eye = [16]float64{1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1}

// The deviation is a property of the motion between two places of the head:
// moving the world (head, centre and both poses together) leaves it alone.
func TestRMSDeviationMovesWithTheWorld(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		pose := func(name string) [16]float64 {
			x := rapid.SliceOfN(rapid.Float64Range(-1, 1), 6, 6).Draw(t, name)
			return rigid(x[0], x[1], x[2], [3]float64{40 * x[3], 40 * x[4], 40 * x[5]})
		}
		a, b, w := pose("a"), pose("b"), pose("world")
		c := [3]float64{3, -20, 11}
		var wc [3]float64
		for i := range wc {
			wc[i] = w[4*i]*c[0] + w[4*i+1]*c[1] + w[4*i+2]*c[2] + w[4*i+3]
		}
		plain := RMSDeviation(a, b, c, 80)
		// w a b⁻¹ w⁻¹ is the same motion seen from the moved world.
		moved := RMSDeviation(mul(w, a), mul(w, b), wc, 80)
		// 1e-11 mm: shifts of up to 100 mm times a dozen roundings.
		if math.Abs(plain-moved) > 1e-11 {
			t.Fatalf("%.15g, moved %.15g", plain, moved)
		}
		if d := RMSDeviation(a, a, c, 80); d > 1e-11 {
			t.Fatalf("against itself: %g", d)
		}
	})
}

func rigid(x, y, z float64, t [3]float64) [16]float64 {
	cx, sx, cy, sy, cz, sz := math.Cos(x), math.Sin(x), math.Cos(y), math.Sin(y), math.Cos(z), math.Sin(z)
	rx := [16]float64{1, 0, 0, 0, 0, cx, -sx, 0, 0, sx, cx, 0, 0, 0, 0, 1}
	ry := [16]float64{cy, 0, sy, 0, 0, 1, 0, 0, -sy, 0, cy, 0, 0, 0, 0, 1}
	rz := [16]float64{cz, -sz, 0, t[0], sz, cz, 0, t[1], 0, 0, 1, t[2], 0, 0, 0, 1}
	return mul(rz, mul(ry, rx))
}

func mul(a, b [16]float64) (m [16]float64) {
	for i := range 4 {
		for j := range 4 {
			for k := range 4 {
				m[4*i+j] += a[4*i+k] * b[4*k+j]
			}
		}
	}
	return m
}

// Power et al. 2012: 0.1 mm, 0.2 mm and 0.05 mm of shift, 0.001 and 0.002 rad
// of turn on a sphere of 50 mm are 0.35 + 0.15 mm.
func ExampleFramewiseDisplacement() {
	fd := FramewiseDisplacement([][]float64{
		{0, 0, 0, 0, 0, 0},
		{0.1, -0.2, 0.05, 0.001, 0, -0.002},
		nil, // lost
	}, FDRadiusMM)
	fmt.Printf("%.2f\n", fd)
	// Output: [NaN 0.50 NaN]
}

// Jenkinson 1999: a turn of q about the centre of the ball is R sqrt(8/5)
// sin(q/2), 0.883063 mm for one degree and 80 mm.
func ExampleRMSDeviation() {
	q := math.Pi / 180
	before := [16]float64{1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1}
	after := [16]float64{
		math.Cos(q), -math.Sin(q), 0, 0,
		math.Sin(q), math.Cos(q), 0, 0,
		0, 0, 1, 0,
		0, 0, 0, 1,
	}
	fmt.Printf("%.6f mm\n", RMSDeviation(after, before, [3]float64{}, BallRadiusMM))
	fmt.Printf("%.6f mm, 50 mm off the axis\n", RMSDeviation(after, before, [3]float64{50, 0, 0}, BallRadiusMM))
	// Output:
	// 0.883063 mm
	// 1.241501 mm, 50 mm off the axis
}
