package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

func gramRows(seed uint64, m, n int) (rows [][]float32, w []float32) {
	r := random(seed)
	for range m {
		rows = append(rows, noise(r, n))
	}
	w = fractions(r, n)
	for i := range w {
		if i%5 == 2 {
			w[i] = 0
			for _, row := range rows {
				row[i] = float32(math.NaN())
			}
		}
	}
	return rows, w
}

// split turns float64 sums to pairs of float32 with the same bits, to be compared.
func split(v []float64) []float32 {
	var out []float32
	for _, x := range v {
		u := math.Float64bits(x)
		out = append(out, math.Float32frombits(uint32(u)), math.Float32frombits(uint32(u>>32)))
	}
	return out
}

func gramSums(rows [][]float32, w []float32) func() [][]float32 {
	return func() [][]float32 {
		sum := make([]float64, len(rows)*(len(rows)+1)/2)
		for i := range sum {
			sum[i] = 1
		}
		Gram(sum, rows, w)
		return [][]float32{split(sum)}
	}
}

func TestGramTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		rows, w := gramRows(rapid.Uint64().Draw(t, "seed"), rapid.IntRange(0, MostRows).Draw(t, "rows"), rapid.IntRange(0, 300).Draw(t, "points"))
		both(t, gramSums(rows, w))
	})
}

// Against compensated sums (Neumaier 1974, ZAMM 54:39-51). Two products and fifteen sums in
// float32 err by 17 x 2^-24 of the sum of sizes, 1.1e-6, at the very most; they seldom
// conspire.
func TestGramAgainstDirect(t *testing.T) {
	for _, c := range [][2]int{{1, 1}, {2, 3}, {3, 64}, {4, 65}, {7, 127}, {10, 1000}, {11, 999}, {12, 100000}} {
		rows, w := gramRows(uint64(c[1]), c[0], c[1])
		for _, plain := range []bool{true, false} {
			was := SetPlain(plain)
			sum := make([]float64, c[0]*(c[0]+1)/2)
			Gram(sum, rows, w)
			SetPlain(was)
			at := 0
			for a := range rows {
				for b := a; b < len(rows); b++ {
					want, rest, size := 0.0, 0.0, 0.0
					for i, wt := range w {
						if wt == 0 {
							continue
						}
						x := float64(wt) * float64(rows[a][i]) * float64(rows[b][i])
						size += math.Abs(x)
						s := want + x
						if math.Abs(want) > math.Abs(x) {
							rest += want - s + x
						} else {
							rest += x - s + want
						}
						want = s
					}
					want += rest
					if !(math.Abs(sum[at]-want) <= 3e-7*size) {
						t.Errorf("%d rows, %d points, plain %v, (%d,%d): %g, want %g", c[0], c[1], plain, a, b, sum[at], want)
					}
					at++
				}
			}
		}
	}
}

// Squares of what float32 holds need not be in its range: sums are those of rows of usual
// size, by a power of two.
func TestGramRange(t *testing.T) {
	rows, w := gramRows(8, 7, 400)
	usual := make([]float64, 28)
	Gram(usual, rows, w)
	for _, e := range []int{-110, -90, -70, 62, 70, 110} {
		rows, _ := gramRows(8, 7, 400)
		for _, row := range rows {
			for i, v := range row {
				row[i] = float32(math.Ldexp(float64(v), e))
			}
		}
		sum := make([]float64, len(usual))
		Gram(sum, rows, w)
		for i, v := range sum {
			v = math.Ldexp(v, -2*e)
			if want := usual[i]; !(math.Abs(v-want) <= 3e-7*400) { // as in TestGramAgainstDirect, of products below one
				t.Errorf("2^%d: sum %d is %g, want %g", e, i, v, want)
			}
		}
	}
}

func TestGramStaysInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for n := 1; n < 70; n++ {
			rows, w := gramRows(1, 4, n)
			for r := range rows {
				rows[r] = fenced(t, rows[r], front)
			}
			both(t, gramSums(rows, fenced(t, w, front)))
		}
	}
}

func TestSameBytesGram(t *testing.T) {
	rows, w := gramRows(3, 11, 1003)
	sameBytes(t, "a4ec50c5c3e5b9b2", gramSums(rows, w))
}

func BenchmarkGram(b *testing.B) {
	for _, m := range []int{8, 11} {
		const n = 40000
		r := random(1)
		var rows [][]float32
		for range m {
			rows = append(rows, noise(r, n))
		}
		w, sum := fractions(r, n), make([]float64, m*(m+1)/2)
		for _, plain := range []bool{false, true} {
			b.Run(fmt.Sprintf("%d/%s", m, map[bool]string{false: "asm", true: "plain"}[plain]), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				per := perItem()
				for b.Loop() {
					// In pieces, as slots come.
					for from := 0; from < n; from += 2000 {
						var part [MostRows][]float32
						for k := range rows {
							part[k] = rows[k][from : from+2000]
						}
						Gram(sum, part[:m], w[from:from+2000])
					}
				}
				per(b, n, "point")
			})
		}
	}
}
