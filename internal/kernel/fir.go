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
