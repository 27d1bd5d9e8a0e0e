package kernel

import (
	"fmt"
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// firCase is rows and taps for all filters.
type firCase struct {
	n    int
	h    []float32
	rows [][]float32 // for Symmetric
	line []float32
	old  []float32
}

func newFIR(seed uint64, n, reach int) *firCase {
	r := random(seed)
	c := &firCase{n: n, h: noise(r, reach+1), line: noise(r, n+2*reach), old: noise(r, n)}
	for range 2*reach + 1 {
		c.rows = append(c.rows, noise(r, n))
	}
	return c
}

func (c *firCase) run() [][]float32 {
	var out [2][]float32
	for k := range out {
		out[k] = slices.Clone(c.old)
	}
	c.into(out[:])
	return out[:]
}

func (c *firCase) into(out [][]float32) {
	Symmetric(out[0], c.h, c.rows)
	SymmetricLine(out[1], c.h, c.line)
}

func TestFIRTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.OneOf(rapid.IntRange(0, 20), rapid.IntRange(0, 200)).Draw(t, "n")
		c := newFIR(rapid.Uint64().Draw(t, "seed"), n, rapid.IntRange(0, MostReach).Draw(t, "reach"))
		for i := range c.old {
			if i%7 == 2 {
				c.old[i], c.line[i] = float32(math.Copysign(0, -1)), float32(math.NaN())
			}
		}
		both(t, c.run)
	})
}

// Up to 65 terms below 2: sums of signs that differ stay below 32, and 130 roundings of
// 2^-19 that do not line up add to some 12 x 2^-20 = 1e-5.
func TestFIRAgainstDirect(t *testing.T) {
	for _, size := range [][2]int{{1, 0}, {7, 3}, {70, 16}, {131, 32}} {
		c := newFIR(uint64(size[0]), size[0], size[1])
		for _, plain := range []bool{true, false} {
			was := SetPlain(plain)
			out := c.run()
			SetPlain(was)
			for i := range c.n {
				var want [2]float64
				r := size[1]
				for k := -r; k <= r; k++ {
					w := float64(c.h[max(k, -k)])
					want[0] += w * float64(c.rows[r+k][i])
					want[1] += w * float64(c.line[i+r+k])
				}
				for k, w := range want {
					if d := math.Abs(float64(out[k][i]) - w); !(d < 1e-5) {
						t.Errorf("size %v, plain %v, output %d, value %d: %g, want %g", size, plain, k, i, out[k][i], w)
					}
				}
			}
		}
	}
}

func TestFIRStaysInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for _, n := range []int{1, 2, 7, 8, 9, 31, 33, 63, 65, 76} {
			c := newFIR(uint64(n), n, 4)
			c.h, c.line = fenced(t, c.h, front), fenced(t, c.line, front)
			for k := range c.rows {
				c.rows[k] = fenced(t, c.rows[k], front)
			}
			var out [2][]float32
			for k := range out {
				out[k] = fenced(t, c.old, front)
			}
			both(t, func() [][]float32 {
				for k := range out {
					copy(out[k], c.old)
				}
				c.into(out[:])
				var got [][]float32
				for _, o := range out {
					got = append(got, slices.Clone(o))
				}
				return got
			})
		}
	}
}

func TestSameBytesFIR(t *testing.T) {
	sameBytes(t, "04ac275a3a58949e", newFIR(9, 1003, 12).run)
}

// No kernel allocates, whichever twin runs.
func TestNothingIsAllocated(t *testing.T) {
	c := newFIR(1, 100, 8)
	var out [6][]float32
	for k := range out {
		out[k] = make([]float32, c.n)
	}
	rows, w := gramRows(1, 8, 100)
	sum := make([]float64, 36)
	a := newAffine(1, 5, [3]int{20, 8, 8}, 3, 20)
	dst := make([]float32, 20)
	s := newPoints(1, 5, [3]int{10, 10, 10}, 30)
	v := make([]float32, 30)
	p := NewPrefilter([3]int{11, 10, 9}, 5, 3)
	vol, coefficients := make([]float32, 990), make([]float32, 17*16*15)
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		n := testing.AllocsPerRun(5, func() {
			c.into(out[:])
			Gram(sum, rows, w)
			a.into(dst)
			Value5(v, s.c, 10, 100, s.base, s.tx, s.ty, s.tz)
			p.Run(coefficients, vol)
			Residual(out[0], out[1], out[2], out[3], out[4], out[5], [4]float32{1})
			Tukey(out[0], out[1], 1)
			Abs(out[0], out[1])
		})
		SetPlain(was)
		if n != 0 {
			t.Errorf("plain %v: %g allocations", plain, n)
		}
	}
}

func BenchmarkFIR(b *testing.B) {
	const n = 4096
	c := newFIR(1, n, 6)
	dst := make([]float32, n)
	for _, plain := range []bool{false, true} {
		name := map[bool]string{false: "asm", true: "plain"}[plain]
		for k, f := range []func(){
			func() { Symmetric(dst, c.h, c.rows) },
			func() { SymmetricLine(dst[:70], c.h, c.line[:82]) },
		} {
			items := []int{n, 70}[k]
			b.Run(fmt.Sprintf("%s/%s", []string{"symmetric6", "line6"}[k], name), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				per := perItem()
				for b.Loop() {
					f()
				}
				per(b, items, "value")
			})
		}
	}
}
