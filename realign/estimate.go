package realign

import (
	"context"
	"fmt"
	"math"
	"slices"

	"evenkeel/internal/parallel"
)

// State says how far the pose of a volume can be relied on.
type State string

const (
	Aligned  State = "aligned"
	Doubtful State = "doubtful" // a pose was found, but the volume does not look like the reference there
	Lost     State = "lost"     // no pose was found
)

// Volume is what was found for one volume.
type Volume struct {
	Pose       Pose // of a lost volume: interpolated between its aligned neighbours
	State      State
	Fit        float64 // correlation with the reference inside the head after alignment, both lightly smoothed
	Outside    float64 // share of the head outside the field of view
	Iterations int     // of all matches that led to the pose
	Reason     string  // why the volume is not aligned; "" if it is
	// SliceResiduals says, by slice index, how badly each slice fits: the rms
	// residual after alignment over that of the median slice; 0 for a slice with
	// nothing to compare, nil if no match ended.
	SliceResiduals []float64
	// Gain says how bright the volume is against the reference: at a scanner
	// point x the factor is Gain[0] + (Gain[1] X + Gain[2] Y + Gain[3] Z)/80, with
	// (X, Y, Z) = x - Centre in mm. 1, 0, 0, 0 for a lost volume.
	Gain [4]float64

	shares []float64 // residual of each slice over its signal
}

// Reference says what volumes are aligned to.
type Reference int

const (
	Mean     Reference = iota // the average of the aligned volumes, at the pose of the first of them
	First                     // volume 0
	Middle                    // volume nt/2
	Index                     // the volume Options.Index
	External                  // Options.External
)

// Options of [EstimateVolumes].
type Options struct {
	Reference Reference
	Index     int       // with [Index]
	External  []float32 // with [External]: a volume on the same grid
	SliceAxis int       // axis along which slices are stacked: 0, 1, 2
	Workers   int       // goroutines; results do not depend on it

	// Progress, if not nil, is told roughly what share of the work is done (0 to 1; it may
	// fall when a pass has to be repeated). It is called from any goroutine, one call at
	// a time, and delays the work while it runs; results do not depend on it.
	Progress func(share float64)
}

// Estimate is the outcome for a run.
type Estimate struct {
	Volumes        []Volume
	Reference      []float32  // the reference, on the grid
	Mask           []bool     // the head in the reference
	Centre         [3]float64 // centroid of Mask, world mm: the centre of rotation
	ReferenceIndex int        // the volume at whose pose the reference stands; -1 for an external one
	Passes         int        // how often every volume was matched
	Parameters     []Parameter
	// Scale is what an external reference was multiplied by to be about as bright as
	// the series: a power of two. Reference and the gains are those after it. 1 for
	// any other reference.
	Scale float32

	// Progress, if not nil, is told what [EstimatePath] and [PathEstimate.Rebuilt] have
	// done of their work, as with [Options]. EstimateVolumes leaves it nil.
	Progress func(share float64)

	unknown []bool // voxels the reference has no data for; nil: none
}

// Parameter is one constant that an estimate used, for the record.
type Parameter struct {
	Name  string
	Value float64
}

// TooFewAligned is returned when no pose was found for all but one volume, or all; or when
// none is good enough to be averaged where a mean is the reference.
type TooFewAligned struct {
	Aligned  int // volumes that look like the reference
	Doubtful int // volumes for which a pose was found, but that do not
	Volumes  int
}

func (e *TooFewAligned) Error() string {
	return fmt.Sprintf("of %d volumes %d are aligned and %d doubtful; at least 2 with a pose are needed, and for a mean at least 1 that is aligned", e.Volumes, e.Aligned, e.Doubtful)
}

// tooFew counts the volumes of a run that cannot go on.
func tooFew(vols []Volume) error {
	return &TooFewAligned{Aligned: countState(vols, Aligned), Doubtful: countState(vols, Doubtful), Volumes: len(vols)}
}

