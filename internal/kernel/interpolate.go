package kernel

import "math"

// tapsInAssembly is the most rows [Interpolate] takes as assembly.
const tapsInAssembly = 96

// Interpolate sets dst to the sum of w[k] src[k], taken in float64, in the order of k
// and from zero, and rounded to float32; where that is zero it has the sign of like. It
// reports whether all of dst is finite. Rows are of one length; dst may be any of
// them, as value i comes from values i alone.
func Interpolate(dst []float32, w []float64, src [][]float32, like []float32) (finite bool) {
	n := len(dst)
	check(len(w) == len(src) && len(like) == n, "weights and rows differ in number, or rows in length")
	for _, row := range src {
		check(len(row) == n, "rows differ in length")
	}
	if !useAssembly || n == 0 || len(w) == 0 || len(w) > tapsInAssembly {
		return interpolatePlain(dst, w, src, like)
	}
	var at [tapsInAssembly]*float32
	for k, row := range src {
		at[k] = &row[0]
	}
	return interpolate(&dst[0], n, &w[0], &at[0], len(w), &like[0])
}

// InterpolateEach is [Interpolate] with weights of each value's own: dst[i] is the sum
// of w[k][i] src[k][i].
func InterpolateEach(dst []float32, w [][]float64, src [][]float32, like []float32) (finite bool) {
	n := len(dst)
	check(len(w) == len(src) && len(like) == n, "weights and rows differ in number, or rows in length")
	for k, row := range src {
		check(len(row) == n && len(w[k]) == n, "rows differ in length")
	}
	if !useAssembly || n == 0 || len(w) == 0 || len(w) > tapsInAssembly {
		return interpolateEachPlain(dst, w, src, like)
	}
	var at [tapsInAssembly]*float32
	var by [tapsInAssembly]*float64
	for k, row := range src {
		at[k], by[k] = &row[0], &w[k][0]
	}
	return interpolateEach(&dst[0], n, &by[0], &at[0], len(w), &like[0])
}

// sumsAtOnce is how many sums plain Go keeps.
const sumsAtOnce = 128

func interpolatePlain(dst []float32, w []float64, src [][]float32, like []float32) (finite bool) {
	finite = true
	var sums [sumsAtOnce]float64
	for from := 0; from < len(dst); from += sumsAtOnce {
		n := min(sumsAtOnce, len(dst)-from)
		s := sums[:n]
		clear(s)
		k := 0
		// Four taps in a sweep; the order of sums stays.
		for ; k+4 <= len(w); k += 4 {
			w0, w1, w2, w3 := w[k], w[k+1], w[k+2], w[k+3]
			a, b, c, d := src[k][from:][:len(s)], src[k+1][from:][:len(s)], src[k+2][from:][:len(s)], src[k+3][from:][:len(s)]
			for i := range s {
				v := s[i] + float64(w0*float64(a[i]))
				v += float64(w1 * float64(b[i]))
				v += float64(w2 * float64(c[i]))
				s[i] = v + float64(w3*float64(d[i]))
			}
		}
		for ; k < len(w); k++ {
			for i, v := range src[k][from:][:len(s)] {
				s[i] += float64(w[k] * float64(v))
			}
		}
		finite = settle(dst[from:][:n], s, like[from:][:n]) && finite
	}
	return finite
}

func interpolateEachPlain(dst []float32, w [][]float64, src [][]float32, like []float32) (finite bool) {
	finite = true
	var sums [sumsAtOnce]float64
	for from := 0; from < len(dst); from += sumsAtOnce {
		n := min(sumsAtOnce, len(dst)-from)
		s := sums[:n]
		clear(s)
		for k := range w {
			by := w[k][from:][:len(s)]
			for i, v := range src[k][from:][:len(s)] {
				s[i] += float64(by[i] * float64(v))
			}
		}
		finite = settle(dst[from:][:n], s, like[from:][:n]) && finite
	}
	return finite
}

// settle rounds sums.
func settle(dst []float32, s []float64, like []float32) (finite bool) {
	finite = true
	for i, v := range s[:len(dst)] {
		r := float32(v)
		if r == 0 {
			r = math.Float32frombits(math.Float32bits(like[i]) & (1 << 31))
		}
		if r-r != 0 {
			finite = false
		}
		dst[i] = r
	}
	return finite
}
