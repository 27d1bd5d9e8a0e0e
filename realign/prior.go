package realign

import (
	"context"
	"math"
	"slices"

	"evenkeel/internal/detmath"
	"evenkeel/internal/parallel"
)

// A path is a chain of slots, one for each excitation of the run in order of
// time. Its prior says that it has no reason to bend: second differences are
// small, except now and then, when the head jerks.
//
//	sum over s of w_s [ lt |D t_s|^2 + lr |D r_s|^2 ]
//
// with D the second difference (for unequal gaps the difference of slopes,
// scaled so that equal gaps give p[s-1] - 2p[s] + p[s+1]). The weights
// w_s = (nu+6)/(nu+d_s), d_s the bracket, make it a Student-t prior (Lange,
// Little, Taylor 1989, JASA 84:881-896, iterative reweighting; from memory): a bend far
// larger than the others costs little, so that steps stay steps. The strengths
// lt and lr are those under which the data are most probable (MacKay 1992,
// Neural Computation 4:415-447, evidence).

// slotData is what the images say about one slot: the quadratic
// -(1/2) d'Hd + g'd of the log likelihood around the present pose.
type slotData struct {
	h [21]float64 // upper triangle of H, by rows
	g [poseUnknowns]float64
}

// params of a slot: shift (mm) and rotation vector (rad) about the centre.
type params [poseUnknowns]float64

const (
	freedom = 3 // nu: heavy tails, but a finite variance
	// Strengths at which a path is a straight line to well below a micrometre;
	// beyond, only the arithmetic suffers.
	mostShift = 1e8
	mostTurn  = 6e11
	// Where the search starts: stiff, bends of a third of a micrometre, and of as
	// much at 80 mm, so that offsets are told from motion before anything bends.
	startShift = 1e7
	startTurn  = startShift * turnReach * turnReach
	softShift  = 1e4 // bends of 10 um
	softTurn   = softShift * turnReach * turnReach
	// offsetPrecision of the shots' offsets, per mm^2: a template is rarely off by
	// more than 50 um. It only matters for shots that see nothing.
	offsetPrecision = 400
	// A jerk first looks like weakness of the prior everywhere; only when its
	// weight has fallen do the strengths rise, and its weight falls further.
	retunes   = 3
	reweights = 4
)

// chain holds the prior of a run.
//
// Beside the path proper it has one offset for each shot of a volume, the same in
// all volumes. Motion locked to the volumes cannot be told from a template whose slices
// stand where they should not (odd ones against even ones, say, after a jerk in the run
// it was averaged from). It is taken for the latter: offsets explain residuals,
// but the path that is reported, and that the next template is built along, is without
// them.
type chain struct {
	period  int
	offset  []params
	bend    [][3]float64 // of slot s: coefficients of p[s-1], p[s], p[s+1]
	w       []float64    // Student-t weights
	lt      float64
	lr      float64
	m       band
	delta   []float64
	twin    *chain // scratch: the same chain at other strengths
	ctx     context.Context
	workers int
	fresh   bool // strengths have never been tuned
	afresh  bool // strengths are to be sought from the soft end too, at the next update
}

func newChain(times []float64, period int) *chain {
	n := len(times)
	c := &chain{period: period, offset: make([]params, period), bend: make([][3]float64, n), w: make([]float64, n), lt: startShift, lr: startTurn, m: make(band, poseUnknowns*n), delta: make([]float64, poseUnknowns*n), fresh: true, ctx: context.Background(), workers: 1}
	// In units of the usual gap, that between the excitations of a volume: strengths
	// then mean the same with a pause between volumes and without.
	usual := 1.0
	if n > 1 {
		var gaps []float64
		for s := 1; s < n; s++ {
			gaps = append(gaps, times[s]-times[s-1])
		}
		slices.Sort(gaps)
		usual = max(gaps[len(gaps)/2], 1e-6)
	}
	// Ties cannot occur between slots; the floor is for clocks that round.
	gap := func(s int) float64 { return max(times[s+1]-times[s], float64(1e-3*usual)) / usual }
	for s := 1; s < n-1; s++ {
		a, b := gap(s-1), gap(s)
		k := 1 / math.Sqrt((a+b)/2)
		c.bend[s] = [3]float64{k / a, -float64(k * (1/a + 1/b)), k / b}
	}
	for s := range c.w {
		c.w[s] = 1
	}
	return c
}

func (c *chain) strength(k int) float64 {
	if k < 3 {
		return c.lt
	}
	return c.lr
}

// curve is the second difference of component k at slot s.
func (c *chain) curve(p []params, s, k int) float64 {
	b := &c.bend[s]
	return float64(b[0]*p[s-1][k]) + float64(b[1]*p[s][k]) + float64(b[2]*p[s+1][k])
}

