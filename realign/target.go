package realign

import "math"

// target is a reference prepared for matching volumes with it, at one level of smoothing:
// the voxels that take part, row by row, with value and derivatives of the reference at
// each. It is read-only once made.
type target struct {
	g      Grid
	inv    [16]float64 // world mm to voxel index
	degree int         // of the splines of volumes
	centre [3]float64  // world mm
	margin [3]float64  // voxels left out at each field edge, of volumes too
	rows   []span
	voxel  []int32      // of each point
	value  []float32    // of the reference, smoothed
	jac    [6][]float32 // gradient and moment of the reference, per mm and per rad
	phi    [3][]float32 // coordinates for the gain, from the centre, / gainReach
	shade  [3][]float32 // value times phi
	slope  []float32    // squared length of the gradient, in units of the reference's size
	weight []float32    // what a point counts in a robust match; nil: all alike
	head   []span       // rows of the head, whether they take part or not
	inHead []bool       // by point
	some   []int32      // points that stand for all where a median or a mean is wanted
	size   float64      // voxels of the head
	fewer  *target      // every fourth row of it; nil: too few
}

// span is a stretch of a row of voxels.
type span struct {
	x, y, z, n int
	at         int // of its first voxel, among the points
}

// spansOf lists the stretches of a mask, in the order of memory.
func spansOf(mask []bool, n [3]int) (rows []span) {
	at := 0
	for z := range n[2] {
		for y := range n[1] {
			row := mask[n[0]*(y+n[1]*z):][:n[0]]
			for x := 0; x < len(row); x++ {
				if !row[x] {
					continue
				}
				from := x
				for x < len(row) && row[x] {
					x++
				}
				rows = append(rows, span{from, y, z, x - from, at})
				at += x - from
			}
		}
	}
	return rows
}

// fewestPoints that a quarter of the rows must hold to be used at all: some hundred for
// each unknown.
const fewestPoints = 1000

// newTarget takes the smoothed reference vol and the head on its grid. unknown marks voxels
// where the reference is not known (outside the field of most volumes averaged), or is
// nil.
func newTarget(g Grid, vol []float32, head, unknown []bool, rim int, margin [3]float64, centre [3]float64, degree int) *target {
	t := newTemplate(g, vol, head, unknown, rim, margin, centre, degree)
	usable := t.usable
	i := 0
	for z := range g.N[2] {
		for y := range g.N[1] {
			for x := range g.N[0] {
				for a, v := range [3]int{x, y, z} {
					usable[i] = usable[i] && float64(v) >= margin[a] && float64(v) <= float64(g.N[a]-1)-margin[a]
				}
				i++
			}
		}
	}
	a := &target{g: g, inv: t.inv, degree: degree, centre: centre, margin: margin, rows: spansOf(usable, g.N), head: spansOf(head, g.N)}
	for _, r := range a.head {
		a.size += float64(r.n)
	}
	toCentre := g.Affine
	for k := range centre {
		toCentre[4*k+3] -= centre[k]
	}
	b := &batch{}
	for _, r := range a.rows {
		for x := r.x; x < r.x+r.n; x++ {
			q := x + g.N[0]*(r.y+g.N[1]*r.z)
			a.voxel = append(a.voxel, int32(q))
			a.value = append(a.value, vol[q])
			a.inHead = append(a.inHead, head[q])
			t.s.add(b, float64(x), float64(r.y), float64(r.z))
		}
	}
	count := len(a.voxel)
	t.s.gradients(b)
	for k := range a.jac {
		a.jac[k] = make([]float32, count)
	}
	for k := range a.phi {
		a.phi[k], a.shade[k] = make([]float32, count), make([]float32, count)
	}
	a.slope = make([]float32, count)
	unit := unitOf(a.value)
	for q, v := range a.voxel {
		x := int(v)
		at := applyAffine(&toCentre, float64(x%g.N[0]), float64(x/g.N[0]%g.N[1]), float64(x/(g.N[0]*g.N[1])))
		gw := toWorld(&a.inv, [3]float64{float64(b.gx[q]), float64(b.gy[q]), float64(b.gz[q])})
		mo := cross(at, gw)
		for k := range 3 {
			a.jac[k][q], a.jac[3+k][q] = float32(gw[k]), float32(mo[k])
			a.phi[k][q] = float32(at[k] * (1.0 / gainReach))
			a.shade[k][q] = float32(a.value[q] * a.phi[k][q])
		}
		for k := range gw {
			gw[k] *= unit
		}
		a.slope[q] = float32(float64(gw[0]*gw[0]) + float64(gw[1]*gw[1]) + float64(gw[2]*gw[2]))
	}
	a.some = a.sample()
	a.thin()
	return a
}

