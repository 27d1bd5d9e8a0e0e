package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// timeCase is rows and weights of both interpolations.
type timeCase struct {
	w    []float64
	each [][]float64
	src  [][]float32
	like []float32
}

func newTimeCase(seed uint64, n, taps int) *timeCase {
	r := random(seed)
	c := &timeCase{like: noise(r, n)}
	for k := range taps {
		c.w = append(c.w, float64(int64(r.Uint64()>>12)-1<<51)/(1<<51))
		row := make([]float64, n)
		for i := range row {
			row[i] = float64(int64(r.Uint64()>>12)-1<<51) / (1 << 51)
			if i%9 == 4 {
				row[i] = 0
			}
		}
		c.each = append(c.each, row)
		c.src = append(c.src, noise(r, n))
		for i := range c.src[k] {
			if i%5 == 3 { // a sum of zero, of either sign
				c.src[k][i] = float32(math.Copysign(0, float64(c.like[i])))
			}
		}
	}
	return c
}

// run returns the results, and whether they are finite as a row.
func (c *timeCase) run() [][]float32 {
	a, b, finite := make([]float32, len(c.like)), make([]float32, len(c.like)), make([]float32, 2)
	if Interpolate(a, c.w, c.src, c.like) {
		finite[0] = 1
	}
	if InterpolateEach(b, c.each, c.src, c.like) {
		finite[1] = 1
	}
	return [][]float32{a, b, finite}
}

func TestInterpolateTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.OneOf(rapid.IntRange(0, 20), rapid.IntRange(0, 300)).Draw(t, "n")
		c := newTimeCase(rapid.Uint64().Draw(t, "seed"), n, rapid.IntRange(0, tapsInAssembly+2).Draw(t, "taps"))
		if n > 0 && len(c.src) > 0 && rapid.Bool().Draw(t, "spoilt") {
			i := rapid.IntRange(0, n-1).Draw(t, "at")
			c.src[rapid.IntRange(0, len(c.src)-1).Draw(t, "row")][i] = rapid.SampledFrom([]float32{
				float32(math.NaN()), float32(math.Inf(1)), float32(math.Inf(-1)), math.MaxFloat32, math.SmallestNonzeroFloat32}).Draw(t, "by")
		}
		both(t, c.run)
	})
}

// One rounding to float32 of sums below 70: 70 x 2^-24; those of float64 are nothing to it.
func TestInterpolateAgainstDirect(t *testing.T) {
	for _, size := range [][2]int{{1, 1}, {7, 16}, {70, 17}, {131, 65}} {
		n, taps := size[0], size[1]
		c := newTimeCase(uint64(n), n, taps)
		for _, plain := range []bool{true, false} {
			was := SetPlain(plain)
			out := c.run()
			SetPlain(was)
			if out[2][0] != 1 || out[2][1] != 1 {
				t.Errorf("finite values are called not finite (plain Go: %v)", plain)
			}
			for i := range n {
				s, e := 0.0, 0.0
				for k := range taps {
					s += c.w[k] * float64(c.src[k][i])
					e += c.each[k][i] * float64(c.src[k][i])
				}
				if d := math.Abs(float64(out[0][i]) - s); !(d <= 70./(1<<24)) {
					t.Errorf("%v, value %d: %g, want %g", size, i, out[0][i], s)
				}
				if d := math.Abs(float64(out[1][i]) - e); !(d <= 70./(1<<24)) {
					t.Errorf("%v, value %d: %g, want %g (own weights)", size, i, out[1][i], e)
				}
				if s == 0 && math.Signbit(float64(out[0][i])) != math.Signbit(float64(c.like[i])) {
					t.Errorf("%v, value %d: zero without the sign of %g", size, i, c.like[i])
				}
			}
			for i := range n {
				for _, v := range nan(2) {
					c := newTimeCase(uint64(n), n, taps)
					c.src[taps/2][i] = v
					c.each[taps/2][i] = 1
					was := SetPlain(plain)
					out := c.run()
					SetPlain(was)
					if out[2][0] != 0 || out[2][1] != 0 {
						t.Fatalf("%g at %d of %d is called finite (plain Go: %v)", v, i, n, plain)
					}
				}
			}
		}
	}
}

func TestInterpolateStaysInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for n := 1; n < 40; n++ {
			c := newTimeCase(uint64(n), n, 3)
			c.like = fenced(t, c.like, front)
			for k := range c.src {
				c.src[k] = fenced(t, c.src[k], front)
			}
			both(t, func() [][]float32 {
				out := fenced(t, make([]float32, n), front)
				Interpolate(out, c.w, c.src, c.like)
				each := fenced(t, make([]float32, n), front)
				InterpolateEach(each, c.each, c.src, c.like)
				return [][]float32{out, each}
			})
		}
	}
}

// A row may be written over itself.
func TestInterpolateInPlace(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		c := newTimeCase(3, 301, 5)
		want := c.run()[0]
		Interpolate(c.src[2], c.w, c.src, c.like)
		if digest(c.src[2]) != digest(want) {
			t.Errorf("in place differs (plain Go: %v)", plain)
		}
		SetPlain(was)
	}
}

func TestSameBytesInterpolate(t *testing.T) {
	sameBytes(t, "ef38ec51f1949701", newTimeCase(5, 1001, 17).run)
}

func BenchmarkInterpolate(b *testing.B) {
	const n = 512
	for _, taps := range []int{16, 24, 64} {
		c := newTimeCase(1, n, taps)
		out := make([]float32, n)
		for _, plain := range []bool{false, true} {
			for _, each := range []bool{false, true} {
				b.Run(fmt.Sprintf("%s/%s/%d", map[bool]string{false: "one", true: "each"}[each], map[bool]string{false: "asm", true: "plain"}[plain], taps), func(b *testing.B) {
					defer SetPlain(SetPlain(plain))
					per := perItem()
					for b.Loop() {
						if each {
							InterpolateEach(out, c.each, c.src, c.like)
						} else {
							Interpolate(out, c.w, c.src, c.like)
						}
					}
					per(b, n, "value")
				})
			}
		}
	}
}
