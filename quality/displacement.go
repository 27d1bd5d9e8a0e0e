package quality

import (
	"fmt"
	"math"
)

// FramewiseDisplacement returns, for each volume, how far the head moved since
// the volume before, in mm (Power et al. 2012, NeuroImage 59(3):2142-2154).
//
// Row t of params is the pose of volume t: shift along x, y, z (mm), then turn
// about x, y, z (radian); a nil row is a volume that could not be aligned.
// radiusMM, 50 in the publication, makes a turn into the length of its arc.
// The value is NaN where it is undefined: in the first volume, and where this
// volume or the one before has no pose. A row that is neither nil nor of six
// values panics.
func FramewiseDisplacement(params [][]float64, radiusMM float64) []float64 {
	fd := make([]float64, len(params))
	for t, now := range params {
		if now != nil && len(now) != 6 {
			panic(fmt.Sprintf("quality: FramewiseDisplacement: row %d has %d values, not 6", t, len(now)))
		}
		fd[t] = math.NaN()
		if t == 0 || now == nil || params[t-1] == nil {
			continue
		}
		var shift, turn float64
		for k, before := range params[t-1] {
			if d := math.Abs(now[k] - before); k < 3 {
				shift += d
			} else {
				turn += d
			}
		}
		// Power et al. (2012), "Framewise displacement (FD) calculations".
		fd[t] = shift + float64(radiusMM*turn)
	}
	return fd
}

// RMSDeviation returns the root mean square, over the points x of a solid ball,
// of |a b⁻¹ x - x|, in mm (Jenkinson 1999, technical report TR99MJ1).
//
// a and b are maps of world space (row-major 4x4, mm) such as the poses of two
// volumes, each taking a point of the reference to where it was in that
// volume; a b⁻¹ is then what happened to the head from b to a. The ball has its
// centre at centre (mm) and the radius radiusMM; 80 mm is customary. For rigid
// maps, swapping a and b changes the value only as far as the ball has moved
// between them. The last row of a and b is taken to be 0 0 0 1. The value is
// NaN if b has no inverse.
//
// With a b⁻¹ - I = [A|t], and E[yyᵀ] = R²/5 I over a ball about 0, the mean of
// |A(y+c) + t|² is R²/5 tr(AᵀA) + |t + Ac|².
func RMSDeviation(a, b [16]float64, centre [3]float64, radiusMM float64) float64 {
	inv, shift, ok := inverse(b)
	if !ok {
		return math.NaN()
	}
	var trace, miss float64
	for i := range 3 {
		row := a[4*i : 4*i+3]
		t := a[4*i+3] + dot3(row[0], shift[0], row[1], shift[1], row[2], shift[2])
		for j := range 3 {
			v := dot3(row[0], inv[j], row[1], inv[3+j], row[2], inv[6+j])
			if i == j {
				v--
			}
			trace += float64(v * v)
			t += float64(v * centre[j])
		}
		miss += float64(t * t)
	}
	// Jenkinson (1999), the closing formula.
	return math.Sqrt(float64(float64(radiusMM*radiusMM)/5*trace) + miss)
}

// inverse returns the inverse of an affine map as its 3x3 part and its shift,
// by cofactors; ok is false if the determinant is zero or not finite.
func inverse(m [16]float64) (inv [9]float64, shift [3]float64, ok bool) {
	at := func(i, j int) float64 { return m[4*i+j] }
	for i := range 3 {
		for j := range 3 {
			p, q, r, s := (j+1)%3, (j+2)%3, (i+1)%3, (i+2)%3
			inv[3*i+j] = float64(at(p, r)*at(q, s)) - float64(at(p, s)*at(q, r))
		}
	}
	det := dot3(m[0], inv[0], m[1], inv[3], m[2], inv[6])
	if det == 0 || math.IsNaN(det) || math.IsInf(det, 0) {
		return inv, shift, false
	}
	for k := range inv {
		inv[k] /= det
	}
	for i := range shift {
		shift[i] = -dot3(inv[3*i], m[3], inv[3*i+1], m[7], inv[3*i+2], m[11])
	}
	return inv, shift, true
}

// dot3 returns ab + cd + ef, each product rounded before it is added.
func dot3(a, b, c, d, e, f float64) float64 {
	return float64(a*b) + float64(c*d) + float64(e*f)
}
