package kernel

import "math"

// Slack is how many elements a coefficient array must hold past its last tap:
// kernels load whole registers. Their values are of no account, NaN included.
const Slack = 8

// bsplines5 are the pieces of the quintic B-spline over the six taps around a
// point a fraction t past the third: row k holds the factors of t^k in 120ths
// (expanded from Unser 1999, IEEE Signal Processing Magazine 16(6):22-38, box 1).
var bsplines5 = [6][8]float32{
	{1. / 120, 26. / 120, 66. / 120, 26. / 120, 1. / 120, 0},
	{-5. / 120, -50. / 120, 0, 50. / 120, 5. / 120, 0},
	{10. / 120, 20. / 120, -60. / 120, 20. / 120, 10. / 120, 0},
	{-10. / 120, 20. / 120, 0, -20. / 120, 10. / 120, 0},
	{5. / 120, -20. / 120, 30. / 120, -20. / 120, 5. / 120, 0},
	{-1. / 120, 5. / 120, -10. / 120, 10. / 120, -5. / 120, 1. / 120},
}

// slopes5 are their derivatives.
var slopes5 = [5][8]float32{
	{-5. / 120, -50. / 120, 0, 50. / 120, 5. / 120, 0},
	{20. / 120, 40. / 120, -120. / 120, 40. / 120, 20. / 120, 0},
	{-30. / 120, 60. / 120, 0, -60. / 120, 30. / 120, 0},
	{20. / 120, -80. / 120, 120. / 120, -80. / 120, 20. / 120, 0},
	{-5. / 120, 25. / 120, -50. / 120, 50. / 120, -25. / 120, 5. / 120},
}

// bsplines3 and slopes3 likewise for the cubic B-spline, in sixths.
var bsplines3 = [4][4]float32{
	{1. / 6, 4. / 6, 1. / 6, 0},
	{-3. / 6, 0, 3. / 6, 0},
	{3. / 6, -6. / 6, 3. / 6, 0},
	{-1. / 6, 3. / 6, -3. / 6, 1. / 6},
}

var slopes3 = [3][4]float32{
	{-3. / 6, 0, 3. / 6, 0},
	{6. / 6, -12. / 6, 6. / 6, 0},
	{-3. / 6, 9. / 6, -9. / 6, 3. / 6},
}

// table5 and table3 are weights and slopes one after the other, as the assembly
// wants them.
var (
	table5 [11 * 8]float32
	table3 [7 * 4]float32
)

func init() {
	at := 0
	for _, rows := range [][][8]float32{bsplines5[:], slopes5[:]} {
		for _, row := range rows {
			at += copy(table5[at:], row[:])
		}
	}
	at = 0
	for _, rows := range [][][4]float32{bsplines3[:], slopes3[:]} {
		for _, row := range rows {
			at += copy(table3[at:], row[:])
		}
	}
}

// Value5 interpolates by the quintic B-spline at many points: v[i] is the sum
// over 6x6x6 taps of weights and the coefficients c[base[i] + x + mx*y + area*z].
// tx, ty, tz, in [0, 1], say how far the point lies past the third tap of each axis.
//
// c must reach Slack elements past the last tap of every point. v may alias a
// fraction. The slices but c are of one length. Value5 and Gradient5 give the
// same values to the bit.
func Value5(v, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	if checkPoints(len(v), c, 5*mx+5*area+6, base, tx, ty, tz) {
		value5(&v[0], &c[0], mx, area, &base[0], &tx[0], &ty[0], &tz[0], len(v), &table5[0])
		return
	}
	value5Plain(v, c, mx, area, base, tx, ty, tz)
}

// Gradient5 is Value5 with the derivatives of the value with respect to the
// coordinates of the point, in voxels. The outputs must not overlap.
func Gradient5(v, gx, gy, gz, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	check(len(gx) == len(v) && len(gy) == len(v) && len(gz) == len(v), "values and derivatives differ in number")
	if checkPoints(len(v), c, 5*mx+5*area+6, base, tx, ty, tz) {
		gradient5(&v[0], &gx[0], &gy[0], &gz[0], &c[0], mx, area, &base[0], &tx[0], &ty[0], &tz[0], len(v), &table5[0])
		return
	}
	gradient5Plain(v, gx, gy, gz, c, mx, area, base, tx, ty, tz)
}

// Value3 is Value5 for the cubic B-spline: 4x4x4 taps, the point lies past the
// second.
func Value3(v, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	if checkPoints(len(v), c, 3*mx+3*area+4, base, tx, ty, tz) {
		value3(&v[0], &c[0], mx, area, &base[0], &tx[0], &ty[0], &tz[0], len(v), &table3[0])
		return
	}
	value3Plain(v, c, mx, area, base, tx, ty, tz)
}

// Gradient3 is Gradient5 for the cubic B-spline.
func Gradient3(v, gx, gy, gz, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	check(len(gx) == len(v) && len(gy) == len(v) && len(gz) == len(v), "values and derivatives differ in number")
	if checkPoints(len(v), c, 3*mx+3*area+4, base, tx, ty, tz) {
		gradient3(&v[0], &gx[0], &gy[0], &gz[0], &c[0], mx, area, &base[0], &tx[0], &ty[0], &tz[0], len(v), &table3[0])
		return
	}
	gradient3Plain(v, gx, gy, gz, c, mx, area, base, tx, ty, tz)
}

