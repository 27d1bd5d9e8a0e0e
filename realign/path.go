package realign

import (
	"context"
	"fmt"
	"math"
	"slices"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
	"evenkeel/internal/parallel"
	"evenkeel/slicetime"
)

// PathEstimate is a pose for every excitation of a run.
type PathEstimate struct {
	// Path holds one pose per excitation ("slot"), in order of time: slot
	// n*Shots + s is shot s of volume n, at n TR + the shot's time (s).
	Path  Path
	Shots int   // excitations a volume
	Shot  []int // shot of each slice, by slice index

	Reference []float32  // the reference, rebuilt from the path
	Mask      []bool     // the head in it
	Centre    [3]float64 // centre of rotation, world mm: that of the volume poses

	// Gains holds, per volume, how bright it is against the reference: at a
	// scanner point x the factor is g[0] + (g[1] X + g[2] Y + g[3] Z)/80,
	// (X, Y, Z) = x - Centre in mm.
	Gains [][4]float64
	// Expected is, per volume, the expected error of its slots' poses: the root
	// mean square displacement over the head, mm, under the posterior.
	// NaN where there is no path.
	Expected []float64
	// Used is false where the data could not support a path; Reason says why, and
	// Path holds the volume poses, at the middle of each volume.
	Used   bool
	Reason string

	spoilt [][]bool // by volume and slice: left out of the reference

	Sigma    float64 // noise, in units of the images: scale of the residuals
	Evidence float64 // of the path, at the last step: log, up to a constant
	LastStep float64 // the last change of a slot's pose, at most, mm at 80 mm
	Settled  bool    // LastStep is small beside what a slot is uncertain by; if not, Expected is too small
	// Residuals of pixels that took no part in finding the path, over Sigma (and what
	// interpolation leaves at the least): their scale, rms over the slots of enough volumes,
	// with one pose a volume and along the path.
	VolumeResidual float64
	PathResidual   float64
	Explained      float64 // share of the variance inside the head that the template explains
	StrengthShift  float64 // of the prior, per mm^2
	StrengthTurn   float64 // per rad^2
	Passes         int
	Iterations     int
	Parameters     []Parameter

	// Progress, if not nil, is told what [PathEstimate.Joint] has done of its work, as with
	// [Options]. Nothing here sets it.
	Progress func(share float64)
}

// Constants of the path, each with its reason.
const (
	pathPasses  = 2    // passes over the data, each with a template of its own: a third changes poses by less than the noise ...
	mostPasses  = 4    // ... unless the second still moved some slot by
	settledStep = 0.05 // mm, three times the uncertainty of one
	mostSpoilt  = 3    // as the noise: what a corrupt slot counts in the comparison with volume poses, at most
	// Iterations of a pass, at most: the first starts 0.1 to 0.5 mm off,
	// where the slope of the template changes by a few percent.
	pathFirstIterations = 4
	pathNextIterations  = 2
	pathRim             = 1   // voxels around the head that take part: past them an unfiltered template is flat
	pathMargin          = 2.0 // planes left out at each field edge: slices are not smoothed, and a spline is bent there
	draftProjections    = 1   // of a template that is still to change: one sharpens most
	lastProjections     = 2   // of the last pass; more sharpen no further
	// A pass ends when no slot moves by more than pathTolerance, mm: a next iteration
	// would move that one by a tenth as much, and most by far less than a micrometre.
	pathTolerance = 2e-2
	// fewestData: a path is only worth its name where most slots see the head.
	fewestData = 0.5
	// fewestAligned: an average of one or two volumes fits those volumes whatever
	// their poses.
	fewestAligned = 3
	// regionRim: the template is rebuilt in the head and this many voxels
	// around it: the rim that takes part and the reach of a spline.
	regionRim = pathRim + 3
	// A slot whose residual is within corruptScale of the usual one is merely out
	// of place: half a millimetre on a head of tSNR 100. It then counts as if its
	// scale were at most pullScale of the usual one.
	corruptScale = 6
	pullScale    = 1.2
	// slotPoints: with fewer pixels in a slot (half as many of every other pixel) its
	// scale cannot be told.
	slotPoints = 50
	// quietest: pixels count as if their noise were at least this share of the
	// signal. What interpolation leaves is a few ten-thousandths of the signal and
	// alike in slot after slot; taken for measurements of that precision it
	// outweighs the prior and bends the path of a run without noise by 10 to 30 um,
	// with this by 1 to 3. Real series are noisier (tSNR 333).
	quietest = 3e-3
)

// EstimatePath refines the volume poses of est to one pose per excitation.
// series and g are as for [EstimateVolumes]; est is what that returned; s says
// when each slice is excited. It fails only with the error of the series or of ctx.
//
// Maximum likelihood on unfiltered slices against a template (noise in the
// pixels is then white), with the prior described in this package's chain: a
// penalised likelihood in the manner of a smoothing spline (Green, Silverman
// 1994, Nonparametric Regression and Generalized Linear Models; from memory).
func EstimatePath(ctx context.Context, g Grid, series Series, s slicetime.Schedule, est *Estimate, workers int) (*PathEstimate, error) {
	e, err := newPathEstimator(ctx, g, series, s, est, workers)
	if err != nil {
		return nil, err
	}
	return e.run()
}

