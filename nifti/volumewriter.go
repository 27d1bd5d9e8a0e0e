package nifti

import (
	"context"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"slices"
	"sync"

	"evenkeel/internal/parallel"
)

// pieceBytes is how much is stored and compressed at a time: it stays in the
// nearer caches on the way. A divisor of blockBytes.
const pieceBytes = 64 << 10

// A VolumeWriter writes an image whose volumes are made by any number of
// goroutines. Each compresses its own volume; whoever finishes the volume that
// is next in the file writes it, and those behind it that are ready. The bytes
// are those that a [Writer] writes, for any number of goroutines and in whatever
// order they call.
//
// It holds the compressed form of at most as many volumes as it has slots, and
// what the compressors of the goroutines that are inside Volume need (some
// 300 KiB each); after the first volumes nothing is allocated any more.
type VolumeWriter struct {
	frame
	level int
	slots int
	nt    int

	mu      sync.Mutex
	moved   sync.Cond // next or err has changed
	next    int       // the volume the file waits for
	taken   []bool    // by slot: a volume is under way there
	ready   []*packet // by slot: compressed, waiting for its turn
	writing bool      // somebody is at sink
	sink    sink      // of the goroutine that set writing
	packers []*packer // not in use
	packets []*packet // not in use
	err     error
}

// errGivenUp is what others see when one of them panics.
var errGivenUp = errors.New("nifti: a volume was given up")

// A packet is one volume as it will stand in the file.
type packet struct {
	out output
	crc uint32
}

// A packer makes packets and owns what it needs for that.
type packer struct {
	sq  *squeezer // nil for plain bytes
	raw []byte
}

// NewVolumeWriter begins an image as [NewWriter] does. slots is how many volumes
// at once may be compressed or wait for their turn, at least one: as many as
// there are workers, and some more where the work differs from volume to volume
// (or the file is slow).
func NewVolumeWriter(w io.Writer, h *Header, compress bool, slots int) (*VolumeWriter, error) {
	f, err := newFrame(h)
	if err != nil {
		return nil, err
	}
	_, _, _, nt := f.h.Size()
	slots = min(max(slots, 1), nt)
	vw := &VolumeWriter{frame: *f, level: level(f.h.Datatype), slots: slots, nt: nt,
		taken: make([]bool, slots), ready: make([]*packet, slots), sink: sink{w: w, gz: compress}}
	vw.moved.L = &vw.mu
	return vw, nil
}

// Volume stores volume n, counted from 0, as [Writer.WriteVolume] does, and may be
// called from any goroutine, once for every volume. It waits while volume
// n-slots is not in the file yet, so that volumes must be begun in about their
// order: whoever is called with n needs volume n-slots to be under way
// elsewhere, or done. v is not kept. An error, of whichever volume, ends the
// image: it is returned by every later call and by those that wait.
//
// A caller that cannot make a volume must say so by [VolumeWriter.Abort], or
// those who wait for it wait for ever.
func (w *VolumeWriter) Volume(n int, v []float32) error {
	if len(v) != w.h.voxels() {
		panic("nifti: Volume of a slice that is not one volume long")
	}
	pk, p, err := w.begin(n)
	if err != nil {
		return err
	}
	whole := false
	defer func() {
		if !whole { // a panic: let nobody wait for us
			w.Abort(errGivenUp)
		}
	}()
	at, err := pk.pack(p, &w.frame, v)
	whole = true
	if err != nil {
		err = fmt.Errorf("nifti: compressing: %w", err)
	} else if at >= 0 {
		err = w.notFinite(n, at, v[at])
	}
	return w.end(n, pk, p, err)
}

// begin waits for a slot and takes it.
func (w *VolumeWriter) begin(n int) (*packer, *packet, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	for w.err == nil && n >= w.next+w.slots && n < w.nt {
		w.moved.Wait()
	}
	switch {
	case w.err != nil:
		return nil, nil, w.err
	case n < 0 || n >= w.nt:
		return nil, nil, w.fail(w.tooMany())
	case n < w.next || w.taken[n%w.slots]:
		return nil, nil, w.fail(fmt.Errorf("nifti: volume %d a second time", n))
	}
	w.taken[n%w.slots] = true
	p := &packet{}
	if k := len(w.packets); k > 0 {
		p, w.packets = w.packets[k-1], w.packets[:k-1]
	}
	if k := len(w.packers); k > 0 {
		pk := w.packers[k-1]
		w.packers = w.packers[:k-1]
		return pk, p, nil
	}
	pk := &packer{raw: make([]byte, 0, min(pieceBytes, max(w.volumeBytes(), len(w.frame.begin))))}
	if w.sink.gz {
		var err error
		if pk.sq, err = newSqueezer(w.level); err != nil {
			return nil, nil, w.fail(err)
		}
	}
	return pk, p, nil
}

// end leaves volume n for whoever writes, or writes.
func (w *VolumeWriter) end(n int, pk *packer, p *packet, err error) error {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.packers = append(w.packers, pk)
	if w.err != nil {
		return w.err
	}
	if err != nil {
		return w.fail(err)
	}
	w.ready[n%w.slots] = p
	if w.writing {
		return nil
	}
	w.writing = true
	whole := false
	defer func() {
		w.writing = false
		if !whole { // a panic of the writer below
			w.fail(errGivenUp)
		}
	}()
	for w.err == nil && w.next < w.nt && w.ready[w.next%w.slots] != nil {
		p := w.ready[w.next%w.slots]
		if err := w.outside(func() error { return w.put(p) }); err != nil {
			whole = true
			return w.fail(err)
		}
		w.ready[w.next%w.slots], w.taken[w.next%w.slots] = nil, false
		w.packets = append(w.packets, p)
		w.next++
		w.moved.Broadcast()
	}
	whole = true
	return w.err
}