// checkPoints panics unless all taps lie in c, and reports whether assembly is
// to run. reach is the number of elements from the first tap to past the last.
func checkPoints(n int, c []float32, reach int, base []int32, tx, ty, tz []float32) bool {
	check(len(base) == n && len(tx) == n && len(ty) == n && len(tz) == n, "points differ in number")
	if n == 0 {
		return false
	}
	lo, hi := base[0], base[0]
	for _, b := range base {
		lo, hi = min(lo, b), max(hi, b)
	}
	check(lo >= 0 && int(hi)+reach+Slack <= len(c), "a tap lies outside the coefficients, or they lack the slack")
	return useAssembly
}

// negZero starts a sum: unlike +0 it leaves every first term as it is, -0 included,
// as if the sum began with that term.
var negZero = float32(math.Copysign(0, -1))

var (
	minusZeros6 = [6]float32{negZero, negZero, negZero, negZero, negZero, negZero}
	minusZeros4 = [4]float32{negZero, negZero, negZero, negZero}
)

// horner5 evaluates the six polynomials of a quintic.
func horner5(t float32, rows *[6][8]float32, w *[6]float32) {
	a, b, c, d, e, f := &rows[5], &rows[4], &rows[3], &rows[2], &rows[1], &rows[0]
	for l := range w {
		v := float32(a[l]*t) + b[l]
		v = float32(v*t) + c[l]
		v = float32(v*t) + d[l]
		v = float32(v*t) + e[l]
		w[l] = float32(v*t) + f[l]
	}
}

// hornerSlope5 evaluates their derivatives.
func hornerSlope5(t float32, rows *[5][8]float32, w *[6]float32) {
	a, b, c, d, e := &rows[4], &rows[3], &rows[2], &rows[1], &rows[0]
	for l := range w {
		v := float32(a[l]*t) + b[l]
		v = float32(v*t) + c[l]
		v = float32(v*t) + d[l]
		w[l] = float32(v*t) + e[l]
	}
}

// horner3 and hornerSlope3 likewise for the cubic.
func horner3(t float32, rows *[4][4]float32, w *[4]float32) {
	a, b, c, d := &rows[3], &rows[2], &rows[1], &rows[0]
	for l := range w {
		v := float32(a[l]*t) + b[l]
		v = float32(v*t) + c[l]
		w[l] = float32(v*t) + d[l]
	}
}

func hornerSlope3(t float32, rows *[3][4]float32, w *[4]float32) {
	a, b, c := &rows[2], &rows[1], &rows[0]
	for l := range w {
		v := float32(a[l]*t) + b[l]
		w[l] = float32(v*t) + c[l]
	}
}

// lanes8 is the sum of eight lanes, the last two of which are zero: the added
// zero turns a sum of -0 into +0, as there.
func lanes8(l0, l1, l2, l3, l4, l5 float32) float32 {
	return ((l0 + l2) + (l1 + l3)) + ((l4 + posZero) + (l5 + posZero))
}

// lanes4 is the sum of four.
func lanes4(l0, l1, l2, l3 float32) float32 { return (l0 + l2) + (l1 + l3) }

var posZero float32

func value5Plain(v, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	var wx, wy, wz [6]float32
	for i, b := range base {
		horner5(tx[i], &bsplines5, &wx)
		horner5(ty[i], &bsplines5, &wy)
		horner5(tz[i], &bsplines5, &wz)
		a0, a1, a2, a3, a4, a5 := negZero, negZero, negZero, negZero, negZero, negZero
		for z, u := range wz {
			p0, p1, p2, p3, p4, p5 := negZero, negZero, negZero, negZero, negZero, negZero
			plane := c[int(b)+area*z:][:5*mx+6]
			for y, w := range wy {
				r := (*[6]float32)(plane[mx*y:])
				p0 += float32(w * r[0])
				p1 += float32(w * r[1])
				p2 += float32(w * r[2])
				p3 += float32(w * r[3])
				p4 += float32(w * r[4])
				p5 += float32(w * r[5])
			}
			a0 += float32(u * p0)
			a1 += float32(u * p1)
			a2 += float32(u * p2)
			a3 += float32(u * p3)
			a4 += float32(u * p4)
			a5 += float32(u * p5)
		}
		v[i] = lanes8(float32(wx[0]*a0), float32(wx[1]*a1), float32(wx[2]*a2), float32(wx[3]*a3), float32(wx[4]*a4), float32(wx[5]*a5))
	}
}

