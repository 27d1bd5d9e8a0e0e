package realign

import (
	"slices"

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

// at returns where voxel (x, y, z) of the reference lies in the volume.
func (s *slotMap) at(x, y, z float64) (v [3]float64) {
	k := [3]float64{x, y, z}[s.axis]
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
	for i := range x {
		v := s.at(float64(i), float64(j), float64(k))
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
func (e *pathEstimator) rebuild(projections int) error {
	var use []int
	for n, v := range e.est.Volumes {
		if v.State == Aligned {
			use = append(use, n)
		}
	}
	var at []int
	for i, in := range e.region {
		if in {
			at = append(at, i)
		}
	}
	weak := make([][]bool, e.nt)
	usual, _ := e.usualScale()
	for _, n := range use {
		weak[n] = slices.Clone(e.weak[n])
		for k, s := range e.shotOf {
			// A slice whose residual stands out far more than its fellows'.
			if u := usual[s]; u > 0 && e.scale[n*len(e.shots)+s] > float64(spoiltScale*u) {
				weak[n][k] = true
			}
		}
	}
	image := append([]float32(nil), e.est.Reference...)
	for round := range projections + 1 {
		mean, square, count, err := e.backMap(use, at, weak, round > 0)
		if err != nil {
			return err
		}
		for q, i := range at {
			if float64(count[q]) < float64(coverage*float64(len(use))) || count[q] == 0 {
				continue
			}
			if round > 0 {
				image[i] += mean[q]
			} else {
				image[i] = mean[q]
			}
		}
		e.image = image
		e.setTemplate(image)
		if round == projections {
			e.weigh(at, mean, square, count)
		}
	}
	return nil
}

// Voxels that change of themselves (activation, vessels, eyes) pull at the poses;
// they are recognised by what the template leaves of them varying more than
// elsewhere, and count less: with s^2 the noise and x the excess of the variance over
// quietShare times its lower quartile in the head, by s^2 / (s^2 + excessCost x). The
// variance is smoothed by a voxel, for that of a single one is too uncertain.
const (
	quietShare = 1.3
	excessCost = 12 // from a simulation study that preceded this code, where 22 um became 12.5 with many active spots
)

func (e *pathEstimator) weigh(at []int, mean, square []float32, count []int32) {
	v := make([]float32, e.g.voxels())
	for q, i := range at {
		if n := float64(count[q]); n > 2 {
			m := float64(mean[q])
			v[i] = float32((float64(square[q]) - float64(m*m)) * n / (n - 1))
		}
	}
	edge := e.g.edges()
	s := newSmoother(e.g, max(edge[0], edge[1], edge[2]), [3]int{1, 1, 1})
	smooth := make([]float32, len(v))
	s.run(smooth, v)
	var inside []float32
	level := 0.0
	for i, in := range e.est.Mask {
		if in {
			inside = append(inside, smooth[i])
			level += float64(float64(e.image[i]) * float64(e.image[i]))
		}
	}
	if len(inside) == 0 {
		return
	}
	quiet := float64(quartile(inside))
	// As quietest: what interpolation leaves in a run without noise is no activity.
	noise := max(float64(e.sigma*e.sigma), float64(quietest*quietest*float64(level/float64(len(inside)))))
	e.voxel = make([]float32, len(v))
	for i := range e.voxel {
		x := max(0, float64(smooth[i])-float64(quietShare*quiet))
		e.voxel[i] = float32(noise / (noise + float64(excessCost*x)))
	}
}

// quartile returns the lower quartile and reorders v.
func quartile(v []float32) float32 {
	slices.Sort(v)
	return v[len(v)/4]
}

// spoiltScale: as z > 1.78 in the volume's match, where a slice loses half of
// its weight.
const spoiltScale = 1.8

// usualScale is the median residual scale of each shot over the volumes.
func (e *pathEstimator) usualScale() (usual []float64, any bool) {
	usual = make([]float64, len(e.shots))
	for s := range usual {
		var seen []float32
		for n := range e.nt {
			if v := e.scale[n*len(e.shots)+s]; v > 0 {
				seen = append(seen, float32(v))
			}
		}
		usual[s] = float64(median(seen))
		any = any || len(seen) > 0
	}
	return usual, any
}

// backMap averages, at the voxels listed, the volumes (or, with residual, what
// the template fails to predict of them) mapped back along the path.
func (e *pathEstimator) backMap(use, at []int, weak [][]bool, residual bool) (mean, square []float32, count []int32, err error) {
	degree := 5
	if residual {
		degree = 3
	}
	sum, sum2 := make([]float64, len(at)), make([]float64, len(at))
	count = make([]int32, len(at))
	type scratch struct {
		s   *spline
		vol []float32
	}
	work := make([]*scratch, e.workers)
	val := make([][]float32, 2*e.workers)
	in := make([][]bool, len(val))
	for i := range val {
		val[i], in[i] = make([]float32, len(at)), make([]bool, len(at))
	}
	n0, n1 := e.g.N[0], e.g.N[1]
	axis := e.schedule.Axis
	for rest := use; len(rest) > 0; {
		batch := rest[:min(len(rest), len(val))]
		rest = rest[len(batch):]
		err := parallel.For(e.ctx, e.workers, len(batch), func(worker, b int) error {
			defer e.done.piece()
			n := batch[b]
			if work[worker] == nil {
				work[worker] = &scratch{newSpline(e.g.N, degree, Odd), make([]float32, e.g.voxels())}
			}
			w := work[worker]
			e.level(w.vol, n, residual)
			vol := w.vol
			if p := e.patch(vol, weak[n]); p != nil {
				vol = p
			}
			w.s.load(vol)
			m := newSlotMap(e.g, axis, func(k int) Pose { return e.poses[n*len(e.shots)+e.shotOf[k]] })
			for q, i := range at {
				v := m.at(float64(i%n0), float64(i/n0%n1), float64(i/(n0*n1)))
				ok := true
				for a := range v {
					ok = ok && v[a] >= -0.5 && v[a] <= float64(e.g.N[a])-0.5
				}
				if ok {
					s := int(v[axis] + 1)
					ok = !(s > 0 && weak[n][s-1] || s < len(weak[n]) && weak[n][s])
				}
				if in[b][q] = ok; ok {
					val[b][q] = w.s.value(v[0], v[1], v[2])
				}
			}
			return nil
		})
		if err != nil {
			return nil, nil, nil, err
		}
		const block = 4096
		err = parallel.For(e.ctx, e.workers, (len(at)+block-1)/block, func(_, k int) error {
			for b := range batch {
				for q := k * block; q < min(len(at), (k+1)*block); q++ {
					if in[b][q] {
						v := float64(val[b][q])
						sum[q] += v
						sum2[q] += float64(v * v)
						count[q]++
					}
				}
			}
			return nil
		})
		if err != nil {
			return nil, nil, nil, err
		}
	}
	mean, square = make([]float32, len(at)), make([]float32, len(at))
	for q := range mean {
		if n := float64(count[q]); n > 0 {
			mean[q], square[q] = float32(sum[q]/n), float32(sum2[q]/n)
		}
	}
	return mean, square, count, nil
}

// level fills dst with volume n at the brightness of the reference, less the
// prediction with residual (0 where nothing is predicted).
func (e *pathEstimator) level(dst []float32, n int, residual bool) {
	vol := e.volume(n)
	gain := e.est.Volumes[n].Gain
	rows := newGainRows(e.g, e.est.Centre, &gain)
	axis := e.schedule.Axis
	maps := make([][16]float64, e.g.N[axis])
	if residual {
		inv := e.t.inv
		for k := range maps {
			maps[k] = mul(inv, mul(e.poses[n*len(e.shots)+e.shotOf[k]].Inverse().Matrix(), e.g.Affine))
		}
	}
	i := 0
	for z := range e.g.N[2] {
		for y := range e.g.N[1] {
			base := rows.row(y, z)
			for x := range e.g.N[0] {
				v := float32(float64(vol[i]) / (base + float64(rows.step*float64(x))))
				if residual {
					at := applyAffine(&maps[[3]int{x, y, z}[axis]], float64(x), float64(y), float64(z))
					if e.t.inField(at) && e.region[e.t.nearest(at)] {
						v -= e.t.s.value(at[0], at[1], at[2])
					} else {
						v = 0
					}
				}
				dst[i] = v
				i++
			}
		}
	}
}

// gainRows evaluates a gain along the rows of a grid, where it is linear.
type gainRows struct {
	step, y, z, origin float64
}

func newGainRows(g Grid, centre [3]float64, gain *[4]float64) gainRows {
	at := func(i, j, k float64) float64 {
		p := g.world(i, j, k)
		for a := range p {
			p[a] -= centre[a]
		}
		return gainOf(gain, p)
	}
	o := at(0, 0, 0)
	return gainRows{step: at(1, 0, 0) - o, y: at(0, 1, 0) - o, z: at(0, 0, 1) - o, origin: o}
}

// row is the gain at the start of a row; it grows by step with each voxel.
func (r *gainRows) row(j, k int) float64 {
	return r.origin + float64(r.y*float64(j)) + float64(r.z*float64(k))
}

// at is the gain at a voxel coordinate.
func (r *gainRows) at(x [3]float64) float64 {
	return r.origin + float64(r.step*x[0]) + float64(r.y*x[1]) + float64(r.z*x[2])
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
