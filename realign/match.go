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
	gain       [4]float64 // of the volume, at scanner points: gain[0] + (gain[1] X + ...)/80
	iterations int
	converged  bool
	fit        float64 // correlation with the reference inside the head, by weight of slice
	points     int
	again      bool // matched with slices left out: the volume is not as it was loaded

	slices []float64 // residual of each slice over the median slice's; nil if the match was not robust
	shares []float64 // residual of each slice over its signal
}

// effort says how hard a match tries.
type effort struct {
	tolerance  float64 // mm: the match ends when no point of the head would move more
	iterations int
	robust     bool // weights by slice and by Tukey's biweight
	thin       bool // every fourth row only
	draft      bool // only the pose is wanted
	sliceAxis  int
	skip       []bool // slices that take no part; nil: all do
}

// matcher aligns volumes with a target. It owns its scratch and belongs to one
// goroutine.
type matcher struct {
	t     *target
	v     []float32 // value of the volume at the points
	in    []float32 // 1 where the point lies inside the volume's field and its slice takes part
	slice []int32   // of the volume, nearest to the point
	flat  []int32   // by row: the one slice that all of it lies in, or -1
	count int       // points that take part
	res   []float32 // residual

	disturbed bool // of a robust match: slices stand out

	weight []float32
	some   []float32 // sizes of some residuals
}

// see evaluates a volume at the matching points of a target; with same, the points that
// take part stay those of the last time.
func (m *matcher) see(t *target, s *spline, p Pose, e *effort, same bool) {
	n := len(t.value)
	m.t = t
	m.v, m.in, m.slice, m.res, m.weight = sized(m.v, n), sized(m.in, n), sized(m.slice, n), sized(m.res, n), sized(m.weight, n)
	m.flat = sized(m.flat, len(t.rows))
	if !same {
		m.count = 0
	}
	b := mul(t.inv, mul(p.Matrix(), t.g.Affine))
	step := [3]float64{b[0], b[4], b[8]}
	slices := t.g.N[e.sliceAxis]
	for k, r := range t.rows {
		start := applyAffine(&b, float64(r.x), float64(r.y), float64(r.z))
		s.line(m.v[r.at:][:r.n], start, step)
		if same {
			continue
		}
		in := m.in[r.at:][:r.n]
		lo, hi := inside(&start, step, r.n, t.g.N, t.margin)
		m.count += hi - lo
		clear(in)
		for i := range in[lo:hi] {
			in[lo+i] = 1
		}
		x, dx := start[e.sliceAxis], step[e.sliceAxis]
		first, last := sliceAt(x, slices), sliceAt(x+float64(dx*float64(r.n-1)), slices)
		if first == last {
			m.flat[k] = first
			if e.skip != nil && e.skip[first] {
				clear(in)
				m.count -= hi - lo
			}
			continue
		}
		m.flat[k] = -1
		for i := range r.n {
			at := sliceAt(x+float64(dx*float64(i)), slices)
			m.slice[r.at+i] = at
			if e.skip != nil && e.skip[at] && in[i] > 0 {
				in[i] = 0
				m.count--
			}
		}
	}
}

// bySlice calls f for every stretch of points that lie in one slice of the volume.
func (m *matcher) bySlice(f func(slice int32, from, to int)) {
	for k, r := range m.t.rows {
		if s := m.flat[k]; s >= 0 {
			f(s, r.at, r.at+r.n)
			continue
		}
		from := r.at
		for q := r.at + 1; q <= r.at+r.n; q++ {
			if q == r.at+r.n || m.slice[q] != m.slice[from] {
				f(m.slice[from], from, q)
				from = q
			}
		}
	}
}

