package nifti

import (
	"encoding/binary"
	"fmt"
	"io"

	"evenkeel/internal/kernel"
)

// A StoredVolume is one volume in the smallest form that loses nothing: voxels of
// 8 and 16 bits as they are stored, a quarter and half of their float32 values;
// of every other type the float32 values that [Reader.ReadVolume] gives. To widen
// it gives the bits that ReadVolume gives.
//
// It may be read by several goroutines at once.
type StoredVolume struct {
	conv   converter
	n      int
	b8     []byte    // Uint8, Int8
	b16    []int16   // Int16; Uint16 as the same bits
	f32    []float32 // all others, scaled
	index  int
	origin *Stream // nil if it belongs to the caller
	out    bool    // handed out by origin
}

// NewStored returns room for one volume of an image with header h.
func NewStored(h *Header) *StoredVolume {
	v := &StoredVolume{conv: newConverter(h), n: h.voxels()}
	switch h.Datatype.Bytes() {
	case 1:
		v.b8 = make([]byte, v.n)
	case 2:
		v.b16 = make([]int16, v.n)
	default:
		v.f32 = make([]float32, v.n)
	}
	return v
}

// StoredBytes returns the memory of one [StoredVolume] of an image with header h.
func (h *Header) StoredBytes() int64 {
	return int64(h.voxels()) * int64(min(h.Datatype.Bytes(), 4))
}

// Len returns the number of voxels.
func (v *StoredVolume) Len() int { return v.n }

// Index returns the number of the volume in its [Stream], counted from 0 after
// those left out.
func (v *StoredVolume) Index() int { return v.index }

// Float32 returns the values of an image that is held as such (see
// [StoredVolume]), else nil. They alias v and must not be changed.
func (v *StoredVolume) Float32() []float32 { return v.f32 }

// Widen gives the len(dst) values from voxel number from on. It allocates nothing.
// Voxels that are not there panic.
func (v *StoredVolume) Widen(dst []float32, from int) {
	if from < 0 || from > v.n || len(dst) > v.n-from {
		panic("nifti: Widen beyond the volume")
	}
	c := &v.conv
	switch {
	case v.f32 != nil:
		copy(dst, v.f32[from:])
	case v.b8 != nil:
		c.widen8(dst, v.b8[from:from+len(dst)])
	case c.dt == Uint16 && c.scaled:
		kernel.FromUint16Scaled(dst, v.b16[from:from+len(dst)], c.slope, c.inter)
	case c.dt == Uint16:
		kernel.FromUint16(dst, v.b16[from:from+len(dst)])
	case c.scaled:
		kernel.FromInt16Scaled(dst, v.b16[from:from+len(dst)], c.slope, c.inter)
	default:
		kernel.FromInt16(dst, v.b16[from:from+len(dst)])
	}
}

// widen8 is convert for one byte a voxel, without looking at the values.
func (c *converter) widen8(dst []float32, b []byte) {
	b = b[:len(dst)]
	switch c.dt {
	case Uint8:
		for i, x := range b {
			dst[i] = float32(float64(c.slope*float64(x)) + c.inter)
		}
	default:
		for i, x := range b {
			dst[i] = float32(float64(c.slope*float64(int8(x))) + c.inter)
		}
	}
}

// take stores the voxels in b from voxel number at on; b may be changed. wide is room to
// look at values in, where 8 or 16 bits can become something not finite. It
// returns the index, from there, of the first value that is not finite and the
// value, or -1.
func (v *StoredVolume) take(at int, b []byte, wide *[]float32) (int, float32) {
	n := len(b) / v.conv.dt.Bytes()
	switch {
	case v.f32 != nil:
		dst := v.f32[at : at+n]
		if i := v.conv.convert(dst, b); i >= 0 {
			return i, dst[i]
		}
		return -1, 0
	case v.b8 != nil:
		copy(v.b8[at:], b)
	default:
		if v.conv.swap {
			swapBytes(b, 2)
		}
		dst := v.b16[at : at+n]
		le := binary.LittleEndian
		// Four at a time out of one load.
		k := n &^ 3
		for i := 0; i < k; i += 4 {
			x, d := le.Uint64(b[2*i:]), dst[i:i+4:i+4]
			d[0], d[1], d[2], d[3] = int16(x), int16(x>>16), int16(x>>32), int16(x>>48)
		}
		for i := k; i < n; i++ {
			dst[i] = int16(le.Uint16(b[2*i:]))
		}
	}
	if !v.conv.mustCheck {
		return -1, 0
	}
	if len(*wide) < n {
		*wide = make([]float32, n)
	}
	w := (*wide)[:n]
	v.Widen(w, at)
	if i := firstNotFinite(w); i >= 0 {
		return i, w[i]
	}
	return -1, 0
}

// openBehind opens an image and reads past the first skip volumes; nt are left.
func openBehind(path string, tap io.Writer, skip int) (*Reader, int, error) {
	if skip < 0 {
		panic("nifti: a negative number of volumes to skip")
	}
	r, err := Open(path, tap)
	if err != nil {
		return nil, 0, err
	}
	_, _, _, nt := r.h.Size()
	if skip >= nt {
		r.Close()
		return nil, 0, &Error{Kind: KindSize, File: path, Field: "dim[4]", Found: fmt.Sprintf("%d volumes", nt), Expected: fmt.Sprintf("more than the %d to be left out", skip)}
	}
	for range skip {
		if err := r.SkipVolume(); err != nil {
			r.Close()
			return nil, 0, err
		}
	}
	return r, nt - skip, nil
}
