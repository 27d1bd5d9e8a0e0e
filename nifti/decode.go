package nifti

import (
	"encoding/binary"
	"math"
	"math/bits"
)

// converter turns stored voxels into float32: float32(slope*stored + inter),
// computed in float64 without a fused multiply-add. Without scaling integers go
// to float64 first too, so that slope 1 and no slope give the same bits.
type converter struct {
	dt           Datatype
	swap         bool // stored big-endian
	slope, inter float64
	scaled       bool
	// mustCheck is false where no stored value can come out as anything
	// but a finite number.
	mustCheck bool
}

func newConverter(h *Header) converter {
	c := converter{dt: h.Datatype, swap: h.BigEndian}
	c.slope, c.inter, c.scaled = h.Scaling()
	lo, hi, isInt := h.Datatype.limits()
	// Half of the range of float32 leaves room for every rounding.
	most := float64(max(-lo, hi)*math.Abs(c.slope)) + math.Abs(c.inter)
	c.mustCheck = !isInt || !(most < math.MaxFloat32/2)
	return c
}

// convert decodes len(dst) voxels out of b, which is changed where its byte
// order is not ours. It returns the index of the first value that is not
// finite, or -1.
func (c *converter) convert(dst []float32, b []byte) int {
	size := c.dt.Bytes()
	if len(b) != len(dst)*size {
		panic("nifti: convert with buffers that do not match")
	}
	if c.swap {
		swapBytes(b, size)
	}
	le := binary.LittleEndian
	slope, inter := c.slope, c.inter
	switch c.dt {
	case Int16:
		if c.scaled {
			for i := range dst {
				dst[i] = float32(float64(slope*float64(int16(le.Uint16(b[2*i:])))) + inter)
			}
			break
		}
		// Four at a time out of one load.
		n := len(dst) &^ 3
		for i := 0; i < n; i += 4 {
			v, d := le.Uint64(b[2*i:]), dst[i:i+4:i+4]
			d[0] = float32(int16(v))
			d[1] = float32(int16(v >> 16))
			d[2] = float32(int16(v >> 32))
			d[3] = float32(int16(v >> 48))
		}
		for i := n; i < len(dst); i++ {
			dst[i] = float32(int16(le.Uint16(b[2*i:])))
		}
	case Uint16:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(le.Uint16(b[2*i:]))) + inter)
		}
	case Uint8:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(b[i])) + inter)
		}
	case Int8:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(int8(b[i]))) + inter)
		}
	case Int32:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(int32(le.Uint32(b[4*i:])))) + inter)
		}
	case Uint32:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(le.Uint32(b[4*i:]))) + inter)
		}
	case Int64:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(int64(le.Uint64(b[8*i:])))) + inter)
		}
	case Uint64:
		for i := range dst {
			dst[i] = float32(float64(slope*float64(le.Uint64(b[8*i:]))) + inter)
		}
	case Float32:
		for i := range dst {
			dst[i] = math.Float32frombits(le.Uint32(b[4*i:]))
		}
		if c.scaled {
			for i, v := range dst {
				dst[i] = float32(float64(slope*float64(v)) + inter)
			}
		}
	case Float64:
		if c.scaled {
			for i := range dst {
				dst[i] = float32(float64(slope*math.Float64frombits(le.Uint64(b[8*i:]))) + inter)
			}
			break
		}
		for i := range dst { // keeps the sign of a zero
			dst[i] = float32(math.Float64frombits(le.Uint64(b[8*i:])))
		}
	default:
		panic("nifti: convert of a type that is not supported")
	}
	if !c.mustCheck {
		return -1
	}
	return firstNotFinite(dst)
}

// firstNotFinite returns the index of the first NaN or infinity, or -1.
func firstNotFinite(v []float32) int {
	// An exponent of all ones, plus one, is the sign bit.
	const exponent, one = 0x7f800000, 0x00800000
	from := 0
	for ; from+8 <= len(v); from += 8 {
		d := v[from : from+8 : from+8]
		any := uint32(0)
		for i := range 8 {
			any |= math.Float32bits(d[i])&exponent + one
		}
		if any>>31 != 0 {
			break
		}
	}
	for i, x := range v[from:] {
		if math.Float32bits(x)&exponent == exponent {
			return from + i
		}
	}
	return -1
}

// swapBytes turns the byte order of every element of size bytes.
func swapBytes(b []byte, size int) {
	le := binary.LittleEndian
	switch size {
	case 2:
		for i := 0; i+2 <= len(b); i += 2 {
			b[i], b[i+1] = b[i+1], b[i]
		}
	case 4:
		for i := 0; i+4 <= len(b); i += 4 {
			le.PutUint32(b[i:], bits.ReverseBytes32(le.Uint32(b[i:])))
		}
	case 8:
		for i := 0; i+8 <= len(b); i += 8 {
			le.PutUint64(b[i:], bits.ReverseBytes64(le.Uint64(b[i:])))
		}
	}
}