// unitOf is the power of two that brings the largest value near to one, so that squares stay
// in the range of float32; 1 where there is none.
func unitOf(v []float32) float64 {
	peak := 0.0
	for _, x := range v {
		peak = max(peak, math.Abs(float64(x)))
	}
	if !(peak > 0 && peak <= math.MaxFloat32) {
		return 1
	}
	_, e := math.Frexp(peak)
	return math.Ldexp(1, -e)
}

// thin prepares every fourth row. Rows are counted from both ends of an axis towards
// its middle, so that an array written the other way round gives the same ones; each
// slice along any axis keeps some.
func (t *target) thin() {
	f := *t
	f.rows, f.voxel, f.value, f.inHead, f.slope = nil, nil, nil, nil, nil
	f.jac, f.phi, f.shade = [6][]float32{}, [3][]float32{}, [3][]float32{}
	n := t.g.N
	for _, r := range t.rows {
		if (min(r.y, n[1]-1-r.y)+2*min(r.z, n[2]-1-r.z))%4 != 0 {
			continue
		}
		from, to := r.at, r.at+r.n
		r.at = len(f.voxel)
		f.rows = append(f.rows, r)
		f.voxel = append(f.voxel, t.voxel[from:to]...)
		f.value = append(f.value, t.value[from:to]...)
		f.inHead = append(f.inHead, t.inHead[from:to]...)
		f.slope = append(f.slope, t.slope[from:to]...)
		for k := range t.jac {
			f.jac[k] = append(f.jac[k], t.jac[k][from:to]...)
		}
		for k := range t.phi {
			f.phi[k] = append(f.phi[k], t.phi[k][from:to]...)
			f.shade[k] = append(f.shade[k], t.shade[k][from:to]...)
		}
	}
	f.some = f.sample()
	if len(f.voxel) >= fewestPoints {
		t.fewer = &f
	}
}

// enoughSamples make a median certain to 1.5 % of the spread.
const enoughSamples = 8000

// sample picks about so many of the points, or all of fewer: voxels on every so many-th
// sloping plane, counted from the corners, so that it is the same ones however
// the array is turned.
func (t *target) sample() (some []int32) {
	every := max(1, len(t.voxel)/enoughSamples)
	n := t.g.N
	for q, v := range t.voxel {
		x, y, z := int(v)%n[0], int(v)/n[0]%n[1], int(v)/(n[0]*n[1])
		if (min(x, n[0]-1-x)+min(y, n[1]-1-y)+min(z, n[2]-1-z))%every == 0 {
			some = append(some, int32(q))
		}
	}
	return some
}

// weigh has points count as their voxels do.
func (t *target) weigh(byVoxel []float32) {
	for _, t := range []*target{t, t.fewer} {
		if t == nil {
			continue
		}
		t.weight = make([]float32, len(t.voxel))
		for q, v := range t.voxel {
			t.weight[q] = byVoxel[v]
		}
	}
}

// outside is the share of the head that pose p moves out of the field of view,
// which ends half a voxel past the outermost centres.
func (t *target) outside(p Pose) float64 { return outside(t.g, t.head, t.size, p) }

func outside(g Grid, head []span, size float64, p Pose) float64 {
	if size == 0 {
		return 0
	}
	b := mul(mustInvert(g.Affine), mul(p.Matrix(), g.Affine))
	out := 0
	for _, r := range head {
		start := applyAffine(&b, float64(r.x), float64(r.y), float64(r.z))
		lo, hi := inside(&start, [3]float64{b[0], b[4], b[8]}, r.n, g.N, [3]float64{-0.5, -0.5, -0.5})
		out += r.n - (hi - lo)
	}
	return float64(out) / size
}

// inside gives the stretch [lo, hi) of n points, start + i step, that keep a margin from
// the outermost samples of a field of size voxels.
func inside(start *[3]float64, step [3]float64, n int, size [3]int, margin [3]float64) (lo, hi int) {
	within := func(i int) bool {
		f := float64(i)
		for a := range 3 {
			x := start[a] + float64(step[a]*f)
			if !(x >= margin[a] && x <= float64(size[a]-1)-margin[a]) {
				return false
			}
		}
		return true
	}
	// A straight line through a box: one stretch, most often all of it.
	hi = n
	for lo < hi && !within(lo) {
		lo++
	}
	for hi > lo && !within(hi-1) {
		hi--
	}
	return lo, hi
}

// sliceAt is the slice nearest to a voxel coordinate.
func sliceAt(x float64, n int) int32 { return int32(max(0, min(n-1, int(math.Floor(x+0.5))))) }
