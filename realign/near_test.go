package realign_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"evenkeel/internal/kernel"
	"evenkeel/phantom"
	"evenkeel/realign"
)

// shifted is a map that moves by parts of voxels.
func shifted(g realign.Grid, voxels [3]float64) realign.Map {
	var mm [3]float64
	for a := range mm {
		mm[a] = g.Affine[5*a] * voxels[a]
	}
	return realign.PoseMap(g, realign.FromParams(mm, [3]float64{}, [3]float64{}))
}

// turnedAbout is a pose turned by so many degrees about a slanted axis, and shifted.
func turnedAbout(degrees float64, shift [3]float64) realign.Pose {
	a := degrees * math.Pi / 180 / math.Sqrt(3)
	return realign.FromParams(shift, [3]float64{a, -a, a}, [3]float64{})
}

// both resamples vol by Eval and by Near.
func bothWays(tb testing.TB, g realign.Grid, degree int, vol []float32, m realign.Map) (eval, passes []float32) {
	tb.Helper()
	r := realign.NewResampler(g.N, degree)
	eval, passes = make([]float32, len(vol)), slices.Clone(vol)
	r.Load(vol)
	r.Eval(eval, m)
	if !realign.NearIdentity(m) || !r.Near(passes, passes, m) { // in place
		tb.Fatal("not near the identity")
	}
	return eval, passes
}

// Golden: scipy.ndimage.map_coordinates (testdata/near.py). A pure shift is one
// interpolation by whichever way; float32 as in TestSplineGolden.
func TestNearGolden(t *testing.T) {
	var doc struct {
		Size   [3]int
		Values []float32
		Cases  []struct {
			Shift          [3]float64
			Cubic, Quintic []float64
		}
	}
	golden(t, "near.json", &doc)
	g := axial(doc.Size, [3]float64{3, 3, 4})
	for _, c := range doc.Cases {
		for _, k := range []struct {
			degree int
			want   []float64
		}{{3, c.Cubic}, {5, c.Quintic}} {
			eval, passes := bothWays(t, g, k.degree, doc.Values, shifted(g, c.Shift))
			for i, w := range k.want {
				near(t, fmt.Sprintf("degree %d, shift %v, voxel %d, one axis after the other", k.degree, c.Shift, i), float64(passes[i]), w, 1e-3)
				near(t, fmt.Sprintf("degree %d, shift %v, voxel %d, at once", k.degree, c.Shift, i), float64(eval[i]), w, 1e-3)
			}
		}
	}
}

// Outside the field both ways give the edge's value, at any turn; points that only
// a pass sees outside are no different from their neighbours.
func TestNearOutside(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	g := axial([3]int{21, 17, 12}, [3]float64{3, 3, 3})
	// Smooth in the field, and steep at its edges: clamped by mistake, or not
	// clamped, values would differ by 10 and more.
	vol := make([]float32, 21*17*12)
	for i := range vol {
		x, y, z := float64(i%21)-10, float64(i/21%17)-8, float64(i/21/17)-5.5
		vol[i] = float32(1000 + 40*x - 30*y + 50*z + x*y + 2*y*z - x*z)
	}
	outside := 0
	for range 12 {
		var shift [3]float64
		for a := range shift {
			shift[a] = 12*r.Float64() - 6
		}
		p := turnedAbout(6*r.Float64()-3, shift)
		m := realign.PoseMap(g, p)
		for _, degree := range []int{3, 5} {
			eval, passes := bothWays(t, g, degree, vol, m)
			x, y, z := make([]float64, 21), make([]float64, 21), make([]float64, 21)
			for i, want := range eval {
				m.Row(i/21%17, i/21/17, x, y, z)
				at := [3]float64{x[i%21], y[i%21], z[i%21]}
				tol := 0.03 // inside: the edge rule is applied to a sheared field; slopes 150 a voxel
				for a, v := range at {
					if v < 0 || v > float64(g.N[a]-1) {
						tol = 2e-3 // the same spline, of the plane alone: float32 of 2000
					}
				}
				if tol < 0.1 {
					outside++
				}
				near(t, fmt.Sprintf("degree %d, pose %v, voxel %d at %.2f", degree, p, i, at), float64(passes[i]), float64(want), tol)
			}
			if t.Failed() {
				return
			}
		}
	}
	if outside < 1000 {
		t.Errorf("only %d points outside", outside)
	}
}

// One voxel along an axis, or two, as many as there are, and the shift past all of it.
func TestNearSizes(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 6))
	for _, n := range [][3]int{{1, 1, 1}, {1, 9, 8}, {9, 1, 8}, {9, 8, 1}, {2, 3, 2}, {1, 300, 300}, {130, 2, 5}} {
		g := axial(n, [3]float64{3, 3, 3})
		vol := make([]float32, n[0]*n[1]*n[2])
		for i := range vol {
			vol[i] = float32(100 * r.Float64())
		}
		for _, s := range [][3]float64{{}, {0.4, -0.3, 0.2}, {-500, 0, 0}, {3, 500, -2}, {0, 0.5, 1e6}} {
			for _, degree := range []int{3, 5} {
				eval, passes := bothWays(t, g, degree, vol, shifted(g, s))
				for i, w := range eval {
					near(t, fmt.Sprintf("degree %d, size %v, shift %v, voxel %d", degree, n, s, i), float64(passes[i]), float64(w), 4e-4)
				}
			}
		}
	}
}