// Constants of the estimate, each with its reason.
const (
	// coarseSigma: a Gaussian of 8 mm leaves structures of the size of the head,
	// so that a start 30 mm or 40 degrees off still slopes towards the match
	// (found by simulation).
	coarseSigma = 8.0
	// fineShare of the largest voxel edge, at most fineMost mm: 2 mm at 3.8 mm
	// voxels removes the spectrum that quintic splines cannot follow, at under
	// 2 % of the precision (found by simulation).
	fineShare = 0.55
	fineMost  = 3.0
	// fineMargin: one plane is left out at each field edge, in the volume and in
	// the template. Two cost 5 % of the precision where the field cuts the head, and
	// remove no error that can be seen at tSNR 100 or 300, given an average that
	// edgeWeight guards (found by simulation).
	fineMargin = 1.0
	// bentPlanes at the ends of a field are those that a spline without knowledge
	// of what follows bends.
	bentPlanes = 2.0
	// coarseMargin: coarse planes are further apart, and rough is enough.
	coarseMargin = 1.0
	// rim: the head's outline, blurred by the filter, holds much of what tells
	// poses apart; two voxels take it in.
	rim = 2
	// fineTolerance ends a match when another step would move no point of the head
	// by more; the best precision that noise allows is about 5 um.
	fineTolerance   = 1e-4
	roughTolerance  = 5e-4 // first of two passes: small beside the noise of its single-volume template
	coarseTolerance = 2e-2
	// maxIterations is twice what any start within capture range took.
	maxIterations       = 30
	coarseMaxIterations = 25
	// fanBelow: when the match from rest looks worse than this, other starting
	// turns are tried too. An undisturbed volume has 0.99 and more.
	fanBelow = 0.95
	// alignedFit: of real volumes, those that moved by millimetres and were
	// matched correctly correlate above 0.9, those turned by tens of degrees
	// while they were taken, or partly out of the field, reach 0.895 at most: the gap
	// is narrow, and known from six runs only.
	alignedFit = 0.90
	// doubtfulFit: below, the pose found is no better than others nearby.
	doubtfulFit = 0.5
	// mostOutside: with a third of the head out of the field, what is left no
	// longer pins down six parameters.
	mostOutside = 0.33
	// coverage: the average counts where half of its volumes contributed.
	coverage = 0.5
)

// EstimateVolumes finds one pose for each volume of a series on grid g. It fails with
// [*TooFewAligned], or with the error of the series or of ctx.
func EstimateVolumes(ctx context.Context, g Grid, s Series, opt Options) (*Estimate, error) {
	e, err := newEstimator(ctx, g, s, opt)
	if err != nil {
		return nil, err
	}
	e.done.tell = opt.Progress
	e.prepare()
	return e.run()
}

func newEstimator(ctx context.Context, g Grid, s Series, opt Options) (*estimator, error) {
	e := &estimator{ctx: ctx, g: g, nt: s.Len(), opt: opt, workers: max(1, opt.Workers), series: s}
	return e, e.withoutPadding()
}

// each goes through the volumes, or through those wanted.
func (e *estimator) each(want func(t int) bool, f func(worker, t int, vol []float32) error) error {
	return e.series.Each(e.ctx, e.workers, want, f)
}

// copyOf returns volume t.
func (e *estimator) copyOf(t int) ([]float32, error) { return copyOf(e.ctx, e.series, t) }

// estimator holds what the passes of one estimate share.
type estimator struct {
	ctx     context.Context
	g       Grid
	nt      int
	opt     Options
	workers int
	series  Series
	done    progress

	padded, nearPadding []bool // slices; nil: none

	smoothing float64 // mm, of the fine level
	scratch   []*workspace
	coarse    Grid
}

// workspace is what one worker owns.
type workspace struct {
	fine, coarse   *smoother
	vFine, vCoarse []float32
	sFine          *spline // of the volume at hand
	sCoarse        *spline
	m              matcher
}

// load prepares a volume for matching at the fine level, loadCoarse at the coarse one.
func (w *workspace) load(vol []float32, degree int) {
	w.fine.run(w.vFine, vol)
	if w.sFine == nil || w.sFine.degree != degree {
		w.sFine = newSpline(w.fine.out, degree)
	}
	w.sFine.load(w.vFine)
}

func (w *workspace) loadCoarse(vol []float32) {
	w.coarse.run(w.vCoarse, vol)
	if w.sCoarse == nil {
		w.sCoarse = newSpline(w.coarse.out, coarseDegree)
	}
	w.sCoarse.load(w.vCoarse)
}

const coarseDegree = 3

func (e *estimator) prepare() {
	edge := e.g.edges()
	e.smoothing = min(fineMost, fineShare*max(edge[0], edge[1], edge[2]))
	// Coarse samples stand about 8 mm apart, one sigma, but no axis is thinned
	// to fewer than 8 planes.
	var stride [3]int
	for a := range stride {
		stride[a] = max(1, min(int(coarseSigma/edge[a]), e.g.N[a]/8))
	}
	e.scratch = make([]*workspace, e.workers)
	for i := range e.scratch {
		w := &workspace{
			fine:   newSmoother(e.g, e.smoothing, [3]int{1, 1, 1}),
			coarse: newSmoother(e.g, coarseSigma, stride),
		}
		w.vFine = make([]float32, e.g.voxels())
		w.vCoarse = make([]float32, w.coarse.out[0]*w.coarse.out[1]*w.coarse.out[2])
		e.scratch[i] = w
	}
	e.coarse = e.scratch[0].coarse.grid(e.g)
}

