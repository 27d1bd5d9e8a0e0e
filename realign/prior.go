package realign

import (
	"context"
	"math"
	"slices"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
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
	// reweighted: weights that move no slot by more, mm, have settled. A hundredth of
	// what a slot is uncertain by.
	reweighted = 1e-4
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
	links   []kernel.Link                 // the equations of a step, but for the strengths
	inverse [][kernel.LadderLanes]float64 // scratch
	rungs   []kernel.Rung                 // the factor at the last step
	delta   []params                      // and its solution
	ctx     context.Context
	fresh   bool // strengths have never been tuned
	afresh  bool // strengths are to be sought from the soft end too, at the next update
}

func newChain(times []float64, period int) *chain {
	n := len(times)
	c := &chain{period: period, offset: make([]params, period), bend: make([][3]float64, n), w: make([]float64, n), lt: startShift, lr: startTurn, links: make([]kernel.Link, n), rungs: make([]kernel.Rung, n), delta: make([]params, n), fresh: true, ctx: context.Background()}
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
	bent := c.link(data, p)
	strengths := [2]float64{c.lt, c.lr}
	log := newLogSum()
	gained := 0.0
	r1, r2 := &kernel.Rung{}, &kernel.Rung{}
	for s := range c.links {
		r := &c.rungs[s]
		r.Eliminate(&c.links[s], &strengths, r1, r2)
		product := 1.0
		for a, y := range r.Y {
			product = float64(product * r.D[a][a])
			gained += float64(y * y)
		}
		log.add(product)
		c.delta[s] = r.Y
		r1, r2 = r, r1
	}
	if evidence, ok = c.evidence(strengths, gained, log.value(), bent); ok {
		back(c.delta, c.rungs)
	}
	return evidence, ok
}

// evidences are those under other strengths, for the equations linked last; -Inf where
// they have no solution.
func (c *chain) evidences(strengths [kernel.LadderLanes][2]float64, bent [2]float64) (e [kernel.LadderLanes]float64) {
	if c.inverse == nil {
		c.inverse = make([][kernel.LadderLanes]float64, len(c.links))
	}
	gained := kernel.Ladder(c.inverse, c.links, &strengths)
	for lane := range e {
		log := newLogSum()
		for s := range c.inverse {
			log.add(c.inverse[s][lane])
		}
		var ok bool
		if e[lane], ok = c.evidence(strengths[lane], gained[lane], log.value(), bent); !ok {
			e[lane] = math.Inf(-1)
		}
	}
	return e
}

// evidence puts together what the elimination of the equations of a step has left.
//
// With H and g the Hessian and gradient of the data, Q that of the prior, A = H + Q and
// b = g - Q p, the log likelihood and log prior at the best change d = A^-1 b are
// g'd - d'Hd/2 - (p+d)'Q(p+d)/2 = b'A^-1 b/2 - p'Qp/2, and b'A^-1 b is |L^-1 b|^2. The
// volume of the posterior adds -log|L|.
func (c *chain) evidence(strengths [2]float64, gained, logInverse float64, bent [2]float64) (e float64, ok bool) {
	gained -= float64(strengths[0]*bent[0]) + float64(strengths[1]*bent[1])
	e = float64(gained/2) + logInverse
	e += float64(float64(1.5*float64(len(c.links)-2)) * (detmath.Log(strengths[0]) + detmath.Log(strengths[1])))
	return e, !math.IsNaN(e) && !math.IsInf(e, 0)
}

// link sets up the equations of a step, for any strengths, and returns the penalties of
// the path as it is, over their strengths.
func (c *chain) link(data []slotData, p []params) (bent [2]float64) {
	n := len(p)
	for s := range c.links {
		c.links[s] = kernel.Link{H: data[s].h, G: data[s].g}
	}
	for s := 1; s < n-1; s++ {
		w, b := c.w[s], &c.bend[s]
		before, here, after := &c.links[s-1], &c.links[s], &c.links[s+1]
		w0, w1, w2 := float64(w*b[0]), float64(w*b[1]), float64(w*b[2])
		before.Q[0] += float64(w0 * b[0])
		here.Q[0] += float64(w1 * b[1])
		here.Q[1] += float64(w1 * b[0])
		after.Q[0] += float64(w2 * b[2])
		after.Q[1] += float64(w2 * b[1])
		after.Q[2] += float64(w2 * b[0])
		for k := range poseUnknowns {
			v := c.curve(p, s, k)
			bent[k/3] += float64(float64(w*v) * v)
			before.U[k] += float64(w0 * v)
			here.U[k] += float64(w1 * v)
			after.U[k] += float64(w2 * v)
		}
	}
	return bent
}