// What Near refuses it leaves alone.
func TestNearRefuses(t *testing.T) {
	g := axial([3]int{8, 8, 8}, [3]float64{3, 3, 3})
	r := realign.NewResampler(g.N, 5)
	vol := make([]float32, 512)
	for name, m := range map[string]realign.Map{
		"turn":  realign.PoseMap(g, realign.FromParams([3]float64{}, [3]float64{0, 0.06, 0}, [3]float64{})),
		"slots": realign.SlotMap(g, 2, func(int) realign.Pose { return realign.Identity }),
	} {
		dst := []float32{0: 7, 511: 7}
		if realign.NearIdentity(m) || r.Near(dst, vol, m) || dst[0] != 7 || dst[511] != 7 {
			t.Errorf("%s: accepted, or written to", name)
		}
	}
	// A turn of 3 degrees about any axis of voxels of one edge is accepted, and 0.055 of a
	// voxel where they differ.
	if m := realign.PoseMap(g, realign.FromParams([3]float64{}, [3]float64{0.0523, 0, 0}, [3]float64{})); !realign.NearIdentity(m) {
		t.Error("3 degrees are refused")
	}
	flat := axial(g.N, [3]float64{2, 2, 6})
	for turn, ok := range map[float64]bool{0.018: true, 0.019: false} {
		if m := realign.PoseMap(flat, realign.FromParams([3]float64{}, [3]float64{turn, 0, 0}, [3]float64{})); realign.NearIdentity(m) != ok {
			t.Errorf("edges of 2 and 6 mm, %g rad: %v", turn, !ok)
		}
	}
}

// An analytic head, sampled and resampled at a turn, against itself: rms errors inside the head of one
// way and the other. White noise: the variance it keeps, and how much of it is common to both ways.
// Both interpolate by the same spline; what the shear between passes moves past
// Nyquist is all that differs.
func TestNearAgainstTruth(t *testing.T) {
	g := axial([3]int{64, 64, 36}, [3]float64{3.3, 3.3, 3.6})
	head := phantom.NewHead(7)
	nv := g.N[0] * g.N[1] * g.N[2]
	world := func(i int) (x [3]float64) {
		for a, v := range [3]int{i % 64, i / 64 % 64, i / 64 / 64} {
			x[a] = g.Affine[5*a]*float64(v) + g.Affine[4*a+3]
		}
		return x
	}
	vol, noise := make([]float32, nv), make([]float32, nv)
	r := rand.New(rand.NewPCG(3, 8))
	for i := range vol {
		vol[i], noise[i] = float32(head.At(world(i))), float32(r.NormFloat64())
	}
	for _, c := range []struct {
		degrees float64
		// How little noise may have in common: twice what was measured is missing from
		// 1 (0.99994, 0.99956, 0.99899).
		common float64
	}{{0.7, 0.99988}, {2, 0.9991}, {3, 0.998}} {
		p := turnedAbout(c.degrees, [3]float64{0.7, -1.1, 0.9})
		m := realign.PoseMap(g, p)
		eval, passes := bothWays(t, g, 5, vol, m)
		noiseEval, noisePasses := bothWays(t, g, 5, noise, m)
		var e, q, ee, qq, eq, count float64
		for i := range vol {
			x, y, z := i%64, i/64%64, i/64/64
			if min(x, y, z) < 6 || x > 57 || y > 57 || z > 29 { // what either does at edges is tested above
				continue
			}
			truth := head.At(p.Apply(world(i)))
			a, b := float64(eval[i])-truth, float64(passes[i])-truth
			e += a * a
			q += b * b
			a, b = float64(noiseEval[i]), float64(noisePasses[i])
			ee += a * a
			qq += b * b
			eq += a * b
			count++
		}
		e, q = math.Sqrt(e/count), math.Sqrt(q/count)
		common := eq / math.Sqrt(ee*qq)
		t.Logf("%g degrees: rms error %.4f, at once %.4f; variance of noise kept %.4f, at once %.4f; correlation %.5f", c.degrees, q, e, qq/count, ee/count, common)
		if !(q <= e*1.001) { // it was smaller by 0.4 to 2 %
			t.Errorf("%g degrees: rms error %g, at once %g", c.degrees, q, e)
		}
		if !(math.Abs(qq/ee-1) < 0.002) { // a tenth of a percent in SD; measured 0.0004
			t.Errorf("%g degrees: variance of noise %g, at once %g", c.degrees, qq/count, ee/count)
		}
		if !(common > c.common) {
			t.Errorf("%g degrees: correlation %g", c.degrees, common)
		}
	}
}

// Near gives the same bytes whichever twin runs.
func TestNearTwins(t *testing.T) {
	g, data := benchRun(t, 1)
	m := realign.PoseMap(g, turnedAbout(1.5, [3]float64{2, -5, 3}))
	var out [2][]float32
	for k := range out {
		func() {
			defer kernel.SetPlain(kernel.SetPlain(k == 0))
			out[k] = make([]float32, len(data))
			realign.NewResampler(g.N, 5).Near(out[k], data, m)
		}()
	}
	for i, v := range out[0] {
		if math.Float32bits(v) != math.Float32bits(out[1][i]) {
			t.Fatalf("voxel %d: %g in plain Go, %g in assembly", i, v, out[1][i])
		}
	}
}
