package slicetime

import (
	"math"

	"evenkeel/internal/kernel"
)

// The sinc kernel over rows of voxels.
//
// Inside the run a sample is a sum of taps of the samples themselves: the taps of a
// slice are the same for all its voxels, so that whole rows are summed at once, and
// as they take a constant and a straight line to themselves nothing else is needed.
// Near the ends of the run the reach goes past it. What stands there is predicted,
// voxel by voxel, from the endVolumes volumes nearest that end and no others, so
// that a run can be corrected while it is read.

// endVolumes is how many volumes at an end tell what stands beyond it. More cost
// memory, as a window must hold them; fewer cost accuracy. First and last volume of runs
// of 200, moved by half a sample, as in TestEndAccuracy (error without noise, with noise of
// SD 1): .083 and .98 from 24 volumes, .073 and .95 from 32, .069 and .94 from 40, .057 and
// .89 from all. With 40 every run is as good at its ends as one of 40.
const endVolumes = 40

// filter is the sinc kernel for one shift. Sample m of the result is the sum of
// taps[k] x[m+first+k].
type filter struct {
	shift float64
	first int
	taps  []float64 // none for shift 0
	// Shifts past everything predicted are cut to where only the line stands, which
	// is read so much farther out instead.
	farther float64
}

func newFilter(n int, shift float64, reach int) *filter {
	far := n + extension + reach + 1
	whole, rest, none := split(shift, far)
	f := &filter{shift: shift, first: whole}
	switch {
	case none:
		f.shift = 0
		return f
	case rest == 0:
		f.taps = []float64{1}
	default:
		f.taps = lineTaps(reach, rest, kaiserBeta)
		f.first -= reach
		// One end, or both, is outside the reach.
		for f.taps[0] == 0 {
			f.taps, f.first = f.taps[1:], f.first+1
		}
		for f.taps[len(f.taps)-1] == 0 {
			f.taps = f.taps[:len(f.taps)-1]
		}
	}
	f.farther = min(max(0, math.Abs(shift)-math.Abs(float64(whole)+rest)), 1e200)
	return f
}

func (f *filter) last() int { return f.first + len(f.taps) - 1 }

// sinc is what all work on runs of one size and schedule shares; read only.
type sinc struct {
	n, volume int
	filters   []*filter // by slice; equal shifts share one
	moved     bool      // some shift is not zero
	// The least first and greatest last sample any filter takes, relative to its own.
	least, most int
	head, tail  end
	pieces      blocks
	each        [][]float64 // for pieces across slices: by tap from least, by voxel

	fitted int // volumes an end's prediction is fitted to
	order  int
	ridge  float64
	taper  []float64
}

// end is the volumes at one end of a run whose filters go past it, and the samples
// they are made of. The head of a run so short that it meets the tail holds all.
type end struct {
	from, count    int // volumes made here
	first, samples int // volumes they are made of
	before, after  int // predicted samples at most
	isHead, isTail bool
}

// mostRows bounds the memory of a worker, in values of float32.
const mostRows = 1 << 16

