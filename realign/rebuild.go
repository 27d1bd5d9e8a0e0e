package realign

import (
	"math"
	"slices"

	"evenkeel/internal/kernel"
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

// A line is a piece of a row of the reference whose points lie, in the volume, on a
// straight line: voxels x to x+n-1, of which the first is at start.
type line struct {
	x, n        int
	start, step [3]float64
}

// straight: a row is cut until no point lies further from its line than this, in voxels:
// a few micrometres, where poses differ from slice to slice by more than that.
const straight = 1e-3

// halfSlice: within half a slice a row crosses no more than one slice's plane, where
// the map bends. The bend then shows in the middle by half of what it is at most; over more,
// it may bend one way and back, and be straight in its middle by chance.
const halfSlice = 0.5

// lines cuts the row of voxels x to x+n-1 of (y, z) into lines, in order, and appends
// them to those given. g is carried from row to row.
func (s *slotMap) lines(to []line, x, n, y, z int, g *rowGuess) []line {
	r := row{s, y, z}
	first := r.find(x, float64([3]int{x, y, z}[s.axis])+g.moved)
	g.moved = first[s.axis] - float64([3]int{x, y, z}[s.axis])
	if n == 1 {
		return append(to, line{x: x, n: 1, start: first})
	}
	steps := float64(n - 1)
	last := r.find(x+n-1, first[s.axis]+float64(g.slope*steps))
	g.slope = (last[s.axis] - first[s.axis]) / steps
	to = r.cut(to, x, x+n-1, first, last)
	to[len(to)-1].n++
	return to
}

// rowGuess carries from row to row how far the slice coordinate of a row's first voxel
// moved, and how it grows along the row.
type rowGuess struct{ moved, slope float64 }

// row is one of the reference.
type row struct {
	s    *slotMap
	y, z int
}

// find returns where a voxel of the row lies, guess as for at.
func (r *row) find(x int, guess float64) [3]float64 {
	return r.s.at(float64(x), float64(r.y), float64(r.z), guess)
}

// cut makes lines of the voxels from a up to but not including b.
func (r *row) cut(to []line, a, b int, va, vb [3]float64) []line {
	l := line{x: a, n: b - a, start: va}
	for k := range va {
		l.step[k] = (vb[k] - va[k]) / float64(b-a)
	}
	if b-a == 1 {
		return append(to, l)
	}
	axis, mid := r.s.axis, (a+b)/2
	steps := float64(mid - a)
	v := r.find(mid, va[axis]+float64(l.step[axis]*steps))
	near := math.Abs(vb[axis]-va[axis]) <= halfSlice
	for k := range v {
		near = near && math.Abs(v[k]-(va[k]+float64(l.step[k]*steps))) <= straight/2
	}
	if near {
		return append(to, l)
	}
	to = r.cut(to, a, mid, va, v)
	return r.cut(to, mid, b, v, vb)
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
	rows := spansOf(e.region, e.g.N)
	at := voxelsOf(rows, e.g.N)
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
		mean, square, count, err := e.backMap(from, rows, len(at), weak, round > 0, draft && round == projections)
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

// voxelsOf lists the voxels of spans.
func voxelsOf(rows []span, n [3]int) (at []int) {
	for _, r := range rows {
		for x := range r.n {
			at = append(at, r.x+x+n[0]*(r.y+n[1]*r.z))
		}
	}
	return at
}

// An average sums volumes mapped back, at the voxels of a region.
type average struct {
	sum, square, full []float64
	count             []int32
}

// part is what one volume has for an average: values and, by pieces of the list of
// voxels, what they count.
type part struct {
	value, weight []float32
	pieces        []piece
}

// piece is a part of the list of voxels; all of it counts in full, or as its weights
// say: not at all where they are 0.
type piece struct {
	at, n int
	full  bool
}

// add adds a volume, with squares or without.
func (a *average) add(p *part, squares bool) {
	for _, c := range p.pieces {
		v := p.value[c.at:][:c.n]
		sum, full, count := a.sum[c.at:][:c.n], a.full[c.at:][:c.n], a.count[c.at:][:c.n]
		if !c.full {
			weight, square := p.weight[c.at:][:c.n], a.square[c.at:][:c.n]
			for q, w := range weight {
				if w, v := float64(w), float64(v[q]); w > 0 {
					sum[q] += float64(w * v)
					square[q] += float64(float64(w*v) * v)
					full[q] += w
					count[q]++
				}
			}
			continue
		}
		for q, v := range v {
			sum[q] += float64(v)
			full[q]++
			count[q]++
		}
		if squares {
			square := a.square[c.at:][:c.n]
			for q, v := range v {
				square[q] += float64(float64(v) * float64(v))
			}
		}
	}
}

// backMap averages, at the voxels of the region and by edgeWeight, the volumes (or, with
// residual, what the template fails to predict of them) mapped back along the path;
// with squares their squares as well.
func (e *pathEstimator) backMap(use []int, rows []span, voxels int, weak [][]bool, residual, squares bool) (mean, square []float32, count []int32, err error) {
	degree := 5
	if residual {
		degree = 3
	}
	a := average{make([]float64, voxels), make([]float64, voxels), make([]float64, voxels), make([]int32, voxels)}
	type scratch struct {
		s   *spline
		vol []float32
		b   batch
		part
		lines []line
	}
	work := make([]*scratch, e.workers)
	var turns parallel.Turns
	err = e.each(isIn(use, e.nt), func(worker, n int, raw []float32) error {
		defer e.done.piece()
		if work[worker] == nil {
			work[worker] = &scratch{s: newSpline(e.g.N, degree), vol: make([]float32, e.g.voxels()), part: part{value: make([]float32, voxels), weight: make([]float32, voxels)}}
		}
		w := work[worker]
		return turns.Do(rank(use, n), func() error {
			e.level(w.vol, raw, n, residual, &w.b)
			vol := w.vol
			if p := e.patch(vol, weak[n]); p != nil {
				vol = p
			}
			w.s.load(vol)
			m := newSlotMap(e.g, e.schedule.Axis, func(k int) Pose { return e.poses[n*len(e.shots)+e.shotOf[k]] })
			w.pieces = w.pieces[:0]
			var g rowGuess
			for _, r := range rows {
				w.lines = m.lines(w.lines[:0], r.x, r.n, r.y, r.z, &g)
				for i := range w.lines {
					l := &w.lines[i]
					at := r.at + l.x - r.x
					w.s.line(w.value[at:][:l.n], l.start, l.step)
					full := e.weighLine(w.weight[at:][:l.n], l, weak[n])
					if k := len(w.pieces) - 1; k >= 0 && w.pieces[k].full == full {
						w.pieces[k].n += l.n
					} else {
						w.pieces = append(w.pieces, piece{at, l.n, full})
					}
				}
			}
			return nil
		}, func() { a.add(&w.part, squares) })
	})
	if err != nil {
		return nil, nil, nil, err
	}
	mean, square = make([]float32, voxels), make([]float32, voxels)
	for q := range mean {
		if n := a.full[q]; n > 0 {
			mean[q], square[q] = float32(a.sum[q]/n), float32(a.square[q]/n)
		}
	}
	return mean, square, a.count, nil
}

// weighLine fills weight with what the points of a line count, unless all of them count
// in full: weak slices and those beside them do not, what lies outside the field does
// not, and what lies near its edge counts less.
func (e *pathEstimator) weighLine(weight []float32, l *line, weak []bool) (full bool) {
	axis := e.schedule.Axis
	point := func(i int) (v [3]float64) {
		for k := range v {
			v[k] = l.start[k] + float64(l.step[k]*float64(i))
		}
		return v
	}
	// What a line's ends are not, nothing between them is.
	a, b := l.start, point(l.n-1)
	if e.g.wellInside(&a) && e.g.wellInside(&b) {
		lo, hi := int(min(a[axis], b[axis])), int(max(a[axis], b[axis]))+1
		if !slices.Contains(weak[lo:hi+1], true) {
			return true
		}
	}
	for i := range weight {
		v := point(i)
		deep := e.g.depth(v)
		weight[i] = 0
		if deep < -0.5 {
			continue
		}
		if !besideAny(weak, v[axis]) {
			weight[i] = float32(edgeWeight(deep))
		}
	}
	return false
}

// level fills dst with volume n at the brightness of the reference, less the
// prediction with residual (0 where nothing is predicted: outside the region). b is scratch.
func (e *pathEstimator) level(dst, vol []float32, n int, residual bool, b *batch) {
	axis, nx := e.schedule.Axis, e.g.N[0]
	gain := e.gainRows(n)
	var maps [][16]float64
	var boxes [][2][3]int // what can be predicted of each slice
	if residual {
		region := template{box: boxOf(e.region, e.g.N)}
		maps, boxes = make([][16]float64, e.g.N[axis]), make([][2][3]int, e.g.N[axis])
		for k := range maps {
			pose := e.poses[n*len(e.shots)+e.shotOf[k]]
			maps[k] = mul(e.t.inv, mul(pose.Inverse().Matrix(), e.g.Affine))
			forth := mul(e.t.inv, mul(pose.Matrix(), e.g.Affine))
			boxes[k][0], boxes[k][1] = region.reached(&forth, [3]int{}, [3]int{nx - 1, e.g.N[1] - 1, e.g.N[2] - 1})
		}
	}
	for z := range e.g.N[2] {
		for y := range e.g.N[1] {
			from := nx * (y + e.g.N[1]*z)
			row, raw := dst[from:][:nx], vol[from:][:nx]
			if axis == 0 {
				// Neighbours in a row stand at poses of their own.
				for x, v := range raw {
					row[x] = v / float32(max(gain[x].row(y, z)+float64(gain[x].step*float64(x)), faintest))
				}
				if residual {
					e.unpredictedPoints(row, maps, y, z, b)
				}
				continue
			}
			k := [3]int{0, y, z}[axis]
			if !residual {
				kernel.OverRamp(row, raw, float32(gain[k].row(y, z)), float32(gain[k].step), faintest)
				continue
			}
			clear(row)
			if box := &boxes[k]; y < box[0][1] || y > box[1][1] || z < box[0][2] || z > box[1][2] {
				continue
			}
			x, end := e.predicted(&maps[k], y, z, &boxes[k])
			if x >= end {
				continue
			}
			kernel.OverRamp(row[x:end], raw[x:end], float32(gain[k].row(y, z)+float64(gain[k].step*float64(x))), float32(gain[k].step), faintest)
			b.v = sized(b.v, end-x)
			e.t.s.line(b.v, applyAffine(&maps[k], float64(x), float64(y), float64(z)), [3]float64{maps[k][0], maps[k][4], maps[k][8]})
			kernel.AddRamp(row[x:end], b.v, -1, 0)
		}
	}
}

// predicted gives the voxels of a row, x to end-1, from the first to the last that m takes
// into the region, which lies in a box.
func (e *pathEstimator) predicted(m *[16]float64, y, z int, box *[2][3]int) (x, end int) {
	o := applyAffine(m, 0, float64(y), float64(z))
	in := func(x int) bool {
		fx := float64(x)
		at := [3]float64{o[0] + float64(m[0]*fx), o[1] + float64(m[4]*fx), o[2] + float64(m[8]*fx)}
		return e.t.inField(at) && e.region[e.t.nearest(at)]
	}
	x, end = box[0][0], box[1][0]+1
	// Where the row leads past rows of the region only, it can be told from those.
	if first, last, ok := e.regionRows.along(m, &o, end-1); ok {
		end = min(end, last+1)
		x = min(max(x, first), end)
	}
	for x < end && !in(x) {
		x++
	}
	for end > x && !in(end-1) {
		end--
	}
	return x, end
}

// extents holds, for each row of a field, the first and the last voxel of a mask in that row
// and the rows around it; first > last where there is none.
type extents struct {
	n           [3]int
	first, last []int
}

func extentsOf(mask []bool, n [3]int) *extents {
	e := &extents{n: n, first: make([]int, n[1]*n[2]), last: make([]int, n[1]*n[2])}
	for row := range e.first {
		e.first[row], e.last[row] = n[0], -1
	}
	for _, s := range spansOf(mask, n) {
		for z := max(0, s.z-1); z <= min(n[2]-1, s.z+1); z++ {
			for y := max(0, s.y-1); y <= min(n[1]-1, s.y+1); y++ {
				row := y + n[1]*z
				e.first[row], e.last[row] = min(e.first[row], s.x), max(e.last[row], s.x+s.n-1)
			}
		}
	}
	return e
}

// along gives the voxels x of a row, of 0 to end, that m can take to voxels of the mask; o is
// where it takes the first. ok is false where the row leads too far across others.
func (e *extents) along(m *[16]float64, o *[3]float64, end int) (first, last int, ok bool) {
	if !(m[0] > 0.5) {
		return 0, 0, false
	}
	var at [3]int
	for a := 1; a < 3; a++ {
		half := float64(m[4*a] * float64(end) / 2)
		// Half a voxel either way is nearest to the middle row or one beside it.
		middle := math.Floor(o[a] + half + 0.5)
		if !(math.Abs(half) < 0.5) || !(middle >= 0 && middle < float64(e.n[a])) {
			return 0, 0, false
		}
		at[a] = int(middle)
	}
	row := at[1] + e.n[1]*at[2]
	if e.first[row] > e.last[row] {
		return 0, -1, true
	}
	return int((float64(e.first[row])-0.5-o[0])/m[0]) - 1, int((float64(e.last[row])+0.5-o[0])/m[0]) + 1, true
}

// unpredictedPoints takes the prediction out of a row whose voxels stand at poses of
// their own.
func (e *pathEstimator) unpredictedPoints(row []float32, maps [][16]float64, y, z int, b *batch) {
	b.reset()
	for x := range row {
		at := applyAffine(&maps[x], float64(x), float64(y), float64(z))
		if e.t.inField(at) && e.region[e.t.nearest(at)] {
			e.t.s.add(b, at[0], at[1], at[2])
		} else {
			row[x] = nothing
		}
	}
	e.t.s.values(b)
	next := 0
	for x, v := range row {
		if v == nothing {
			row[x] = 0
			continue
		}
		row[x] = v - b.v[next]
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