// model is a reference prepared at both levels.
type model struct {
	image        []float32
	mask         []bool
	centre       [3]float64
	fine, coarse *target
	unknown      []bool
}

// newModel prepares a reference; unknown marks voxels it has no data for.
func (e *estimator) newModel(image []float32, unknown []bool, degree int) *model {
	unknown = e.alongPadding(unknown)
	m := &model{image: image, mask: HeadMask(e.g, image), unknown: unknown}
	for i, u := range unknown {
		m.mask[i] = m.mask[i] && !u
	}
	m.centre = Centroid(e.g, m.mask)
	w := e.scratch[0]
	v := make([]float32, e.g.voxels())
	w.fine.run(v, image)
	m.fine = newTarget(e.g, v, m.mask, unknown, rim, edgeMargins(e.g.N, fineMargin), m.centre, degree)
	c := make([]float32, len(w.vCoarse))
	w.coarse.run(c, image)
	m.coarse = newTarget(e.coarse, c, thinMask(m.mask, e.g.N, w.coarse), nil, 1, edgeMargins(e.coarse.N, coarseMargin), m.centre, coarseDegree)
	return m
}

// run makes the passes.
func (e *estimator) run() (*Estimate, error) {
	switch e.opt.Reference {
	case External:
		if len(e.opt.External) != e.g.voxels() {
			panic("realign: external reference and grid differ in size")
		}
		k, err := e.brightness()
		if err != nil {
			return nil, err
		}
		image := make([]float32, len(e.opt.External))
		for i, v := range e.opt.External {
			image[i] = float32(v * k)
		}
		est, err := e.against(image, -1)
		if err == nil {
			est.Scale = k
		}
		return est, err
	case First:
		return e.againstOne(0)
	case Middle:
		return e.againstOne(e.nt / 2)
	case Index:
		return e.againstOne(e.opt.Index)
	}
	return e.againstMean()
}

// brightness is the power of two by which an external reference comes nearest to the
// brightness of the series: thresholds and noise are then in like units, and nothing
// is rounded.
func (e *estimator) brightness() (float32, error) {
	mean := func(v []float32) float64 {
		sum, n := 0.0, 0.0
		for i, in := range HeadMask(e.g, v) {
			if in {
				sum += float64(v[i])
				n++
			}
		}
		return sum / max(n, 1)
	}
	middle, err := e.copyOf(e.nt / 2)
	if err != nil {
		return 0, err
	}
	own, other := mean(middle), mean(e.opt.External)
	k := float32(1)
	if !(own > 0 && other > 0) {
		return k, nil
	}
	for range 60 {
		switch r := own / float64(other*float64(k)); {
		case r > math.Sqrt2:
			k *= 2
		case r < math.Sqrt2/2:
			k /= 2
		default:
			return k, nil
		}
	}
	return k, nil
}

// fineEffort is that of the pass whose poses are kept.
func (e *estimator) fineEffort() effort {
	return effort{tolerance: fineTolerance, iterations: maxIterations, robust: true, sliceAxis: e.opt.SliceAxis, skip: e.nearPadding}
}

// againstOne aligns all volumes with one of them.
func (e *estimator) againstOne(t int) (*Estimate, error) {
	image, err := e.copyOf(t)
	if err != nil {
		return nil, err
	}
	return e.against(image, t)
}

// against aligns all volumes with a given reference, one pass.
func (e *estimator) against(image []float32, index int) (*Estimate, error) {
	m := e.newModel(image, nil, 5)
	e.done.phase(0, 1, e.nt)
	vols, left, err := e.pass(m, nil, e.fineEffort())
	if err != nil {
		return nil, err
	}
	passes := 1
	if vols, passes, err = e.quieten(m, vols, left, passes); err != nil {
		return nil, err
	}
	if index >= 0 {
		// The reference stands at its own pose by definition; what rounding
		// leaves must not have it resampled.
		vols[index].Pose = Identity
	}
	return e.finish(m, vols, index, passes)
}

