package realign

import (
	"math"

	"evenkeel/internal/parallel"
)

// slotMap carries reference voxels into one volume whose slices were taken at
// poses of their own: voxel-to-voxel maps by slice, blended between neighbouring
// slices. Where a point of the reference lies in the volume depends on the
// slice it falls into, which depends on where it lies: a few rounds of fixed-point
// iteration settle it, since the pose changes little from slice to slice.
type slotMap struct {
	m    [][16]float64 // by slice
	axis int
}

// settled: the rounds end when the slice coordinate moves by less (over which a
// pose changes by next to nothing), or after mostRounds (each round shrinks the error by the change of pose per slice,
// a few percent even for a jerk).
const (
	settled    = 1e-4
	mostRounds = 6
)

func newSlotMap(g Grid, axis int, pose func(slice int) Pose) *slotMap {
	s := &slotMap{m: make([][16]float64, g.N[axis]), axis: axis}
	inv := mustInvert(g.Affine)
	for k := range s.m {
		s.m[k] = mul(inv, mul(pose(k).Matrix(), g.Affine))
	}
	return s
}

// at returns where voxel (x, y, z) of the reference lies in the volume; guess is
// roughly its slice coordinate there.
func (s *slotMap) at(x, y, z, guess float64) (v [3]float64) {
	k := guess
	for range mostRounds {
		v = s.through(k, x, y, z)
		d := v[s.axis] - k
		k = v[s.axis]
		if d < settled && d > -settled {
			break
		}
	}
	return v
}

// guess carries from one voxel to its neighbour how far the slice coordinate moved.
type guess struct{ moved float64 }

func (g *guess) next(k float64) float64 { return k + g.moved }
func (g *guess) was(k, found float64)   { g.moved = found - k }

// through maps by the slices around slice coordinate k.
func (s *slotMap) through(k, x, y, z float64) [3]float64 {
	last := len(s.m) - 1
	if !(k > 0) {
		return applyAffine(&s.m[0], x, y, z)
	}
	if k >= float64(last) {
		return applyAffine(&s.m[last], x, y, z)
	}
	i := int(k)
	u := k - float64(i)
	a, b := applyAffine(&s.m[i], x, y, z), applyAffine(&s.m[i+1], x, y, z)
	for c := range a {
		a[c] += float64(u * (b[c] - a[c]))
	}
	return a
}

// Row makes a slotMap a [Map].
func (s *slotMap) Row(j, k int, x, y, z []float64) {
	var g guess
	for i := range x {
		at := [3]float64{float64(i), float64(j), float64(k)}
		v := s.at(at[0], at[1], at[2], g.next(at[s.axis]))
		g.was(at[s.axis], v[s.axis])
		x[i], y[i], z[i] = v[0], v[1], v[2]
	}
}

// SlotMap returns the map of reference voxels into a volume whose slices stand
// at poses of their own: pose(k) for slice k along the axis.
func SlotMap(g Grid, axis int, pose func(slice int) Pose) Map { return newSlotMap(g, axis, pose) }

// rebuild makes the template anew from the path: every aligned volume, its gain
// taken out, mapped back slice by slice and averaged; then, as often as
// projections says, what the template fails to predict of each slice is mapped
// back and added (the update of iterative back-projection: Irani, Peleg 1991,
// CVGIP: Graphical Models and Image Processing 53(3):231-239, eq. 3), which
// sharpens what averaging has blurred. Voxels outside the region keep the first
// reference.
//
// The mean is over all volumes, or over enough of them where the template is still
// to be made anew (draft); what it fails to predict is alike in all, so enough of
// them tell.
func (e *pathEstimator) rebuild(projections int, draft bool) error {
	use := e.est.used()
	var at []int
	for i, in := range e.region {
		if in {
			at = append(at, i)
		}
	}
	if e.sliceScale != nil {
		e.judgeSlices()
	}
	weak := e.spoilt
	if weak == nil {
		weak = e.weak
	}
	image := append([]float32(nil), e.est.Reference...)
	for round := range projections + 1 {
		from := use
		if round > 0 || draft {
			from = spread(use, enoughVolumes)
		}
		mean, square, count, err := e.backMap(from, at, weak, round > 0)
		if err != nil {
			return err
		}
		for q, i := range at {
			if float64(count[q]) < float64(coverage*float64(len(from))) || count[q] == 0 {
				continue
			}
			if round > 0 {
				image[i] += mean[q]
			} else {
				image[i] = mean[q]
			}
		}
		e.image = image
		if draft || round < projections {
			e.setTemplate(image)
		}
		if draft && round == projections {
			e.weigh(at, mean, square, count)
		}
	}
	return nil
}