// reweight sets the Student-t weights for a path.
func (c *chain) reweight(p []params) {
	for s := 1; s < len(p)-1; s++ {
		d := 0.0
		for k := range poseUnknowns {
			v := c.curve(p, s, k)
			d += float64(c.strength(k) * float64(v*v))
		}
		c.w[s] = (freedom + poseUnknowns) / (freedom + d)
	}
}

// step finds the change of the path that the data and the prior agree on,
// into c.delta, and returns the log evidence up to a constant; ok is false where
// the equations are not definite.
func (c *chain) step(data []slotData, p []params) (evidence float64, ok bool) {
	n := len(p)
	for i := range c.m {
		c.m[i] = [bandWidth + 1]float64{}
	}
	rhs := c.delta
	for s := range data {
		at := 0
		for a := range poseUnknowns {
			rhs[poseUnknowns*s+a] = data[s].g[a]
			for b := a; b < poseUnknowns; b++ {
				c.m.add(poseUnknowns*s+b, poseUnknowns*s+a, data[s].h[at])
				at++
			}
		}
	}
	for s := 1; s < n-1; s++ {
		b := &c.bend[s]
		for k := range poseUnknowns {
			q := float64(c.w[s] * c.strength(k))
			v := float64(q * c.curve(p, s, k))
			for i := range 3 {
				row := poseUnknowns*(s-1+i) + k
				rhs[row] -= float64(b[i] * v)
				qb := float64(q * b[i])
				for j := 0; j <= i; j++ {
					c.m.add(row, poseUnknowns*(s-1+j)+k, float64(qb*b[j]))
				}
			}
		}
	}
	if !c.m.cholesky() {
		return 0, false
	}
	c.m.solve(c.delta)
	// Likelihood and prior at the new path, and the volume of the posterior.
	for s := range data {
		d := c.delta[poseUnknowns*s:][:poseUnknowns]
		at := 0
		for a := range poseUnknowns {
			evidence += float64(data[s].g[a] * d[a])
			for b := a; b < poseUnknowns; b++ {
				v := float64(float64(data[s].h[at]*d[a]) * d[b])
				if a == b {
					v /= 2
				}
				evidence -= v
				at++
			}
		}
	}
	for s := 1; s < n-1; s++ {
		b := &c.bend[s]
		for k := range poseUnknowns {
			v := c.curve(p, s, k)
			for i := range 3 {
				v += float64(b[i] * c.delta[poseUnknowns*(s-1+i)+k])
			}
			evidence -= float64(float64(float64(float64(c.w[s]*c.strength(k))*v)*v) / 2)
		}
	}
	evidence -= c.m.logDiagonal()
	evidence += float64(float64(1.5*float64(n-2)) * (detmath.Log(c.lt) + detmath.Log(c.lr)))
	return evidence, true
}

// tuneFromSoft seeks the strengths once more from the soft end and keeps what is more
// probable: where a path is all but straight the evidence is flat, and a search
// from there does not find its way to motion that a better template shows.
func (c *chain) tuneFromSoft(data []slotData, p []params) {
	stiff, ok := c.step(data, p)
	lt, lr := c.lt, c.lr
	best := [2]float64{lt, lr}
	for _, start := range [][2]float64{{softShift, softTurn}, {lt, softTurn}, {softShift, lr}} {
		c.lt, c.lr = start[0], start[1]
		c.tune(data, p)
		if e, fine := c.step(data, p); fine && (!ok || e > stiff) {
			stiff, ok, best = e, true, [2]float64{c.lt, c.lr}
		}
	}
	c.lt, c.lr = best[0], best[1]
}

// tune moves the strengths to the greatest evidence, by coordinate steps of
// ever smaller factors, from where they are.
func (c *chain) tune(data []slotData, p []params) {
	best, ok := c.step(data, p)
	if !ok {
		c.lt, c.lr = softShift, softTurn
		if best, ok = c.step(data, p); !ok {
			return
		}
	}
	// Up and down are tried side by side.
	if c.twin == nil {
		c.twin = &chain{bend: c.bend, w: c.w, m: make(band, len(c.m)), delta: make([]float64, len(c.delta))}
	}
	side := [2]*chain{c, c.twin}
	for _, factor := range []float64{10, 3.2, 1.8} {
		for moved := true; moved; {
			moved = false
			for _, up := range [][2]float64{{factor, 1}, {1, factor}} {
				lt, lr := c.lt, c.lr
				evidence := [2]float64{math.Inf(-1), math.Inf(-1)}
				c.lt, c.lr = min(mostShift, float64(lt*up[0])), min(mostTurn, float64(lr*up[1]))
				c.twin.lt, c.twin.lr = lt/up[0], lr/up[1]
				capped := c.lt == lt && c.lr == lr
				// A half cannot fail. Where ctx has ended nothing is better than what
				// there is, and the caller notices.
				_ = parallel.For(c.ctx, min(len(side), c.workers), len(side), func(_, i int) error {
					if i == 0 && capped {
						return nil
					}
					if e, ok := side[i].step(data, p); ok {
						evidence[i] = e
					}
					return nil
				})
				switch {
				case evidence[0] > best && evidence[0] >= evidence[1]:
					best, moved = evidence[0], true
				case evidence[1] > best:
					best, moved = evidence[1], true
					c.lt, c.lr = c.twin.lt, c.twin.lr
				default:
					c.lt, c.lr = lt, lr
				}
			}
		}
	}
}