func newPathEstimator(ctx context.Context, g Grid, series Series, s slicetime.Schedule, est *Estimate, workers int) (*pathEstimator, error) {
	if len(est.Volumes) != series.Len() {
		panic("realign: series and estimate differ in size")
	}
	plain, err := newEstimator(ctx, g, series, Options{SliceAxis: s.Axis, Workers: workers})
	if err != nil {
		return nil, err
	}
	e := &pathEstimator{estimator: plain, schedule: s, est: est}
	e.done.tell = est.Progress
	e.weak = e.weakSlices(est.Volumes, -1)
	e.gains = est.sliceGains(g, s)
	e.region = dilate(est.Mask, g.N, regionRim)
	e.regionRows = extentsOf(e.region, g.N)
	return e, nil
}

// pathEstimator holds what the passes share.
type pathEstimator struct {
	*estimator
	schedule   slicetime.Schedule
	est        *Estimate
	shots      []slicetime.Shot
	shotOf     []int // by slice
	times      []float64
	p          []params // the path
	at         []params // the path and the offsets of the shots: where slots are measured
	poses      []Pose   // of at
	chain      *chain
	t          *template // unsmoothed
	image      []float32
	region     []bool
	regionRows *extents
	weak       [][]bool       // by volume and slice: as the volume match found
	spoilt     [][]bool       // left out of the template; nil: not judged yet
	gains      [][][4]float64 // by volume and slice
	voxel      []float32      // weight of each voxel of the template; nil: all alike
	thin       bool           // every other pixel only
	others     bool           // with thin: the other half of them
	chess      [2][]bool      // by x: the voxels of a row that are even, and those that are odd
	noise      float64        // as seen so far, in units of the volumes
	scale      []float64      // residual scale of each slot, 0: no data
	// sliceScale is the same by volume and slice.
	sliceScale []float64
	signal     float64 // rms in the head
	explain    [2]float64
	work       []*slotWork
}

// slotWork is the scratch of one worker.
type slotWork struct {
	sites kernel.Sites
	rows  []pixels
	ends  []int
	val   []float32 // pixel
	wt    []float32
	grad  []float32 // the template and its derivatives by voxel
	out   []float32 // as kernel.Slopes writes it
	abs   []float32 // size of the residual
	near  []float32
}

// scale is that of residuals whose sizes are given: their median, times madScale. guess is
// roughly that, or 0.
func (w *slotWork) scale(size []float32, guess float64) float64 {
	w.near = sized(w.near, 2*len(size))
	return float64(madScale * float64(medianNear(size, float32(guess/madScale), w.near)))
}

// medianNear is medianOf, found sooner where it is within a tenth of guess: only what lies there
// is put in order. room holds twice as many values.
func medianNear(v []float32, guess float32, room []float32) float32 {
	lo, hi := int32(math.Float32bits(guess*0.9)), int32(math.Float32bits(guess*1.1))
	// Sizes are in the order of their bits; differences of those do not run over.
	below, n := 0, 0
	for _, x := range v {
		u := int32(math.Float32bits(x))
		room[n] = x
		less := int(uint32(u-lo) >> 31)
		below += less
		n += int(uint32(u-hi)>>31) - less
	}
	k := len(v)/2 - below
	if !(guess > 0) || k < 0 || k >= n {
		return medianOf(v)
	}
	// The k-th of n is the median once the shorter side is made up.
	for ; n > 2*k+1; k++ {
		room[n] = 0
		n++
	}
	for n < 2*k {
		room[n] = math.MaxFloat32
		n++
	}
	return median(room[:n])
}

