package pipeline

// A raw series, read as often as it is needed.

import (
	"context"
	"errors"
	"io"
	"sync"

	"evenkeel/fault"
	"evenkeel/internal/parallel"
	"evenkeel/nifti"
	"evenkeel/provenance"
	"evenkeel/realign"
)

// A reel is one raw series of a run. Its file is read anew for every pass, decoded
// beside the work; with keep, the first pass that sees it whole keeps the volumes as
// they are stored, and later ones find them in memory. A pass that sees the file whole
// checks it to its last byte, and the first of them digests it.
//
// Every pass looks, at its end, whether the inputs are still the files that the
// plan was made from. Passes must not overlap.
type reel struct {
	p      *Plan
	rel    string
	keep   bool
	nt, nv int

	digest *provenance.Digester  // nil until a pass has seen the file whole
	kept   []*nifti.StoredVolume // nil: not kept (yet)
	wide   [][]float32           // by worker: room for a volume
}

var _ realign.Series = (*reel)(nil)

// newReel is the series of a file that has the grid of p and as many volumes.
func newReel(p *Plan, rel string, keep bool) *reel {
	return &reel{p: p, rel: rel, keep: keep, nt: p.Volumes, nv: p.Grid.N[0] * p.Grid.N[1] * p.Grid.N[2]}
}

// drop lets go of everything but the digest.
func (r *reel) drop() { r.kept, r.wide, r.keep = nil, nil, false }

// Len is the number of volumes.
func (r *reel) Len() int { return r.nt }

// failed says what an error of reading is: a fault (*Refused), an IOError, or the end of ctx.
func (r *reel) failed(ctx context.Context, err error) error {
	if ctx.Err() != nil {
		return ctx.Err()
	}
	// A file that changed under us explains whatever else is wrong with it.
	if faults := r.p.changed(); len(faults) > 0 {
		return &Refused{faults}
	}
	if f, isFault := imageFault(r.rel, err); isFault {
		return &Refused{[]fault.Fault{f}}
	}
	return &IOError{Path: r.rel, Step: "reading", Err: err}
}

// A tap digests what is read, if it has a digester, and ends the reading when ctx ends.
type tap struct {
	ctx context.Context
	d   *provenance.Digester
}

func (t tap) Write(b []byte) (int, error) {
	if err := t.ctx.Err(); err != nil {
		return 0, err
	}
	if t.d == nil {
		return len(b), nil
	}
	return t.d.Write(b)
}

// A pass gives the first volumes of a reel one after another; it belongs to one goroutine at a time.
type pass struct {
	r      *reel
	ctx    context.Context
	count  int
	t      int // next volume
	stream *nifti.Stream
	digest *provenance.Digester
	keeps  bool
	kept   []*nifti.StoredVolume
}

// begin starts a pass over the first count volumes, of which at most so many are decoded
// ahead. It must be closed, and ends well only with finish.
func (r *reel) begin(ctx context.Context, count, ahead int) (*pass, error) {
	s := &pass{r: r, ctx: ctx, count: count, keeps: r.keep && count == r.nt}
	if r.kept != nil {
		return s, nil
	}
	if r.digest == nil && count == r.nt {
		s.digest = &provenance.Digester{}
	}
	var err error
	s.stream, err = nifti.OpenPart(r.p.Dataset.Path(r.rel), tap{ctx, s.digest}, r.p.Settings.Skip, count, min(ahead, count))
	if err != nil {
		return nil, r.failed(ctx, err)
	}
	if h := s.stream.Header(); s.stream.Volumes() != count || !sameSize(h, r.p.Header) {
		err := errors.New("found another size than when the run was planned")
		s.close()
		return nil, r.failed(ctx, err)
	}
	return s, nil
}

// sameSize reports whether two images have as many voxels and volumes along each axis.
func sameSize(a, b *nifti.Header) bool {
	ax, ay, az, at := a.Size()
	bx, by, bz, bt := b.Size()
	return ax == bx && ay == by && az == bz && at == bt
}

// next gives the next volume, which must be released; there must be one.
func (s *pass) next() (*nifti.StoredVolume, error) {
	if s.t == s.count {
		panic("pipeline: a volume beyond the last")
	}
	if s.stream == nil {
		s.t++
		return s.r.kept[s.t-1], nil
	}
	v, err := s.stream.Next()
	if err != nil {
		return nil, s.r.failed(s.ctx, err)
	}
	s.t++
	if s.keeps {
		s.kept = append(s.kept, v)
	}
	return v, nil
}

// release takes a volume back, from any goroutine.
func (s *pass) release(v *nifti.StoredVolume) {
	if s.stream != nil && !s.keeps {
		v.Release()
	}
}