// againstMean aligns all volumes with one of them, averages those aligned, and
// aligns all with the average.
func (e *estimator) againstMean() (*Estimate, error) {
	rough := e.fineEffort()
	rough.tolerance = roughTolerance
	// The first volume serves unless hardly any other looks like it: then it is
	// the odd one, and the middle or last volume gets its turn.
	var vols []Volume
	passes, target := 0, 0
	for _, t := range []int{0, e.nt / 2, e.nt - 1} {
		image, err := e.copyOf(t)
		if err != nil {
			return nil, err
		}
		m := e.newModel(image, nil, 3)
		e.done.phase(0, roughDone, e.nt)
		v, _, err := e.pass(m, nil, rough)
		if err != nil {
			return nil, err
		}
		passes++
		if countState(v, Aligned) > countState(vols, Aligned) {
			vols, target = v, t
		}
		if 4*countState(vols, Aligned) >= e.nt {
			break
		}
	}
	var m *model
	first := -1
	weak := e.weakSlices(vols, target)
	for range 3 {
		// The average stands at the pose of the first aligned volume.
		if first = firstAligned(vols); first < 0 {
			return nil, tooFew(vols)
		}
		back := vols[first].Pose.Inverse()
		used := make([]bool, e.nt)
		for t := range vols {
			vols[t].Pose = vols[t].Pose.Compose(back)
			used[t] = vols[t].State == Aligned
		}
		vols[first].Pose = Identity
		e.done.phase(roughDone, averageDone, e.nt)
		image, unknown, err := e.average(vols, weak)
		if err != nil {
			return nil, err
		}
		m = e.newModel(image, unknown, 5)
		e.done.phase(averageDone, 1, e.nt)
		next, left, err := e.pass(m, vols, e.fineEffort())
		if err != nil {
			return nil, err
		}
		passes++
		// A volume that entered the average but does not fit it must leave it, and
		// so must slices, if there are enough of them to matter.
		nextWeak := e.weakSlices(next, -1)
		clean := !spoilt(used, weak, nextWeak)
		for t := range vols {
			clean = clean && (!used[t] || next[t].State == Aligned)
		}
		vols, weak = next, nextWeak
		if clean {
			if vols, passes, err = e.quieten(m, vols, left, passes); err != nil {
				return nil, err
			}
			return e.finish(m, vols, first, passes)
		}
	}
	// Whatever still does not fit stays out of the reference that is given.
	if firstAligned(vols) < 0 {
		return nil, tooFew(vols)
	}
	image, unknown, err := e.average(vols, weak)
	if err != nil {
		return nil, err
	}
	m = e.newModel(image, unknown, 5)
	return e.finish(m, vols, first, passes)
}

// spoiltShare: bad slices in a fiftieth of the volumes averaged shift an average
// by about a percent, and poses by less than noise does.
const spoiltShare = 0.02

// spoilt reports whether some slice of the average took in too many bad ones:
// marked now, not before.
func spoilt(used []bool, before, now [][]bool) bool {
	volumes := 0
	bad := make([]int, len(now[0]))
	for t, u := range used {
		if !u {
			continue
		}
		volumes++
		for s := range bad {
			if now[t][s] && !before[t][s] {
				bad[s]++
			}
		}
	}
	return float64(slices.Max(bad)) > float64(spoiltShare*float64(volumes))
}

// weakSlices marks, per volume and slice, the slices that are to stay out of
// the average. A slice that fits badly in most volumes is the fault of what they
// were compared with, so it is weak only in volumes that stand out among their
// fellows, and in the volume target that they were compared with (-1: none).
func (e *estimator) weakSlices(vols []Volume, target int) [][]bool {
	n := e.g.N[e.opt.SliceAxis]
	weak := make([][]bool, len(vols))
	for t := range weak {
		weak[t] = make([]bool, n)
	}
	for s := range n {
		var z []float32
		for t, v := range vols {
			if t != target && v.State == Aligned && v.SliceResiduals != nil {
				z = append(z, float32(v.SliceResiduals[s]))
			}
		}
		usual := max(1, float64(median(z)))
		stands := func(z, among float64) bool {
			return sliceWeights([]float64{z / among})[0] < weakBelow
		}
		for t, v := range vols {
			if v.SliceResiduals != nil {
				weak[t][s] = v.shares[s] > weakShare && stands(v.SliceResiduals[s], usual)
			}
		}
		if target >= 0 && stands(usual, 1) {
			weak[target][s] = true
		}
		for t := range weak {
			weak[t][s] = weak[t][s] || e.padded != nil && e.padded[s]
		}
	}
	return weak
}

func countState(vols []Volume, s State) (n int) {
	for _, v := range vols {
		if v.State == s {
			n++
		}
	}
	return n
}

