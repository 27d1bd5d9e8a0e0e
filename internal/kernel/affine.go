package kernel

import "math"

// Pieces of the B-splines by distance x from the nearest knot (Unser 1999, IEEE Signal
// Processing Magazine 16(6):22-38, box 1): the assembly reads them from affineTable.
const (
	half             = float32(1) / 2
	quarter          = float32(1) / 4
	twelfth          = float32(1. / 12)
	elevenTwentieths = float32(11. / 20)
	perHundredTwenty = float32(1. / 120)
	twentyFourth     = float32(1. / 24)
	sixth            = float32(1. / 6)
	fiveTwelfths     = float32(5. / 12)
	thirteenSixtieth = float32(13. / 60)
	twoThirds        = float32(2. / 3)
)

// affineTable holds the constants eight times each, then 0 to 7 as int32 and as
// float64.
var affineTable [13 * 8]float32

func init() {
	for k, v := range []float32{half, quarter, twelfth, elevenTwentieths, perHundredTwenty, twentyFourth, sixth, fiveTwelfths, thirteenSixtieth, twoThirds} {
		for l := range 8 {
			affineTable[8*k+l] = v
		}
	}
	for l := range 8 {
		affineTable[80+l] = math.Float32frombits(uint32(l))
		u := math.Float64bits(float64(l))
		affineTable[88+2*l], affineTable[89+2*l] = math.Float32frombits(uint32(u)), math.Float32frombits(uint32(u>>32))
	}
}

// AffineRow5 interpolates by the quintic B-spline along a line: dst[i] is the
// value at start + i step, in voxels. Coordinates outside the field, [0, n-1], are
// moved to its edge, NaN to zero.
//
// c are coefficients as [Prefilter] leaves them: n samples and pad more at every
// face, pad at least 3, and [Slack] elements. Coordinates are in float64, start +
// float64(i)*step, their fractions and all else in float32.
//
// It is fastest where the line keeps close to x: eight outputs whose cells are
// neighbours in one row take as long as one.
func AffineRow5(dst, c []float32, n [3]int, pad int, start, step [3]float64) {
	affineRow(dst, c, n, pad, start, step, 5)
}

// AffineRow3 is AffineRow5 for the cubic B-spline; pad is at least 2.
func AffineRow3(dst, c []float32, n [3]int, pad int, start, step [3]float64) {
	affineRow(dst, c, n, pad, start, step, 3)
}

func affineRow(dst, c []float32, n [3]int, pad int, start, step [3]float64, degree int) {
	mx, area := n[0]+2*pad, (n[0]+2*pad)*(n[1]+2*pad)
	check(n[0] > 0 && n[1] > 0 && n[2] > 0 && pad > degree/2 && len(c) >= area*(n[2]+2*pad)+Slack, "size of the field, or coefficients without padding or slack")
	if len(dst) == 0 {
		return
	}
	// The first tap of a point on the first sample.
	c = c[(pad-degree/2)*(1+mx+area):]
	axes := [9]float64{start[0], start[1], start[2], step[0], step[1], step[2], float64(n[0] - 1), float64(n[1] - 1), float64(n[2] - 1)}
	switch {
	case degree == 5 && useAssembly:
		affineRow5(&dst[0], len(dst), &c[0], mx, area, &axes[0], &affineTable[0], &masks[0])
	case degree == 5:
		affineRow5Plain(dst, c, mx, area, &axes)
	case useAssembly:
		affineRow3(&dst[0], len(dst), &c[0], mx, area, &axes[0], &affineTable[0], &masks[0])
	default:
		affineRow3Plain(dst, c, mx, area, &axes)
	}
}

// FlatRow interpolates in a field of two dimensions as [AffineRow5] does in three, and
// [AffineRow3] with degree 3. c are coefficients as [Prefilter.RunFlat] leaves them: n samples
// and pad more at every edge, pad at least degree/2+1, and [Slack] elements.
func FlatRow(dst, c []float32, n [2]int, pad int, start, step [2]float64, degree int) {
	mx := n[0] + 2*pad
	check((degree == 3 || degree == 5) && n[0] > 0 && n[1] > 0 && pad > degree/2 && len(c) >= mx*(n[1]+2*pad)+Slack, "size of the field, or coefficients without padding or slack")
	if len(dst) == 0 {
		return
	}
	c = c[(pad-degree/2)*(1+mx):]
	axes := [6]float64{start[0], start[1], step[0], step[1], float64(n[0] - 1), float64(n[1] - 1)}
	switch {
	case degree == 5 && useAssembly:
		flatRow5(&dst[0], len(dst), &c[0], mx, &axes[0], &affineTable[0], &masks[0])
	case degree == 5:
		flatRow5Plain(dst, c, mx, &axes)
	case useAssembly:
		flatRow3(&dst[0], len(dst), &c[0], mx, &axes[0], &affineTable[0], &masks[0])
	default:
		flatRow3Plain(dst, c, mx, &axes)
	}
}