func (e *pathEstimator) run() (*PathEstimate, error) {
	out := &PathEstimate{
		Reference: e.est.Reference, Mask: e.est.Mask, Centre: e.est.Centre,
		Gains: make([][4]float64, e.nt), Expected: make([]float64, e.nt),
	}
	for n, v := range e.est.Volumes {
		out.Gains[n] = v.Gain
	}
	fallBack := func(why string) *PathEstimate {
		p := FromVolumes(e.g, e.schedule, e.est, why)
		p.Passes, p.Iterations = out.Passes, out.Iterations
		return p
	}
	e.shots = e.schedule.Shots()
	timed := 0
	for _, s := range e.shots {
		timed += len(s.Slices)
	}
	switch n := e.g.N[e.schedule.Axis]; {
	case timed == 0:
		return fallBack("no slice times, so no instant is known for a slice"), nil
	case timed != n || len(e.schedule.Times) != n:
		return fallBack(fmt.Sprintf("times are known for %d of %d slices", timed, n)), nil
	}
	if len(e.shots) < 2 {
		return fallBack("all slices are excited at one instant: one pose a volume is the path"), nil
	}
	if n := countState(e.est.Volumes, Aligned); n < fewestAligned {
		return fallBack(fmt.Sprintf("of the volumes %d could be aligned, and a template needs %d before residuals mean anything", n, fewestAligned)), nil
	}
	e.lay()
	e.image = append([]float32(nil), e.est.Reference...)
	// Cubic, for a draft.
	e.t = e.newTemplate(e.image, 3)
	c := newChain(e.times, len(e.shots))
	c.ctx = e.ctx
	e.chain = c
	slots := make([]slotData, len(e.times))
	e.thin = true
	some := e.some()
	e.done.phase(0, firstMeasured, len(some)+e.nt*pathFirstIterations)
	if err := e.measure(slots, looking{plain: true, scales: true, only: some}); err != nil {
		return nil, err
	}
	seen, posed := 0, len(some)*len(e.shots)
	for _, s := range e.scale {
		if s > 0 {
			seen++
		}
	}
	if float64(seen) < float64(fewestData*float64(posed)) {
		return fallBack(fmt.Sprintf("only %d of %d excitations of volumes that are not lost see enough of the head", seen, posed)), nil
	}
	e.noise = e.usualNoise()
	seenThen := e.noise
	for pass := 0; ; pass++ {
		// The first pass ends with a template that is still to change: half of the
		// pixels will do.
		e.thin = pass == 0
		iterations := pathFirstIterations
		if pass > 0 {
			iterations = pathNextIterations
			e.done.phase(firstRebuilt, nextMeasured, e.nt*iterations)
			// With the new template motion may show that the first one hid.
			c.afresh = true
		}
		for range iterations {
			if err := e.measure(slots, looking{}); err != nil {
				return nil, err
			}
			out.LastStep, out.Evidence = c.update(slots, e.p)
			if err := e.ctx.Err(); err != nil {
				return nil, err
			}
			e.setPoses(c.offset)
			out.Iterations++
			e.noise = e.usualNoise()
			if out.LastStep < pathTolerance {
				break
			}
		}
		if pass == 0 {
			moved, err := e.relocate(slots)
			if err != nil {
				return nil, err
			}
			if moved {
				c.reweight(e.p)
				if err := e.measure(slots, looking{}); err != nil {
					return nil, err
				}
				c.update(slots, e.p)
				e.setPoses(c.offset)
				out.Iterations++
			}
		}
		out.Passes++
		// The next template takes the offsets up.
		clear(c.offset)
		e.setPoses(nil)
		if pass == 0 {
			var err error
			seenThen = e.noise
			if out.VolumeResidual, err = e.heldOutVolumes(); err != nil {
				return nil, err
			}
		}
		last := pass+1 >= pathPasses && (out.LastStep < settledStep || pass+1 >= mostPasses)
		// One projection sharpens most, a second the rest; more change nothing.
		projections := draftProjections
		if last {
			projections = lastProjections
			e.done.phase(nextMeasured, 1, rebuildPieces(e.nt, projections, !last))
		} else {
			e.done.phase(firstMeasured, firstRebuilt, rebuildPieces(e.nt, projections, !last))
		}
		if err := e.rebuild(projections, !last); err != nil {
			return nil, err
		}
		if pass == 0 {
			var err error
			if out.PathResidual, err = e.heldOut(false); err != nil {
				return nil, err
			}
			if allowed := harmAllowed(countState(e.est.Volumes, Aligned)); out.PathResidual > float64(allowed*out.VolumeResidual) {
				return fallBack(fmt.Sprintf("pixels kept aside fit worse along the path than with one pose a volume, by more than chance (residuals of %.4g against %.4g, %.2f %% allowed)", out.PathResidual, out.VolumeResidual, 100*(allowed-1))), nil
			}
		}
		if last {
			break
		}
	}
	if _, ok := c.step(slots, e.p); !ok {
		return fallBack("the equations of the path have no solution"), nil
	}
	e.expect(c, slots, out.Expected)
	e.holdEnds(out.Expected)
	// The comparison was in units of the noise as it was seen then.
	units := math.Sqrt(e.unit(seenThen) / e.unit(e.noise))
	out.VolumeResidual *= units
	out.PathResidual *= units
	out.Sigma, out.Settled = e.noise, out.LastStep < settledStep
	if e.explain[1] > 0 {
		out.Explained = 1 - e.explain[0]/e.explain[1]
	}
	out.StrengthShift, out.StrengthTurn = c.lt, c.lr
	out.Used = true
	out.Path = Path{Times: e.times, Poses: e.poses}
	out.Shots, out.Shot = len(e.shots), e.shotOf
	out.Reference, out.spoilt = e.image, e.spoilt
	out.Parameters = []Parameter{
		{"passes", pathPasses},
		{"first_iterations", pathFirstIterations},
		{"next_iterations", pathNextIterations},
		{"tolerance_mm", pathTolerance},
		{"settled_step_mm", settledStep},
		{"most_passes", mostPasses},
		{"enough_volumes", enoughVolumes},
		{"projections", lastProjections},
		{"margin_voxels", pathMargin},
		{"rim_voxels", pathRim},
		{"degrees_of_freedom", freedom},
		{"biweight_cut", tukeyCut},
		{"quietest_share", quietest},
		{"corrupt_scale", corruptScale},
		{"pull_scale", pullScale},
		{"quiet_share", quietShare},
		{"excess_cost", excessCost},
	}
	return out, nil
}

// harm: a path that predicts pixels it has not seen worse than the volume poses do,
// by more than chance, has lost its way. Right paths came to a ratio of at most 1.001
// from 12 volumes on, and 1.011 with 6, in simulations.
const (
	harm    = 1.003
	harmFew = 0.1 // over the number of aligned volumes, in addition
)

// harmAllowed is the ratio of residuals up to which a path may be used.
func harmAllowed(aligned int) float64 { return harm + harmFew/float64(aligned) }

