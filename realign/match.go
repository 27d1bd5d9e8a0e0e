package realign

import (
	"math"

	"evenkeel/internal/kernel"
)

// gainReach scales the polynomial of the gain: a coefficient of 0.1 means 10 %
// over 80 mm, the radius of a head.
const gainReach = 80

// turnReach converts a turn to the displacement it causes at the edge of a
// head, mm per rad.
const turnReach = 80

// unknowns of the normal equations: shift (3), turn (3), gain (4).
const unknowns = 10

// found is the outcome of one match.
type found struct {
	pose       Pose
	gain       [4]float64 // V = (gain[0] + gain[1] X/80 + ...) R
	iterations int
	converged  bool
	fit        float64 // correlation with the template inside the head, by weight of slice
	points     int

	slices []float64 // residual of each slice over the median slice's; nil if the match was not robust
	shares []float64 // residual of each slice over its signal
}

// effort says how hard a match tries.
type effort struct {
	tolerance  float64 // mm: the match ends when no point of the head moves more
	iterations int
	robust     bool // weights by slice and by Tukey's biweight
	thin       bool // every other voxel only
	sliceAxis  int
	skip       []bool // slices that take no part; nil: all do
}

// matcher aligns smoothed volumes with a template. It owns its scratch and
// belongs to one goroutine.
type matcher struct {
	points
	v   []float32 // value of the volume at the point
	r   []float32 // value of the template
	res []float32 // residual

	b      batch
	weight []float32
	abs    []float32
	rows   [5][]float32 // rows of the normal equations: brightness and residual, over the gain
}

// points are the voxels of a volume that take part in a match, with the template at
// their matching points.
type points struct {
	at    [][3]int32
	slice []int32
	near  []int32      // voxel of the template nearest to the matching point
	w     []float32    // weight of that voxel
	head  []bool       // inside the head
	phi   [3][]float32 // scanner coordinates for the gain, from the centre, / gainReach
	jac   [6][]float32 // gradient and moment of the template, per mm and per rad
}

func (p *points) reset(room int) {
	if cap(p.at) < room {
		p.at, p.slice, p.near = make([][3]int32, 0, room), make([]int32, 0, room), make([]int32, 0, room)
		p.w, p.head = make([]float32, 0, room), make([]bool, 0, room)
		for a := range p.phi {
			p.phi[a] = make([]float32, 0, room)
		}
	}
	p.at, p.slice, p.near, p.w, p.head = p.at[:0], p.slice[:0], p.near[:0], p.w[:0], p.head[:0]
	for a := range p.phi {
		p.phi[a] = p.phi[a][:0]
	}
}