// enoughVolumes: a mean over so many adds under a percent to the noise of a residual.
const enoughVolumes = 64

// spread takes at most so many of a list, evenly.
func spread(of []int, most int) []int {
	if len(of) <= most {
		return of
	}
	out := make([]int, most)
	for i := range out {
		out[i] = of[(2*i+1)*len(of)/(2*most)]
	}
	return out
}

// rebuildPieces is how many volumes a rebuild goes through.
func rebuildPieces(nt, projections int, draft bool) int {
	some := min(nt, enoughVolumes)
	if draft {
		return some * (1 + projections)
	}
	return nt + some*projections
}

// used lists the volumes that averages are of: those aligned, or, where none is (a
// reference of another kind), those that are doubtful.
func (e *Estimate) used() (use []int) {
	from := Aligned
	if countState(e.Volumes, Aligned) == 0 {
		from = Doubtful
	}
	for n, v := range e.Volumes {
		if v.State == from {
			use = append(use, n)
		}
	}
	return use
}

// weigh sets the weights of the template's voxels by what varies there of
// itself.
func (e *pathEstimator) weigh(at []int, mean, square []float32, count []int32) {
	v := make([]float32, e.g.voxels())
	for q, i := range at {
		if n := float64(count[q]); n > 2 {
			m := float64(mean[q])
			v[i] = float32((float64(square[q]) - float64(m*m)) * n / (n - 1))
		}
	}
	noise := e.noise / e.usualGain() // in units of the reference, as the variance
	e.voxel, _ = quietWeights(e.g, v, e.est.Mask, meanSquare(e.image, e.est.Mask), float64(noise*noise))
}

// spoiltScale: as z > 1.78 in the volume's match, where a slice loses half of
// its weight.
const spoiltScale = 1.8

// judgeSlices marks the slices that stay out of the template: those whose
// residual along the path stands out far more than in other volumes, and where
// the path sees nothing those that the volume match found weak. (What stood out
// there may only have been at a pose of its own.)
func (e *pathEstimator) judgeSlices() {
	n := e.g.N[e.schedule.Axis]
	usual := e.usualScale(e.sliceScale, n)
	e.spoilt = make([][]bool, e.nt)
	for t := range e.spoilt {
		e.spoilt[t] = make([]bool, n)
		for k := range n {
			if v := e.sliceScale[t*n+k]; v > 0 {
				e.spoilt[t][k] = v > float64(spoiltScale*usual[k])
			} else {
				e.spoilt[t][k] = e.weak[t][k]
			}
		}
	}
}

// usualScale is the median over the volumes of each of n scales a volume.
func (e *pathEstimator) usualScale(scale []float64, n int) []float64 {
	usual := make([]float64, n)
	for s := range usual {
		var seen []float32
		for t := range e.nt {
			if v := scale[t*n+s]; v > 0 {
				seen = append(seen, float32(v))
			}
		}
		usual[s] = float64(median(seen))
	}
	return usual
}