func newSinc(size [3]int, nt, axis int, shifts []float64, opt Options) *sinc {
	s := &sinc{n: nt, volume: size[0] * size[1] * size[2], fitted: min(nt, endVolumes), taper: taperFor(extension)}
	s.order, s.ridge = predictor(s.fitted)
	known := map[float64]*filter{} // looked up only
	for _, shift := range shifts {
		f := known[shift]
		if f == nil {
			f = newFilter(nt, shift, opt.reach())
			known[shift] = f
		}
		s.filters = append(s.filters, f)
		if f.taps == nil {
			continue
		}
		if !s.moved {
			s.least, s.most = f.first, f.last()
		}
		s.moved = true
		s.least, s.most = min(s.least, f.first), max(s.most, f.last())
	}
	// A volume's own sample is always wanted: it says what sign a zero has.
	s.least, s.most = min(0, s.least), max(0, s.most)
	head, tail := min(nt, -s.least), min(nt, s.most)
	if head+tail >= nt && s.moved {
		s.head = end{count: nt, samples: nt, before: -s.least, after: s.most, isHead: true, isTail: true}
		s.tail = end{from: nt}
	} else {
		s.head = end{count: head, samples: min(nt, max(s.fitted, head+s.most)), before: -s.least, isHead: true}
		first := max(0, min(nt-s.fitted, nt-tail+s.least))
		s.tail = end{from: nt - tail, count: tail, first: first, samples: nt - first, after: s.most, isTail: true}
	}
	rows := s.ring() + s.head.count + s.tail.count
	s.pieces = blocksOf(size, axis, min(maxPiece, max(minPiece, mostRows/rows)))
	if s.pieces.across {
		s.each = make([][]float64, s.most-s.least+1)
		for k := range s.each {
			s.each[k] = make([]float64, s.pieces.width)
			for v := range s.each[k] {
				f := s.filters[s.pieces.sliceOf(v)]
				if j := k + s.least - f.first; j >= 0 && j < len(f.taps) {
					s.each[k][v] = f.taps[j]
				}
			}
		}
	}
	return s
}

// maxPiece voxels of all the taps' volumes are some 64 kB, which the second-level
// cache holds; minPiece are a cache line.
const (
	maxPiece = 1024
	minPiece = 16
)

// ring is how many volumes a piece moved in place must keep.
func (s *sinc) ring() int { return 1 - s.least }

// sliceOf is the slice of voxel v of a block across slices.
func (b *blocks) sliceOf(v int) int { return v / b.inner % b.slices }

// sincBytes bounds what Correct allocates for the sinc kernel.
func sincBytes(size [3]int, nt, axis, workers int, opt Options) int64 {
	// Shifts are below nt samples: at most so many taps, and rows of a ring and ends.
	taps := int64(2*(opt.reach()+nt) + 1)
	rows := int64(opt.reach()+nt) + 1 + int64(nt)
	b := blocksOf(size, axis, maxPiece)
	tables := int64(size[axis]) * (int64(2*opt.reach()+1)*8*2 + 256)
	if b.across {
		tables += taps * (int64(b.width)*8 + 24)
	}
	width := int64(b.width)
	if !b.across {
		width = minPiece
	}
	line := 24 * (taps + 2*rows + 2*int64(nt+endVolumes))
	each := 4*max(mostRows, rows*width) + line + int64(b.width) + 8*laneCount*(taps+2*int64(nt)+2*(endVolumes+extension)) + 16<<10
	return tables + each*int64(max(1, workers)) + 64<<10
}

// sincDesk is one goroutine's memory.
type sincDesk struct {
	taps    [][]float32 // the rows under the taps
	rows    [][]float32 // the samples of an end
	whole   [][]float32 // volumes, of which rows and taps are pieces
	each    [][]float64
	varies  []bool
	batch   [laneCount]int // voxels of the piece that wait for a full batch
	waiting int
	x, r    []lanes // samples of an end with what stands beyond; residuals of the fit
	ar      kernel.Autoregression

	ring, head, tail [][]float32 // for work in place: volumes of a piece
}

func (s *sinc) newDesk(inPlace bool) *sincDesk {
	samples := max(s.head.samples, s.tail.samples)
	d := &sincDesk{
		taps:   make([][]float32, s.most-s.least+1),
		rows:   make([][]float32, samples),
		each:   make([][]float64, len(s.each)),
		varies: make([]bool, s.pieces.width),
		x:      make([]lanes, max(s.head.before+s.head.samples+s.head.after, s.tail.samples+s.tail.after)),
		r:      make([]lanes, s.fitted+extension),
	}
	if !inPlace {
		d.whole = make([][]float32, max(samples, s.most-s.least+1))
		return d
	}
	make2 := func(n int) [][]float32 {
		rows, all := make([][]float32, n), make([]float32, n*s.pieces.width)
		for i := range rows {
			rows[i] = all[i*s.pieces.width:][:s.pieces.width]
		}
		return rows
	}
	d.ring, d.head, d.tail = make2(s.ring()), make2(s.head.count), make2(s.tail.count)
	return d
}