// outside calls f without the lock.
func (w *VolumeWriter) outside(f func() error) error {
	w.mu.Unlock()
	defer w.mu.Lock()
	return f()
}

// put writes the next volume, the header before the first.
func (w *VolumeWriter) put(p *packet) error {
	err := w.putHeader()
	if err == nil {
		err = w.sink.add(p.out.b, p.crc, w.volumeBytes())
	}
	if err != nil {
		return fmt.Errorf("nifti: writing: %w", err)
	}
	return nil
}

func (w *VolumeWriter) putHeader() error {
	if w.sink.begun {
		return nil
	}
	var out output
	if !w.sink.gz {
		return w.sink.add(w.frame.begin, 0, len(w.frame.begin))
	}
	sq, err := newSqueezer(w.level)
	if err == nil {
		err = sq.all(&out, w.frame.begin)
	}
	if err != nil {
		return err
	}
	return w.sink.add(out.b, crc32.ChecksumIEEE(w.frame.begin), len(w.frame.begin))
}

// fail keeps the first error and wakes those who wait.
func (w *VolumeWriter) fail(err error) error {
	if w.err == nil {
		w.err = err
		w.moved.Broadcast()
	}
	return w.err
}

// Abort gives the image up with err, which must not be nil: every call that waits,
// and every later one, returns it, unless there was an error before.
func (w *VolumeWriter) Abort(err error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.fail(err)
}

// Close ends the image after the last call of Volume has returned, and complains if
// a volume is missing. It does not close the underlying writer. A VolumeWriter
// that is given up needs no Close, but see [VolumeWriter.Abort].
func (w *VolumeWriter) Close() error {
	w.mu.Lock()
	defer w.mu.Unlock()
	if w.err != nil {
		return w.err
	}
	if w.next != w.nt {
		return w.fail(w.tooFew(w.next))
	}
	if err := w.sink.end(); err != nil {
		return w.fail(fmt.Errorf("nifti: writing: %w", err))
	}
	w.err = errClosed
	w.packers, w.packets = nil, nil
	return nil
}

// pack makes p out of v. It returns the index of a value that is not finite, or
// -1.
func (pk *packer) pack(p *packet, f *frame, v []float32) (notFinite int, err error) {
	size := f.h.Datatype.Bytes()
	p.out.b = slices.Grow(p.out.b[:0], len(v)*size+len(v)*size/64+64) // incompressible, in stored blocks
	p.crc = 0
	for done := 0; done < len(v); {
		if pk.sq != nil && done*size%blockBytes == 0 {
			if done > 0 {
				if err := pk.sq.end(); err != nil {
					return -1, err
				}
			}
			pk.sq.begin(&p.out)
		}
		k := min(len(v)-done, pieceBytes/size)
		piece := v[done : done+k]
		if i := firstNotFinite(piece); i >= 0 {
			return done + i, nil
		}
		done += k
		if pk.sq == nil {
			p.out.b = appendVoxels(p.out.b, piece, f.h.Datatype, f.slope, f.inter)
			continue
		}
		pk.raw = appendVoxels(pk.raw[:0], piece, f.h.Datatype, f.slope, f.inter)
		p.crc = crc32.Update(p.crc, crc32.IEEETable, pk.raw)
		if err := pk.sq.write(pk.raw); err != nil {
			return -1, err
		}
	}
	if pk.sq != nil {
		return -1, pk.sq.end()
	}
	return -1, nil
}

// WriteVolumes writes a whole image by workers goroutines (at least one). fill makes
// volume n in dst, of nx*ny*nz voxels, which belongs to that worker and holds
// whatever was left there; it is called once for every volume, begun in their
// order. The first error in that order, or the end of ctx, ends the image; a
// panic in fill is raised again here, as package internal/parallel does.
func WriteVolumes(ctx context.Context, w io.Writer, h *Header, compress bool, workers int, fill func(worker, n int, dst []float32) error) error {
	workers = max(workers, 1)
	dst := make([][]float32, workers)
	return writeVolumes(ctx, w, h, compress, workers, func(worker, n int) ([]float32, error) {
		if dst[worker] == nil {
			dst[worker] = make([]float32, h.voxels())
		}
		return dst[worker], fill(worker, n, dst[worker])
	})
}

// WriteSeries is [WriteVolumes] for volumes that are in memory: volume n is
// data[n*nv:(n+1)*nv], nv being nx*ny*nz; another length panics.
func WriteSeries(ctx context.Context, w io.Writer, h *Header, compress bool, workers int, data []float32) error {
	nv := h.voxels()
	if _, _, _, nt := h.Size(); len(data) != nv*nt {
		panic("nifti: WriteSeries of another number of values than the image has voxels")
	}
	return writeVolumes(ctx, w, h, compress, max(workers, 1), func(_, n int) ([]float32, error) { return data[n*nv:][:nv], nil })
}

// writeVolumes writes the volumes that give gives.
func writeVolumes(ctx context.Context, w io.Writer, h *Header, compress bool, workers int, give func(worker, n int) ([]float32, error)) error {
	vw, err := NewVolumeWriter(w, h, compress, 2*workers+1)
	if err != nil {
		return err
	}
	stop := context.AfterFunc(ctx, func() { vw.Abort(ctx.Err()) })
	defer stop()
	err = parallel.For(ctx, workers, vw.nt, func(worker, n int) error {
		whole := false
		defer func() {
			if !whole {
				vw.Abort(errGivenUp)
			}
		}()
		v, err := give(worker, n)
		whole = true
		if err == nil {
			return vw.Volume(n, v)
		}
		vw.Abort(err)
		return err
	})
	if err != nil {
		return err
	}
	return vw.Close()
}