// heldOut is the residual scale, rms over the slots and in units of the noise, of the
// pixels that took no part in finding the path: with one pose a volume (plain), or
// along the path. A slot counts at most mostSpoilt, or a few corrupt ones would be
// all that is compared. The template must have been made with the poses that are
// judged: one averaged at others leans to those.
func (e *pathEstimator) heldOut(plain bool) (float64, error) {
	idle := make([]slotData, len(e.p))
	scale, slicesOf, explain, thin := slices.Clone(e.scale), slices.Clone(e.sliceScale), e.explain, e.thin
	defer func() { e.scale, e.sliceScale, e.explain, e.thin, e.others = scale, slicesOf, explain, thin, false }()
	nothing, unit := e.unit(0), e.unit(e.noise)
	e.thin, e.others = true, true
	some := e.apart()
	if err := e.measure(idle, looking{plain: plain, scales: true, only: some}); err != nil {
		return 0, err
	}
	sum, n := 0.0, 0.0
	for _, t := range some {
		for _, s := range e.scale[t*len(e.shots):][:len(e.shots)] {
			if s > 0 {
				sum += min((float64(s*s)+nothing)/unit, mostSpoilt*mostSpoilt)
				n++
			}
		}
	}
	return math.Sqrt(sum / max(n, 1)), nil
}

// unit is the square of what residual scales are compared with: the noise, and what
// interpolation leaves in a run without any, which says nothing about poses.
func (e *pathEstimator) unit(noise float64) float64 {
	floor := float64(quietest * e.signal)
	return float64(noise*noise) + float64(floor*floor)
}

// some lists volumes that are not lost, enough of them to tell what holds for all.
func (e *pathEstimator) some() []int {
	var posed []int
	for n, v := range e.est.Volumes {
		if v.State != Lost {
			posed = append(posed, n)
		}
	}
	return spread(posed, enoughVolumes)
}

// apart lists volumes as some does, but such as a draft of the template is not made of, if
// there are half as many: a template fits its own volumes by a percent better than others.
func (e *pathEstimator) apart() []int {
	in := isIn(spread(e.est.used(), enoughVolumes), e.nt)
	var out []int
	for n, v := range e.est.Volumes {
		if v.State != Lost && !in(n) {
			out = append(out, n)
		}
	}
	if 2*len(out) < enoughVolumes {
		return e.some()
	}
	return spread(out, enoughVolumes)
}

// heldOutVolumes is heldOut of the volume poses, against a template made with them
// as the path's is made with the path. It leaves that template behind.
func (e *pathEstimator) heldOutVolumes() (float64, error) {
	path := e.poses
	e.poses = make([]Pose, len(path))
	for i := range e.poses {
		e.poses[i] = e.est.Volumes[i/len(e.shots)].Pose
	}
	err := e.rebuild(draftProjections, true)
	e.poses = path
	if err != nil {
		return 0, err
	}
	return e.heldOut(true)
}

// holdEnds gives lost volumes before the first and after the last that has data
// the nearest pose that is supported, where the prior would go on in a straight line,
// and takes from lost volumes the expected error: it is that of a guess.
func (e *pathEstimator) holdEnds(expected []float64) {
	per := len(e.shots)
	first, last := e.nt, -1
	for n, v := range e.est.Volumes {
		if v.State == Lost {
			expected[n] = math.NaN()
			continue
		}
		first, last = min(first, n), n
	}
	for i := range e.poses {
		switch {
		case i < first*per:
			e.p[i], e.poses[i] = e.p[first*per], e.poses[first*per]
		case i >= (last+1)*per:
			e.p[i], e.poses[i] = e.p[last*per+per-1], e.poses[last*per+per-1]
		}
	}
}

// FromVolumes is the path of one pose a volume: what [EstimatePath] falls back to,
// and what combines with [PathEstimate.Joint] where no path is wanted. why is
// kept as the Reason.
func FromVolumes(g Grid, s slicetime.Schedule, est *Estimate, why string) *PathEstimate {
	out := &PathEstimate{
		Reference: est.Reference, Mask: est.Mask, Centre: est.Centre, Reason: why,
		Gains: make([][4]float64, len(est.Volumes)), Expected: make([]float64, len(est.Volumes)),
		Path: volumePath(s, est), Shots: 1, Shot: make([]int, g.N[s.Axis]),
	}
	for n, v := range est.Volumes {
		out.Gains[n] = v.Gain
		out.Expected[n] = math.NaN()
	}
	return out
}

// volumePath is the path of one pose a volume, at the middle of its slices.
func volumePath(s slicetime.Schedule, est *Estimate) Path {
	mid := 0.0
	if len(s.Times) > 0 {
		mid = s.Middle()
	}
	var p Path
	for n, v := range est.Volumes {
		p.Times = append(p.Times, float64(float64(n)*s.TR)+mid)
		p.Poses = append(p.Poses, v.Pose)
	}
	return p
}

// Slot is the pose of a slice of volume n.
func (p *PathEstimate) Slot(n, slice int) Pose { return p.Path.Poses[n*p.Shots+p.Shot[slice]] }

// At is the pose for volume n at time t (s): that of the path there, or, where
// there is one pose a volume, that one.
func (p *PathEstimate) At(n int, t float64) Pose {
	if !p.Used {
		return p.Path.Poses[n]
	}
	return p.Path.At(t)
}