// selectPoints lists the voxels of vol that take part at the pose and evaluates
// the template and its derivatives at their matching points.
func (m *matcher) selectPoints(t *template, vol []float32, p Pose, e effort) {
	n := t.g.N
	m.points.reset(t.room)
	m.b.reset()
	m.b.grow(t.room)
	m.v = m.v[:0]
	b := mul(t.inv, mul(p.Inverse().Matrix(), t.g.Affine))
	toCentre := t.g.Affine // voxel index to mm from the centre
	for a := range t.centre {
		toCentre[4*a+3] -= t.centre[a]
	}
	var lo, hi [3]int
	var perVoxel [3]float64 // of phi, along a row
	for a := range lo {
		perVoxel[a] = float64(toCentre[4*a] * (1.0 / gainReach))
		lo[a] = int(math.Ceil(t.margin[a]))
		hi[a] = int(math.Floor(float64(n[a]-1) - t.margin[a]))
	}
	forth := mul(t.inv, mul(p.Matrix(), t.g.Affine))
	lo, hi = t.reached(&forth, lo, hi)
	for k := lo[2]; k <= hi[2]; k++ {
		for j := lo[1]; j <= hi[1]; j++ {
			// Along a row everything is its start and a step for each voxel.
			row := vol[n[0]*(j+n[1]*k):][:n[0]]
			o, xo := applyAffine(&b, 0, float64(j), float64(k)), applyAffine(&toCentre, 0, float64(j), float64(k))
			for a := range xo {
				xo[a] = float64(xo[a] * (1.0 / gainReach))
			}
			for i := lo[0]; i <= hi[0]; i++ {
				if e.thin && white(n, i, j, k) {
					continue
				}
				slice := [3]int{i, j, k}[e.sliceAxis]
				if e.skip != nil && e.skip[slice] {
					continue
				}
				fi := float64(i)
				y := [3]float64{o[0] + float64(b[0]*fi), o[1] + float64(b[4]*fi), o[2] + float64(b[8]*fi)}
				near, ok := t.see(&m.b, &y)
				if !ok {
					continue
				}
				m.at = append(m.at, [3]int32{int32(i), int32(j), int32(k)})
				m.slice = append(m.slice, int32(slice))
				m.near = append(m.near, int32(near))
				m.head = append(m.head, t.head[near])
				w := float32(1)
				if t.weight != nil {
					w = t.weight[near]
				}
				m.w = append(m.w, w)
				for a := range xo {
					m.phi[a] = append(m.phi[a], float32(xo[a]+float64(perVoxel[a]*fi)))
				}
				m.v = append(m.v, row[i])
			}
		}
	}
	t.s.gradients(&m.b)
	count := len(m.at)
	m.r = append(m.r[:0], m.b.v...)
	for a := range m.jac {
		m.jac[a] = sized(m.jac[a], count)
	}
	for q, at := range m.at {
		g := [3]float64{float64(m.b.gx[q]), float64(m.b.gy[q]), float64(m.b.gz[q])}
		gw := toWorld(&t.inv, g)
		y := applyAffine(&b, float64(at[0]), float64(at[1]), float64(at[2]))
		mo := cross(applyAffine(&toCentre, y[0], y[1], y[2]), gw)
		for a := range 3 {
			m.jac[a][q], m.jac[3+a][q] = float32(gw[a]), float32(mo[a])
		}
	}
}

// toWorld turns derivatives by voxel into derivatives by mm; inv takes mm to voxels.
func toWorld(inv *[16]float64, g [3]float64) (w [3]float64) {
	for a := range w {
		w[a] = float64(g[0]*inv[a]) + float64(g[1]*inv[4+a]) + float64(g[2]*inv[8+a])
	}
	return w
}

// white says which voxels thinning leaves out: those of one colour of a
// chessboard that is its own mirror image, so that an array written the other way
// round gives the same poses.
func white(n [3]int, x, y, z int) bool {
	return (min(x, n[0]-1-x)+min(y, n[1]-1-y)+min(z, n[2]-1-z))&1 != 0
}

// revalue evaluates the template anew at another pose, derivatives kept.
func (m *matcher) revalue(t *template, p Pose) {
	b := mul(t.inv, mul(p.Inverse().Matrix(), t.g.Affine))
	m.b.reset()
	for _, at := range m.at {
		y := applyAffine(&b, float64(at[0]), float64(at[1]), float64(at[2]))
		t.s.add(&m.b, y[0], y[1], y[2])
	}
	t.s.valuesInto(m.r, &m.b)
}

// extrapolate changes the template's values by J d. jac holds the gradient and
// moment of the template at the matching point, which moves by the opposite of
// the twist.
func (m *matcher) extrapolate(d Twist) {
	d0, d1, d2 := float32(d.V[0]), float32(d.V[1]), float32(d.V[2])
	d3, d4, d5 := float32(d.W[0]), float32(d.W[1]), float32(d.W[2])
	j0, j1, j2, j3, j4, j5 := m.jac[0], m.jac[1], m.jac[2], m.jac[3], m.jac[4], m.jac[5]
	for q := range m.r {
		a := float32(j0[q]*d0) + float32(j1[q]*d1) + float32(j2[q]*d2)
		b := float32(j3[q]*d3) + float32(j4[q]*d4) + float32(j5[q]*d5)
		m.r[q] -= a + b
	}
}

// nearMM is how far the pose may move, at the head's edge, before the template
// is evaluated anew; below, its change is J d. What that leaves out is half the
// second derivative times d^2: for an image smoothed by 2 mm, d = 0.01 mm, one
// part in 10^5 of the contrast, which moves a pose by less than 0.1 um.
const nearMM = 0.01

