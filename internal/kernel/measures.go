package kernel

import "math"

// FromInt16 sets dst to the numbers in src, which float32 holds exactly.
func FromInt16(dst []float32, src []int16) {
	check(len(dst) == len(src), "rows differ in length")
	n := 0
	if useAssembly && len(dst) >= 8 {
		n = len(dst) &^ 7
		fromInt16(&dst[0], &src[0], n)
	}
	for i, x := range src[n:] {
		dst[n+i] = float32(x)
	}
}

// FromUint16 is [FromInt16] for the same bits as numbers without a sign.
func FromUint16(dst []float32, src []int16) {
	check(len(dst) == len(src), "rows differ in length")
	n := 0
	if useAssembly && len(dst) >= 8 {
		n = len(dst) &^ 7
		fromUint16(&dst[0], &src[0], n)
	}
	for i, x := range src[n:] {
		dst[n+i] = float32(uint16(x))
	}
}

// FromInt16Scaled sets dst to slope times the numbers in src plus inter, taken in float64
// and rounded to float32.
func FromInt16Scaled(dst []float32, src []int16, slope, inter float64) {
	check(len(dst) == len(src), "rows differ in length")
	n := 0
	if useAssembly && len(dst) >= 8 {
		n = len(dst) &^ 7
		fromInt16Scaled(&dst[0], &src[0], n, slope, inter)
	}
	for i, x := range src[n:] {
		dst[n+i] = float32(float64(slope*float64(x)) + inter)
	}
}

// FromUint16Scaled is [FromInt16Scaled] for the same bits as numbers without a sign.
func FromUint16Scaled(dst []float32, src []int16, slope, inter float64) {
	check(len(dst) == len(src), "rows differ in length")
	n := 0
	if useAssembly && len(dst) >= 8 {
		n = len(dst) &^ 7
		fromUint16Scaled(&dst[0], &src[0], n, slope, inter)
	}
	for i, x := range src[n:] {
		dst[n+i] = float32(float64(slope*float64(uint16(x))) + inter)
	}
}

// strands is two sums of four strands each: value i goes to strand i%4, those after the last
// four to strand 0. It is part of the definition of the results' bits.
type strands [8]float64

func (s *strands) sums() (a, b float64) {
	return (s[0] + s[1]) + (s[2] + s[3]), (s[4] + s[5]) + (s[6] + s[7])
}

// Changes returns the sum of now and the sum of the squares of now less before, in float64.
func Changes(now, before []float32) (level, square float64) {
	check(len(now) == len(before), "rows differ in length")
	var s strands
	n := len(now) &^ 3
	if useAssembly && n > 0 {
		changes((*[8]float64)(&s), &now[0], &before[0], n)
	} else {
		changesPlain(&s, now[:n], before[:n])
	}
	for i, v := range now[n:] {
		x := float64(v)
		d := x - float64(before[n+i])
		s[0] += x
		s[4] += float64(d * d)
	}
	return s.sums()
}

func changesPlain(s *strands, now, before []float32) {
	var l0, l1, l2, l3, c0, c1, c2, c3 float64
	for len(now) >= 4 && len(before) >= 4 {
		x0, x1, x2, x3 := float64(now[0]), float64(now[1]), float64(now[2]), float64(now[3])
		d0, d1, d2, d3 := x0-float64(before[0]), x1-float64(before[1]), x2-float64(before[2]), x3-float64(before[3])
		l0, l1, l2, l3 = l0+x0, l1+x1, l2+x2, l3+x3
		c0 += float64(d0 * d0)
		c1 += float64(d1 * d1)
		c2 += float64(d2 * d2)
		c3 += float64(d3 * d3)
		now, before = now[4:], before[4:]
	}
	*s = strands{l0, l1, l2, l3, c0, c1, c2, c3}
}

