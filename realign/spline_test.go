package realign_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"evenkeel/realign"
)

// Golden: numpy.roots, scipy.ndimage.spline_filter1d and map_coordinates, and a
// dense solve (testdata/generate.py).
func TestSplineGolden(t *testing.T) {
	var doc struct {
		Poles map[string][]float64
		Lines []struct {
			Name           string
			Degree         int
			X, Mirror, Odd []float64
		}
		Volume struct {
			Size           [3]int
			Values         []float32
			Points         [][3]float64
			Cubic, Quintic []float64
		}
	}
	golden(t, "spline.json", &doc)
	for name, want := range doc.Poles {
		got := realign.Poles(map[string]int{"3": 3, "5": 5}[name])
		for i := range want {
			near(t, "pole of degree "+name, got[i], want[i], exact)
		}
	}
	for _, c := range doc.Lines {
		for _, rule := range []struct {
			name string
			b    realign.Boundary
			want []float64
		}{{"mirror", realign.Mirror, c.Mirror}, {"odd", realign.Odd, c.Odd}} {
			got := realign.FilterLine(c.X, c.Degree, rule.b)
			for k, w := range rule.want {
				near(t, c.Name+" "+rule.name, got[3+k], w, 1e-12*200) // signals to 200
			}
		}
	}
	// Coefficients are kept as float32: 2^-24 of values to 900, over 216 taps of
	// weight 1 in all, and the sums of the filter.
	const tol = 1e-3
	for degree, want := range map[int][]float64{3: doc.Volume.Cubic, 5: doc.Volume.Quintic} {
		v, _ := realign.Interpolate(doc.Volume.Size, doc.Volume.Values, degree, realign.Mirror, doc.Volume.Points)
		for i, w := range want {
			near(t, "volume", float64(v[i]), w, tol)
		}
	}
}

// Published: Unser, Aldroubi, Eden 1993, Table I (values as in references,
// section 3).
func TestPolesPublished(t *testing.T) {
	near(t, "cubic", realign.Poles(3)[0], -0.267949192431123, 1e-15)
	near(t, "quintic", realign.Poles(5)[0], -0.430575347099973, 1e-14)
	near(t, "quintic", realign.Poles(5)[1], -0.043096288203265, 1e-14)
}

// A linear image is its own interpolation anywhere in the field under the odd
// rule, and keeps its slope; the mirror bends it near the edges.
func TestOddKeepsRamps(t *testing.T) {
	n := [3]int{9, 5, 4}
	vol := make([]float32, n[0]*n[1]*n[2])
	f := func(x, y, z float64) float64 { return 10 + 3*x - 2*y + 5*z }
	i := 0
	for z := range n[2] {
		for y := range n[1] {
			for x := range n[0] {
				vol[i] = float32(f(float64(x), float64(y), float64(z)))
				i++
			}
		}
	}
	pts := [][3]float64{{0, 0, 0}, {0.3, 0.2, 0.1}, {8, 4, 3}, {7.7, 3.9, 2.5}, {4, 2, 1.5}}
	for _, degree := range []int{3, 5} {
		v, g := realign.Interpolate(n, vol, degree, realign.Odd, pts)
		for i, p := range pts {
			near(t, "ramp", float64(v[i]), f(p[0], p[1], p[2]), 1e-4)
			for a, want := range [3]float64{3, -2, 5} {
				near(t, "slope", float64(g[i][a]), want, 1e-4)
			}
		}
		m, _ := realign.Interpolate(n, vol, degree, realign.Mirror, pts[1:2])
		if math.Abs(float64(m[0])-f(0.3, 0.2, 0.1)) < 0.05 {
			t.Error("the mirror rule should bend a ramp near the edge: is the rule applied at all?")
		}
	}
}

// Derivatives against differences of the values themselves.
func TestGradientAgainstDifferences(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	n := [3]int{8, 7, 6}
	vol := make([]float32, n[0]*n[1]*n[2])
	for i := range vol {
		vol[i] = float32(r.NormFloat64())
	}
	const h = 1e-2
	for _, degree := range []int{3, 5} {
		for range 200 {
			p := [3]float64{0.5 + 6*r.Float64(), 0.5 + 5*r.Float64(), 0.5 + 4*r.Float64()}
			pts := [][3]float64{p}
			for a := range 3 {
				lo, hi := p, p
				lo[a] -= h
				hi[a] += h
				pts = append(pts, lo, hi)
			}
			v, g := realign.Interpolate(n, vol, degree, realign.Odd, pts)
			for a := range 3 {
				// h^2/6 of a third derivative of about 20, and float32 over 2h.
				near(t, "derivative", float64(g[0][a]), float64(v[2+2*a]-v[1+2*a])/(2*h), 2e-3)
			}
		}
	}
}