func firstAligned(vols []Volume) int {
	for t, v := range vols {
		if v.State == Aligned {
			return t
		}
	}
	return -1
}

// pass matches every volume with the model. known holds poses to start from;
// volumes that are lost there, and all when it is nil, start from scratch. It also
// returns the residuals of the volumes that are aligned.
func (e *estimator) pass(m *model, known []Volume, how effort) ([]Volume, *leftovers, error) {
	vols := make([]Volume, e.nt)
	left := make([]*leftovers, e.workers)
	peak := float32(0)
	for _, v := range m.image {
		peak = max(peak, v)
	}
	for i := range left {
		left[i] = newLeftovers(len(m.image), peak)
	}
	err := e.each(nil, func(worker, t int, vol []float32) error {
		defer e.done.piece()
		w := e.scratch[worker]
		w.load(vol, m.fine.degree)
		if known != nil && known[t].State != Lost {
			f := e.withoutSpoilt(w, m, vol, w.m.match(m.fine, w.sFine, known[t].Pose, how), how)
			if vols[t] = e.judge(m, f); vols[t].State != Lost {
				if vols[t].State == Aligned {
					left[worker].add(&w.m, &f)
				}
				return nil
			}
			if f.again {
				w.load(vol, m.fine.degree)
			}
		}
		w.loadCoarse(vol)
		vols[t] = e.judge(m, e.withoutSpoilt(w, m, vol, e.search(w, m, how), how))
		return nil
	})
	if err != nil {
		return nil, nil, err
	}
	for _, l := range left[1:] {
		left[0].merge(l)
	}
	return vols, left[0], e.secondLook(m, vols, how)
}

// quieten matches once more with voxels that change of themselves counting
// less, where there are enough of them to matter; left are the residuals so far.
func (e *estimator) quieten(m *model, vols []Volume, left *leftovers, passes int) ([]Volume, int, error) {
	weights, restless := quietWeights(e.g, left.variance(), m.mask, meanSquare(m.image, m.mask), 0)
	if !restless {
		return vols, passes, nil
	}
	m.fine.weigh(weights)
	vols, _, err := e.pass(m, vols, e.fineEffort())
	return vols, passes + 1, err
}

// search matches the volume in w from the identity, and from a fan of turns if
// that does not lead to a good match.
func (e *estimator) search(w *workspace, m *model, how effort) found {
	rough := e.roughEffort()
	first := rough
	first.draft = true
	c := w.m.match(m.coarse, w.sCoarse, Identity, first)
	best := e.refine(w, m, c.pose, how)
	best.iterations += c.iterations
	if best.fit >= fanBelow && best.converged {
		return best
	}
	// Each start takes a few steps; the most promising go on to the end.
	quick := rough
	quick.iterations, quick.thin = 4, true
	type try struct {
		f     found
		score float64
	}
	var tries []try
	for _, p := range fan(m.centre) {
		f := w.m.match(m.coarse, w.sCoarse, p, quick)
		tries = append(tries, try{f, e.score(m, f)})
	}
	var turned found
	for range 4 {
		at := 0
		for i := range tries {
			if tries[i].score > tries[at].score {
				at = i
			}
		}
		f := w.m.match(m.coarse, w.sCoarse, tries[at].f.pose, rough)
		if e.score(m, f) > e.score(m, turned) {
			turned = f
		}
		tries[at].score = -2
	}
	if e.score(m, turned) > 0 && distance(turned.pose, c.pose, m.centre) > farMM {
		f := e.refine(w, m, turned.pose, how)
		f.iterations += turned.iterations
		if e.score(m, f) > e.score(m, best) {
			best = f
		}
	}
	return best
}

// withoutSpoilt matches a volume once more if some of its slices are spoilt, with those
// filled from their neighbours, so that filter and spline carry nothing of them
// to points beside them, and left out.
func (e *estimator) withoutSpoilt(w *workspace, m *model, vol []float32, f found, how effort) found {
	if !how.robust || !finitePose(f.pose) {
		return f
	}
	spoilt := make([]bool, len(f.slices))
	copy(spoilt, how.skip)
	few := 0
	for s, z := range f.slices {
		if z > spoiltFrom && f.shares[s] > weakShare {
			spoilt[s] = true
			few++
		}
	}
	// Where more than a quarter stand out it is not they that are wrong: the head has jerked among them,
	// and they keep their say.
	if len(spoilt) == 0 || few > max(3, len(spoilt)/4) || slices.Equal(spoilt, how.skip) {
		return f
	}
	patched := e.patch(vol, spoilt)
	if patched == nil {
		return f
	}
	w.load(patched, m.fine.degree)
	how.skip = spoilt
	g := w.m.match(m.fine, w.sFine, f.pose, how)
	g.iterations += f.iterations
	f.again, g.again = true, true
	if !g.converged {
		return f
	}
	for s, left := range spoilt {
		if left {
			g.slices[s], g.shares[s] = f.slices[s], f.shares[s]
		}
	}
	return g
}