// farMM is how far the pose may wander, at the head's edge, from where points
// and derivatives were taken before they are taken anew: a tenth of a
// millimetre is a thirtieth of a voxel, over which the slope of a smoothed image
// changes by about a percent.
const farMM = 0.1

// settling: with few planes a match can go to and fro between two poses, each
// of which takes in a voxel that leads to the other. After so many iterations,
// which suffice from any start within capture range, the voxels stay as they are.
const settling = 15

// runaway is a step, in mm at the head's edge, that only a match without any
// hold takes: nearly a head's length.
const runaway = 150

// match aligns vol with the template, from a starting pose, by Gauss-Newton
// (Baker, Matthews 2004, IJCV 56(3):221-255, section 2, for rigid maps; the
// gain joins the unknowns as a linear appearance, ibid. part 3).
func (m *matcher) match(t *template, vol []float32, start Pose, e effort) found {
	f := found{pose: start}
	m.selectPoints(t, vol, start, e)
	taken, valued := start, start
	f.gain[0] = m.ratio()
	for f.iterations < e.iterations {
		if f.points = len(m.at); f.points < 10*unknowns {
			return f // hardly any overlap: fit stays 0
		}
		step, ok := m.step(&f, e, t.g.N[e.sliceAxis])
		f.iterations++
		if !ok {
			return f
		}
		moved := math.Max(norm(step.V), turnReach*norm(step.W))
		if !(moved < runaway) {
			return f
		}
		f.pose = f.pose.Compose(Exp(step).centred(t.centre))
		if moved < e.tolerance {
			f.converged = true
			break
		}
		switch {
		case distance(taken, f.pose, t.centre) > farMM && f.iterations < settling:
			m.selectPoints(t, vol, f.pose, e)
			taken, valued = f.pose, f.pose
		case distance(valued, f.pose, t.centre) > nearMM:
			m.revalue(t, f.pose)
			valued = f.pose
		default:
			m.extrapolate(step)
		}
	}
	var weights []float64
	m.residuals(&f)
	if e.robust {
		f.slices = m.sliceResiduals(t.g.N[e.sliceAxis])
		f.shares = m.sliceShares(t.g.N[e.sliceAxis])
		weights = sliceWeights(f.slices)
	}
	f.fit = m.correlation(weights)
	return f
}

// centred turns a map about the origin into the same map about c.
func (p Pose) centred(c [3]float64) Pose { return p.about(c, p.T) }

func norm(v [3]float64) float64 {
	return math.Sqrt(float64(v[0]*v[0]) + float64(v[1]*v[1]) + float64(v[2]*v[2]))
}

// distance bounds how far two poses are apart at the edge of a head about c.
func distance(p, q Pose, c [3]float64) float64 {
	d := p.Inverse().Compose(q)
	at := d.Apply(c)
	for i := range at {
		at[i] -= c[i]
	}
	return norm(at) + float64(turnReach*norm(d.Log().W))
}

// ratio is the one gain that fits the values best.
func (m *matcher) ratio() float64 {
	vr, rr := 0.0, 0.0
	for i, r := range m.r {
		vr += float64(float64(m.v[i]) * float64(r))
		rr += float64(float64(r) * float64(r))
	}
	if !(rr > 0) {
		return 1
	}
	return vr / rr
}

// residuals evaluates e at the points, with the gain in f.
func (m *matcher) residuals(f *found) {
	m.res = sized(m.res, len(m.at))
	kernel.Residual(m.res, m.v, m.r, m.phi[0], m.phi[1], m.phi[2], f.gain32())
}

func (f *found) gain32() (g [4]float32) {
	for a := range g {
		g[a] = float32(f.gain[a])
	}
	return g
}

