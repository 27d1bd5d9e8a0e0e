package kernel

import "math"

// masks holds, from index 8-n, the mask of the first n of eight lanes.
var masks = [16]int32{-1, -1, -1, -1, -1, -1, -1, -1}

// Residual sets r to v less the template t times its gain, which is linear in p1,
// p2 and p3: r = v - (gain[0] + gain[1] p1 + gain[2] p2 + gain[3] p3) t. r may alias
// any of the rows, which are of one length.
func Residual(r, v, t, p1, p2, p3 []float32, gain [4]float32) {
	n := len(r)
	check(len(v) == n && len(t) == n && len(p1) == n && len(p2) == n && len(p3) == n, "rows differ in length")
	if useAssembly && n > 0 {
		residual(&r[0], &v[0], &t[0], &p1[0], &p2[0], &p3[0], n, &gain[0], &masks[0])
		return
	}
	residualPlain(r, v, t, p1, p2, p3, gain)
}

func residualPlain(r, v, t, p1, p2, p3 []float32, gain [4]float32) {
	v, t, p1, p2, p3 = v[:len(r)], t[:len(r)], p1[:len(r)], p2[:len(r)], p3[:len(r)]
	for i := range r {
		s := float32(gain[1]*p1[i]) + gain[0]
		s += float32(gain[2] * p2[i])
		s += float32(gain[3] * p3[i])
		r[i] = v[i] - float32(s*t[i])
	}
}

// Tukey multiplies w by the biweight (1 - (r/cut)^2)^2 of residuals below cut in
// size, and by zero where they are not or are NaN (Beaton, Tukey 1974,
// Technometrics 16(2):147-185). The quotient is r times the reciprocal of cut.
func Tukey(w, r []float32, cut float32) {
	check(len(w) == len(r), "rows differ in length")
	inverse := 1 / cut
	if useAssembly && len(w) > 0 {
		tukey(&w[0], &r[0], len(w), inverse, &masks[0])
		return
	}
	tukeyPlain(w, r, inverse)
}

func tukeyPlain(w, r []float32, inverse float32) {
	r = r[:len(w)]
	for i := range w {
		u := float32(r[i] * inverse)
		u = 1 - float32(u*u)
		if !(u > 0) {
			u = 0
		}
		w[i] *= float32(u * u)
	}
}

// Abs sets dst to the absolute values of src, which it may alias.
func Abs(dst, src []float32) {
	check(len(dst) == len(src), "rows differ in length")
	if useAssembly && len(dst) > 0 {
		abs(&dst[0], &src[0], len(dst), &masks[0])
		return
	}
	absPlain(dst, src)
}

func absPlain(dst, src []float32) {
	dst = dst[:len(src)]
	for i, v := range src {
		dst[i] = math.Float32frombits(math.Float32bits(v) &^ (1 << 31))
	}
}