func gradient5Plain(v, gx, gy, gz, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	var w, d [3][6]float32
	var a [3][6]float32
	for i, b := range base {
		for k, t := range [3]float32{tx[i], ty[i], tz[i]} {
			horner5(t, &bsplines5, &w[k])
			hornerSlope5(t, &slopes5, &d[k])
		}
		a = [3][6]float32{minusZeros6, minusZeros6, minusZeros6}
		for z, wz := range w[2] {
			dz := d[2][z]
			// Three lanes at a time, or the sums would not fit the registers.
			for l := 0; l < 6; l += 3 {
				p0, p1, p2, q0, q1, q2 := negZero, negZero, negZero, negZero, negZero, negZero
				plane := c[int(b)+l+area*z:][:5*mx+3]
				for y, wy := range w[1] {
					dy := d[1][y]
					r := (*[3]float32)(plane[mx*y:])
					p0 += float32(wy * r[0])
					q0 += float32(dy * r[0])
					p1 += float32(wy * r[1])
					q1 += float32(dy * r[1])
					p2 += float32(wy * r[2])
					q2 += float32(dy * r[2])
				}
				s := (*[3]float32)(a[0][l:])
				s[0] += float32(wz * p0)
				s[1] += float32(wz * p1)
				s[2] += float32(wz * p2)
				s = (*[3]float32)(a[1][l:])
				s[0] += float32(wz * q0)
				s[1] += float32(wz * q1)
				s[2] += float32(wz * q2)
				s = (*[3]float32)(a[2][l:])
				s[0] += float32(dz * p0)
				s[1] += float32(dz * p1)
				s[2] += float32(dz * p2)
			}
		}
		v[i], gx[i], gy[i], gz[i] = dot6(&w[0], &a[0]), dot6(&d[0], &a[0]), dot6(&w[0], &a[1]), dot6(&w[0], &a[2])
	}
}

func dot6(w, a *[6]float32) float32 {
	return lanes8(float32(w[0]*a[0]), float32(w[1]*a[1]), float32(w[2]*a[2]), float32(w[3]*a[3]), float32(w[4]*a[4]), float32(w[5]*a[5]))
}

func dot4(w, a *[4]float32) float32 {
	return lanes4(float32(w[0]*a[0]), float32(w[1]*a[1]), float32(w[2]*a[2]), float32(w[3]*a[3]))
}

func value3Plain(v, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	var wx, wy, wz [4]float32
	for i, b := range base {
		horner3(tx[i], &bsplines3, &wx)
		horner3(ty[i], &bsplines3, &wy)
		horner3(tz[i], &bsplines3, &wz)
		a0, a1, a2, a3 := negZero, negZero, negZero, negZero
		for z, u := range wz {
			p0, p1, p2, p3 := negZero, negZero, negZero, negZero
			plane := c[int(b)+area*z:][:3*mx+4]
			for y, w := range wy {
				r := (*[4]float32)(plane[mx*y:])
				p0 += float32(w * r[0])
				p1 += float32(w * r[1])
				p2 += float32(w * r[2])
				p3 += float32(w * r[3])
			}
			a0 += float32(u * p0)
			a1 += float32(u * p1)
			a2 += float32(u * p2)
			a3 += float32(u * p3)
		}
		v[i] = lanes4(float32(wx[0]*a0), float32(wx[1]*a1), float32(wx[2]*a2), float32(wx[3]*a3))
	}
}

func gradient3Plain(v, gx, gy, gz, c []float32, mx, area int, base []int32, tx, ty, tz []float32) {
	var w, d [3][4]float32
	var a [3][4]float32
	for i, b := range base {
		for k, t := range [3]float32{tx[i], ty[i], tz[i]} {
			horner3(t, &bsplines3, &w[k])
			hornerSlope3(t, &slopes3, &d[k])
		}
		a = [3][4]float32{minusZeros4, minusZeros4, minusZeros4}
		for z, wz := range w[2] {
			dz := d[2][z]
			p0, p1, p2, p3, q0, q1, q2, q3 := negZero, negZero, negZero, negZero, negZero, negZero, negZero, negZero
			plane := c[int(b)+area*z:][:3*mx+4]
			for y, wy := range w[1] {
				dy := d[1][y]
				r := (*[4]float32)(plane[mx*y:])
				p0 += float32(wy * r[0])
				q0 += float32(dy * r[0])
				p1 += float32(wy * r[1])
				q1 += float32(dy * r[1])
				p2 += float32(wy * r[2])
				q2 += float32(dy * r[2])
				p3 += float32(wy * r[3])
				q3 += float32(dy * r[3])
			}
			s := &a[0]
			s[0] += float32(wz * p0)
			s[1] += float32(wz * p1)
			s[2] += float32(wz * p2)
			s[3] += float32(wz * p3)
			s = &a[1]
			s[0] += float32(wz * q0)
			s[1] += float32(wz * q1)
			s[2] += float32(wz * q2)
			s[3] += float32(wz * q3)
			s = &a[2]
			s[0] += float32(dz * p0)
			s[1] += float32(dz * p1)
			s[2] += float32(dz * p2)
			s[3] += float32(dz * p3)
		}
		v[i], gx[i], gy[i], gz[i] = dot4(&w[0], &a[0]), dot4(&d[0], &a[0]), dot4(&w[0], &a[1]), dot4(&w[0], &a[2])
	}
}