// inPlace moves piece i of the run.
func (s *sinc) inPlace(d *sincDesk, data []float32, i int) {
	start, width, slice := s.pieces.at(i)
	if !s.moved || slice >= 0 && s.filters[slice].taps == nil {
		return
	}
	at := func(t int) []float32 { return data[t*s.volume+start:][:width] }
	for k, e := range []*end{&s.head, &s.tail} {
		if e.count == 0 {
			continue
		}
		for u := range e.samples {
			d.rows[u] = at(e.first + u)
		}
		s.edge(d, e, [][][]float32{d.head, d.tail}[k], slice, width)
	}
	least, most := s.least, s.most
	if slice >= 0 {
		least, most = s.filters[slice].first, s.filters[slice].last()
	}
	for t := s.head.count; t < s.tail.from; t++ {
		// Volumes from head.count to t are overwritten by now.
		kept := d.ring[t%len(d.ring)][:width]
		copy(kept, at(t))
		taps := d.taps[:most-least+1]
		for k := range taps {
			if u := t + least + k; u >= s.head.count && u <= t {
				taps[k] = d.ring[u%len(d.ring)][:width]
			} else {
				taps[k] = at(u)
			}
		}
		s.inside(d, at(t), kept, slice)
	}
	for j := range s.head.count {
		copy(at(j), d.head[j])
	}
	for j := range s.tail.count {
		copy(at(s.tail.from+j), d.tail[j])
	}
}

// inside makes one volume of a piece from the rows in d.taps, which are those of its
// slice's filter or, across slices, all from least to most; like is its own sample.
func (s *sinc) inside(d *sincDesk, dst, like []float32, slice int) {
	if slice >= 0 {
		f := s.filters[slice]
		taps := d.taps[:len(f.taps)]
		if kernel.Interpolate(dst, f.taps, taps, like) {
			return
		}
		for i, v := range dst {
			if v-v != 0 {
				dst[i] = rescue(f.taps, taps, i, like[i])
			}
		}
		return
	}
	width := len(dst)
	for k := range d.each {
		d.each[k] = s.each[k][:width]
	}
	finite := kernel.InterpolateEach(dst, d.each, d.taps[:len(d.each)], like)
	for i := range dst {
		f := s.filters[s.pieces.sliceOf(i)]
		if f.taps == nil {
			dst[i] = like[i]
		} else if !finite && dst[i]-dst[i] != 0 {
			dst[i] = rescue(f.taps, d.taps[f.first-s.least:][:len(f.taps)], i, like[i])
		}
	}
}

// rescue makes a value again that came out not finite.
func rescue(taps []float64, rows [][]float32, i int, like float32) float32 {
	sum, equal := 0.0, true
	for k, w := range taps {
		v := rows[k][i]
		sum += float64(w * float64(v))
		equal = equal && v == like
	}
	return settle(sum, equal, like)
}

// settle rounds a sum of taps to float32. A zero has the sign of the sample itself,
// so that zeros of either sign keep it; what overshoots the range is held at its end;
// and samples that are all one infinity give it.
func settle(sum float64, equal bool, like float32) float32 {
	switch {
	case sum-sum == 0:
		r := store(sum)
		if r == 0 {
			r = math.Float32frombits(math.Float32bits(like) & (1 << 31))
		}
		return r
	case equal:
		return like
	}
	return float32(sum)
}

// edge makes the volumes of an end, out[j] being volume e.from+j of the piece, from
// the rows in d.rows, which are its samples.
func (s *sinc) edge(d *sincDesk, e *end, out [][]float32, slice, width int) {
	rows := d.rows[:e.samples]
	for j := range out {
		copy(out[j][:width], rows[e.from+j-e.first]) // what does not vary stays
	}
	varies := d.varies[:width]
	clear(varies)
	for left, u := width, 1; u < len(rows) && left > 0; u++ {
		row, first := rows[u], rows[0][:width]
		left = width
		for v, x := range row[:width] {
			if x != first[v] {
				varies[v] = true
			}
			if varies[v] {
				left--
			}
		}
	}
	if slice >= 0 {
		f := s.filters[slice]
		for v := range width {
			s.add(d, e, f, v, out)
		}
		s.flush(d, e, f, out)
		return
	}
	b := &s.pieces
	for k, f := range s.filters {
		if f.taps == nil {
			continue
		}
		for o := range width / (b.slices * b.inner) {
			for j := range b.inner {
				s.add(d, e, f, (o*b.slices+k)*b.inner+j, out)
			}
		}
		s.flush(d, e, f, out)
	}
}

