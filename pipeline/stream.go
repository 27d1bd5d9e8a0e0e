package pipeline

// One pass from the raw series to the corrected one, a few volumes at a time.

import (
	"context"
	"io"
	"sync"

	"evenkeel/internal/parallel"
	"evenkeel/nifti"
	"evenkeel/quality"
	"evenkeel/slicetime"
)

// batchVolumes is how many output volumes are made between two meetings of the workers.
// It is a balance of memory (a batch is held beside the window of raw volumes) and of
// waiting at the meetings. It changes no byte.
const batchVolumes = 8

// windowVolumes is how many volumes at most a worker makes at a time. It changes no byte.
const windowVolumes = 4

// A batch is a step of a pass: the volumes up to (not including) those named are, after
// it, read, measured as they were, and made.
type batch struct{ read, measured, made int }

// batches plans the steps of a pass over nt volumes, and how many raw volumes must be in
// memory together. needs tells the first and last raw volume that an output volume is
// made from, look those that a raw one is measured with, both growing with the volume.
func batches(nt int, needs, look func(t int) (first, last int)) (steps []batch, ring int) {
	var b batch
	for b.made < nt {
		was := b
		b.made = min(b.made+batchVolumes, nt)
		_, last := needs(b.made - 1)
		b.read = max(b.read, b.made, last+1)
		for b.measured < nt {
			if _, last := look(b.measured); last >= b.read {
				break
			}
			b.measured++
		}
		// The oldest that this step looks at: to make the first volume, to measure the first, to
		// take the difference to the one before the first that is new.
		oldest, _ := needs(was.made)
		if was.measured < nt {
			first, _ := look(was.measured)
			oldest = min(oldest, first)
		}
		oldest = min(oldest, max(0, was.read-1))
		ring = max(ring, b.read-oldest)
		steps = append(steps, b)
	}
	return steps, ring
}

// current is what a pass holds.
type current struct {
	w      *worker
	p      *Plan
	nt, nv int
	count  []bool // volumes that enter averages
	space  *resampling
	window *slicetime.Window // nil: nothing is moved in time
	raw    [][]float32       // volume t in raw[t%len(raw)]
	steady [][]float32       // likewise
	before *looks
	after  *looks
	spikes *quality.Spikes
	out    *nifti.VolumeWriter
}

// looks are the measures taken both of the raw and of the corrected series.
type looks struct {
	change *quality.Change // nil: no head
	course *quality.Course
}

func newLooks(m *measures, nv, nt int) *looks {
	l := &looks{course: quality.NewCourse(nv)}
	if m.headVoxels() > 0 {
		l.change = quality.NewChange(nv, nt, m.mask)
	}
	return l
}

// results gives what was measured.
func (l *looks) results(nt int, counts []bool) (dvars []float64, tsnr []float32) {
	dvars = undefined(nt)
	if l.change != nil {
		dvars = l.change.DVARS(counts)
	}
	tsnr = make([]float32, l.course.Voxels())
	l.course.TSNR(tsnr)
	return dvars, tsnr
}

// stream reads the series once more, measures it, moves it in time and space, measures
// what comes out and writes it to out as an image with header h. The fields of m
// that measureRaw and measureSteady fill are filled.
func (w *worker) stream(ctx context.Context, p *Plan, po *posed, r *reel, m *measures, h *nifti.Header, out io.Writer) (err error) {
	c := &current{w: w, p: p, nt: r.nt, nv: r.nv, count: m.counts(), space: p.resampling(po, w.workers)}
	n := p.Grid.N
	if c.window, err = p.window(); err != nil {
		return err
	}
	c.spikes = quality.NewSpikes(n[0], n[1], n[2], c.nt, p.Schedule.Axis, m.mask)
	c.before, c.after = newLooks(m, c.nv, c.nt), newLooks(m, c.nv, c.nt)
	steps, ring := p.batches(c.window)
	c.raw = make([][]float32, ring)
	c.steady = make([][]float32, min(c.nt, batchVolumes+1)) // and the last of the batch before
	workers := max(1, w.workers)
	if c.out, err = nifti.NewVolumeWriter(out, h, true, 2*workers+1); err != nil {
		return err
	}
	// Nobody may wait for a volume that will not come.
	defer context.AfterFunc(ctx, func() { c.out.Abort(ctx.Err()) })()

	r.keep = false // from the last pass nothing is kept that is not there already
	s, err := r.begin(ctx, c.nt, batchVolumes)
	if err != nil {
		return err
	}
	defer s.close()
	var was, last batch
	for _, b := range steps {
		// What was made is measured while the next volumes are read.
		if err := c.take(ctx, workers, s, last, was, b); err != nil {
			return err
		}
		if b.read == c.nt && was.read < c.nt {
			if err := s.finish(); err != nil {
				return err
			}
			s.close()
		}
		if err := c.make(ctx, workers, was, b); err != nil {
			return err
		}
		last, was = was, b
	}
	if err := c.take(ctx, workers, s, last, was, was); err != nil {
		return err
	}
	if err := c.out.Close(); err != nil {
		return err
	}
	m.dvarsRaw, m.tsnrRaw = c.before.results(c.nt, c.count)
	m.dvarsSteady, m.tsnrSteady = c.after.results(c.nt, c.count)
	m.spikes = c.spikes.Scores()
	return nil
}