// lay sets out the slots in order of time and starts them on the volume poses,
// interpolated.
func (e *pathEstimator) lay() {
	e.shotOf = make([]int, e.g.N[e.schedule.Axis])
	for s, shot := range e.shots {
		for _, k := range shot.Slices {
			e.shotOf[k] = s
		}
	}
	start := volumePath(e.schedule, e.est)
	for n := range e.nt {
		for _, shot := range e.shots {
			t := float64(float64(n)*e.schedule.TR) + shot.Time
			e.times = append(e.times, t)
			e.p = append(e.p, e.toParams(start.At(t)))
		}
	}
	e.poses = make([]Pose, len(e.p))
	e.scale = make([]float64, len(e.p))
	e.sliceScale = make([]float64, e.nt*e.g.N[e.schedule.Axis])
	e.signal = math.Sqrt(meanSquare(e.est.Reference, e.est.Mask)) * e.usualGain()
	e.at = make([]params, len(e.p))
	e.setPoses(nil)
	for x := range e.g.N[0] {
		odd := min(x, e.g.N[0]-1-x)&1 != 0
		e.chess[0], e.chess[1] = append(e.chess[0], !odd), append(e.chess[1], odd)
	}
	e.work = make([]*slotWork, e.workers)
	for i := range e.work {
		e.work[i] = &slotWork{}
	}
}

// toParams and fromParams: shift and rotation vector about the centre.
func (e *pathEstimator) toParams(p Pose) (q params) {
	at := p.Apply(e.est.Centre)
	w := Pose{Q: p.Q}.Log().W
	for k := range 3 {
		q[k], q[3+k] = at[k]-e.est.Centre[k], w[k]
	}
	return q
}

func (e *pathEstimator) fromParams(q params) Pose {
	r := Exp(Twist{W: [3]float64{q[3], q[4], q[5]}})
	return r.about(e.est.Centre, [3]float64{q[0], q[1], q[2]})
}

// setPoses brings the poses up to date, with the offsets of the shots or without.
func (e *pathEstimator) setPoses(offset []params) {
	for s := range e.p {
		e.at[s] = e.p[s]
		if offset != nil {
			for k, v := range offset[s%len(offset)] {
				e.at[s][k] += v
			}
		}
		e.poses[s] = e.fromParams(e.at[s])
	}
}

func (e *pathEstimator) setTemplate(image []float32) {
	e.t = e.newTemplate(image, 5)
}

func (e *pathEstimator) newTemplate(image []float32, degree int) *template {
	return newTemplate(e.g, image, e.est.Mask, e.est.unknown, pathRim, edgeMargins(e.g.N, pathMargin), e.est.Centre, degree)
}

// jacobian is K = d(twist about the centre)/d(params): the twist's shift is
// R' dt, its turn Jr(w) dw, Jr = I - (1-cos a)/a^2 [w]x + (a-sin a)/a^3 [w]x^2
// (Chirikjian 2011, Stochastic Models, Information Theory, and Lie Groups 2,
// eq. 10.86; from memory, tested against differences).
func jacobian(p Pose, q params) (rt, jr [9]float64) {
	r := p.rotation()
	for i := range 3 {
		for j := range 3 {
			rt[3*i+j] = r[3*j+i]
		}
	}
	w := [3]float64{q[3], q[4], q[5]}
	a2 := float64(w[0]*w[0]) + float64(w[1]*w[1]) + float64(w[2]*w[2])
	b, c := 0.5-a2/24, 1.0/6-a2/120
	if a2 > 1e-4 {
		a := math.Sqrt(a2)
		s, cs := detmath.Sincos(a)
		b, c = (1-cs)/a2, (a-s)/float64(a2*a)
	}
	k := [9]float64{0, -w[2], w[1], w[2], 0, -w[0], -w[1], w[0], 0}
	for i := range 3 {
		for j := range 3 {
			kk := 0.0
			for m := range 3 {
				kk += float64(k[3*i+m] * k[3*m+j])
			}
			v := float64(c*kk) - float64(b*k[3*i+j])
			if i == j {
				v++
			}
			jr[3*i+j] = v
		}
	}
	return rt, jr
}

// looking says what a pass over the slots is for.
type looking struct {
	plain  bool  // at the volume poses themselves
	scales bool  // scales are all that is wanted
	only   []int // volumes looked at, increasing; nil: all
}

// measure evaluates, for every slot, gradient and Hessian of the log likelihood
// at the present path and template, or scales only.
func (e *pathEstimator) measure(slots []slotData, how looking) error {
	explain := make([][2]float64, e.nt)
	var want func(n int) bool
	if how.only != nil {
		want = isIn(how.only, e.nt)
	}
	err := e.each(want, func(worker, n int, vol []float32) error {
		defer e.done.piece()
		for s, shot := range e.shots {
			i := n*len(e.shots) + s
			slots[i] = slotData{}
			if e.est.Volumes[n].State == Lost {
				e.scale[i] = 0
				continue
			}
			pose := e.poses[i]
			if how.plain {
				pose = e.est.Volumes[n].Pose
			}
			to := &slots[i]
			if how.scales {
				to = nil
			}
			ex := e.slot(e.work[worker], vol, n, i, shot.Slices, pose, to)
			explain[n][0] += ex[0]
			explain[n][1] += ex[1]
		}
		return nil
	})
	e.explain = [2]float64{}
	for _, x := range explain {
		e.explain[0] += x[0]
		e.explain[1] += x[1]
	}
	return err
}

// pixels are those of a row that take part: from and to tell which of the slot's.
type pixels struct{ y, z, from, to int }

