package realign

import (
	"context"
	"slices"

	"evenkeel/slicetime"
)

// What tests in package realign_test need of the inside.

var Poles = poles

// FilterLine turns one line of samples into coefficients.
func FilterLine(x []float64, degree int, b Boundary) []float64 {
	f := newLineFilter(len(x), degree, 3, b)
	for k, v := range x {
		for l := range lanes {
			f.buf[3+k][l] = v
		}
	}
	f.run(len(x))
	c := make([]float64, len(f.buf))
	for k := range c {
		c[k] = f.buf[k][lanes-1]
	}
	return c
}

// Interpolate loads a volume and evaluates value and gradient at points.
func Interpolate(n [3]int, vol []float32, degree int, b Boundary, pts [][3]float64) (v []float32, g [][3]float32) {
	s := newSpline(n, degree)
	if b == Odd {
		s.load(vol)
	} else {
		s.loadExactly(vol, b)
	}
	var at batch
	for _, p := range pts {
		s.add(&at, p[0], p[1], p[2])
	}
	s.values(&at)
	only := slices.Clone(at.v)
	s.gradients(&at)
	if !slices.Equal(only, at.v) {
		panic("value and gradient disagree")
	}
	for q := range pts {
		v, g = append(v, at.v[q]), append(g, [3]float32{at.gx[q], at.gy[q], at.gz[q]})
	}
	return v, g
}

// Smooth filters a volume.
func Smooth(g Grid, sigmaMM float64, stride [3]int, vol []float32) (Grid, []float32) {
	s := newSmoother(g, sigmaMM, stride)
	out := make([]float32, s.out[0]*s.out[1]*s.out[2])
	s.run(out, vol)
	return s.grid(g), out
}

var (
	Otsu        = otsu
	KeepLargest = keepLargest
	FillHoles   = fillHoles
	Dilate      = dilate
	Median      = median
	EdgeMargin  = edgeMargin
	Invert      = invert
	Mul         = mul
	White       = white
)

const AlignedFit = alignedFit

// PaddedSlices finds padding in a series.
func PaddedSlices(g Grid, axis int, data []float32) []bool {
	nv := g.voxels()
	dead, err := paddedSlices(context.Background(), g, axis, Floats(data, len(data)/nv))
	if err != nil {
		panic(err)
	}
	return dead
}

// RoughMatches matches volumes with one of them as the first pass does, from the
// identity, and tells iterations and whether each converged.
func RoughMatches(g Grid, data []float32, axis int) (iterations []int, converged []bool) {
	nv := g.voxels()
	e, err := newEstimator(context.Background(), g, Floats(data, len(data)/nv), Options{SliceAxis: axis, Workers: 1})
	if err != nil {
		panic(err)
	}
	e.prepare()
	m := e.newModel(data[:nv], nil, 3)
	w := e.scratch[0]
	for t := range e.nt {
		w.load(data[t*nv:][:nv], 3)
		f := w.m.match(m.fine, w.sFine, Identity, e.fineEffort())
		iterations, converged = append(iterations, f.iterations), append(converged, f.converged)
	}
	return iterations, converged
}

// RebuildOn gives the path with its reference rebuilt from another recording of
// the same run (noise-free, say).
func RebuildOn(ctx context.Context, g Grid, data []float32, nt int, s slicetime.Schedule, est *Estimate, p *PathEstimate, workers int) *PathEstimate {
	e, err := newPathEstimator(ctx, g, Floats(data, nt), s, est, workers)
	if err != nil {
		panic(err)
	}
	e.shots = s.Shots()
	e.lay()
	copy(e.poses, p.Path.Poses)
	e.image = append([]float32(nil), est.Reference...)
	e.setTemplate(e.image)
	e.sliceScale, e.spoilt = nil, p.spoilt
	if err := e.rebuild(2, false); err != nil {
		panic(err)
	}
	q := *p
	q.Reference = e.image
	return &q
}

// What the tests of the path need.

type (
	Chain    = chain
	SlotData = slotData
	Params   = params
)

var NewChain = newChain

const (
	PathRelocations = relocations
	PathUnknowns    = poseUnknowns
)