// batches plans the pass over the run.
func (p *Plan) batches(window *slicetime.Window) (steps []batch, ring int) {
	return batches(p.Volumes, needsOf(window), func(t int) (first, last int) { return quality.SpikeSpan(t, p.Volumes) })
}

// window moves the slices of a streamed run in time; nil where none is moved.
func (p *Plan) window() (*slicetime.Window, error) {
	if !p.Timing.Temporal {
		return nil, nil
	}
	n := p.Grid.N
	return slicetime.NewWindow(n[0], n[1], n[2], p.Volumes, p.Schedule, p.Timing.Origin, p.Settings.kernel())
}

// needsOf says which volumes a volume is made of.
func needsOf(w *slicetime.Window) func(t int) (first, last int) {
	if w == nil {
		return func(t int) (first, last int) { return t, t }
	}
	return w.Needs
}

// room gives the place of volume t in a ring, made when it is first needed.
func room(ring [][]float32, t, nv int) []float32 {
	v := &ring[t%len(ring)]
	if *v == nil {
		*v = make([]float32, nv)
	}
	return *v
}

// counted lists the volumes of a ring between two that enter averages.
func (c *current) counted(ring [][]float32, from, to int) (vols [][]float32) {
	for t := from; t < to; t++ {
		if c.count[t] {
			vols = append(vols, ring[t%len(ring)])
		}
	}
	return vols
}

// take measures the volumes made by step was, which followed last, and reads those of step b.
func (c *current) take(ctx context.Context, workers int, s *pass, last, was, b batch) error {
	made := c.counted(c.steady, last.made, was.made)
	c.after.course.Begin(made)
	read, changes := b.read-was.read, was.made-last.made
	blocks := c.after.course.Blocks()
	if len(made) == 0 {
		blocks = 0
	}
	var mu sync.Mutex
	return parallel.For(ctx, workers, changes+blocks+read, func(_, i int) error {
		switch {
		case i < changes:
			c.after.differ(c.steady, last.made+i)
		case i < changes+blocks:
			c.after.course.Block(made, i-changes)
		default: // last, since it may have to wait
			mu.Lock()
			t := s.t
			v, err := s.next()
			if err != nil {
				mu.Unlock()
				return err
			}
			dst := room(c.raw, t, c.nv)
			mu.Unlock()
			v.Widen(dst, 0)
			s.release(v)
		}
		return nil
	})
}

// differ measures the change of volume t in a ring.
func (l *looks) differ(ring [][]float32, t int) {
	if l.change == nil {
		return
	}
	var before []float32
	if t > 0 {
		before = ring[(t-1)%len(ring)]
	}
	l.change.Volume(t, before, ring[t%len(ring)])
}

// make makes and writes the volumes of step b, which follows was, and measures the raw
// ones that were read for it.
func (c *current) make(ctx context.Context, workers int, was, b batch) error {
	read := c.counted(c.raw, was.read, b.read)
	c.before.course.Begin(read)
	for t := was.made; t < b.made; t++ {
		room(c.steady, t, c.nv)
	}
	at := func(t int) []float32 { return c.raw[t%len(c.raw)] }
	// The longest pieces first: a few volumes each, which the window makes with fewer trips
	// to memory than one by one.
	few := max(1, min(windowVolumes, (b.made-was.made)/workers))
	made, changes, looked := (b.made-was.made+few-1)/few, b.read-was.read, b.measured-was.measured
	blocks := c.before.course.Blocks()
	if len(read) == 0 {
		blocks = 0
	}
	return parallel.For(ctx, workers, made+looked+changes+blocks, func(worker, i int) error {
		switch {
		case i < made:
			return c.some(worker, was.made+i*few, min(was.made+(i+1)*few, b.made), at)
		case i < made+looked:
			c.spikes.Volume(was.measured+i-made, at)
		case i < made+looked+changes:
			c.before.differ(c.raw, was.read+i-made-looked)
		default:
			c.before.course.Block(read, i-made-looked-changes)
		}
		return nil
	})
}

// some makes the volumes between two and hands them over to be written.
func (c *current) some(worker, from, to int, at func(t int) []float32) (err error) {
	whole := false
	defer func() {
		if !whole { // a panic
			c.out.Abort(errGivenUp)
		}
	}()
	if c.window != nil {
		var room [windowVolumes][]float32
		dst := room[:0]
		for t := from; t < to; t++ {
			dst = append(dst, c.steady[t%len(c.steady)])
		}
		c.window.Volumes(dst, from, at)
	}
	for t := from; t < to && err == nil; t++ {
		dst := c.steady[t%len(c.steady)]
		src := dst
		if c.window == nil {
			src = at(t)
		}
		c.space.volume(worker, t, dst, src)
		if err = c.out.Volume(t, dst); err == nil && c.w.share != nil {
			c.w.share(c.p, "steady", float64(t+1)/float64(c.nt))
		}
	}
	whole = true
	return err
}