// finish ends a pass that has given all its volumes.
func (s *pass) finish() error {
	if s.stream == nil {
		return s.ctx.Err()
	}
	if _, err := s.stream.Next(); err != io.EOF {
		return s.r.failed(s.ctx, err)
	}
	if faults := s.r.p.changed(); len(faults) > 0 {
		return &Refused{faults}
	}
	if s.digest != nil {
		s.r.digest = s.digest
	}
	if s.keeps {
		s.r.kept = s.kept
	}
	return nil
}

// close lets go of the file.
func (s *pass) close() {
	if s.stream != nil {
		s.stream.Close()
	}
}

// Each is as [realign.Series] has it. An error of reading is a fault (*Refused) or an IOError.
func (r *reel) Each(ctx context.Context, workers int, want func(t int) bool, f func(worker, t int, vol []float32) error) error {
	workers = max(1, workers)
	for len(r.wide) < workers {
		r.wide = append(r.wide, nil)
	}
	return r.each(ctx, workers, want, func(worker, t int, v *nifti.StoredVolume) error {
		if vol := v.Float32(); vol != nil {
			return f(worker, t, vol)
		}
		if r.wide[worker] == nil {
			r.wide[worker] = make([]float32, r.nv)
		}
		v.Widen(r.wide[worker], 0)
		return f(worker, t, r.wide[worker])
	})
}

// each is Each for volumes as they are stored.
func (r *reel) each(ctx context.Context, workers int, want func(t int) bool, f func(worker, t int, v *nifti.StoredVolume) error) error {
	count := r.nt
	for want != nil && count > 0 && !want(count-1) {
		count-- // what nobody wants at the end need not be read
	}
	if count == 0 {
		return ctx.Err()
	}
	// Decoding is several times as fast as any work: a volume for each worker is enough.
	s, err := r.begin(ctx, count, workers+1)
	if err != nil {
		return err
	}
	defer s.close()
	var (
		mu    sync.Mutex
		stop  bool
		at    = count
		first error
	)
	fail := func(t int, err error) {
		mu.Lock()
		defer mu.Unlock()
		stop = true
		if err != nil && t < at {
			at, first = t, err
		}
	}
	// take gives the next volume wanted, nil after the last.
	take := func() (*nifti.StoredVolume, error) {
		mu.Lock()
		defer mu.Unlock()
		for !stop && s.t < count && ctx.Err() == nil {
			v, err := s.next()
			if err != nil {
				stop = true
				if s.t < at {
					at, first = s.t, err
				}
				return nil, err
			}
			if want == nil || want(v.Index()) {
				return v, nil
			}
			s.release(v)
		}
		return nil, nil
	}
	err = parallel.For(ctx, workers, workers, func(_, worker int) error {
		for {
			v, err := take()
			if v == nil || err != nil {
				return nil
			}
			whole := false
			func() {
				defer func() {
					if !whole { // a panic, which For raises again
						fail(v.Index(), nil)
					}
				}()
				err = f(worker, v.Index(), v)
				whole = true
			}()
			t := v.Index()
			s.release(v)
			if err != nil {
				fail(t, err)
				return nil
			}
		}
	})
	switch {
	case first != nil:
		return first
	case err != nil:
		return err
	}
	return s.finish()
}

// floats reads the series into one array, as it is needed for work in place. It is the last pass, of
// which nothing is kept that is not there already.
func (r *reel) floats(ctx context.Context, workers int) ([]float32, error) {
	r.keep = false
	data := make([]float32, r.nv*r.nt)
	err := r.each(ctx, workers, nil, func(_, t int, v *nifti.StoredVolume) error {
		v.Widen(data[t*r.nv:][:r.nv], 0)
		return nil
	})
	if err != nil {
		return nil, err
	}
	return data, nil
}

// readOne reads an image of one volume, the reference of a run, with its digest.
func readOne(ctx context.Context, p *Plan, rel string) ([]float32, *provenance.Digester, error) {
	d := &provenance.Digester{}
	_, s, err := nifti.ReadSeries(p.Dataset.Path(rel), tap{ctx, d}, 0)
	if ctx.Err() != nil {
		return nil, nil, ctx.Err()
	}
	if f, isFault := imageFault(rel, err); isFault {
		return nil, nil, &Refused{[]fault.Fault{f}}
	}
	if err != nil {
		return nil, nil, &IOError{Path: rel, Step: "reading", Err: err}
	}
	return s.Volume(0), d, nil // the only one, as planned
}

var errGivenUp = errors.New("pipeline: a volume was given up")