// MakeSlot is the quadratic of a slot with Hessian h that wants to move by d:
// g = h d.
func MakeSlot(h [poseUnknowns][poseUnknowns]float64, d Params) (s SlotData) {
	at := 0
	for a := range poseUnknowns {
		for b := range poseUnknowns {
			s.g[a] += h[a][b] * d[b]
		}
		for b := a; b < poseUnknowns; b++ {
			s.h[at] = h[a][b]
			at++
		}
	}
	return s
}

func (c *chain) Update(data []slotData, p []params) (moved, evidence float64) {
	return c.update(data, p)
}
func (c *chain) Step(data []slotData, p []params) (delta []float64, evidence float64, ok bool) {
	evidence, ok = c.step(data, p)
	for _, d := range c.delta {
		delta = append(delta, d[:]...)
	}
	return delta, evidence, ok
}
func (c *chain) Tune(data []slotData, p []params) { c.tune(c.link(data, p), allFactors) }
func (c *chain) EvidenceAt(data []slotData, p []params, lt, lr float64) float64 {
	at := [2]float64{lt, lr}
	return c.evidences([4][2]float64{{1, 1}, {2, 3}, at, {4, 5}}, c.link(data, p))[2]
}
func (c *chain) Offset() []params                  { return c.offset }
func (c *chain) Bend() [][3]float64                { return c.bend }
func (c *chain) Weights() []float64                { return c.w }
func (c *chain) Strengths() (shift, turn float64)  { return c.lt, c.lr }
func (c *chain) SetStrengths(shift, turn float64)  { c.lt, c.lr = shift, turn }
func (s slotData) Moved(d *params) slotData        { return s.moved(d) }
func (s slotData) Gradient() [poseUnknowns]float64 { return s.g }
func (c *chain) Covariances() []block              { return covariances(c.rungs) }

// PathParams and PathPose convert between poses and the parameters of the path.
func PathParams(centre [3]float64, p Pose) Params {
	e := pathEstimator{est: &Estimate{Centre: centre}}
	return e.toParams(p)
}

func PathPose(centre [3]float64, q Params) Pose {
	e := pathEstimator{est: &Estimate{Centre: centre}}
	return e.fromParams(q)
}

// PathJacobian is d(twist about the centre)/d(parameters), the diagonal blocks.
func PathJacobian(centre [3]float64, q Params) (shift, turn [9]float64) {
	return jacobian(PathPose(centre, q), q)
}

// HeldOut compares one pose a volume with poses of the slots on held-out pixels, as
// EstimatePath does.
func HeldOut(g Grid, data []float32, nt int, s slicetime.Schedule, est *Estimate, poses []Pose) (volumes, path, allowed float64) {
	e, err := newPathEstimator(context.Background(), g, Floats(data, nt), s, est, 2)
	if err != nil {
		panic(err)
	}
	e.shots = s.Shots()
	e.lay()
	e.setTemplate(est.Reference)
	e.thin = true
	must := func(err error) {
		if err != nil {
			panic(err)
		}
	}
	must(e.measure(make([]slotData, len(e.p)), looking{plain: true}))
	e.noise = e.usualNoise()

	volumes, err = e.heldOutVolumes()
	must(err)
	copy(e.poses, poses)
	must(e.rebuild(draftProjections, true))
	path, err = e.heldOut(false)
	must(err)
	return volumes, path, harmAllowed(countState(est.Volumes, Aligned))
}

// Lines gives the points of a row of the reference as the rebuilding of the template finds
// them: voxels x to x+n-1 of (y, z), after those of the row before; and in how many lines.
func Lines(m Map, rows [][4]int) (points [][3]float64, lines int) {
	var g rowGuess
	for _, r := range rows {
		at := r[0]
		for _, l := range m.(*slotMap).lines(nil, r[0], r[1], r[2], r[3], &g) {
			if l.x != at {
				panic("lines do not follow each other")
			}
			at += l.n
			lines++
			for i := range l.n {
				var v [3]float64
				for k := range v {
					v[k] = l.start[k] + l.step[k]*float64(i)
				}
				points = append(points, v)
			}
		}
		if at != r[0]+r[1] {
			panic("lines do not fill their row")
		}
	}
	return points, lines
}

