package nifti

import (
	"encoding/binary"
	"math"
)

// appendVoxels appends the stored form of v, little-endian: float types as they are,
// integers as round-half-to-even((v-inter)/slope), clipped to the range of the
// type. Values must be finite.
func appendVoxels(b []byte, v []float32, dt Datatype, slope, inter float64) []byte {
	size := dt.Bytes()
	from := len(b)
	b = b[:from+len(v)*size]
	out := b[from:]
	le := binary.LittleEndian
	lo, hi, isInt := dt.limits()
	store := func(x float32) float64 {
		return min(max(math.RoundToEven((float64(x)-inter)/slope), lo), hi)
	}
	switch dt {
	case Float32:
		// Two at a time into one store.
		n := len(v) &^ 1
		for i := 0; i < n; i += 2 {
			d := v[i : i+2 : i+2]
			le.PutUint64(out[4*i:], uint64(math.Float32bits(d[0]))|uint64(math.Float32bits(d[1]))<<32)
		}
		if n < len(v) {
			le.PutUint32(out[4*n:], math.Float32bits(v[n]))
		}
		return b
	case Float64:
		for i, x := range v {
			le.PutUint64(out[8*i:], math.Float64bits(float64(x)))
		}
		return b
	case Int16:
		for i, x := range v {
			q := math.RoundToEven((float64(x) - inter) / slope)
			if q < -1<<15 {
				q = -1 << 15
			} else if q > 1<<15-1 {
				q = 1<<15 - 1
			}
			le.PutUint16(out[2*i:], uint16(int16(q)))
		}
		return b
	}
	if !isInt {
		panic("nifti: appendVoxels of a type that is not supported")
	}
	for i, x := range v {
		q := store(x)
		// The two's complement of a negative number, cut to the size,
		// is that of the smaller type.
		var u uint64
		switch {
		case dt == Uint64 && q >= 1<<64:
			u = math.MaxUint64
		case dt == Int64 && q >= 1<<63:
			u = math.MaxInt64
		case q < 0:
			u = uint64(int64(q))
		default:
			u = uint64(q)
		}
		switch size {
		case 1:
			out[i] = byte(u)
		case 2:
			le.PutUint16(out[2*i:], uint16(u))
		case 4:
			le.PutUint32(out[4*i:], uint32(u))
		case 8:
			le.PutUint64(out[8*i:], u)
		}
	}
	return b
}

// Int16Scaling returns slope and inter, both exact as float32, such that
// [lo, hi] fills the range of int16 as far as their rounding allows and no value
// of it is clipped: true = slope*stored + inter. For a constant, slope is 1 and
// inter the constant, where float32 holds it. lo must not be above hi, and both
// must be finite; anything else panics.
func Int16Scaling(lo, hi float32) (slope, inter float64) {
	l, h := float64(lo), float64(hi)
	if !(l <= h) || !finite(l) || !finite(h) {
		panic("nifti: Int16Scaling of a range that is none")
	}
	if l == h {
		return 1, l
	}
	// The intercept that would be best, rounded as the header rounds it; then
	// the least slope that still reaches both ends from there.
	inter = float64(float32(l + float64(32768*((h-l)/65535))))
	need := max((h-inter)/32767, (inter-l)/32768)
	s := float32(need)
	if float64(s) < need {
		s = math.Nextafter32(s, math.MaxFloat32)
	}
	return float64(s), inter
}
