package kernel

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

func rampRows(dst, src []float32, start, step, least float32) [][]float32 {
	sum, over := slices.Clone(dst), slices.Clone(dst)
	AddRamp(sum, src, start, step)
	OverRamp(over, src, start, step, least)
	return [][]float32{sum, over}
}

func TestRampTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := random(rapid.Uint64().Draw(t, "seed"))
		n := rapid.IntRange(0, 80).Draw(t, "n")
		dst, src := noise(r, n), noise(r, n)
		for i := range src {
			if i%11 == 7 {
				src[i] = float32(math.NaN())
			}
		}
		// A factor that runs down past the least, and no number.
		start := rapid.SampledFrom([]float32{1.1, 0.2, -1, float32(math.NaN())}).Draw(t, "start")
		both(t, func() [][]float32 { return rampRows(dst, src, start, -0.01, 1e-3) })
	})
}

// Against float64: three roundings at factors below 2 are 3 x 2^-23 < 4e-7, of which
// the quotient, by factors above a tenth, may show a hundredfold.
func TestRampAgainstDirect(t *testing.T) {
	r := random(4)
	dst, src := noise(r, 101), noise(r, 101)
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		out := rampRows(dst, src, 1.1, -0.01, 0.125)
		SetPlain(was)
		for i := range dst {
			f := 1.1 - 0.01*float64(i)
			if want, got := float64(dst[i])+f*float64(src[i]), float64(out[0][i]); math.Abs(got-want) > 4e-7 {
				t.Errorf("plain %v, sum %d: %g, want %g", plain, i, got, want)
			}
			if want, got := float64(src[i])/math.Max(f, 0.125), float64(out[1][i]); math.Abs(got-want) > 4e-5 {
				t.Errorf("plain %v, quotient %d: %g, want %g", plain, i, got, want)
			}
		}
	}
}

// What lies past a row is neither read (the page ends) nor written.
func TestRampStaysInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for n := 1; n < 20; n++ {
			r := random(uint64(n))
			dst, over, src := fenced(t, noise(r, n), front), fenced(t, make([]float32, n), front), fenced(t, noise(r, n), front)
			was := slices.Clone(dst)
			both(t, func() [][]float32 {
				copy(dst, was)
				AddRamp(dst, src, 1, 0.1)
				OverRamp(over, src, 1, 0.1, 1e-3)
				return [][]float32{slices.Clone(dst), slices.Clone(over)}
			})
		}
	}
}

func TestSameBytesRamp(t *testing.T) {
	r := random(6)
	dst, src := noise(r, 1001), noise(r, 1001)
	sameBytes(t, "10ace8316d34a0a9", func() [][]float32 { return rampRows(dst, src, 1.1, -0.002, 1e-3) })
}