// Apart returns the sum of the distances of x from the medians of the four others (half the
// sum of the middle two), and the sum of the magnitudes of x, in float64. Values must be
// finite: what comes of others is not the same in both twins.
func Apart(x []float32, others *[4][]float32) (dist, size float64) {
	for _, o := range others {
		check(len(o) == len(x), "rows differ in length")
	}
	var s strands
	n := len(x) &^ 3
	if useAssembly && n > 0 {
		at := [4]*float32{&others[0][0], &others[1][0], &others[2][0], &others[3][0]}
		apart((*[8]float64)(&s), &x[0], &at, n)
	} else {
		apartPlain(&s, x[:n], others[0][:n], others[1][:n], others[2][:n], others[3][:n])
	}
	for i := n; i < len(x); i++ {
		s[0] += distance(x[i], others[0][i], others[1][i], others[2][i], others[3][i])
		s[4] += math.Abs(float64(x[i]))
	}
	return s.sums()
}

func apartPlain(s *strands, x, a, b, c, e []float32) {
	var d0, d1, d2, d3, l0, l1, l2, l3 float64
	for len(x) >= 4 && len(a) >= 4 && len(b) >= 4 && len(c) >= 4 && len(e) >= 4 {
		d0 += distance(x[0], a[0], b[0], c[0], e[0])
		d1 += distance(x[1], a[1], b[1], c[1], e[1])
		d2 += distance(x[2], a[2], b[2], c[2], e[2])
		d3 += distance(x[3], a[3], b[3], c[3], e[3])
		l0, l1 = l0+math.Abs(float64(x[0])), l1+math.Abs(float64(x[1]))
		l2, l3 = l2+math.Abs(float64(x[2])), l3+math.Abs(float64(x[3]))
		x, a, b, c, e = x[4:], a[4:], b[4:], c[4:], e[4:]
	}
	*s = strands{d0, d1, d2, d3, l0, l1, l2, l3}
}

// distance is that of x from the median of four: the middle two, unordered, are the larger of the
// smaller ones and the smaller of the larger ones of two pairs. Whole numbers are compared
// without a branch.
func distance(x, a, b, c, e float32) float64 {
	p, q, r, s := order(a), order(b), order(c), order(e)
	low, high := max(min(p, q), min(r, s)), min(max(p, q), max(r, s))
	return math.Abs(float64(x) - float64((float64(number(low))+float64(number(high)))*0.5))
}

// order maps numbers to whole numbers in the same order (IEEE 754 keeps sign and
// magnitude); number is its inverse.
func order(x float32) int32 {
	b := int32(math.Float32bits(x))
	return b ^ int32(uint32(b>>31)>>1)
}

func number(b int32) float32 { return math.Float32frombits(uint32(b ^ int32(uint32(b>>31)>>1))) }

// Courses adds to d1 and d2, in float64, the differences of four volumes to the first, and their squares,
// one after another in every voxel.
func Courses(d1, d2 []float64, first []float32, volumes *[4][]float32) {
	check(len(d2) == len(d1) && len(first) == len(d1), "rows differ in length")
	for _, v := range volumes {
		check(len(v) == len(d1), "rows differ in length")
	}
	n := 0
	if useAssembly && len(d1) >= 4 {
		n = len(d1) &^ 3
		at := [4]*float32{&volumes[0][0], &volumes[1][0], &volumes[2][0], &volumes[3][0]}
		courses(&d1[0], &d2[0], &first[0], &at, n)
	}
	v0, v1, v2, v3 := volumes[0][n:], volumes[1][n:], volumes[2][n:], volumes[3][n:]
	first, d1, d2 = first[n:], d1[n:], d2[n:]
	first, d2, v0, v1, v2, v3 = first[:len(d1)], d2[:len(d1)], v0[:len(d1)], v1[:len(d1)], v2[:len(d1)], v3[:len(d1)]
	for i, s1 := range d1 {
		f, s2 := float64(first[i]), d2[i]
		a, b, c, d := float64(v0[i])-f, float64(v1[i])-f, float64(v2[i])-f, float64(v3[i])-f
		d1[i] = (((s1 + a) + b) + c) + d
		s2 += float64(a * a)
		s2 += float64(b * b)
		s2 += float64(c * c)
		s2 += float64(d * d)
		d2[i] = s2
	}
}