// add puts a voxel of the piece into the batch and moves the batch when it is full.
func (s *sinc) add(d *sincDesk, e *end, f *filter, voxel int, out [][]float32) {
	if !d.varies[voxel] {
		return
	}
	d.batch[d.waiting] = voxel
	d.waiting++
	if d.waiting == laneCount {
		s.flush(d, e, f, out)
	}
}

// flush makes the end of the voxels that wait. Lanes never mix.
func (s *sinc) flush(d *sincDesk, e *end, f *filter, out [][]float32) {
	if d.waiting == 0 {
		return
	}
	v := &d.batch
	for l := d.waiting; l < laneCount; l++ {
		v[l] = v[0]
	}
	x := d.x[e.before:]
	together := v[laneCount-1] == v[0]+laneCount-1
	for u, row := range d.rows[:e.samples] {
		to := &x[u]
		if together {
			for l, f := range (*[laneCount]float32)(row[v[0]:]) {
				to[l] = float64(f)
			}
			continue
		}
		for l, voxel := range v {
			to[l] = float64(row[voxel])
		}
	}
	if e.isHead {
		s.beyond(d, e.before-1, -1, max(0, -f.first), f)
	}
	if e.isTail {
		s.beyond(d, e.before+e.samples, 1, max(0, f.last()), f)
	}
	for j := range out {
		t := e.from + j - e.first // the sample, counted from the end's first
		var sums lanes
		kernel.SumLanes(&sums, f.taps, d.x[e.before+t+f.first:])
		own := &x[t]
		for l, voxel := range d.batch[:d.waiting] {
			r := float32(sums[l])
			if r-r != 0 || r == 0 {
				like := float32(own[l])
				equal := true
				for k := range f.taps {
					equal = equal && d.x[e.before+t+f.first+k][l] == own[l]
				}
				r = settle(sums[l], equal, like)
			}
			out[j][voxel] = r
		}
	}
	d.waiting = 0
}

// beyond fills count samples past an end of the run, from index at of d.x in steps
// (1 at the tail, -1 at the head): the line through the volumes nearest that end, and
// about it the prediction, for as long as the extension is, led to zero. Time runs
// outwards, so that a head is the mirror image of a tail.
func (s *sinc) beyond(d *sincDesk, at, step, count int, f *filter) {
	if count == 0 {
		return
	}
	n := s.fitted
	r := d.r
	for i := range n {
		r[i] = d.x[at-step*(n-i)]
	}
	var level, slope, top lanes
	kernel.Line(r[:n], &level, &slope, &top)
	predicted := min(count, extension)
	d.ar.Fit(r[:n], s.order, s.ridge)
	d.ar.Forward(r[:n+predicted], n, limitOf(&top))
	mid := float64(float64(n-1) / 2)
	for h := range count {
		u := (float64(n+h) - mid) + f.farther
		weight := 1.0
		var p lanes
		if h < predicted {
			p = r[n+h]
			if k := h - (extension - len(s.taper)); k >= 0 {
				weight = s.taper[k]
			}
		}
		to := &d.x[at+step*h]
		for l := range to {
			to[l] = (level[l] + float64(slope[l]*u)) + float64(weight*p[l])
		}
	}
	for l, v := range level {
		if v-v != 0 { // a run of one infinity goes on
			first, equal := d.x[at-step][l], true
			for i := range n {
				equal = equal && d.x[at-step*(1+i)][l] == first
			}
			for h := 0; equal && h < count; h++ {
				d.x[at+step*h][l] = first
			}
		}
	}
}