// Outside the field the nearest edge value holds, for any coordinate at all.
func TestOutsideTakesEdge(t *testing.T) {
	n := [3]int{5, 1, 2}
	vol := []float32{1, 5, 2, 8, 3, 7, 7, 1, 0, 4}
	pts := [][3]float64{{-3, 0, 0}, {9, 4, -2}, {math.Inf(1), 0, 1}, {math.NaN(), 0, 0}, {0, -1e300, 1e300}}
	v, _ := realign.Interpolate(n, vol, 5, realign.Odd, pts)
	for i, w := range []float64{1, 3, 4, 1, 7} {
		near(t, "edge", float64(v[i]), w, 1e-5)
	}
}

// Golden: scipy.ndimage.gaussian_filter1d (testdata/generate.py).
func TestSmoothGolden(t *testing.T) {
	var doc struct {
		X     []float32
		Cases []struct {
			Sigma float64
			Y     []float64
		}
	}
	golden(t, "smooth.json", &doc)
	n := len(doc.X)
	for axis := range 3 {
		g := realign.Grid{N: [3]int{1, 1, 1}, Affine: realign.Identity.Matrix()}
		g.N[axis] = n
		for _, c := range doc.Cases {
			_, y := realign.Smooth(g, c.Sigma, [3]int{1, 1, 1}, doc.X)
			for i := range y {
				near(t, "gauss", float64(y[i]), c.Y[i], 1e-4) // float32 at 50
			}
		}
	}
}

// Thinning keeps samples where the output grid says they are.
func TestSmoothThinned(t *testing.T) {
	g := axial([3]int{11, 10, 9}, [3]float64{3, 4, 5})
	vol := make([]float32, 11*10*9)
	i := 0
	f := func(p [3]float64) float64 { return 100 + p[0] - 2*p[1] + 3*p[2] }
	for z := range 9 {
		for y := range 10 {
			for x := range 11 {
				vol[i] = float32(f(at(g, x, y, z)))
				i++
			}
		}
	}
	o, out := realign.Smooth(g, 4, [3]int{3, 2, 1}, vol)
	if o.N != [3]int{4, 5, 9} {
		t.Fatalf("size %v", o.N)
	}
	i = 0
	for z := range o.N[2] {
		for y := range o.N[1] {
			for x := range o.N[0] {
				near(t, "thinned ramp", float64(out[i]), f(at(o, x, y, z)), 1e-3)
				i++
			}
		}
	}
}

func at(g realign.Grid, x, y, z int) (p [3]float64) {
	for r := range p {
		p[r] = g.Affine[4*r]*float64(x) + g.Affine[4*r+1]*float64(y) + g.Affine[4*r+2]*float64(z) + g.Affine[4*r+3]
	}
	return p
}

// Resampling by the identity gives the volume back, and by a whole-voxel shift
// its neighbours.
func TestResampleWholeVoxels(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 9))
	g := axial([3]int{12, 11, 10}, [3]float64{3, 3, 4})
	vol := make([]float32, 12*11*10)
	for i := range vol {
		vol[i] = float32(1000 * r.Float64())
	}
	for _, degree := range []int{3, 5} {
		s := realign.NewResampler(g.N, degree)
		s.Load(vol)
		out := make([]float32, len(vol))
		s.Eval(out, realign.PoseMap(g, realign.Identity))
		for i := range vol {
			near(t, "identity", float64(out[i]), float64(vol[i]), 2e-3) // float32 coefficients of noise to 1000
		}
		// The volume's head is 3 mm further along +x: voxel i of the reference
		// comes from i-1, as the x axis of this grid runs the other way.
		s.Eval(out, realign.PoseMap(g, realign.FromParams([3]float64{3, 0, 0}, [3]float64{}, [3]float64{})))
		for i := range vol {
			if i%12 > 0 {
				near(t, "shift", float64(out[i]), float64(vol[i-1]), 2e-3)
			}
		}
	}
}
