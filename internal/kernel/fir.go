package kernel

// MostReach is how far a filter of [Symmetric] may reach to either side.
const MostReach = 32

// Symmetric filters across rows: dst = h[0] rows[r] + the sum over k = 1 ... r of
// h[k] (rows[r-k] + rows[r+k]), where r = len(h) - 1 and rows are 2r+1, all as long
// as dst. dst must not overlap them.
func Symmetric(dst, h []float32, rows [][]float32) {
	r := len(h) - 1
	check(r >= 0 && r <= MostReach && len(rows) == 2*r+1, "taps and rows differ in number, or are too many")
	n := len(dst)
	var at [2*MostReach + 1]*float32
	for k, row := range rows {
		check(len(row) == n, "rows differ in length")
		if n > 0 {
			at[k] = &row[0]
		}
	}
	if useAssembly && n > 0 {
		symmetric(&dst[0], n, &at[0], &h[0], r, &masks[0])
		return
	}
	symmetricPlain(dst, h, rows)
}

// SymmetricLine filters along a line that reaches r = len(h) - 1 samples past dst
// at both ends: dst[i] = h[0] line[i+r] + the sum of h[k] (line[i+r-k] + line[i+r+k]).
func SymmetricLine(dst, h, line []float32) {
	r := len(h) - 1
	check(r >= 0 && r <= MostReach && len(line) == len(dst)+2*r, "line of another length, or too many taps")
	if useAssembly && len(dst) > 0 {
		var at [2*MostReach + 1]*float32
		for k := range 2*r + 1 {
			at[k] = &line[k]
		}
		symmetric(&dst[0], len(dst), &at[0], &h[0], r, &masks[0])
		return
	}
	var rows [2*MostReach + 1][]float32
	for k := range 2*r + 1 {
		rows[k] = line[k:][:len(dst)]
	}
	symmetricPlain(dst, h, rows[:2*r+1])
}

func symmetricPlain(dst, h []float32, rows [][]float32) {
	r := len(h) - 1
	for i, v := range rows[r][:len(dst)] {
		dst[i] = float32(h[0] * v)
	}
	k := 1
	// Two taps in a sweep; the order of sums stays.
	for ; k < r; k += 2 {
		u, v := h[k], h[k+1]
		a, b, c, d := rows[r-k][:len(dst)], rows[r+k][:len(dst)], rows[r-k-1][:len(dst)], rows[r+k+1][:len(dst)]
		for i := range dst {
			s := dst[i] + float32(u*(a[i]+b[i]))
			dst[i] = s + float32(v*(c[i]+d[i]))
		}
	}
	if k == r {
		a, b := rows[r-k][:len(dst)], rows[r+k][:len(dst)]
		for i := range dst {
			dst[i] += float32(h[k] * (a[i] + b[i]))
		}
	}
}

// tapsAtOnce is how many rows one call of assembly takes.
const tapsAtOnce = 64

// Combine sets dst to the sum of w[k] src[k], in that order and starting from zero
// or, with add, from dst. Rows are as long as dst, which must not overlap them.
func Combine(dst, w []float32, src [][]float32, add bool) {
	checkCombine(dst, w, src)
	if !useAssembly || len(dst) == 0 || len(w) == 0 {
		combinePlain(dst, w, src, add)
		return
	}
	var at [tapsAtOnce]*float32
	for from := 0; from < len(w); from += tapsAtOnce {
		some := src[from:min(from+tapsAtOnce, len(w))]
		for k, row := range some {
			at[k] = &row[0]
		}
		combine(&dst[0], len(dst), &w[from], &at[0], len(some), add || from > 0, &masks[0])
	}
}

// CombineInt16 is Combine for rows of stored integers.
func CombineInt16(dst, w []float32, src [][]int16, add bool) {
	checkCombine(dst, w, src)
	if !useAssembly || len(dst) == 0 || len(w) == 0 {
		combinePlain(dst, w, src, add)
		return
	}
	var at [tapsAtOnce]*int16
	for from := 0; from < len(w); from += tapsAtOnce {
		some := src[from:min(from+tapsAtOnce, len(w))]
		for k, row := range some {
			at[k] = &row[0]
		}
		combineInt16(&dst[0], len(dst), &w[from], &at[0], len(some), add || from > 0, &masks[0])
	}
}

func checkCombine[T int16 | float32](dst, w []float32, src [][]T) {
	check(len(w) == len(src), "weights and rows differ in number")
	for _, row := range src {
		check(len(row) == len(dst), "rows differ in length")
	}
}

func combinePlain[T int16 | float32](dst, w []float32, src [][]T, add bool) {
	if !add {
		clear(dst)
	}
	k := 0
	// Four taps in a sweep; the order of sums stays.
	for ; k+4 <= len(w); k += 4 {
		w0, w1, w2, w3 := w[k], w[k+1], w[k+2], w[k+3]
		a, b, c, d := src[k][:len(dst)], src[k+1][:len(dst)], src[k+2][:len(dst)], src[k+3][:len(dst)]
		for i := range dst {
			s := dst[i] + float32(w0*float32(a[i]))
			s += float32(w1 * float32(b[i]))
			s += float32(w2 * float32(c[i]))
			dst[i] = s + float32(w3*float32(d[i]))
		}
	}
	for ; k < len(w); k++ {
		for i, v := range src[k][:len(dst)] {
			dst[i] += float32(w[k] * float32(v))
		}
	}
}