// update moves path and offsets by one step of the outer iteration. data is
// what the images say around p plus the offsets. It returns the largest
// displacement at the head's edge, mm, and the log evidence.
func (c *chain) update(data []slotData, p []params) (moved, evidence float64) {
	next := make([]params, len(p))
	local := make([]slotData, len(data))
	shift := make([]params, c.period) // change of the offsets
	ok := false
	again := retunes
	if !c.fresh && !c.afresh {
		again = 1 // jerks have been found; strengths and weights only follow
	}
	for round := range again + 1 {
		for s := range data {
			local[s] = data[s].moved(&shift[s%c.period])
		}
		if !c.fresh || round > 0 {
			c.tune(local, p)
		}
		if c.afresh {
			c.tuneFromSoft(local, p)
			c.afresh = false
		}
		for range reweights {
			e, fine := c.step(local, p)
			if !fine {
				clear(c.delta) // what is left there is no change of the path
				break
			}
			ok, evidence = true, e
			for s := range p {
				for k := range poseUnknowns {
					next[s][k] = p[s][k] + c.delta[poseUnknowns*s+k]
				}
			}
			c.reweight(next)
		}
		if round < again {
			c.offsets(data, shift)
		}
		if c.fresh && round == 0 {
			// Now let the path bend, and stiffen it again around the jerks: from the
			// stiff side they would stay where the interpolated start had them.
			c.lt, c.lr = softShift, softTurn
			for s := range c.w {
				c.w[s] = 1
			}
		}
	}
	c.fresh = false
	for i := range shift {
		for k := range poseUnknowns {
			c.offset[i][k] += shift[i][k]
		}
	}
	if !ok {
		return 0, math.Inf(-1)
	}
	for s := range p {
		var t, r [3]float64
		for k := range 3 {
			t[k], r[k] = next[s][k]-p[s][k], next[s][3+k]-p[s][3+k]
		}
		moved = max(moved, norm(t)+float64(turnReach*norm(r)))
	}
	copy(p, next)
	return moved, evidence
}

// moved gives the same quadratic around a point d further on.
func (s slotData) moved(d *params) slotData {
	at := 0
	for a := range poseUnknowns {
		for b := a; b < poseUnknowns; b++ {
			s.g[a] -= float64(s.h[at] * d[b])
			if b > a {
				s.g[b] -= float64(s.h[at] * d[a])
			}
			at++
		}
	}
	return s
}

// offsets finds the change of each shot's offset that the data want when the
// path has moved by c.delta.
func (c *chain) offsets(data []slotData, shift []params) {
	var mean params
	for i := range shift {
		var h [poseUnknowns][poseUnknowns]float64
		var g params
		for s := i; s < len(data); s += c.period {
			var d params
			copy(d[:], c.delta[poseUnknowns*s:])
			q := data[s].moved(&d)
			at := 0
			for a := range poseUnknowns {
				g[a] += q.g[a]
				for b := a; b < poseUnknowns; b++ {
					h[a][b] += q.h[at]
					at++
				}
			}
		}
		for a := range poseUnknowns {
			r := float64(offsetPrecision)
			if a >= 3 {
				r *= turnReach * turnReach
			}
			h[a][a] += r
			g[a] -= float64(r * c.offset[i][a])
		}
		shift[i] = solvePose(&h, &g)
		for a := range mean {
			mean[a] += (shift[i][a] + c.offset[i][a]) / float64(len(shift))
		}
	}
	// A common offset is a matter of where the reference stands, not of its shape.
	for i := range shift {
		for a := range mean {
			shift[i][a] -= mean[a]
		}
	}
}

// solvePose solves H x = g for the upper triangle of a positive definite H.
func solvePose(h *[poseUnknowns][poseUnknowns]float64, g *params) (x params) {
	var l [poseUnknowns][poseUnknowns]float64
	for a := range poseUnknowns {
		for b := 0; b <= a; b++ {
			v := h[b][a]
			for k := range b {
				v -= float64(l[a][k] * l[b][k])
			}
			if a == b {
				if !(v > 0) {
					return params{}
				}
				l[a][a] = math.Sqrt(v)
			} else {
				l[a][b] = v / l[b][b]
			}
		}
	}
	for a := range poseUnknowns {
		v := g[a]
		for k := range a {
			v -= float64(l[a][k] * x[k])
		}
		x[a] = v / l[a][a]
	}
	for a := poseUnknowns - 1; a >= 0; a-- {
		v := x[a]
		for k := a + 1; k < poseUnknowns; k++ {
			v -= float64(l[k][a] * x[k])
		}
		x[a] = v / l[a][a]
	}
	return x
}
