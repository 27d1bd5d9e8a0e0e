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

var NewBand = func(n int) band { return make(band, n) }

const BandWidth = bandWidth

type Band = band

func (m band) Add(i, j int, v float64) { m.add(i, j, v) }
func (m band) Cholesky() bool          { return m.cholesky() }
func (m band) Solve(b []float64)       { m.solve(b) }
func (m band) InverseBand() band       { return m.inverseBand() }
func (m band) LogDiagonal() float64    { return m.logDiagonal() }

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
	return append([]float64(nil), c.delta...), evidence, ok
}
func (c *chain) Tune(data []slotData, p []params)  { c.tune(data, p) }
func (c *chain) Offset() []params                  { return c.offset }
func (c *chain) Bend() [][3]float64                { return c.bend }
func (c *chain) Weights() []float64                { return c.w }
func (c *chain) Strengths() (shift, turn float64)  { return c.lt, c.lr }
func (c *chain) SetStrengths(shift, turn float64)  { c.lt, c.lr = shift, turn }
func (s slotData) Moved(d *params) slotData        { return s.moved(d) }
func (s slotData) Gradient() [poseUnknowns]float64 { return s.g }
func (c *chain) InverseBand() band                 { return c.m.inverseBand() }

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
	must(e.measure(make([]slotData, len(e.p)), true))
	e.noise = e.usualNoise()

	volumes, err = e.heldOutVolumes()
	must(err)
	copy(e.poses, poses)
	must(e.rebuild(draftProjections, true))
	path, err = e.heldOut(false)
	must(err)
	return volumes, path, harmAllowed(countState(est.Volumes, Aligned))
}