// Medians of sizes: as found from a guess, and by counting.
func Medians(v []float32, guess float32) (near, counted float32) {
	return medianNear(v, guess, make([]float32, 2*len(v))), medianOf(v)
}

// LineWeights is what the points of a line count in the average of volumes.
func LineWeights(g Grid, axis, n int, start, step [3]float64, weak []bool) (weight []float32, full bool) {
	e := &pathEstimator{estimator: &estimator{g: g}}
	e.schedule.Axis = axis
	weight = make([]float32, n)
	full = e.weighLine(weight, &line{n: n, start: start, step: step}, weak)
	return weight, full
}

func EdgeWeight(deep float64) float64 { return edgeWeight(deep) }

// World is the place of a voxel, mm.
func (g Grid) World(i, j, k float64) [3]float64 { return g.world(i, j, k) }

// A Probe looks into the estimation of a path.
type Probe struct{ e *pathEstimator }

// NewProbe prepares a run for its path, with the reference of est as the template.
func NewProbe(g Grid, data []float32, nt int, s slicetime.Schedule, est *Estimate) Probe {
	e, err := newPathEstimator(context.Background(), g, Floats(data, nt), s, est, 1)
	if err != nil {
		panic(err)
	}
	e.shots = s.Shots()
	e.lay()
	e.setTemplate(est.Reference)
	return Probe{e}
}

// Predicted gives, for the pixels of a shot of volume n at a pose, which voxel of the
// volume each is, the prediction, and its derivatives by shift and turn.
func (p Probe) Predicted(vol []float32, n, shot int, pose Pose) (voxel []int, value []float32, slope [6][]float32) {
	e, w := p.e, p.e.work[0]
	b := mul(e.t.inv, mul(pose.Inverse().Matrix(), e.g.Affine))
	e.gather(w, vol, e.shots[shot].Slices, pose, &b)
	rows := e.predict(w, n, e.schedule.Axis, &b, false)
	for _, r := range w.rows {
		for _, x := range w.sites.Index[r.from:r.to] {
			voxel = append(voxel, int(x)+e.g.N[0]*(r.y+e.g.N[1]*r.z))
		}
	}
	value = append(value, rows[0]...)
	for k := range slope {
		slope[k] = append(slope[k], rows[2+k]...)
	}
	return voxel, value, slope
}

// Level is volume n, all of whose slices stand at a pose, at the brightness of the
// template, less the prediction with residual.
func (p Probe) Level(vol []float32, n int, pose Pose, residual bool) []float32 {
	e := p.e
	for i := range e.shots {
		e.poses[n*len(e.shots)+i] = pose
	}
	dst := make([]float32, len(vol))
	e.level(dst, vol, n, residual, &batch{})
	return dst
}

// SetGain has slice k of all volumes be as bright as said.
func (p Probe) SetGain(k int, gain [4]float64) {
	for n := range p.e.gains {
		p.e.gains[n][k] = gain
	}
}

func (p Probe) Region() []bool { return p.e.region }

// Centred is the map by a twist about c.
func Centred(w Twist, c [3]float64) Pose { return Exp(w).centred(c) }

// GainAt is a gain at a voxel.
func GainAt(g Grid, centre [3]float64, gain [4]float64, x, y, z int) float64 {
	r := newGainRows(g, centre, &gain)
	return r.at([3]float64{float64(x), float64(y), float64(z)})
}

// PassFrom matches volume 1 of two with volume 0 as a pass does, from a known pose or from
// scratch, and gives what was found before any second look.
func PassFrom(g Grid, data []float32, axis int, pose Pose, known bool) Volume {
	e, err := newEstimator(context.Background(), g, Floats(data, 2), Options{SliceAxis: axis, Workers: 1})
	if err != nil {
		panic(err)
	}
	e.prepare()
	m := e.newModel(data[:g.voxels()], nil, 5)
	var from []Volume
	if known {
		from = []Volume{{Pose: Identity, State: Aligned}, {Pose: pose, State: Doubtful}}
	}
	vols, _, err := e.pass(m, from, e.fineEffort())
	if err != nil {
		panic(err)
	}
	return vols[1]
}
