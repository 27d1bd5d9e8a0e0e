package nifti

import (
	"fmt"
	"io"
)

const (
	chunkBytes     = 256 << 10 // decoded at a time: fits the second-level cache; a multiple of every voxel size
	fileBuffer     = 64 << 10  // compressed bytes read at a time
	headerOnlyRead = 4 << 10
)

// ReadHeader reads and checks the header alone (path: .nii, .nii.gz, .hdr or
// .img, the latter two also with .gz) and holds the declared size against the
// file's size as far as that can be told without reading the data: exactly for
// plain files, by the best ratio of deflate for compressed ones.
//
// A header that cannot be used gives an [*Error]; a file that cannot be opened
// or read gives the error of the file system, wrapped (a missing file satisfies
// errors.Is(err, fs.ErrNotExist)).
func ReadHeader(path string) (*Header, error) {
	r, err := open(path, nil, headerOnlyRead)
	if err != nil {
		return nil, err
	}
	return r.h, r.Close()
}

// Reader gives the volumes of an image one after another. It belongs to one
// goroutine and holds less than 1 MiB.
type Reader struct {
	h    *Header
	s    *stream
	conv converter
	buf  []byte
	wide []float32 // room for StoredVolume.take
	t    int       // next volume
	err  error     // what ended the reading
}

// Open opens an image. Every byte read from its file or files goes to tap too,
// if tap is not nil, so that the caller can digest exactly what was decoded (a
// pair: the header file first, then the image file); by the time ReadVolume
// returned io.EOF the whole of them went through tap, once. Errors are those
// of [ReadHeader]; an error of tap is returned wrapped.
func Open(path string, tap io.Writer) (*Reader, error) {
	return open(path, tap, fileBuffer)
}

func open(path string, tap io.Writer, bufferBytes int) (*Reader, error) {
	hdr, img, err := parts(path)
	if err != nil {
		return nil, err
	}
	s, err := openStream(hdr, tap, bufferBytes)
	if err != nil {
		return nil, err
	}
	var next func() (*stream, error)
	if img != "" {
		next = func() (*stream, error) { return openStream(img, tap, bufferBytes) }
	}
	return newReader(s, next)
}

// newReader reads the header from s and takes s over; next, for a pair, opens
// the image file.
func newReader(s *stream, next func() (*stream, error)) (r *Reader, err error) {
	defer func() {
		if err != nil && s != nil {
			s.Close()
		}
	}()
	h, err := s.header(next != nil)
	if err != nil {
		return nil, err
	}
	if next != nil {
		if err := s.closeHeader(); err != nil {
			return nil, err
		}
		if err := s.Close(); err != nil {
			s = nil
			return nil, fmt.Errorf("nifti: %w", err)
		}
		if s, err = next(); err != nil {
			return nil, err
		}
	}
	if err := h.checkSize(s.name, s.fileBytes, s.compressed, s.tail); err != nil {
		return nil, err
	}
	return &Reader{h: h, s: s, conv: newConverter(h)}, nil
}

// Header returns the header, which must not be changed.
func (r *Reader) Header() *Header { return r.h }

// ReadVolume decodes and scales the next volume into dst, of length nx*ny*nz
// (anything else panics). After the last volume it returns io.EOF, once the
// rest of the file was checked: nothing may follow the voxels, and the
// checksums of a gzip stream must hold; a reader that stops before that has
// not seen whether the file was whole. Values that are not finite after
// scaling give an [*Error] that names voxel and volume, from 0. After an error
// every call returns it again, and dst holds nothing of use.
func (r *Reader) ReadVolume(dst []float32) error {
	if len(dst) != r.h.voxels() {
		panic("nifti: ReadVolume into a slice that is not one volume long")
	}
	return r.volume(dst, nil)
}

// ReadStored decodes the next volume into v as it is stored, and is otherwise as
// [Reader.ReadVolume]: v must come from [NewStored] for an image of this size and
// type (anything else panics).
func (r *Reader) ReadStored(v *StoredVolume) error {
	if v.n != r.h.voxels() || v.conv.dt != r.h.Datatype {
		panic("nifti: ReadStored into a volume of another image")
	}
	v.conv = r.conv
	return r.volume(nil, v)
}

// SkipVolume reads past the next volume, without looking at its values; io.EOF
// as for ReadVolume.
func (r *Reader) SkipVolume() error { return r.volume(nil, nil) }

// volume reads the next volume into dst, or v, or past it.
func (r *Reader) volume(dst []float32, v *StoredVolume) error {
	if r.err == nil {
		r.err = r.next(dst, v)
	}
	return r.err
}

func (r *Reader) next(dst []float32, v *StoredVolume) error {
	_, _, _, nt := r.h.Size()
	if err := r.skipToVoxels(); err != nil {
		return err
	}
	if r.t == nt {
		return r.finish()
	}
	size := r.h.Datatype.Bytes()
	for done, n := 0, r.h.voxels(); done < n; {
		k := min(n-done, chunkBytes/size)
		b := r.chunk(k * size)
		got, err := r.s.full(b)
		if err != nil {
			return err
		}
		if got < len(b) {
			return r.cutOff()
		}
		if dst != nil {
			if i := r.conv.convert(dst[done:done+k], b); i >= 0 {
				return r.notFinite(done+i, dst[done+i])
			}
		}
		if v != nil {
			if i, x := v.take(done, b, &r.wide); i >= 0 {
				return r.notFinite(done+i, x)
			}
		}
		done += k
	}
	r.t++
	return nil
}

// chunk returns the buffer, as long as the image needs it at most.
func (r *Reader) chunk(n int) []byte {
	if cap(r.buf) < n {
		r.buf = make([]byte, n)
	}
	return r.buf[:n]
}

// skipToVoxels reads past header extensions, or whatever stands before the
// voxels.
func (r *Reader) skipToVoxels() error {
	gap := r.h.VoxOffset - r.s.n
	if gap <= 0 {
		return nil
	}
	if err := r.s.skip(gap); err != nil {
		return err
	}
	if r.s.n < r.h.VoxOffset {
		return r.cutOff()
	}
	return nil
}

// finish reads to the end of the file and returns io.EOF if nothing is there.
func (r *Reader) finish() error {
	found, any, err := r.s.rest()
	if err != nil {
		return err
	}
	if any {
		return &Error{Kind: KindSize, File: r.s.name, Field: "voxels", Found: found + " after the last voxel", Expected: r.h.sizeWords()}
	}
	return io.EOF
}

func (r *Reader) cutOff() error {
	return &Error{Kind: KindSize, File: r.s.name, Field: "voxels", Found: fmt.Sprintf("%d bytes: the image is cut off", r.s.n), Expected: r.h.sizeWords()}
}

func (r *Reader) notFinite(i int, v float32) error {
	nx, ny, _, _ := r.h.Size()
	e := &Error{Kind: KindValues, File: r.s.name, Field: fmt.Sprintf("voxel (%d,%d,%d), volume %d", i%nx, i/nx%ny, i/nx/ny, r.t), Found: fmt.Sprint(v), Expected: "a finite number"}
	if r.conv.scaled {
		e.Found += fmt.Sprintf(" after scaling by scl_slope %v and scl_inter %v", r.h.SclSlope, r.h.SclInter)
	}
	return e
}

// Close closes the file.
func (r *Reader) Close() error {
	if err := r.s.Close(); err != nil {
		return fmt.Errorf("nifti: %w", err)
	}
	return nil
}