// spoiltFrom: a slice with a residual above so many times the usual one counts less than
// a tenth. It is better left out altogether.
const spoiltFrom = 2.7

func (e *estimator) roughEffort() effort {
	return effort{tolerance: coarseTolerance, iterations: coarseMaxIterations, sliceAxis: e.opt.SliceAxis}
}

// refine matches at the fine level from a coarse pose: most of the way on a quarter of
// the rows, the rest as how says.
func (e *estimator) refine(w *workspace, m *model, start Pose, how effort) found {
	near := how
	near.thin, near.draft, near.tolerance = true, true, max(how.tolerance, coarseTolerance)
	a := w.m.match(m.fine, w.sFine, start, near)
	b := w.m.match(m.fine, w.sFine, a.pose, how)
	b.iterations += a.iterations
	return b
}

// score ranks matches: a good fit over a small overlap is worth less.
func (e *estimator) score(m *model, f found) float64 {
	return float64(f.fit * (1 - m.coarse.outside(f.pose)))
}

// fan lists starting poses: turns about the vertical axis to 60 degrees and
// nods and tilts of 25, all combined, about the centre of the head. A match
// from each catches at least half the distance to the next.
func fan(centre [3]float64) (poses []Pose) {
	const degree = math.Pi / 180
	for _, z := range []float64{0, 20, -20, 40, -40, 60, -60} {
		for _, x := range []float64{0, 25, -25} {
			for _, y := range []float64{0, 25, -25} {
				if x == 0 && y == 0 && z == 0 {
					continue
				}
				poses = append(poses, FromParams([3]float64{}, [3]float64{x * degree, y * degree, z * degree}, centre))
			}
		}
	}
	return poses
}

// secondLook tries volumes that are not aligned again, from the poses of their
// nearest aligned neighbours, and keeps what fits better.
func (e *estimator) secondLook(m *model, vols []Volume, how effort) error {
	seen := append([]Volume(nil), vols...)
	if countState(seen, Aligned) == e.nt {
		return nil
	}
	again := func(t int) bool { return seen[t].State != Aligned }
	return e.each(again, func(worker, t int, vol []float32) error {
		w := e.scratch[worker]
		ready := false
		for _, step := range []int{-1, 1} {
			s := t + step
			for s >= 0 && s < e.nt && seen[s].State != Aligned {
				s += step
			}
			if s < 0 || s >= e.nt {
				continue
			}
			if !ready {
				w.load(vol, m.fine.degree)
				w.loadCoarse(vol)
				ready = true
			}
			c := w.m.match(m.coarse, w.sCoarse, seen[s].Pose, e.roughEffort())
			f := e.withoutSpoilt(w, m, vol, e.refine(w, m, c.pose, how), how)
			ready = ready && !f.again
			v := e.judge(m, f)
			v.Iterations += vols[t].Iterations + c.iterations
			if v.State == Aligned || v.Fit > vols[t].Fit && v.State != Lost {
				vols[t] = v
			}
		}
		return nil
	})
}

// judge turns the outcome of a match into the state of the volume.
func (e *estimator) judge(m *model, f found) Volume {
	v := Volume{Pose: f.pose, Fit: f.fit, Iterations: f.iterations, Outside: m.fine.outside(f.pose), State: Aligned, SliceResiduals: f.slices, shares: f.shares, Gain: f.gain}
	say := func(s State, format string, args ...any) {
		v.State, v.Reason = s, fmt.Sprintf(format, args...)
	}
	switch {
	case !finitePose(f.pose):
		v.Pose = Identity
		say(Lost, "the match ran away")
	case f.points < 10*unknowns:
		say(Lost, "hardly any of the head is inside the field of view")
	case !(f.fit >= doubtfulFit):
		say(Lost, "correlation with the reference %.2f, below %.2f", f.fit, doubtfulFit)
	case f.fit < alignedFit:
		say(Doubtful, "correlation with the reference %.2f, below %.2f", f.fit, alignedFit)
	case v.Outside > mostOutside:
		say(Doubtful, "%.0f %% of the head is outside the field of view", 100*v.Outside)
	case !f.converged:
		say(Doubtful, "no convergence after %d iterations", f.iterations)
	}
	return v
}