// backMap averages, at the voxels listed and by edgeWeight, the volumes (or, with residual, what
// the template fails to predict of them) mapped back along the path.
func (e *pathEstimator) backMap(use, at []int, weak [][]bool, residual bool) (mean, square []float32, count []int32, err error) {
	degree := 5
	if residual {
		degree = 3
	}
	sum, sum2, full := make([]float64, len(at)), make([]float64, len(at)), make([]float64, len(at))
	count = make([]int32, len(at))
	type scratch struct {
		s           *spline
		vol         []float32
		b           batch
		to          []int32 // of each point of b: its place in at
		val, weight []float32
	}
	work := make([]*scratch, e.workers)
	n0, n1 := e.g.N[0], e.g.N[1]
	axis := e.schedule.Axis
	var turns parallel.Turns
	err = e.each(isIn(use, e.nt), func(worker, n int, raw []float32) error {
		defer e.done.piece()
		if work[worker] == nil {
			work[worker] = &scratch{s: newSpline(e.g.N, degree), vol: make([]float32, e.g.voxels()), val: make([]float32, len(at)), weight: make([]float32, len(at))}
		}
		w := work[worker]
		return turns.Do(rank(use, n), func() error {
			e.level(w.vol, raw, n, residual, &w.b)
			vol := w.vol
			if p := e.patch(vol, weak[n]); p != nil {
				vol = p
			}
			w.s.load(vol)
			m := newSlotMap(e.g, axis, func(k int) Pose { return e.poses[n*len(e.shots)+e.shotOf[k]] })
			w.b.reset()
			w.b.grow(len(at))
			w.to = w.to[:0]
			var g guess
			for q, i := range at {
				x := [3]float64{float64(i % n0), float64(i / n0 % n1), float64(i / (n0 * n1))}
				v := m.at(x[0], x[1], x[2], g.next(x[axis]))
				g.was(x[axis], v[axis])
				counts, ok := 1.0, true
				if !e.g.wellInside(&v) {
					deep := e.g.depth(v)
					counts, ok = edgeWeight(deep), deep >= -0.5
				}
				if ok {
					s := int(v[axis] + 1)
					ok = !(s > 0 && weak[n][s-1] || s < len(weak[n]) && weak[n][s])
				}
				w.weight[q] = 0 // nothing known
				if ok {
					w.weight[q] = float32(counts)
					w.s.add(&w.b, v[0], v[1], v[2])
					w.to = append(w.to, int32(q))
				}
			}
			w.s.values(&w.b)
			for i, q := range w.to {
				w.val[q] = w.b.v[i]
			}
			return nil
		}, func() {
			for q, weight := range w.weight {
				if w, v := float64(weight), float64(w.val[q]); w > 0 {
					sum[q] += float64(w * v)
					sum2[q] += float64(float64(w*v) * v)
					full[q] += w
					count[q]++
				}
			}
		})
	})
	if err != nil {
		return nil, nil, nil, err
	}
	mean, square = make([]float32, len(at)), make([]float32, len(at))
	for q := range mean {
		if n := full[q]; n > 0 {
			mean[q], square[q] = float32(sum[q]/n), float32(sum2[q]/n)
		}
	}
	return mean, square, count, nil
}

// level fills dst with volume n at the brightness of the reference, less the
// prediction with residual (0 where nothing is predicted). b is scratch.
func (e *pathEstimator) level(dst, vol []float32, n int, residual bool, b *batch) {
	axis := e.schedule.Axis
	rows := e.gainRows(n)
	i := 0
	for z := range e.g.N[2] {
		for y := range e.g.N[1] {
			for x := range e.g.N[0] {
				r := &rows[[3]int{x, y, z}[axis]]
				dst[i] = vol[i] / float32(max(r.row(y, z)+float64(r.step*float64(x)), faintest))
				i++
			}
		}
	}
	if !residual {
		return
	}
	maps := make([][16]float64, e.g.N[axis])
	for k := range maps {
		maps[k] = mul(e.t.inv, mul(e.poses[n*len(e.shots)+e.shotOf[k]].Inverse().Matrix(), e.g.Affine))
	}
	b.reset()
	b.grow(len(dst))
	i = 0
	for z := range e.g.N[2] {
		for y := range e.g.N[1] {
			for x := range e.g.N[0] {
				at := applyAffine(&maps[[3]int{x, y, z}[axis]], float64(x), float64(y), float64(z))
				if e.t.inField(at) && e.region[e.t.nearest(at)] {
					e.t.s.add(b, at[0], at[1], at[2])
				} else {
					dst[i] = nothing
				}
				i++
			}
		}
	}
	e.t.s.values(b)
	next := 0
	for i, v := range dst {
		if v == nothing {
			dst[i] = 0
			continue
		}
		dst[i] = v - b.v[next]
		next++
	}
}

// nothing marks a voxel for which nothing is predicted; no image holds such a value.
const nothing = -math.MaxFloat32

// gainRows is the gain of volume n, by slice.
func (e *pathEstimator) gainRows(n int) []gainRows {
	out := make([]gainRows, e.g.N[e.schedule.Axis])
	for k := range out {
		out[k] = newGainRows(e.g, e.est.Centre, &e.gains[n][k])
	}
	return out
}

// inField reports whether a voxel coordinate lies within half a voxel of the
// field's outermost centres.
func (t *template) inField(x [3]float64) bool {
	for a := range x {
		if !(x[a] >= -0.5 && x[a] < float64(t.g.N[a])-0.5) {
			return false
		}
	}
	return true
}