// gather lists the pixels of one excitation that take part at a pose, given by b, which
// takes voxels of the volume to voxels of the template; ends tells where the pixels of
// each slice end.
func (e *pathEstimator) gather(w *slotWork, vol []float32, slices []int, pose Pose, b *[16]float64) {
	t := e.t
	field := kernel.Field{N: t.g.N, Mask: t.usable, Pad: splinePad, Degree: t.s.degree, Lo: t.margin}
	for a := range field.Hi {
		field.Hi[a] = float64(t.g.N[a]-1) - t.margin[a]
	}
	w.sites.Reset()
	w.rows, w.ends = w.rows[:0], w.ends[:0]
	forth := mul(t.inv, mul(pose.Matrix(), t.g.Affine))
	step := [3]float64{b[0], b[4], b[8]}
	n := &e.g.N
	for _, k := range slices {
		lo, hi, ok := e.within(k)
		if ok {
			lo, hi = t.reached(&forth, lo, hi)
			count := hi[0] - lo[0] + 1
			for z := lo[2]; z <= hi[2]; z++ {
				for y := lo[1]; y <= hi[1] && count > 0; y++ {
					var accept []bool
					if e.thin {
						odd := (min(y, n[1]-1-y) + min(z, n[2]-1-z)) & 1
						if e.others {
							odd ^= 1
						}
						accept = e.chess[odd][lo[0]:]
					}
					o := applyAffine(b, 0, float64(y), float64(z))
					from := w.sites.Len()
					if found := field.Locate(&w.sites, o, step, lo[0], count, accept); found > 0 {
						w.rows = append(w.rows, pixels{y, z, from, from + found})
					}
				}
			}
		}
		w.ends = append(w.ends, w.sites.Len())
	}
	count := w.sites.Len()
	w.val, w.wt = sized(w.val, count+kernel.Slack), sized(w.wt, count)
	for _, r := range w.rows {
		row := vol[n[0]*(r.y+n[1]*r.z):][:n[0]]
		val := w.val[r.from:r.to]
		for q, x := range w.sites.Index[r.from:r.to] {
			val[q] = row[x]
		}
	}
	if e.voxel == nil {
		for q := range w.wt {
			w.wt[q] = 1
		}
		return
	}
	for q, near := range w.sites.Near {
		w.wt[q] = e.voxel[near]
	}
}

// predict evaluates the template at the pixels gathered, and, unless only values are
// wanted, how it changes with the pose: prediction, residual and six derivatives.
func (e *pathEstimator) predict(w *slotWork, n int, axis int, b *[16]float64, values bool) (rows [kernel.SlopeRows][]float32) {
	t := e.t
	count := w.sites.Len()
	stride := count + kernel.Slack
	w.grad, w.out = sized(w.grad, 4*stride), sized(w.out, kernel.SlopeRows*stride)
	var at [4][]float32
	for k := range at {
		at[k] = w.grad[k*stride:][:count]
	}
	if values {
		t.s.valuesAt(at[0], &w.sites)
	} else {
		t.s.gradientsAt(&at, &w.sites)
	}
	toCentre := t.g.Affine
	for a := range t.centre {
		toCentre[4*a+3] -= t.centre[a]
	}
	place := mul(toCentre, *b) // of the template, mm from the centre, by voxel of the volume
	var f kernel.Frame
	for a := range 3 {
		for k := range 3 {
			f.Turn[3*a+k] = float32(t.inv[4*k+a])
		}
		f.Step[a] = float32(place[4*a])
	}
	slice, gain := -1, gainRows{}
	for _, r := range w.rows {
		if k := [3]int{int(w.sites.Index[r.from]), r.y, r.z}[axis]; k != slice {
			slice, gain = k, newGainRows(e.g, e.est.Centre, &e.gains[n][k])
		}
		f.Gain, f.GainStep = float32(gain.row(r.y, r.z)), float32(gain.step)
		start := applyAffine(&place, 0, float64(r.y), float64(r.z))
		for a, v := range start {
			f.At[a] = float32(v)
		}
		end := min(r.from+(r.to-r.from+7)&^7, count+kernel.Slack)
		kernel.Slopes(w.out[r.from:], stride, w.grad[r.from:], stride, w.val[r.from:end], w.sites.Index[r.from:end], r.to-r.from, &f)
	}
	for k := range rows {
		rows[k] = w.out[k*stride:][:count]
	}
	return rows
}