func finitePose(p Pose) bool {
	for _, v := range append(p.Q[:], p.T[:]...) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return false
		}
	}
	return true
}

// average maps the aligned volumes back and averages them, slices that did not
// count left out; unknown marks voxels for which fewer than half of the volumes
// had data (where none had, the average takes the values at the field's edge).
func (e *estimator) average(vols []Volume, weak [][]bool) (image []float32, unknown []bool, err error) {
	nv := e.g.voxels()
	nx := e.g.N[0]
	sum, out := make([]float64, nv), make([]float64, nv)
	// How much less than all volumes count, and how many do not count at all.
	lack, missed := make([]float64, nv), make([]int32, nv)
	var use []int
	for t, v := range vols {
		if v.State == Aligned {
			use = append(use, t)
		}
	}
	passes := true
	for _, t := range use {
		passes = passes && NearIdentity(PoseMap(e.g, vols[t].Pose))
	}
	// Volumes are resampled side by side, then added in their order.
	res := make([]*Resampler, e.workers)
	buf := make([][]float32, e.workers)
	inv := mustInvert(e.g.Affine)
	var turns parallel.Turns
	err = e.each(isIn(use, e.nt), func(worker, t int, vol []float32) error {
		defer e.done.piece()
		return turns.Do(rank(use, t), func() error {
			if res[worker] == nil {
				res[worker], buf[worker] = NewResampler(e.g.N, 5), make([]float32, nv)
			}
			if vols[t].Pose == Identity {
				copy(buf[worker], vol)
				return nil
			}
			if patched := e.patch(vol, weak[t]); patched != nil {
				vol = patched
			}
			res[worker].Move(buf[worker], vol, PoseMap(e.g, vols[t].Pose), passes)
			return nil
		}, func() {
			b := mul(inv, mul(vols[t].Pose.Matrix(), e.g.Affine))
			vol := buf[worker]
			step := [3]float64{b[0], b[4], b[8]}
			var spoilt []bool
			if slices.Contains(weak[t], true) {
				spoilt = weak[t]
			}
			for row := range e.g.N[1] * e.g.N[2] {
				start := applyAffine(&b, 0, float64(row%e.g.N[1]), float64(row/e.g.N[1]))
				// What is seen from well inside counts in full.
				lo, hi := 0, 0
				if spoilt == nil {
					lo, hi = inside(&start, step, nx, e.g.N, [3]float64{bentPlanes, bentPlanes, bentPlanes})
				}
				at := nx * row
				values, sum, lack, missed := vol[at:][:nx], sum[at:][:nx], lack[at:][:nx], missed[at:][:nx]
				deeply := sum[lo:hi]
				for x, v := range values[lo:hi] {
					deeply[x] += float64(v)
				}
				for x := 0; x < nx; x++ {
					if x == lo && lo < hi {
						x = hi - 1
						continue
					}
					f := float64(x)
					q := [3]float64{start[0] + float64(step[0]*f), start[1] + float64(step[1]*f), start[2] + float64(step[2]*f)}
					deep := e.g.depth(q)
					in := deep >= -0.5
					in = in && (spoilt == nil || !besideAny(spoilt, q[e.opt.SliceAxis]))
					if !in {
						out[at+x] += float64(values[x])
						lack[x]++
						missed[x]++
						continue
					}
					w := edgeWeight(deep)
					sum[x] += float64(w * float64(values[x]))
					lack[x] += 1 - w
				}
			}
		})
	})
	if err != nil {
		return nil, nil, err
	}
	image, unknown = make([]float32, nv), make([]bool, nv)
	for v := range image {
		if int(missed[v]) < len(use) {
			image[v] = float32(sum[v] / (float64(len(use)) - lack[v]))
		} else {
			image[v] = float32(out[v] / float64(len(use))) // nothing but values of the field's edge
		}
		unknown[v] = float64(len(use)-int(missed[v])) < float64(coverage*float64(len(use)))
	}
	return image, unknown, nil
}

// besideAny reports whether a slice coordinate, from -0.5 on, lies on or next to a marked slice.
func besideAny(marked []bool, k float64) bool {
	s := int(k + 1) // between slices s-1 and s
	return s > 0 && marked[s-1] || s < len(marked) && marked[s]
}

// wellInside reports whether a voxel coordinate keeps clear of the planes at the
// field's ends that a spline bends: what most points do.
func (g *Grid) wellInside(x *[3]float64) bool {
	return x[0] >= bentPlanes && x[0] <= float64(g.N[0]-1)-bentPlanes &&
		x[1] >= bentPlanes && x[1] <= float64(g.N[1]-1)-bentPlanes &&
		x[2] >= bentPlanes && x[2] <= float64(g.N[2]-1)-bentPlanes
}

