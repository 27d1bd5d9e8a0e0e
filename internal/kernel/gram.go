package kernel

import "math"

// MostRows is the largest number of rows of [Gram].
const MostRows = 12

// gramPoints points are weighed at a time: all rows twice then fit the fastest cache.
const gramPoints = 128

// gramLanes holds, for each pair of tiles of three rows, four lanes of nine sums.
type gramLanes [MostRows / 3 * (MostRows/3 + 1) / 2][9][4]float64

// Gram adds weighted products of rows to sum: for a <= b, in the order (0,0),
// (0,1) ... (0,m-1), (1,1) ..., the sum over i of w[i] rows[a][i] rows[b][i].
// Rows, at most MostRows, and w are of one length; sum holds m (m+1)/2 values.
//
// A point of weight zero does not count, whatever its rows hold. Products and the sums of
// 16 of them (of the points i with the same i mod 8, 128 points at a time) are in float32,
// what those are added to in float64: lanes 0 to 3, then 4 to 7, to lanes mod 4, which
// join as (0 + 2) + (1 + 3). What comes out so hangs on the length of the call, though not
// on the processor. Where products leave the range of float32 for a row, all sums are made
// in float64, point after point.
func Gram(sum []float64, rows [][]float32, w []float32) {
	m, n := len(rows), len(w)
	check(m <= MostRows && len(sum) == m*(m+1)/2, "too many rows, or sums of another number of rows")
	for _, r := range rows {
		check(len(r) == n, "rows and weights differ in length")
	}
	tiles := (m + 2) / 3
	var a, b [MostRows * gramPoints]float32
	var acc gramLanes
	var tail [2][gramPoints]float32
	for from := 0; from < n; from += gramPoints {
		k := min(gramPoints, n-from)
		weights := w[from : from+k]
		wide := (k + 7) &^ 7
		if k < wide {
			// The missing points weigh nothing.
			weights = tail[0][:wide]
			copy(weights, w[from:])
		}
		for r, row := range rows {
			row = row[from : from+k]
			if k < wide {
				copy(tail[1][:wide], row)
				row = tail[1][:wide]
			}
			if useAssembly {
				weigh(&a[gramPoints*r], &b[gramPoints*r], &row[0], &weights[0], wide)
			} else {
				weighPlain(a[gramPoints*r:][:wide], b[gramPoints*r:][:wide], row, weights)
			}
		}
		if m == 0 {
			continue
		}
		if useAssembly {
			gramBlock(&acc[0][0][0], &a[0], &b[0], tiles, wide)
		} else {
			gramBlockPlain(&acc, &a, &b, tiles, wide)
		}
	}
	for r := range m {
		i := r / 3
		s := &acc[i*tiles-i*(i-1)/2][4*(r%3)]
		// Of a sum of squares: what others hold is below the geometric mean of two of them.
		if own := (s[0] + s[2]) + (s[1] + s[3]); !(math.Abs(own) <= math.MaxFloat32 && math.Abs(own) >= gramLeast) {
			gramWide(sum, rows, w)
			return
		}
	}
	at := 0
	for r := range m {
		for c := r; c < m; c++ {
			// Tiles of 3x3 pairs, in the order of the upper triangle.
			i, j := r/3, c/3
			s := &acc[i*tiles-i*(i-1)/2+j-i][3*(r%3)+c%3]
			sum[at] += (s[0] + s[2]) + (s[1] + s[3])
			at++
		}
	}
}

// gramLeast: squares that sum to less may have lost bits below the range of float32.
const gramLeast = 1e-25

// gramWide is Gram in float64.
func gramWide(sum []float64, rows [][]float32, w []float32) {
	for q, v := range w {
		if v == 0 {
			continue
		}
		at := 0
		for a := range rows {
			p := float64(v) * float64(rows[a][q])
			for _, row := range rows[a:] {
				sum[at] += float64(p * float64(row[q]))
				at++
			}
		}
	}
}

func weighPlain(a, b, row, w []float32) {
	a, b, row = a[:len(w)], b[:len(w)], row[:len(w)]
	for i, v := range w {
		r := row[i]
		if v == 0 {
			r = 0
		}
		b[i] = r
		a[i] = v * r
	}
}

func gramBlockPlain(acc *gramLanes, a, b *[MostRows * gramPoints]float32, tiles, n int) {
	at := 0
	for i := range tiles {
		for j := i; j < tiles; j++ {
			for k := range 9 {
				x, y := a[gramPoints*(3*i+k/3):][:n], b[gramPoints*(3*j+k%3):][:n]
				var s0, s1, s2, s3, s4, s5, s6, s7 float32
				for len(x) >= 8 && len(y) >= 8 {
					s0 += float32(x[0] * y[0])
					s1 += float32(x[1] * y[1])
					s2 += float32(x[2] * y[2])
					s3 += float32(x[3] * y[3])
					s4 += float32(x[4] * y[4])
					s5 += float32(x[5] * y[5])
					s6 += float32(x[6] * y[6])
					s7 += float32(x[7] * y[7])
					x, y = x[8:], y[8:]
				}
				s := &acc[at][k]
				s[0] = s[0] + float64(s0) + float64(s4)
				s[1] = s[1] + float64(s1) + float64(s5)
				s[2] = s[2] + float64(s2) + float64(s6)
				s[3] = s[3] + float64(s3) + float64(s7)
			}
			at++
		}
	}
}
