package realign

import (
	"math"

	"evenkeel/internal/kernel"
)

// batch holds points of a spline that are evaluated together. It is scratch: it
// grows to the largest number of points it ever held.
type batch struct {
	base          []int32   // first tap, in the coefficients
	tx, ty, tz    []float32 // how far the point is past it
	v, gx, gy, gz []float32 // value, and derivatives by voxel
}

func (b *batch) reset() { b.base, b.tx, b.ty, b.tz = b.base[:0], b.tx[:0], b.ty[:0], b.tz[:0] }

// add adds a point, clamped to the field, given by its voxel coordinate.
func (s *spline) add(b *batch, x, y, z float64) {
	i, tx := cell(x, s.n[0], s.degree)
	j, ty := cell(y, s.n[1], s.degree)
	k, tz := cell(z, s.n[2], s.degree)
	b.base = append(b.base, int32(i+s.m[0]*(j+s.m[1]*k)))
	b.tx, b.ty, b.tz = append(b.tx, float32(tx)), append(b.ty, float32(ty)), append(b.tz, float32(tz))
}

// values evaluates the spline at the points of b, into b.v.
func (s *spline) values(b *batch) {
	n := len(b.base)
	b.v = sized(b.v, n)
	s.valuesInto(b.v, b)
}

// valuesInto does so into another slice of as many values.
func (s *spline) valuesInto(v []float32, b *batch) {
	mx, area := s.m[0], s.m[0]*s.m[1]
	if s.degree == 5 {
		kernel.Value5(v, s.c, mx, area, b.base, b.tx, b.ty, b.tz)
	} else {
		kernel.Value3(v, s.c, mx, area, b.base, b.tx, b.ty, b.tz)
	}
}

// gradients evaluates value and derivatives at the points of b.
func (s *spline) gradients(b *batch) {
	n := len(b.base)
	b.v, b.gx, b.gy, b.gz = sized(b.v, n), sized(b.gx, n), sized(b.gy, n), sized(b.gz, n)
	mx, area := s.m[0], s.m[0]*s.m[1]
	if s.degree == 5 {
		kernel.Gradient5(b.v, b.gx, b.gy, b.gz, s.c, mx, area, b.base, b.tx, b.ty, b.tz)
	} else {
		kernel.Gradient3(b.v, b.gx, b.gy, b.gz, s.c, mx, area, b.base, b.tx, b.ty, b.tz)
	}
}

// sized gives v the length n; what is in it is of no account.
func sized[T any](v []T, n int) []T {
	if cap(v) < n {
		return make([]T, n, n+n/8)
	}
	return v[:n]
}

// medianOf returns the upper median of values of at least zero, by their bits, which
// are in the order of the values: eleven, eleven and ten of them at a time. It
// changes nothing. 0 for no values.
func medianOf(v []float32) float32 {
	if len(v) == 0 {
		return 0
	}
	var found, mask uint32
	k := len(v) / 2
	for _, step := range [3]struct{ shift, bits uint32 }{{21, 11}, {10, 11}, {0, 10}} {
		var count [1 << 11]int32
		low := uint32(1)<<step.bits - 1
		if mask == 0 {
			for _, x := range v {
				count[math.Float32bits(x)>>step.shift&low]++
			}
		} else {
			for _, x := range v {
				if b := math.Float32bits(x); b&mask == found {
					count[b>>step.shift&low]++
				}
			}
		}
		at := uint32(0)
		for ; k >= int(count[at]); at++ {
			k -= int(count[at])
		}
		found |= at << step.shift
		mask |= low << step.shift
	}
	return math.Float32frombits(found)
}