// depth is how far a voxel coordinate lies inside the outermost voxel centres,
// in voxels; below 0 it lies outside.
func (g Grid) depth(x [3]float64) float64 {
	d := math.Inf(1)
	for a, v := range x {
		// Not min, which takes care of NaN.
		if v < d {
			d = v
		}
		if u := float64(g.N[a]-1) - v; u < d {
			d = u
		}
	}
	return d
}

// edgeWeight is what a volume counts in an average at a point so deep inside
// its field: the spline bends what lies within two planes of the edge, which
// volumes that see the point from further inside must outvote. (Counting alike, the
// bent parts strained the average of a head that turned by 15 degrees, by up to
// 8 um in its poses.) Where all see it from the edge, they count alike.
func edgeWeight(deep float64) float64 {
	u := max(0.1, min(1, (deep+0.5)/(bentPlanes+0.5)))
	return float64(float64(u*u) * u)
}

// weakBelow: a slice that counts less than half is left out of the average.
const weakBelow = 0.5

// weakShare: a slice off by less than 2 % of its signal does no harm in an
// average, whatever its rank among others (in data without noise ranks mean
// nothing).
const weakShare = 0.02

// patch returns a copy of the volume in which weak slices are filled from the
// nearest sound ones on both sides, so that the spline does not ring into their
// neighbours; nil if nothing is weak.
func (e *estimator) patch(vol []float32, weak []bool) []float32 {
	if !slices.Contains(weak, true) {
		return nil
	}
	out := append([]float32(nil), vol...)
	n, axis := e.g.N, e.opt.SliceAxis
	step := [3]int{1, n[0], n[0] * n[1]}[axis]
	for s := range weak {
		if !weak[s] {
			continue
		}
		lo, hi := s-1, s+1
		for lo >= 0 && weak[lo] {
			lo--
		}
		for hi < n[axis] && weak[hi] {
			hi++
		}
		switch {
		case lo < 0 && hi >= n[axis]:
			return nil // nothing sound to fill from
		case lo < 0:
			lo = hi
		case hi >= n[axis]:
			hi = lo
		}
		u := float32(0)
		if hi > lo {
			u = float32(s-lo) / float32(hi-lo)
		}
		for i := range out {
			if i/step%n[axis] == s {
				a, b := vol[i+(lo-s)*step], vol[i+(hi-s)*step]
				out[i] = a + float32(u*(b-a))
			}
		}
	}
	return out
}

// finish gives lost volumes the pose between their aligned neighbours and puts
// the outcome together.
func (e *estimator) finish(m *model, vols []Volume, index, passes int) (*Estimate, error) {
	posed := e.nt - countState(vols, Lost)
	if posed < 2 {
		return nil, tooFew(vols)
	}
	// Lost volumes stand between aligned ones, or, where there are none (an
	// external reference of another kind), between doubtful ones.
	from := Aligned
	if countState(vols, Aligned) == 0 {
		from = Doubtful
	}
	var p Path
	for t, v := range vols {
		if v.State == from {
			p.Times, p.Poses = append(p.Times, float64(t)), append(p.Poses, v.Pose)
		}
	}
	for t := range vols {
		if vols[t].State == Lost {
			vols[t].Gain = [4]float64{1}
			vols[t].Pose = p.At(float64(t))
			vols[t].Outside = m.fine.outside(vols[t].Pose)
		}
	}
	return &Estimate{
		Volumes: vols, Scale: 1, Reference: append([]float32(nil), m.image...), Mask: m.mask, Centre: m.centre,
		ReferenceIndex: index, Passes: passes, unknown: m.unknown,
		Parameters: []Parameter{
			{"coarse_gaussian_mm", coarseSigma},
			{"fine_gaussian_mm", e.smoothing},
			{"margin_voxels", fineMargin},
			{"rim_voxels", rim},
			{"tolerance_mm", fineTolerance},
			{"rest_of_step", shrink},
			{"rest_over_noise", enough},
			{"max_iterations", maxIterations},
			{"fan_below_correlation", fanBelow},
			{"aligned_from_correlation", alignedFit},
			{"doubtful_from_correlation", doubtfulFit},
			{"most_outside_share", mostOutside},
			{"biweight_cut", tukeyCut},
			{"quiet_share", quietShare},
			{"excess_cost", excessCost},
			{"restless_share", restlessShare},
		},
	}, nil
}