// step solves the weighted normal equations once. It updates the gain in f and
// returns the twist about the centre by which the pose is to move. n is the
// number of slices.
//
// With de/dd = gain J and de/db = -r (1, phi), the equations are those of the rows
// J, -r/gain (1, phi) and e/gain at gain^2 times the weight, which leaves J as it is
// from step to step.
func (m *matcher) step(f *found, e effort, n int) (Twist, bool) {
	m.residuals(f)
	m.weight = sized(m.weight, len(m.at))
	if e.robust {
		bySlice := sliceWeights(m.sliceResiduals(n))
		for q, s := range m.slice {
			m.weight[q] = float32(bySlice[s] * float64(m.w[q]))
		}
		if cut := float32(tukeyCut * madScale * float64(m.medianAbs())); cut > 0 {
			kernel.Tukey(m.weight, m.res, cut)
		}
	} else {
		for q := range m.weight {
			m.weight[q] = 1
		}
	}
	for a := range m.rows {
		m.rows[a] = sized(m.rows[a], len(m.at))
	}
	gain := f.gain32()
	p0, p1, p2 := m.phi[0], m.phi[1], m.phi[2]
	r0, r1, r2, r3, r4 := m.rows[0], m.rows[1], m.rows[2], m.rows[3], m.rows[4]
	for q, r := range m.r {
		g := gain[0] + float32(gain[1]*p0[q]) + float32(gain[2]*p1[q]) + float32(gain[3]*p2[q])
		if !(g > faintest) {
			// Shading so strong that nothing is left there.
			m.weight[q], r0[q], r1[q], r2[q], r3[q], r4[q] = 0, 0, 0, 0, 0, 0
			continue
		}
		over := 1 / g
		a := -float32(r * over)
		r0[q], r1[q], r2[q], r3[q] = a, float32(a*p0[q]), float32(a*p1[q]), float32(a*p2[q])
		r4[q] = float32(m.res[q] * over)
		m.weight[q] = float32(m.weight[q] * float32(g*g))
	}
	const rows = unknowns + 1
	var sum [rows * (rows + 1) / 2]float64
	kernel.Gram(sum[:], [][]float32{m.jac[0], m.jac[1], m.jac[2], m.jac[3], m.jac[4], m.jac[5], r0, r1, r2, r3, r4}, m.weight)
	var h [unknowns][unknowns]float64
	var g [unknowns]float64
	at := 0
	for a := range unknowns {
		for b := a; b < unknowns; b++ {
			h[a][b] = sum[at]
			at++
		}
		g[a] = sum[at]
		at++
	}
	d, ok := solve(&h, &g)
	if !ok {
		return Twist{}, false
	}
	for a := range 4 {
		f.gain[a] -= d[6+a]
	}
	return Twist{V: [3]float64{-d[0], -d[1], -d[2]}, W: [3]float64{-d[3], -d[4], -d[5]}}, true
}

// faintest gain that a voxel may have and still count.
const faintest = 1e-3

// Tukey's biweight: 95 % efficient for normal residuals at 4.685 scales; a
// median absolute deviation of normal residuals is 1/1.4826 of their scale
// (both recomputed in references, section 5.7).
const (
	tukeyCut = 4.685
	madScale = 1.4826
)

// sliceResiduals gives the rms residual of each of n slices over that of the
// median slice; 0 for a slice without points.
func (m *matcher) sliceResiduals(n int) []float64 {
	sum, count := make([]float64, n), make([]float64, n)
	for q, r := range m.res {
		sum[m.slice[q]] += float64(float64(r) * float64(r))
		count[m.slice[q]]++
	}
	var seen []float32
	for s := range sum {
		if count[s] > 0 {
			sum[s] = math.Sqrt(sum[s] / count[s])
			seen = append(seen, float32(sum[s]))
		}
	}
	mid := float64(median(seen))
	if !(mid > 0) {
		return make([]float64, n)
	}
	for s := range sum {
		sum[s] /= mid
	}
	return sum
}

// sliceShares gives the rms residual of each of n slices over the rms of the
// template there; 0 for a slice without points.
func (m *matcher) sliceShares(n int) []float64 {
	share, signal := make([]float64, n), make([]float64, n)
	for q, r := range m.res {
		share[m.slice[q]] += float64(float64(r) * float64(r))
		signal[m.slice[q]] += float64(float64(m.r[q]) * float64(m.r[q]))
	}
	for s := range share {
		if signal[s] > 0 {
			share[s] = math.Sqrt(share[s] / signal[s])
		}
	}
	return share
}

