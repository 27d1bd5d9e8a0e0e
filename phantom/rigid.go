package phantom

import (
	"math"

	"evenkeel/internal/detmath"
)

// Identity is the map that moves nothing.
func Identity() [16]float64 { return [16]float64{1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1} }

// Rigid gives the row-major 4x4 matrix of x' = R (x - centre) + centre + shift
// with R = Rz(turn[2]) Ry(turn[1]) Rx(turn[0]): shift and centre in mm, turn in
// rad, right-handed about the world axes; the convention of the pose table.
func Rigid(shift, turn, centre [3]float64) [16]float64 {
	sx, cx := detmath.Sincos(turn[0])
	sy, cy := detmath.Sincos(turn[1])
	sz, cz := detmath.Sincos(turn[2])
	zy, sy2 := cz*sy, sz*sy
	m := [16]float64{
		cz * cy, float64(zy*sx) - float64(sz*cx), float64(zy*cx) + float64(sz*sx), 0,
		sz * cy, float64(sy2*sx) + float64(cz*cx), float64(sy2*cx) - float64(cz*sx), 0,
		-sy, cy * sx, cy * cx, 0,
		0, 0, 0, 1,
	}
	for r := range 3 {
		rc := float64(m[4*r]*centre[0]) + float64(m[4*r+1]*centre[1]) + float64(m[4*r+2]*centre[2])
		m[4*r+3] = centre[r] - rc + shift[r]
	}
	return m
}

// Mul gives the product a b of two row-major 4x4 matrices: b acts first.
func Mul(a, b [16]float64) (c [16]float64) {
	for i := range 4 {
		for j := range 4 {
			c[4*i+j] = float64(a[4*i]*b[j]) + float64(a[4*i+1]*b[4+j]) + float64(a[4*i+2]*b[8+j]) + float64(a[4*i+3]*b[12+j])
		}
	}
	return c
}

// Inverse gives the inverse of a rigid map: (R, t) becomes (R', -R' t). It is
// wrong for any other matrix.
func Inverse(m [16]float64) [16]float64 {
	v := Identity()
	for r := range 3 {
		for c := range 3 {
			v[4*r+c] = m[4*c+r]
		}
	}
	for r := range 3 {
		v[4*r+3] = -(float64(v[4*r]*m[3]) + float64(v[4*r+1]*m[7]) + float64(v[4*r+2]*m[11]))
	}
	return v
}

// Apply maps a point.
func Apply(m [16]float64, x [3]float64) (y [3]float64) {
	for r := range 3 {
		y[r] = float64(m[4*r]*x[0]) + float64(m[4*r+1]*x[1]) + float64(m[4*r+2]*x[2]) + m[4*r+3]
	}
	return y
}

// Displacement gives the mean and the root mean square, in mm, of |a x - b x|
// over the points: how far two poses of the same head are apart.
func Displacement(a, b [16]float64, points [][3]float64) (mean, rms float64) {
	var s1, s2 float64
	for _, x := range points {
		p, q := Apply(a, x), Apply(b, x)
		var d float64
		for r := range 3 {
			e := p[r] - q[r]
			d += float64(e * e)
		}
		s1 += math.Sqrt(d)
		s2 += d
	}
	n := float64(max(1, len(points)))
	return s1 / n, math.Sqrt(s2 / n)
}

// isRigid reports whether the 3x3 part is a rotation to 1e-9 (products of some
// hundred rigid maps stay within 1e-13) and the last row that of an affine map.
func isRigid(m [16]float64) bool {
	for i := range 3 {
		for j := range 3 {
			d := float64(m[i]*m[j]) + float64(m[4+i]*m[4+j]) + float64(m[8+i]*m[8+j])
			if i == j {
				d--
			}
			if !(math.Abs(d) < 1e-9) {
				return false
			}
		}
		if math.IsNaN(m[4*i+3]) || math.IsInf(m[4*i+3], 0) {
			return false
		}
	}
	return det3(m) > 0 && m[12] == 0 && m[13] == 0 && m[14] == 0 && m[15] == 1
}

func det3(m [16]float64) float64 {
	minor := func(a, b, c, d int) float64 { return float64(m[a]*m[d]) - float64(m[b]*m[c]) }
	return float64(m[0]*minor(5, 6, 9, 10)) - float64(m[1]*minor(4, 6, 8, 10)) + float64(m[2]*minor(4, 5, 8, 9))
}