// extrapolate changes the volume's values by what the reference says of a step d of
// the pose: as the reference changes, at the volume's brightness.
func (m *matcher) extrapolate(d Twist, gain float64) {
	d0, d1, d2 := float32(d.V[0]*gain), float32(d.V[1]*gain), float32(d.V[2]*gain)
	d3, d4, d5 := float32(d.W[0]*gain), float32(d.W[1]*gain), float32(d.W[2]*gain)
	j := &m.t.jac
	j0, j1, j2, j3, j4, j5 := j[0][:len(m.v)], j[1][:len(m.v)], j[2][:len(m.v)], j[3][:len(m.v)], j[4][:len(m.v)], j[5][:len(m.v)]
	for q := range m.v {
		a := float32(j0[q]*d0) + float32(j1[q]*d1) + float32(j2[q]*d2)
		b := float32(j3[q]*d3) + float32(j4[q]*d4) + float32(j5[q]*d5)
		m.v[q] += a + b
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

// shrink is what is left of a step after the next one, at most: 0.015 to 0.03 on heads
// with noise. (Derivatives are those of the reference itself, and slant makes up for the
// biweight.) It does not hold where slices stand out, as in a volume with a jerk: two poses
// then compete for the weights, and a match ends only when its steps are small themselves.
const shrink = 0.05

// enough: where what is left of a step is below a tenth of what noise leaves uncertain,
// another step would mend at most half a percent of the error.
const enough = 0.1

// nearMM is how far the pose may move, at the head's edge, before the volume
// is evaluated anew; below, its change is J d. What that leaves out is half the
// second derivative times d^2: for an image smoothed by 2 mm, d = 0.01 mm, one
// part in 10^5 of the contrast, which moves a pose by less than 0.1 um.
const nearMM = 0.01

// farMM is how far apart two poses must be, at the head's edge, to be worth a match each.
const farMM = 0.1

// settling: with few planes a match can go to and fro between two poses, each
// of which takes in a voxel that leads to the other. After so many iterations,
// which suffice from any start within capture range, the voxels stay as they are.
const settling = 15

// runaway is a step, in mm at the head's edge, that only a match without any
// hold takes: nearly a head's length.
const runaway = 150

// match aligns a volume, given by its spline, with the target, from a starting pose, by
// Gauss-Newton with derivatives taken once, of the reference at its own voxels: the
// inverse compositional algorithm (Baker, Matthews 2004, IJCV 56(3):221-255, section
// 3.2, for rigid maps; the gain joins the unknowns as a linear appearance, ibid. part 3).
func (m *matcher) match(t *target, s *spline, start Pose, e effort) found {
	f := found{pose: start}
	m.disturbed = false
	if e.thin && t.fewer != nil {
		t = t.fewer
	}
	m.see(t, s, start, &e, false)
	valued := start
	var gain [4]float64 // in the frame of the reference
	gain[0] = m.ratio()
	for f.iterations < e.iterations {
		if f.points = m.count; f.points < 10*unknowns {
			return f // hardly any overlap: fit stays 0
		}
		step, size, ok := m.step(&gain, &e)
		f.iterations++
		if !ok {
			return f
		}
		moved := math.Max(norm(step.V), turnReach*norm(step.W))
		if !(moved < runaway) {
			return f
		}
		f.pose = f.pose.Compose(Exp(step).centred(t.centre))
		left := shrink
		if m.disturbed {
			left = 1
		}
		done := float64(moved*left) < e.tolerance || e.robust && float64(size*left) < enough
		if distance(valued, f.pose, t.centre) > nearMM && !done {
			m.see(t, s, f.pose, &e, f.iterations >= settling)
			valued = f.pose
		} else {
			m.extrapolate(step, gain[0])
		}
		if done {
			f.converged = true
			break
		}
	}
	if e.draft {
		return f
	}
	f.gain = scannerGain(gain, f.pose, t.centre)
	var weights []float64
	m.residuals(&gain)
	if e.robust {
		f.slices, f.shares = m.slicesOf(t.g.N[e.sliceAxis])
		weights = sliceWeights(f.slices)
	}
	f.fit = m.correlation(weights)
	return f
}

// scannerGain carries a gain that is linear in the frame of the reference, about c, into
// the scanner's, about the same point: pose takes the one to the other.
func scannerGain(g [4]float64, pose Pose, c [3]float64) (out [4]float64) {
	back := pose.Inverse().Apply(c)
	out[0] = g[0]
	r := pose.rotation()
	for a := range 3 {
		out[0] += float64(float64(g[1+a]*(back[a]-c[a])) * (1.0 / gainReach))
		for b := range 3 {
			out[1+a] += float64(r[3*a+b] * g[1+b])
		}
	}
	return out
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
	for i, r := range m.t.value {
		u := float64(m.in[i]) * float64(r)
		vr += float64(float64(m.v[i]) * u)
		rr += float64(float64(r) * u)
	}
	if !(rr > 0) {
		return 1
	}
	return vr / rr
}

func narrow(gain *[4]float64) (g [4]float32) {
	for a := range g {
		g[a] = float32(gain[a])
	}
	return g
}

// residuals evaluates the residual at the points.
func (m *matcher) residuals(gain *[4]float64) {
	t := m.t
	kernel.Residual(m.res, m.v, t.value, t.phi[0], t.phi[1], t.phi[2], narrow(gain))
}

// step solves the weighted normal equations once. It updates the gain and returns the
// twist about the centre by which the pose is to move, and how large that is in units of
// what noise leaves uncertain, rms over the unknowns (the Newton decrement: Boyd,
// Vandenberghe 2004, Convex Optimization, eq. 9.30).
//
// With e = V(p x) - g(x) T(x), de/dd = g J and de/db = -T (1, phi). In the equations g is
// that at the centre, so that all rows but e are those of the reference, whatever the
// volume: a shading of some percent so has steps end some percent short or long, and points
// weigh by as much more or less, at a cost of its square.
func (m *matcher) step(gain *[4]float64, e *effort) (twist Twist, size float64, ok bool) {
	t := m.t
	m.residuals(gain)
	copy(m.weight, m.in)
	longer, scale := 1.0, 0.0
	if e.robust {
		over, share := m.slicesOf(t.g.N[e.sliceAxis])
		bySlice := sliceWeights(over)
		m.disturbed = false
		for s, z := range over {
			m.disturbed = m.disturbed || z > standsOut && share[s] > weakShare
		}
		m.bySlice(func(s int32, from, to int) {
			if w := float32(bySlice[s]); w != 1 {
				for q := from; q < to; q++ {
					m.weight[q] *= w
				}
			}
		})
		if t.weight != nil {
			for q, w := range t.weight {
				m.weight[q] *= w
			}
		}
		scale = madScale * float64(m.medianAbs())
		if cut := float32(tukeyCut * scale); cut > 0 {
			if !m.disturbed {
				longer = m.slant(cut)
			}
			kernel.Tukey(m.weight, m.res, cut)
		}
	}
	const rows = unknowns + 1
	var sum [rows * (rows + 1) / 2]float64
	kernel.Gram(sum[:], [][]float32{t.jac[0], t.jac[1], t.jac[2], t.jac[3], t.jac[4], t.jac[5], t.value, t.shade[0], t.shade[1], t.shade[2], m.res}, m.weight)
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
		return Twist{}, 0, false
	}
	for a := range d {
		size += float64(d[a] * g[a])
	}
	size = math.Sqrt(max(0, size)/unknowns) / scale
	for a := range d {
		d[a] = float64(d[a] * longer)
	}
	over := -1 / max(gain[0], faintest)
	for a := range gain {
		gain[a] += d[6+a]
	}
	for a := range 3 {
		twist.V[a], twist.W[a] = float64(d[a]*over), float64(d[3+a]*over)
	}
	return twist, size, true
}

// slant is how much longer than that of reweighted least squares a step has to be:
// those equations have the biweight where Newton's have the slope of its influence,
// which is smaller. With u = 1 - (r/cut)^2 they are u^2 and u (5 u - 4); their means,
// by weight and squared gradient, stand for them at every point (Huber 1981, Robust
// Statistics, section 7.8, modified residuals; from memory). For normal residuals it
// is 1.2. One point in a few tells.
func (m *matcher) slant(cut float32) float64 {
	over := 1 / cut
	var full, slope float64
	for _, q := range m.t.some {
		r := float32(m.res[q] * over)
		u := 1 - float32(r*r)
		if !(u > 0) {
			continue
		}
		w := float64(m.weight[q]) * float64(m.t.slope[q]) * float64(u)
		full += float64(w * float64(u))
		slope += float64(w * (float64(5*float64(u)) - 4))
	}
	if !(slope > 0) {
		return mostSlant
	}
	return min(full/slope, mostSlant)
}

// mostSlant: where residuals are not normal, nothing is gained by leaping.
const mostSlant = 1.3

// faintest gain that a voxel may have and still count.
const faintest = 1e-3

// Tukey's biweight: 95 % efficient for normal residuals at 4.685 scales; a
// median absolute deviation of normal residuals is 1/1.4826 of their scale
// (both recomputed in references, section 5.7).
const (
	tukeyCut = 4.685
	madScale = 1.4826
)

// slicesOf gives the rms residual of each of n slices of the volume over that of the
// median slice, and over the rms of the reference there; 0 for a slice without points.
func (m *matcher) slicesOf(n int) (over, share []float64) {
	over, share = make([]float64, n), make([]float64, n)
	signal, count := make([]float64, n), make([]float64, n)
	m.bySlice(func(s int32, from, to int) {
		var sum, square, number float64
		res, value := m.res[from:to], m.t.value[from:to]
		for q, in := range m.in[from:to] {
			w, r, t := float64(in), float64(res[q]), float64(value[q])
			sum += float64(float64(w*r) * r)
			square += float64(float64(w*t) * t)
			number += w
		}
		over[s] += sum
		signal[s] += square
		count[s] += number
	})
	var seen []float32
	for s := range over {
		if signal[s] > 0 {
			share[s] = math.Sqrt(over[s] / signal[s])
		}
		if count[s] > 0 {
			over[s] = math.Sqrt(over[s] / count[s])
			seen = append(seen, float32(over[s]))
		}
	}
	mid := float64(median(seen))
	if !(mid > 0) {
		return make([]float64, n), share
	}
	for s := range over {
		over[s] /= mid
	}
	return over, share
}

// standsOut: slices whose residual is above so many times the median one's count less.
const standsOut = 1.5

// sliceWeights lowers the weight of slices whose residual stands out: with z
// the slice's rms over the median slice's, w = min(1, (1.5/z)^4). A slice lost
// to a spike or to motion during its excitation then counts next to nothing,
// one that is merely noisier keeps most of its weight.
func sliceWeights(z []float64) []float64 {
	w := make([]float64, len(z))
	for s := range w {
		w[s] = 1
		if u := standsOut / z[s]; z[s] > standsOut {
			u = float64(u * u)
			w[s] = float64(u * u)
		}
	}
	return w
}

// medianAbs is the median size of the residuals: of one in a few of them, where there
// are so many that what it is uncertain by (1.3 / sqrt of their number) is of no account.
func (m *matcher) medianAbs() float32 {
	m.some = m.some[:0]
	for _, q := range m.t.some {
		if m.in[q] > 0 {
			m.some = append(m.some, float32(math.Abs(float64(m.res[q]))))
		}
	}
	return medianOf(m.some)
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

// correlation is Pearson's, between volume and reference over the head, by
// weight of slice (nil: all alike).
func (m *matcher) correlation(weights []float64) float64 {
	t := m.t
	var n, sv, sr float64
	m.bySlice(func(s int32, from, to int) {
		w := 1.0
		if weights != nil {
			w = weights[s]
		}
		var k, a, b float64
		for q := from; q < to; q++ {
			if t.inHead[q] && m.in[q] > 0 {
				k++
				a += float64(m.v[q])
				b += float64(t.value[q])
			}
		}
		n += float64(w * k)
		sv += float64(w * a)
		sr += float64(w * b)
	})
	if n < 2 {
		return 0
	}
	mv, mr := sv/n, sr/n
	var vv, rr, vr float64
	m.bySlice(func(s int32, from, to int) {
		w := 1.0
		if weights != nil {
			w = weights[s]
		}
		var x, y, z float64
		for q := from; q < to; q++ {
			if t.inHead[q] && m.in[q] > 0 {
				a, b := float64(m.v[q])-mv, float64(t.value[q])-mr
				x += float64(a * a)
				y += float64(b * b)
				z += float64(a * b)
			}
		}
		vv += float64(w * x)
		rr += float64(w * y)
		vr += float64(w * z)
	})
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