// sliceWeights lowers the weight of slices whose residual stands out: with z
// the slice's rms over the median slice's, w = min(1, (1.5/z)^4). A slice lost
// to a spike or to motion during its excitation then counts next to nothing,
// one that is merely noisier keeps most of its weight.
func sliceWeights(z []float64) []float64 {
	w := make([]float64, len(z))
	for s := range w {
		w[s] = 1
		if u := 1.5 / z[s]; z[s] > 1.5 {
			u = float64(u * u)
			w[s] = float64(u * u)
		}
	}
	return w
}

// medianAbs is the median absolute residual.
func (m *matcher) medianAbs() float32 {
	m.abs = sized(m.abs, len(m.res))
	kernel.Abs(m.abs, m.res)
	return medianOf(m.abs)
}

// median returns the upper median and reorders v. (Hoare 1961, CACM 4:321.)
func median(v []float32) float32 {
	if len(v) == 0 {
		return 0
	}
	lo, hi, k := 0, len(v)-1, len(v)/2
	for lo < hi {
		pivot := v[lo+(hi-lo)/2]
		i, j := lo, hi
		for i <= j {
			for v[i] < pivot {
				i++
			}
			for v[j] > pivot {
				j--
			}
			if i <= j {
				v[i], v[j] = v[j], v[i]
				i++
				j--
			}
		}
		switch {
		case k <= j:
			hi = j
		case k >= i:
			lo = i
		default:
			return v[k]
		}
	}
	return v[k]
}

// correlation is Pearson's, between volume and template over the head, by
// weight of slice (nil: all alike).
func (m *matcher) correlation(weights []float64) float64 {
	weight := func(q int) float64 {
		if !m.head[q] {
			return 0
		}
		if weights == nil {
			return 1
		}
		return weights[m.slice[q]]
	}
	var n, sv, sr float64
	for q := range m.at {
		w := weight(q)
		n += w
		sv += float64(w * float64(m.v[q]))
		sr += float64(w * float64(m.r[q]))
	}
	if n < 2 {
		return 0
	}
	mv, mr := sv/n, sr/n
	var vv, rr, vr float64
	for q := range m.at {
		w := weight(q)
		a, b := float64(m.v[q])-mv, float64(m.r[q])-mr
		vv += float64(float64(w*a) * a)
		rr += float64(float64(w*b) * b)
		vr += float64(float64(w*a) * b)
	}
	if !(vv > 0 && rr > 0) {
		return 0
	}
	return vr / math.Sqrt(float64(vv*rr))
}

// solve returns x with H x = g for the upper triangle of a symmetric positive
// definite H, by Cholesky after scaling the diagonal to one; ok is false where
// H is not definite to working precision.
func solve(h *[unknowns][unknowns]float64, g *[unknowns]float64) (x [unknowns]float64, ok bool) {
	var s [unknowns]float64
	for a := range s {
		if !(h[a][a] > 0) {
			return x, false
		}
		s[a] = 1 / math.Sqrt(h[a][a])
	}
	var l [unknowns][unknowns]float64
	for a := range unknowns {
		for b := 0; b <= a; b++ {
			v := float64(float64(h[b][a]*s[a]) * s[b])
			for c := range b {
				v -= float64(l[a][c] * l[b][c])
			}
			if a == b {
				if !(v > 1e-12) {
					return x, false
				}
				l[a][a] = math.Sqrt(v)
			} else {
				l[a][b] = v / l[b][b]
			}
		}
	}
	for a := range unknowns {
		v := float64(g[a] * s[a])
		for c := range a {
			v -= float64(l[a][c] * x[c])
		}
		x[a] = v / l[a][a]
	}
	for a := unknowns - 1; a >= 0; a-- {
		v := x[a]
		for c := a + 1; c < unknowns; c++ {
			v -= float64(l[c][a] * x[c])
		}
		x[a] = v / l[a][a]
	}
	for a := range x {
		x[a] = float64(x[a] * s[a])
	}
	return x, true
}