func flatRow5Plain(dst, c []float32, mx int, axes *[6]float64) {
	var wx, wy [6]float32
	for i := range dst {
		x, tx := cell(i, axes[0], axes[2], axes[4])
		y, ty := cell(i, axes[1], axes[3], axes[5])
		weights5(tx, &wx)
		weights5(ty, &wy)
		rows := c[x+mx*y:][:5*mx+6]
		sum := negZero
		for y, w := range wy {
			r := (*[6]float32)(rows[mx*y:])
			p := float32(wx[0]*r[0]) + float32(wx[1]*r[1]) + float32(wx[2]*r[2])
			q := float32(wx[3]*r[3]) + float32(wx[4]*r[4]) + float32(wx[5]*r[5])
			sum += float32(w * (p + q))
		}
		dst[i] = sum
	}
}

func flatRow3Plain(dst, c []float32, mx int, axes *[6]float64) {
	var wx, wy [4]float32
	for i := range dst {
		x, tx := cell(i, axes[0], axes[2], axes[4])
		y, ty := cell(i, axes[1], axes[3], axes[5])
		weights3(tx, &wx)
		weights3(ty, &wy)
		rows := c[x+mx*y:][:3*mx+4]
		sum := negZero
		for y, w := range wy {
			r := (*[4]float32)(rows[mx*y:])
			p := float32(wx[0]*r[0]) + float32(wx[1]*r[1])
			q := float32(wx[2]*r[2]) + float32(wx[3]*r[3])
			sum += float32(w * (p + q))
		}
		dst[i] = sum
	}
}

// cell splits a coordinate, clamped to [0, limit].
func cell(i int, start, step, limit float64) (first int, t float32) {
	x := float64(step*float64(i)) + start
	switch {
	case !(x > 0): // NaN as well
		x = 0
	case x > limit:
		x = limit
	}
	first = int(x)
	return first, float32(x - float64(first))
}

func affineRow5Plain(dst, c []float32, mx, area int, axes *[9]float64) {
	var wx, wy, wz [6]float32
	for i := range dst {
		x, tx := cell(i, axes[0], axes[3], axes[6])
		y, ty := cell(i, axes[1], axes[4], axes[7])
		z, tz := cell(i, axes[2], axes[5], axes[8])
		weights5(tx, &wx)
		weights5(ty, &wy)
		weights5(tz, &wz)
		// Scalars, because the compiler keeps no array in registers.
		w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
		base := x + mx*y + area*z
		var sum float32
		for z, w := range wz {
			rows := c[base+area*z:][:5*mx+6]
			plane := negZero
			for y, w := range wy {
				r := (*[6]float32)(rows[mx*y:])
				p := float32(w0*r[0]) + float32(w1*r[1]) + float32(w2*r[2])
				q := float32(w3*r[3]) + float32(w4*r[4]) + float32(w5*r[5])
				plane += float32(w * (p + q))
			}
			sum += float32(w * plane)
		}
		dst[i] = sum
	}
}

func weights5(t float32, w *[6]float32) {
	u := 1 - t
	w[0], w[1], w[2], w[3], w[4], w[5] = outer5(u), side5(t), centre5(t), centre5(u), side5(u), outer5(t)
}

func outer5(x float32) float32 {
	v := float32(x * x)
	return float32(float32(float32(v*v)*x) * perHundredTwenty)
}

// side5 is 13/60 - 5x/12 + x^2/6 + x^3/6 - x^4/6 + x^5/24.
func side5(x float32) float32 {
	r := float32(twentyFourth*x) - sixth
	r = float32(r*x) + sixth
	r = float32(r*x) + sixth
	r = float32(r*x) - fiveTwelfths
	return float32(r*x) + thirteenSixtieth
}

// centre5 is 11/20 - x^2/2 + x^4/4 - x^5/12.
func centre5(x float32) float32 {
	q := float32(x * x)
	r := quarter - float32(twelfth*x)
	r = float32(r*q) - half
	return float32(r*q) + elevenTwentieths
}

func affineRow3Plain(dst, c []float32, mx, area int, axes *[9]float64) {
	var wx, wy, wz [4]float32
	for i := range dst {
		x, tx := cell(i, axes[0], axes[3], axes[6])
		y, ty := cell(i, axes[1], axes[4], axes[7])
		z, tz := cell(i, axes[2], axes[5], axes[8])
		weights3(tx, &wx)
		weights3(ty, &wy)
		weights3(tz, &wz)
		w0, w1, w2, w3 := wx[0], wx[1], wx[2], wx[3]
		base := x + mx*y + area*z
		var sum float32
		for z, w := range wz {
			rows := c[base+area*z:][:3*mx+4]
			plane := negZero
			for y, w := range wy {
				r := (*[4]float32)(rows[mx*y:])
				p := float32(w0*r[0]) + float32(w1*r[1])
				q := float32(w2*r[2]) + float32(w3*r[3])
				plane += float32(w * (p + q))
			}
			sum += float32(w * plane)
		}
		dst[i] = sum
	}
}

func weights3(t float32, w *[4]float32) {
	u := 1 - t
	w[0], w[1], w[2], w[3] = outer3(u), centre3(t), centre3(u), outer3(t)
}

func outer3(x float32) float32 { return float32(float32(float32(x*x)*x) * sixth) }

// centre3 is 2/3 - x^2 + x^3/2.
func centre3(x float32) float32 {
	r := float32(half*x) - 1
	return float32(r*float32(x*x)) + twoThirds
}
