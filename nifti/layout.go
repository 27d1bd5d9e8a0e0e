package nifti

// Where each field stands in the two headers: nifti1.h and nifti2.h. One
// description serves both directions, so that reading and writing cannot
// disagree; the tests hold it against a table of their own.

import (
	"encoding/binary"
	"fmt"
	"math"
)

const (
	headerBytes1 = 348
	headerBytes2 = 540
	flagBytes    = 4 // extension flag behind either header
	minOffset1   = headerBytes1 + flagBytes
	minOffset2   = headerBytes2 + flagBytes
)

// Magic strings. The line ends behind those of NIfTI-2 betray a transfer in
// text mode.
const (
	magicOne1  = "n+1\x00"
	magicPair1 = "ni1\x00"
	magicOne2  = "n+2\x00\r\n\x1a\n"
	magicPair2 = "ni2\x00\r\n\x1a\n"
)

// rawHeader is the header with the fields that the public one leaves out.
type rawHeader struct {
	*Header
	sizeofHdr int64
	magic     string
	bitpix    int64
	voxOffset float64 // NIfTI-1 stores it as float32
}

// codec moves fields between bytes and variables: towards the bytes if put is
// set, else from them.
type codec struct {
	b     []byte
	order binary.ByteOrder
	put   bool
	lost  string // first field whose value does not fit, when putting
	found string
}

func (c *codec) tooBig(field string, v any) {
	if c.lost == "" {
		c.lost, c.found = field, fmt.Sprint(v)
	}
}

type integer interface {
	~uint8 | ~int16 | ~int32 | ~int64
}

func put[T integer](c *codec, field string, v *T, lo, hi int64, store func(int64)) {
	if int64(*v) < lo || int64(*v) > hi {
		c.tooBig(field, *v)
		return
	}
	store(int64(*v))
}

func u8[T integer](c *codec, field string, off int, v *T) {
	if c.put {
		put(c, field, v, 0, math.MaxUint8, func(x int64) { c.b[off] = byte(x) })
		return
	}
	*v = T(c.b[off])
}

func i16[T integer](c *codec, field string, off int, v *T) {
	if c.put {
		put(c, field, v, math.MinInt16, math.MaxInt16, func(x int64) { c.order.PutUint16(c.b[off:], uint16(x)) })
		return
	}
	*v = T(int16(c.order.Uint16(c.b[off:])))
}

func i32[T integer](c *codec, field string, off int, v *T) {
	if c.put {
		put(c, field, v, math.MinInt32, math.MaxInt32, func(x int64) { c.order.PutUint32(c.b[off:], uint32(x)) })
		return
	}
	*v = T(int32(c.order.Uint32(c.b[off:])))
}

func i64[T integer](c *codec, field string, off int, v *T) {
	if c.put {
		c.order.PutUint64(c.b[off:], uint64(int64(*v)))
		return
	}
	*v = T(int64(c.order.Uint64(c.b[off:])))
}

func f32(c *codec, field string, off int, v *float64) {
	if c.put {
		f := float32(*v)
		if math.IsInf(float64(f), 0) && !math.IsInf(*v, 0) {
			c.tooBig(field, *v)
			return
		}
		c.order.PutUint32(c.b[off:], math.Float32bits(f))
		return
	}
	*v = float64(math.Float32frombits(c.order.Uint32(c.b[off:])))
}

func f64(c *codec, field string, off int, v *float64) {
	if c.put {
		c.order.PutUint64(c.b[off:], math.Float64bits(*v))
		return
	}
	*v = math.Float64frombits(c.order.Uint64(c.b[off:]))
}

func text(c *codec, off, n int, v *string) {
	if c.put {
		copy(c.b[off:off+n], *v)
		return
	}
	*v = string(c.b[off : off+n])
}

// layout1 moves all fields of a NIfTI-1 header (nifti1.h, struct
// nifti_1_header).
func (r *rawHeader) layout1(c *codec) {
	i32(c, "sizeof_hdr", 0, &r.sizeofHdr)
	u8(c, "dim_info", 39, &r.DimInfo)
	for i := range r.Dim {
		i16(c, fmt.Sprintf("dim[%d]", i), 40+2*i, &r.Dim[i])
	}
	for i := range r.IntentP {
		f32(c, fmt.Sprintf("intent_p%d", i+1), 56+4*i, &r.IntentP[i])
	}
	i16(c, "intent_code", 68, &r.IntentCode)
	i16(c, "datatype", 70, &r.Datatype)
	i16(c, "bitpix", 72, &r.bitpix)
	i16(c, "slice_start", 74, &r.SliceStart)
	for i := range r.Pixdim {
		f32(c, fmt.Sprintf("pixdim[%d]", i), 76+4*i, &r.Pixdim[i])
	}
	f32(c, "vox_offset", 108, &r.voxOffset)
	f32(c, "scl_slope", 112, &r.SclSlope)
	f32(c, "scl_inter", 116, &r.SclInter)
	i16(c, "slice_end", 120, &r.SliceEnd)
	u8(c, "slice_code", 122, &r.SliceCode)
	u8(c, "xyzt_units", 123, &r.XYZTUnits)
	f32(c, "slice_duration", 132, &r.SliceDuration)
	f32(c, "toffset", 136, &r.Toffset)
	i16(c, "qform_code", 252, &r.QformCode)
	i16(c, "sform_code", 254, &r.SformCode)
	for i := range r.Quatern {
		f32(c, "quatern_"+"bcd"[i:i+1], 256+4*i, &r.Quatern[i])
	}
	for i := range r.Qoffset {
		f32(c, "qoffset_"+"xyz"[i:i+1], 268+4*i, &r.Qoffset[i])
	}
	for i := range r.Srow {
		for j := range r.Srow[i] {
			f32(c, "srow_"+"xyz"[i:i+1], 280+16*i+4*j, &r.Srow[i][j])
		}
	}
	text(c, 344, 4, &r.magic)
}

