package nifti

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"

	"github.com/klauspost/compress/flate"
)

// Writer writes one-file images, little-endian, as plain bytes or as one gzip
// member without name and time: the bytes depend on header and voxels alone, and
// are those that a [VolumeWriter] writes. It belongs to one goroutine, and
// compresses on as many cores as there are. A Writer that is given up needs no
// Close.
type Writer struct {
	frame
	d   *deflater
	buf []byte // the piece under way
	t   int    // volumes written
	err error
}

// A frame is what stands around the voxels, and how they are stored.
type frame struct {
	h            *Header // as a reader will see it
	begin        []byte  // header and empty flag
	slope, inter float64
}

// NewWriter begins an image with the header h (VoxOffset is set by us) and an empty
// extension flag. Scaling is that of h, and must be none for float types. h must be one that
// this package would read (see [Open]) and fit its Version; else an [*Error]
// without a file says which field does not. Nothing is written to w before the
// first volume, or Close.
func NewWriter(w io.Writer, h *Header, compress bool) (*Writer, error) {
	f, err := newFrame(h)
	if err != nil {
		return nil, err
	}
	room := max(len(f.begin), min(blockBytes, f.volumeBytes()))
	return &Writer{frame: *f, d: newDeflater(w, compress, level(f.h.Datatype)), buf: append(make([]byte, 0, room), f.begin...)}, nil
}

// newFrame checks h and fixes what is written of it.
func newFrame(h *Header) (*frame, error) {
	d := *h
	d.BigEndian = false
	d.VoxOffset = d.minOffset()
	if e := d.check(); e != nil {
		return nil, e
	}
	b, err := encodeHeader(&d)
	if err != nil {
		return nil, err
	}
	// What a reader will see: NIfTI-1 rounds to float32.
	version, order, _ := sniff(b)
	got, err := parseHeader("", b[:len(b)-flagBytes], false)
	if err != nil {
		return nil, err
	}
	if version != d.Version || order != binary.ByteOrder(binary.LittleEndian) {
		panic("nifti: a header that does not come back as it was written")
	}
	slope, inter, scaled := got.Scaling()
	_, _, wanted := d.Scaling()
	_, _, isInt := d.Datatype.limits()
	switch {
	case scaled && !isInt:
		return nil, &Error{Kind: KindHeader, Field: "scl_slope", Found: fmt.Sprintf("%v with scl_inter %v", h.SclSlope, h.SclInter), Expected: fmt.Sprintf("no scaling of %v voxels", d.Datatype)}
	case wanted && d.SclSlope != 0 && got.SclSlope == 0:
		return nil, &Error{Kind: KindHeader, Field: "scl_slope", Found: fmt.Sprint(h.SclSlope), Expected: "a number that float32 tells from zero"}
	}
	return &frame{h: got, begin: b, slope: slope, inter: inter}, nil
}

func (f *frame) volumeBytes() int { return f.h.voxels() * f.h.Datatype.Bytes() }

// notFinite is the complaint about value i of volume t.
func (f *frame) notFinite(t, i int, v float32) error {
	nx, ny, _, _ := f.h.Size()
	return &Error{Kind: KindValues, Field: fmt.Sprintf("voxel (%d,%d,%d), volume %d", i%nx, i/nx%ny, i/nx/ny, t), Found: fmt.Sprint(v), Expected: "a finite number"}
}

// tooMany is the complaint about a volume that the header does not declare.
func (f *frame) tooMany() error {
	_, _, _, nt := f.h.Size()
	return fmt.Errorf("nifti: a volume more than the %d of the header", nt)
}

// tooFew is the complaint of Close about volumes that are not there.
func (f *frame) tooFew(t int) error {
	_, _, _, nt := f.h.Size()
	return fmt.Errorf("nifti: %d volumes written of the %d in the header", t, nt)
}

// level chooses the compression by voxel type; see BenchmarkLevels.
func level(dt Datatype) int {
	switch dt {
	case Uint8, Int8:
		// Masks: long runs, and Huffman codes alone cannot go below one bit
		// a voxel. Higher levels gain little and cost much.
		return flate.BestSpeed
	}
	return flate.HuffmanOnly
}

// WriteVolume stores one volume of nx*ny*nz voxels (another length panics), which must be
// finite: float types as they are, integers as round-half-to-even((v-inter)/slope),
// clipped to the range of the type. The slice is not kept. An error of the
// writer below is returned wrapped, and again by every later call.
func (w *Writer) WriteVolume(v []float32) error {
	if len(v) != w.h.voxels() {
		panic("nifti: WriteVolume of a slice that is not one volume long")
	}
	if w.err != nil {
		return w.err
	}
	if _, _, _, nt := w.h.Size(); w.t == nt {
		return w.fail(w.tooMany())
	}
	if i := firstNotFinite(v); i >= 0 {
		return w.fail(w.notFinite(w.t, i, v[i]))
	}
	if w.t == 0 {
		if err := w.flush(); err != nil { // the header
			return err
		}
	}
	size := w.h.Datatype.Bytes()
	for len(v) > 0 {
		k := min(len(v), blockBytes/size)
		w.buf = appendVoxels(w.buf, v[:k], w.h.Datatype, w.slope, w.inter)
		v = v[k:]
		if err := w.flush(); err != nil {
			return err
		}
	}
	w.t++
	return nil
}

// flush hands the collected bytes on.
func (w *Writer) flush() (err error) {
	if w.buf, err = w.d.next(w.buf); err != nil {
		return w.fail(fmt.Errorf("nifti: writing: %w", err))
	}
	return nil
}

func (w *Writer) fail(err error) error {
	w.err = err
	return err
}

var errClosed = errors.New("nifti: the image was closed")

// Close checks that all volumes declared were written and ends the stream; it
// does not close the underlying writer.
func (w *Writer) Close() error {
	if w.err != nil {
		return w.err
	}
	if _, _, _, nt := w.h.Size(); w.t != nt {
		return w.fail(w.tooFew(w.t))
	}
	if err := w.d.end(); err != nil {
		return w.fail(fmt.Errorf("nifti: writing: %w", err))
	}
	w.err = errClosed
	return nil
}
