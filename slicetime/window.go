package slicetime

import (
	"fmt"
	"sync"
	"sync/atomic"
)

// Window moves every slice of a run to one instant, volume by volume, with the sinc
// kernel, from the volumes around each: a run need not be held to be corrected. It
// gives the bytes that [Correct] gives.
//
// A volume needs those that its kernel reaches and, within the kernel's reach of an end
// of the run, the 40 volumes at that end, from which what stands beyond is predicted.
// The volumes near an end are made together when the first of them is asked for, and
// kept ([WindowBytes]).
//
// Its methods may be called by several goroutines at once.
type Window struct {
	*sinc
	ends [2]kept // head and tail

	mutex sync.Mutex
	desks []*sincDesk // nobody works at
}

// NewWindow prepares for a run of nt volumes of nx*ny*nz voxels; s and ref are those of
// [Correct], and opt.Kernel must be [Sinc]. It returns an [*ArgumentError] as Correct
// does, and for another kernel.
func NewWindow(nx, ny, nz, nt int, s Schedule, ref float64, opt Options) (*Window, error) {
	if min(nx, ny, nz, nt) < 1 {
		panic("slicetime: a run without voxels")
	}
	size := [3]int{nx, ny, nz}
	if err := check(size, nt, s, ref, opt); err != nil {
		return nil, err
	}
	if opt.Kernel != Sinc {
		return nil, &ArgumentError{"kernel", opt.Kernel.String(), fmt.Sprintf("%s: a window of volumes is enough for it alone", Sinc)}
	}
	w := &Window{sinc: newSinc(size, nt, s.Axis, s.shifts(ref), opt)}
	for i, e := range []*end{&w.head, &w.tail} {
		w.ends[i] = kept{end: e, done: make(chan struct{}), broken: make(chan struct{})}
		w.ends[i].left.Store(int64(w.pieces.count))
	}
	return w, nil
}

// WindowBytes bounds from above what a [Window] of these arguments allocates, with
// so many goroutines asking for volumes, besides the volumes it is given and fills; 0 for
// arguments that [NewWindow] refuses.
func WindowBytes(nx, ny, nz, nt int, s Schedule, ref float64, opt Options, workers int) int64 {
	size := [3]int{nx, ny, nz}
	if min(nx, ny, nz, nt) < 1 || check(size, nt, s, ref, opt) != nil || opt.Kernel != Sinc {
		return 0
	}
	p := newSinc(size, nt, s.Axis, s.shifts(ref), opt)
	return 4*int64(p.volume)*int64(p.head.count+p.tail.count) + sincBytes(size, nt, s.Axis, workers, opt)
}

// Needs returns the volumes that volume t is made of, first to last, both included and
// inside the run. Neither ever falls as t rises, and they are at most as far apart
// as the larger of 40 volumes and the reach to both sides with the whole samples of
// the shifts; but a run that hardly exceeds that may be wanted whole.
func (w *Window) Needs(t int) (first, last int) {
	if t < 0 || t >= w.n {
		panic("slicetime: no such volume")
	}
	first, last = max(0, t+w.least), min(w.n-1, t+w.most)
	// Held ready from before the tail begins until the head is over, so that
	// neither bound falls.
	if w.head.count > 0 {
		last = max(last, w.head.samples-1)
	}
	if w.tail.count > 0 {
		first = min(first, w.tail.first)
	}
	if w.head.isTail {
		first = 0
	}
	return first, last
}

// Volume writes volume t to dst, of nx*ny*nz voxels. vol gives the volumes that [Window.Needs]
// names, as they were measured; it is called from this goroutine only, and what it
// returns must stay as it is until Volume returns. dst must be none of them.
func (w *Window) Volume(dst []float32, t int, vol func(t int) []float32) {
	one := [1][]float32{dst}
	w.Volumes(one[:], t, vol)
}

// Volumes is [Window.Volume] for volumes t, t+1, ... t+len(dst)-1: the same bytes
// with fewer trips to memory, as what they share stays in the cache. vol gives all that
// is needed from the first's first to the last's last.
func (w *Window) Volumes(dst [][]float32, t int, vol func(t int) []float32) {
	if t < 0 || t+len(dst) > w.n {
		panic("slicetime: no such volume")
	}
	for _, v := range dst {
		if len(v) != w.volume {
			panic("slicetime: a volume of another size")
		}
	}
	for len(dst) > 0 {
		count := 1
		switch {
		case !w.moved:
			copy(dst[0], w.given(vol, t))
		case t < w.head.count:
			copy(dst[0], w.ends[0].volume(w, t, vol))
		case t >= w.tail.from:
			copy(dst[0], w.ends[1].volume(w, t, vol))
		default:
			count = min(len(dst), w.tail.from-t)
			w.between(dst[:count], t, vol)
		}
		dst, t = dst[count:], t+count
	}
}