// tuneFromSoft seeks the strengths once more from the soft end and keeps what is more
// probable: where a path is all but straight the evidence is flat, and a search
// from there does not find its way to motion that a better template shows.
func (c *chain) tuneFromSoft(data []slotData, p []params) {
	bent := c.link(data, p)
	lt, lr := c.lt, c.lr
	starts := [kernel.LadderLanes][2]float64{{lt, lr}, {softShift, softTurn}, {lt, softTurn}, {softShift, lr}}
	stiff := c.evidences(starts, bent)[0]
	best, found := math.Inf(-1), starts[0]
	for _, start := range starts[1:] {
		// Roughly first: only the best of the three is worth more.
		c.lt, c.lr = start[0], start[1]
		if e := c.tune(bent, coarseFactors); e > best {
			best, found = e, [2]float64{c.lt, c.lr}
		}
	}
	c.lt, c.lr = found[0], found[1]
	if !(c.tune(bent, fineFactors) > stiff) {
		c.lt, c.lr = lt, lr
	}
}

// Factors by which strengths are moved in turn while the evidence rises. It is all but
// flat about its top: strengths that are off by the last factor cost a path nothing.
var (
	coarseFactors = []float64{10}
	fineFactors   = []float64{3.2, 1.8}
	allFactors    = []float64{10, 3.2, 1.8}
)

// tune moves the strengths to the greatest evidence for the equations linked last, by steps
// of the factors given, from where they are, and returns it.
func (c *chain) tune(bent [2]float64, factors []float64) (best float64) {
	at := [2]float64{c.lt, c.lr}
	first := c.evidences([kernel.LadderLanes][2]float64{at, {softShift, softTurn}, at, at}, bent)
	if best = first[0]; math.IsInf(best, -1) {
		if best = first[1]; math.IsInf(best, -1) {
			return best
		}
		at = [2]float64{softShift, softTurn}
	}
	for _, factor := range factors {
		for moved := true; moved; {
			// Up and down of either are tried side by side, and the best is taken.
			moved = false
			tries := [kernel.LadderLanes][2]float64{
				{min(mostShift, float64(at[0]*factor)), at[1]}, {at[0] / factor, at[1]},
				{at[0], min(mostTurn, float64(at[1]*factor))}, {at[0], at[1] / factor},
			}
			for lane, e := range c.evidences(tries, bent) {
				if e > best && tries[lane] != at {
					best, moved = e, true
					c.lt, c.lr = tries[lane][0], tries[lane][1]
				}
			}
			if moved {
				at = [2]float64{c.lt, c.lr}
			}
			if c.ctx.Err() != nil {
				break // the caller notices
			}
		}
	}
	c.lt, c.lr = at[0], at[1]
	return best
}

// update moves path and offsets by one step of the outer iteration. data is
// what the images say around p plus the offsets. It returns the largest
// displacement at the head's edge, mm, and the log evidence.
func (c *chain) update(data []slotData, p []params) (moved, evidence float64) {
	next := make([]params, len(p))
	local := make([]slotData, len(data))
	shift := make([]params, c.period) // change of the offsets
	ok := false
	again, factors := retunes, allFactors
	if !c.fresh && !c.afresh {
		// Jerks have been found; strengths and weights only follow.
		again, factors = 1, fineFactors
	}
	for round := range again + 1 {
		for s := range data {
			local[s] = data[s].moved(&shift[s%c.period])
		}
		if !c.fresh || round > 0 {
			c.tune(c.link(local, p), factors)
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
			changed := 0.0
			for s := range p {
				var to params
				for k := range poseUnknowns {
					to[k] = p[s][k] + c.delta[s][k]
				}
				changed = max(changed, apart(&to, &next[s]))
				next[s] = to
			}
			c.reweight(next)
			if changed < reweighted {
				break
			}
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
		moved = max(moved, apart(&next[s], &p[s]))
	}
	copy(p, next)
	return moved, evidence
}

// apart bounds how far two poses of a slot are apart at the edge of a head, mm.
func apart(p, q *params) float64 {
	var t, r [3]float64
	for k := range 3 {
		t[k], r[k] = p[k]-q[k], p[3+k]-q[3+k]
	}
	return norm(t) + float64(turnReach*norm(r))
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
			q := data[s].moved(&c.delta[s])
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
