package realign_test

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"pgregory.net/rapid"

	"evenkeel/realign"
)

func golden(t *testing.T, name string, into any) {
	t.Helper()
	b, err := os.ReadFile("testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, into); err != nil {
		t.Fatal(err)
	}
}

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s: got %.12g, want %.12g within %g", what, got, want, tol)
	}
}

// exact is what double precision leaves of matrix products of this size.
const exact = 1e-12

// Golden: scipy.linalg.expm and numpy (testdata/generate.py).
func TestExpAgainstMatrixExponential(t *testing.T) {
	var doc struct {
		Exp []struct {
			W, V   [3]float64
			Matrix [4][4]float64
		}
		Euler []struct {
			Turn   [3]float64
			RzRyRx [3][3]float64
		}
	}
	golden(t, "se3.json", &doc)
	for _, c := range doc.Exp {
		p := realign.Exp(realign.Twist{V: c.V, W: c.W})
		m := p.Matrix()
		for i := range 16 {
			near(t, "exp", m[i], c.Matrix[i/4][i%4], 60*exact)
		}
		if math.Sqrt(c.W[0]*c.W[0]+c.W[1]*c.W[1]+c.W[2]*c.W[2]) < math.Pi {
			tw := p.Log()
			for a := range 3 {
				near(t, "log V", tw.V[a], c.V[a], 100*exact)
				near(t, "log W", tw.W[a], c.W[a], exact)
			}
		}
	}
	for _, c := range doc.Euler {
		m := realign.FromParams([3]float64{}, c.Turn, [3]float64{}).Matrix()
		for i := range 9 {
			near(t, "Rz Ry Rx", m[i/3*4+i%3], c.RzRyRx[i/3][i%3], exact)
		}
	}
}

// Published worked example (references, section 5.1): w = (.1,-.2,.3),
// v = (1,-2,.5), to the nine digits printed there.
func TestExpWorkedExample(t *testing.T) {
	m := realign.Exp(realign.Twist{V: [3]float64{1, -2, .5}, W: [3]float64{.1, -.2, .3}}).Matrix()
	want := [12]float64{.935754803, -.302932713, -.180540077, 1.234684119, .283164961, .950580618, -.127334575, -1.851625963, .210191706, .068031316, .975290309, .520687985}
	for i, w := range want {
		near(t, "example", m[i], w, 1e-9)
	}
}

func drawVec(t *rapid.T, name string, reach float64) (v [3]float64) {
	for i := range v {
		v[i] = rapid.Float64Range(-reach, reach).Draw(t, name)
	}
	return v
}

func drawPose(t *rapid.T, name string) realign.Pose {
	turn := drawVec(t, name+" turn", 3)
	turn[1] /= 2 // away from the right angle, where x and z are not separable
	return realign.FromParams(drawVec(t, name+" shift", 100), turn, drawVec(t, name+" centre", 50))
}

func samePose(t *rapid.T, what string, p, q realign.Pose, tol float64) {
	t.Helper()
	a, b := p.Matrix(), q.Matrix()
	for i := range a {
		if !(math.Abs(a[i]-b[i]) <= tol) {
			t.Fatalf("%s: %v and %v differ", what, a, b)
		}
	}
}

func TestPoseLaws(t *testing.T) {
	const tol = 1e-10 // mm, for points within a few hundred mm
	rapid.Check(t, func(t *rapid.T) {
		p, q := drawPose(t, "p"), drawPose(t, "q")
		c := drawVec(t, "c", 80)
		x := drawVec(t, "x", 80)
		shift, turn := p.Params(c)
		samePose(t, "params", realign.FromParams(shift, turn, c), p, 1e-9)
		samePose(t, "matrix", realign.FromMatrix(p.Matrix()), p, tol)
		samePose(t, "inverse", p.Compose(p.Inverse()), realign.Identity, tol)
		a, b := p.Compose(q).Apply(x), p.Apply(q.Apply(x))
		for i := range a {
			if math.Abs(a[i]-b[i]) > tol {
				t.Fatalf("compose: %v, %v", a, b)
			}
		}
		samePose(t, "half and half", p.Between(q, 0.5).Between(q, 0.5), p.Between(q, 0.75), 1e-6)
		samePose(t, "ends", p.Between(q, 1), q, 0)
	})
}

func TestParamsAtRightAngle(t *testing.T) {
	p := realign.FromParams([3]float64{1, 2, 3}, [3]float64{0.3, math.Pi / 2, 0.2}, [3]float64{4, 5, 6})
	shift, turn := p.Params([3]float64{4, 5, 6})
	a, b := realign.FromParams(shift, turn, [3]float64{4, 5, 6}).Matrix(), p.Matrix()
	for i := range a {
		near(t, "right angle", a[i], b[i], 1e-7) // the square root of rounding
	}
}

func TestPathAt(t *testing.T) {
	a := realign.FromParams([3]float64{1, 0, 0}, [3]float64{0, 0, 0.1}, [3]float64{})
	b := realign.FromParams([3]float64{3, 0, 0}, [3]float64{0, 0, 0.3}, [3]float64{})
	p := realign.Path{Times: []float64{1, 3}, Poses: []realign.Pose{a, b}}
	if p.At(0) != a || p.At(1) != a || p.At(3) != b || p.At(9) != b {
		t.Error("outside its times and at them, a path holds its poses")
	}
	_, turn := p.At(2).Params([3]float64{})
	near(t, "turn halfway", turn[2], 0.2, exact)
	if (realign.Path{}).At(5) != realign.Identity {
		t.Error("a path without poses must stand still")
	}
}