// slot evaluates one excitation of volume n; with out nil only its scales.
func (e *pathEstimator) slot(w *slotWork, vol []float32, n, i int, slices []int, pose Pose, out *slotData) (explain [2]float64) {
	t := e.t
	b := mul(t.inv, mul(pose.Inverse().Matrix(), t.g.Affine))
	e.gather(w, vol, slices, pose, &b)
	rows := e.predict(w, n, e.schedule.Axis, &b, out == nil)
	pred, res := rows[0], rows[1]
	count := len(res)
	var mean, square, inside, left float64
	for q, near := range w.sites.Near {
		if t.head[near] {
			val, r := float64(w.val[q]), float64(res[q])
			mean += val
			square += float64(val * val)
			left += float64(r * r)
			inside++
		}
	}
	w.abs = sized(w.abs, count)
	kernel.Abs(w.abs, res)
	// Medians are most often near those of the last time.
	guess := e.scale[i]
	e.scale[i] = 0
	nz := e.g.N[e.schedule.Axis]
	from := 0
	for k, end := range w.ends {
		s := &e.sliceScale[n*nz+slices[k]]
		was := *s
		*s = 0
		if end-from >= e.fewest() {
			*s = w.scale(w.abs[from:end], was)
		}
		from = end
	}
	level := e.signal
	if inside > 0 {
		explain = [2]float64{left, square - float64(mean*mean)/inside}
		level = math.Sqrt(square / inside)
	}
	if count < e.fewest() {
		return explain
	}
	scale := 0.0
	if len(slices) == 1 {
		scale = e.sliceScale[n*nz+slices[0]]
	} else {
		scale = w.scale(w.abs, guess)
	}
	// Values that are exact (no noise at all) must not divide by zero.
	scale = max(scale, float64(1e-5*level), 1e-30)
	e.scale[i] = scale
	kernel.Tukey(w.wt, res, float32(tukeyCut*scale))
	var h [21]float64
	var g, jt [6]float64
	var tt, tr float64
	if out == nil {
		var sum [3]float64
		kernel.Gram(sum[:], [][]float32{pred, res}, w.wt)
		tt, tr = sum[0], sum[1]
	} else {
		var sum [kernel.SlopeRows * (kernel.SlopeRows + 1) / 2]float64
		kernel.Gram(sum[:], [][]float32{rows[2], rows[3], rows[4], rows[5], rows[6], rows[7], pred, res}, w.wt)
		at, to := 0, 0
		for a := range 6 {
			to += copy(h[to:], sum[at:at+6-a])
			at += 6 - a
			jt[a], g[a] = sum[at], -sum[at+1]
			at += 2
		}
		tt, tr = sum[at], sum[at+1]
	}
	// The brightness of the excitation is unknown too: it is fitted along with the
	// pose and eliminated (the Schur complement of its row). A scanner that breathes
	// within a volume would otherwise pass for motion.
	if tt > 0 {
		at := 0
		for a := range 6 {
			g[a] += float64(jt[a]*tr) / tt
			for c := a; c < 6; c++ {
				h[at] -= float64(jt[a]*jt[c]) / tt
				at++
			}
		}
		// What brightness explains is no misfit.
		if c := tr / tt; math.Abs(c)*level > float64(0.05*scale) {
			for q, p := range pred {
				w.abs[q] = float32(math.Abs(float64(res[q]) - float64(c*float64(p))))
			}
			e.scale[i] = max(min(scale, w.scale(w.abs, scale)), float64(1e-5*level), 1e-30)
		}
	}
	if out == nil {
		return explain
	}
	// A slot that fits badly because its pose is still off must pull with full
	// force, or the path stays where it is; one that fits so badly that it must be
	// corrupt counts by its own scale.
	if e.noise > 0 && scale < float64(corruptScale*e.noise) {
		scale = min(scale, float64(pullScale*e.noise))
	}
	scale = max(scale, float64(quietest*level))
	toPathParams(&h, &g, pose, e.at[i], 1/float64(scale*scale), out)
	return explain
}

// fewest is the number of pixels without which a scale cannot be told.
func (e *pathEstimator) fewest() int {
	if e.thin {
		return slotPoints / 2
	}
	return slotPoints
}

// toPathParams carries H and g from twists to the parameters of the path.
func toPathParams(h *[21]float64, g *[6]float64, pose Pose, q params, scale float64, out *slotData) {
	rt, jr := jacobian(pose, q)
	var full, k, hk [6][6]float64
	at := 0
	for a := range 6 {
		for b := a; b < 6; b++ {
			full[a][b], full[b][a] = h[at], h[at]
			at++
		}
	}
	for a := range 3 {
		for b := range 3 {
			k[a][b], k[3+a][3+b] = rt[3*a+b], jr[3*a+b]
		}
	}
	for a := range 6 {
		for b := range 6 {
			for c := range 6 {
				hk[a][b] += float64(full[a][c] * k[c][b])
			}
		}
	}
	at = 0
	for a := range 6 {
		out.g[a] = 0
		for c := range 6 {
			out.g[a] += float64(k[c][a] * g[c])
		}
		out.g[a] *= scale
		for b := a; b < 6; b++ {
			v := 0.0
			for c := range 6 {
				v += float64(k[c][a] * hk[c][b])
			}
			out.h[at] = float64(v * scale)
			at++
		}
	}
}

// within gives the voxel ranges of slice k inside the margins.
func (e *pathEstimator) within(k int) (lo, hi [3]int, ok bool) {
	for a := range lo {
		lo[a] = int(math.Ceil(e.t.margin[a]))
		hi[a] = int(math.Floor(float64(e.g.N[a]-1) - e.t.margin[a]))
	}
	axis := e.schedule.Axis
	ok = k >= lo[axis] && k <= hi[axis] && (e.nearPadding == nil || !e.nearPadding[k])
	lo[axis], hi[axis] = k, k
	return lo, hi, ok
}