// between makes volumes of no end.
func (w *Window) between(dst [][]float32, t int, vol func(t int) []float32) {
	d := w.desk()
	n := w.most - w.least + len(dst)
	if len(d.whole) < n {
		d.whole = make([][]float32, n)
	}
	whole := d.whole[:n]
	for k := range whole {
		whole[k] = w.given(vol, t+w.least+k)
	}
	for i := range w.pieces.count {
		start, width, slice := w.pieces.at(i)
		least, count := w.least, w.most-w.least+1
		if slice >= 0 {
			least, count = w.filters[slice].first, len(w.filters[slice].taps)
		}
		for j := range dst {
			own, to := whole[j-w.least][start:][:width], dst[j][start:][:width]
			if count == 0 {
				copy(to, own)
				continue
			}
			for k := range count {
				d.taps[k] = whole[j+least-w.least+k][start:][:width]
			}
			w.inside(d, to, own, slice)
		}
	}
	w.leave(d)
}

func (w *Window) given(vol func(t int) []float32, t int) []float32 {
	v := vol(t)
	if len(v) != w.volume {
		panic(fmt.Sprintf("slicetime: volume %d is given with %d voxels, not %d", t, len(v), w.volume))
	}
	return v
}

// desk returns a desk that nobody else works at.
func (w *Window) desk() *sincDesk {
	w.mutex.Lock()
	defer w.mutex.Unlock()
	if n := len(w.desks); n > 0 {
		d := w.desks[n-1]
		w.desks = w.desks[:n-1]
		return d
	}
	return w.newDesk(false)
}

// leave gives a desk back and lets go of the caller's volumes.
func (w *Window) leave(d *sincDesk) {
	clear(d.whole)
	clear(d.taps)
	clear(d.rows)
	w.mutex.Lock()
	w.desks = append(w.desks, d)
	w.mutex.Unlock()
}

// kept is an end whose volumes are made once, by all who ask for one meanwhile.
type kept struct {
	*end
	once    sync.Once
	volumes [][]float32
	next    atomic.Int64 // piece to be taken
	left    atomic.Int64 // pieces not done
	done    chan struct{}
	broken  chan struct{} // closed when a piece cannot be made
	stop    sync.Once
}

// volume returns volume t, once all are made.
func (e *kept) volume(w *Window, t int, vol func(t int) []float32) []float32 {
	select {
	case <-e.done:
	default:
		e.make(w, vol)
	}
	return e.volumes[t-e.from]
}

func (e *kept) make(w *Window, vol func(t int) []float32) {
	e.once.Do(func() {
		all := make([]float32, e.count*w.volume)
		for j := range e.count {
			e.volumes = append(e.volumes, all[j*w.volume:][:w.volume])
		}
	})
	d := w.desk()
	ok := false
	defer func() {
		if !ok {
			e.stop.Do(func() { close(e.broken) })
		}
	}()
	out := make([][]float32, e.count)
	whole := d.whole[:e.samples]
	for u := range whole {
		whole[u] = nil
	}
	for {
		i := int(e.next.Add(1) - 1)
		if i >= w.pieces.count {
			break
		}
		if whole[0] == nil {
			for u := range whole {
				whole[u] = w.given(vol, e.first+u)
			}
		}
		start, width, slice := w.pieces.at(i)
		for u := range whole {
			d.rows[u] = whole[u][start:][:width]
		}
		for j := range out {
			out[j] = e.volumes[j][start:][:width]
		}
		if slice >= 0 && w.filters[slice].taps == nil {
			for j := range out {
				copy(out[j], d.rows[e.from+j-e.first])
			}
		} else {
			w.edge(d, e.end, out, slice, width)
		}
		if e.left.Add(-1) == 0 {
			close(e.done)
		}
	}
	ok = true
	w.leave(d)
	select {
	case <-e.done:
	case <-e.broken:
		panic("slicetime: another goroutine failed at an end of the run")
	}
}