// layout2 moves all fields of a NIfTI-2 header (nifti2.h, struct
// nifti_2_header).
func (r *rawHeader) layout2(c *codec) {
	i32(c, "sizeof_hdr", 0, &r.sizeofHdr)
	text(c, 4, 8, &r.magic)
	i16(c, "datatype", 12, &r.Datatype)
	i16(c, "bitpix", 14, &r.bitpix)
	for i := range r.Dim {
		i64(c, "dim", 16+8*i, &r.Dim[i])
	}
	for i := range r.IntentP {
		f64(c, "intent_p", 80+8*i, &r.IntentP[i])
	}
	for i := range r.Pixdim {
		f64(c, "pixdim", 104+8*i, &r.Pixdim[i])
	}
	i64(c, "vox_offset", 168, &r.VoxOffset)
	f64(c, "scl_slope", 176, &r.SclSlope)
	f64(c, "scl_inter", 184, &r.SclInter)
	f64(c, "slice_duration", 208, &r.SliceDuration)
	f64(c, "toffset", 216, &r.Toffset)
	i64(c, "slice_start", 224, &r.SliceStart)
	i64(c, "slice_end", 232, &r.SliceEnd)
	i32(c, "qform_code", 344, &r.QformCode)
	i32(c, "sform_code", 348, &r.SformCode)
	for i := range r.Quatern {
		f64(c, "quatern", 352+8*i, &r.Quatern[i])
	}
	for i := range r.Qoffset {
		f64(c, "qoffset", 376+8*i, &r.Qoffset[i])
	}
	for i := range r.Srow {
		for j := range r.Srow[i] {
			f64(c, "srow", 400+32*i+8*j, &r.Srow[i][j])
		}
	}
	i32(c, "slice_code", 496, &r.SliceCode)
	i32(c, "xyzt_units", 500, &r.XYZTUnits)
	i32(c, "intent_code", 504, &r.IntentCode)
	u8(c, "dim_info", 524, &r.DimInfo)
}

// sniff tells version and byte order from the first four bytes: sizeof_hdr is
// 348 or 540 in the order in which the file was written.
func sniff(b []byte) (version int, order binary.ByteOrder, ok bool) {
	for _, o := range []binary.ByteOrder{binary.LittleEndian, binary.BigEndian} {
		switch o.Uint32(b) {
		case headerBytes1:
			return 1, o, true
		case headerBytes2:
			return 2, o, true
		}
	}
	return 0, nil, false
}

// decodeHeader parses the bytes of a header, 348 or 540 of them according to
// version, without judging them.
func decodeHeader(b []byte, version int, order binary.ByteOrder) *rawHeader {
	r := &rawHeader{Header: &Header{Version: version, BigEndian: order == binary.ByteOrder(binary.BigEndian)}}
	c := &codec{b: b, order: order}
	if version == 1 {
		r.layout1(c)
	} else {
		r.layout2(c)
		r.voxOffset = float64(r.VoxOffset)
	}
	return r
}

// encodeHeader gives the bytes of a one-file, little-endian header with an
// empty extension flag behind it.
func encodeHeader(h *Header) ([]byte, error) {
	raw := rawHeader{Header: h, bitpix: int64(8 * h.Datatype.Bytes())}
	c := &codec{order: binary.LittleEndian, put: true}
	switch h.Version {
	case 1:
		c.b = make([]byte, minOffset1)
		raw.sizeofHdr, raw.magic, raw.voxOffset = headerBytes1, magicOne1, float64(h.VoxOffset)
		raw.layout1(c)
	case 2:
		c.b = make([]byte, minOffset2)
		raw.sizeofHdr, raw.magic = headerBytes2, magicOne2
		raw.layout2(c)
	}
	if c.lost != "" {
		return nil, &Error{Kind: KindHeader, Field: c.lost, Found: c.found, Expected: fmt.Sprintf("a value that NIfTI-%d can hold", h.Version)}
	}
	return c.b, nil
}