// relocate mends what reweighting cannot: a jerk placed between the wrong two
// slots. A slot on its wrong side fits badly where it is and well at its
// neighbour's pose; it is moved there. It reports whether any slot was.
func (e *pathEstimator) relocate(slots []slotData) (bool, error) {
	any := false
	for round := range relocations {
		if round > 0 { // the first round goes by the last measurement
			if err := e.measure(slots, looking{}); err != nil {
				return false, err
			}
		}
		usual := e.usualScale(e.scale, len(e.shots))
		per, nz := len(e.shots), e.g.N[e.schedule.Axis]
		to := make([]int, len(e.p)) // the slot whose pose is taken over, or the slot itself
		looked := func(i int) bool { return e.scale[i] > float64(misplaced*usual[i%per]) }
		odd := make([]bool, e.nt)
		for i := range to {
			to[i] = i
			odd[i/per] = odd[i/per] || looked(i)
		}
		if !slices.Contains(odd, true) {
			break
		}
		err := e.each(func(n int) bool { return odd[n] }, func(worker, n int, vol []float32) error {
			for s, shot := range e.shots {
				i := n*per + s
				best := e.scale[i]
				if !looked(i) {
					continue
				}
				best = float64(best * 0.9)
				was := e.scale[i]
				wasSlices := slices.Clone(e.sliceScale[n*nz:][:nz])
				for _, j := range []int{i - 1, i + 1} {
					if j < 0 || j >= len(e.p) {
						continue
					}
					// The neighbour's pose as it stands, with the offset of its shot: that of
					// the slot's own has taken up part of the jerk.
					e.slot(e.work[worker], vol, n, i, shot.Slices, e.poses[j], nil)
					if e.scale[i] > 0 && e.scale[i] < best {
						best, to[i] = e.scale[i], j
					}
				}
				e.scale[i] = was
				copy(e.sliceScale[n*nz:], wasSlices)
			}
			return nil
		})
		if err != nil {
			return false, err
		}
		moved := false
		old := append([]params(nil), e.p...)
		for i, j := range to {
			if i != j {
				e.p[i] = old[j]
				moved = true
			}
		}
		if !moved {
			break
		}
		any = true
		e.setPoses(e.chain.offset)
	}
	return any, nil
}

const (
	// misplaced: a slot whose residual is a third above its fellows' is looked at.
	misplaced   = 1.3
	relocations = 4 // a jerk can be that many slots off
)

// usualGain is the median brightness of the volumes that are not lost, against the
// reference.
func (e *pathEstimator) usualGain() float64 {
	var g []float64
	for _, v := range e.est.Volumes {
		if v.State != Lost {
			g = append(g, v.Gain[0])
		}
	}
	if len(g) == 0 {
		return 1
	}
	slices.Sort(g)
	return max(g[len(g)/2], faintest)
}

// usualNoise is the median over the slots of the residual scale.
func (e *pathEstimator) usualNoise() float64 {
	var seen []float32
	for _, s := range e.scale {
		if s > 0 {
			seen = append(seen, float32(s))
		}
	}
	if len(seen) == 0 {
		return 1
	}
	return max(float64(median(seen)), 1e-30)
}

// expect fills the expected pose error of each volume from the posterior that
// c holds the factor of: with covariance C of (t, r) at a slot, the mean square
// displacement over the head is tr Ct + tr(Cr (tr(S) I - S)), S the second
// moments of the head about its centre.
func (e *pathEstimator) expect(c *chain, slots []slotData, out []float64) {
	var s [3][3]float64
	count := 0.0
	i := 0
	for z := range e.g.N[2] {
		for y := range e.g.N[1] {
			for x := range e.g.N[0] {
				if e.est.Mask[i] {
					p := e.g.world(float64(x), float64(y), float64(z))
					for a := range 3 {
						for b := range 3 {
							s[a][b] += float64((p[a] - e.est.Centre[a]) * (p[b] - e.est.Centre[b]))
						}
					}
					count++
				}
				i++
			}
		}
	}
	if count == 0 {
		return
	}
	trace := s[0][0] + s[1][1] + s[2][2]
	z := covariances(c.rungs)
	for n := range e.nt {
		sum := 0.0
		for k := range e.shots {
			cov := &z[n*len(e.shots)+k]
			for a := range 3 {
				sum += cov[a][a]
				for b := range 3 {
					v := -s[a][b]
					if a == b {
						v += trace
					}
					sum += float64(cov[3+a][3+b]*v) / count
				}
			}
		}
		out[n] = math.Sqrt(max(0, sum/float64(len(e.shots))))
	}
}

// Rebuilt returns p with its reference built anew from another series of the
// same acquisition (another echo, say): mapped back along the path and sharpened,
// as [EstimatePath] does with its own. series and s are as there, est is the
// estimate that p came from. The gains stay those of p. It fails only with the
// error of the series or of ctx.
func (p *PathEstimate) Rebuilt(ctx context.Context, g Grid, series Series, s slicetime.Schedule, est *Estimate, workers int) (*PathEstimate, error) {
	e, err := newPathEstimator(ctx, g, series, s, est, workers)
	if err != nil {
		return nil, err
	}
	nt := e.nt
	e.shotOf, e.poses, e.spoilt = p.Shot, p.Path.Poses, p.spoilt
	e.shots, e.scale = make([]slicetime.Shot, p.Shots), make([]float64, nt*p.Shots)
	e.done.phase(0, 1, rebuildPieces(nt, lastProjections, false))
	// Outside the region, and where nothing reaches, the plain mean.
	start := *est
	start.Reference = make([]float32, g.voxels())
	use := est.used()
	sum := make([]float64, len(start.Reference))
	var turns parallel.Turns
	err = series.Each(ctx, e.workers, isIn(use, nt), func(_, n int, vol []float32) error {
		return turns.Do(rank(use, n), func() error { return nil }, func() {
			for i, v := range vol {
				sum[i] += float64(v)
			}
		})
	})
	if err != nil {
		return nil, err
	}
	for i := range sum {
		if len(use) > 0 {
			start.Reference[i] = float32(sum[i] / float64(len(use)))
		}
	}
	e.est = &start
	e.setTemplate(start.Reference)
	if err := e.rebuild(lastProjections, false); err != nil {
		return nil, err
	}
	q := *p
	q.Reference = e.image
	return &q, nil
}
