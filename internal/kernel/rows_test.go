package kernel

import (
	"fmt"
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// rowSet is a handful of rows.
func rowSet(seed uint64, n int) func() [][]float32 {
	r := random(seed)
	var in [6][]float32
	for k := range in {
		in[k] = noise(r, n)
	}
	for i := range in[0] {
		if i%11 == 7 {
			in[0][i] = float32(math.NaN())
		}
		if i%13 == 3 {
			in[5][i] = float32(math.Copysign(0, -1))
		}
	}
	return func() [][]float32 { return elementwiseRows(in) }
}

func elementwiseRows(in [6][]float32) [][]float32 {
	n := len(in[0])
	r, w, a := make([]float32, n), slices.Clone(in[1]), make([]float32, n)
	Residual(r, in[0], in[1], in[2], in[3], in[4], [4]float32{1.1, 0.2, -0.3, 0.1})
	Tukey(w, r, 0.9)
	Abs(a, in[5])
	return [][]float32{r, w, a}
}

func TestRowsTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		both(t, rowSet(rapid.Uint64().Draw(t, "seed"), rapid.IntRange(0, 80).Draw(t, "n")))
	})
}

// Four roundings at values below 4: 4 x 2^-22 < 1e-6.
func TestRowsAgainstDirect(t *testing.T) {
	r := random(2)
	var in [6][]float32
	for k := range in {
		in[k] = noise(r, 101)
	}
	in[0][5] = float32(math.Inf(1))
	in[0][6] = float32(math.NaN())
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		out := elementwiseRows(in)
		SetPlain(was)
		for i, v := range in[0] {
			want := float64(v) - (1.1+0.2*float64(in[2][i])-0.3*float64(in[3][i])+0.1*float64(in[4][i]))*float64(in[1][i])
			if got := float64(out[0][i]); !(math.Abs(got-want) < 1e-6) && !(i == 5 && math.IsInf(got, 1)) && !(i == 6 && got != got) {
				t.Errorf("plain %v, residual %d: %g, want %g", plain, i, got, want)
			}
			u := want / 0.9
			weight := math.Max(0, 1-u*u)
			if i == 5 || i == 6 {
				weight = 0
			}
			if want, got := float64(in[1][i])*weight*weight, float64(out[1][i]); !(math.Abs(got-want) < 2e-6) {
				t.Errorf("plain %v, weight %d: %g, want %g", plain, i, got, want)
			}
			if out[2][i] != float32(math.Abs(float64(in[5][i]))) {
				t.Errorf("plain %v, abs of %g: %g", plain, in[5][i], out[2][i])
			}
		}
	}
}

// What lies past a row is neither read (the page ends) nor written.
func TestRowsStayInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for n := 1; n < 20; n++ {
			r := random(uint64(n))
			var in [6][]float32
			for k := range in {
				in[k] = fenced(t, noise(r, n), front)
			}
			both(t, func() [][]float32 {
				var out [3][]float32
				for k := range out {
					out[k] = fenced(t, make([]float32, n), front)
				}
				copy(out[1], in[1])
				Residual(out[0], in[0], in[1], in[2], in[3], in[4], [4]float32{1, 2, 3, 4})
				Tukey(out[1], out[0], 3)
				Abs(out[2], in[5])
				return out[:]
			})
		}
	}
	big := make([]float32, 40)
	Abs(big[3:14], noise(random(1), 11))
	for i, v := range big {
		if (i < 3 || i >= 14) && v != 0 {
			t.Errorf("wrote %g at %d", v, i)
		}
	}
}

func TestSameBytesRows(t *testing.T) {
	sameBytes(t, "bf69076bfd55d30c", rowSet(5, 1001))
}

func BenchmarkRows(b *testing.B) {
	const n = 4000
	r := random(1)
	var in [6][]float32
	for k := range in {
		in[k] = noise(r, n)
	}
	out, w := make([]float32, n), make([]float32, n)
	for _, plain := range []bool{false, true} {
		name := map[bool]string{false: "asm", true: "plain"}[plain]
		for k, f := range []func(){
			func() { Residual(out, in[0], in[1], in[2], in[3], in[4], [4]float32{1, 2, 3, 4}) },
			func() { Tukey(w, in[0], 3) },
			func() { Abs(out, in[0]) },
		} {
			b.Run(fmt.Sprintf("%s/%s", []string{"residual", "tukey", "abs"}[k], name), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				per := perItem()
				for b.Loop() {
					f()
				}
				per(b, n, "value")
			})
		}
	}
}
