package kernel

import (
	"fmt"
	"math"
	"math/big"
	"testing"

	"pgregory.net/rapid"
)

// rowCase is a row of points through a field.
type rowCase struct {
	f            Field
	start, step  [3]float64
	first, count int
	accept       []bool
}

func newRowCase(seed uint64, n [3]int, degree, count int) *rowCase {
	r := random(seed)
	c := &rowCase{count: count, first: r.IntN(5)}
	c.f = Field{N: n, Pad: degree/2 + 1 + r.IntN(2), Degree: degree, Mask: make([]bool, n[0]*n[1]*n[2])}
	for i := range c.f.Mask {
		c.f.Mask[i] = r.IntN(4) > 0
	}
	for a := range n {
		c.f.Lo[a], c.f.Hi[a] = 0, float64(n[a]-1)
		if r.IntN(2) == 0 {
			m := math.Max(0, math.Min(1.5, float64(n[a]-1)/2))
			c.f.Lo[a], c.f.Hi[a] = m, float64(n[a]-1)-m
		}
		c.start[a] = r.Float64()*float64(n[a]+2) - 1
		c.step[a] = (r.Float64() - 0.5) * 0.05
		if r.IntN(3) == 0 { // on samples and halfway between them
			c.start[a], c.step[a] = math.Round(2*c.start[a])/2, 0
		}
	}
	c.start[0] -= float64(c.first) + 3*r.Float64()
	c.step[0]++
	if r.IntN(2) == 0 {
		c.accept = make([]bool, count)
		for i := range c.accept {
			c.accept[i] = r.IntN(2) == 0
		}
	}
	return c
}

// run appends to points that are there already.
func (c *rowCase) run() *Sites {
	s := &Sites{Base: []int32{7}, Near: []int32{7}, Index: []int32{7}, X: []float32{7}, Y: []float32{7}, Z: []float32{7}}
	if n := c.f.Locate(s, c.start, c.step, c.first, c.count, c.accept); n != s.Len()-1 {
		panic(fmt.Sprintf("%d found, %d there", n, s.Len()-1))
	}
	return s
}

// rows are the outputs as float32 by their bits.
func (s *Sites) rows() [][]float32 {
	out := [][]float32{s.X, s.Y, s.Z}
	for _, v := range [][]int32{s.Base, s.Near, s.Index} {
		f := make([]float32, len(v))
		for i, x := range v {
			f[i] = math.Float32frombits(uint32(x))
		}
		out = append(out, f)
	}
	return out
}

// direct is what the definition says: coordinates rounded twice, all else in exact
// arithmetic.
func (c *rowCase) direct() *Sites {
	s := &Sites{Base: []int32{7}, Near: []int32{7}, Index: []int32{7}, X: []float32{7}, Y: []float32{7}, Z: []float32{7}}
	for i := range c.count {
		if c.accept != nil && !c.accept[i] {
			continue
		}
		var cell, near [3]int
		var frac [3]float32
		ok := true
		for a := range cell {
			x := c.start[a] + float64(c.step[a]*float64(c.first+i))
			if math.IsNaN(x) || x < c.f.Lo[a] || x > c.f.Hi[a] {
				ok = false
				break
			}
			at := new(big.Rat).SetFloat64(x)
			cell[a] = int(math.Floor(x))
			past := new(big.Rat).Sub(at, big.NewRat(int64(cell[a]), 1))
			frac[a], _ = past.Float32()
			near[a] = cell[a]
			if past.Cmp(big.NewRat(1, 2)) >= 0 {
				near[a]++
			}
		}
		if !ok {
			continue
		}
		v := near[0] + c.f.N[0]*(near[1]+c.f.N[1]*near[2])
		if !c.f.Mask[v] {
			continue
		}
		taps := c.f.Pad - c.f.Degree/2
		mx, my := c.f.N[0]+2*c.f.Pad, c.f.N[1]+2*c.f.Pad
		s.Base = append(s.Base, int32(cell[0]+taps+mx*(cell[1]+taps+my*(cell[2]+taps))))
		s.Near, s.Index = append(s.Near, int32(v)), append(s.Index, int32(c.first+i))
		s.X, s.Y, s.Z = append(s.X, frac[0]), append(s.Y, frac[1]), append(s.Z, frac[2])
	}
	return s
}

func TestLocateAgainstDefinition(t *testing.T) {
	found := 0
	for seed := range uint64(600) {
		n := [][3]int{{25, 9, 8}, {1, 1, 1}, {8, 2, 3}, {40, 6, 1}, {64, 30, 20}}[seed%5]
		c := newRowCase(seed, n, []int{3, 5}[seed%2], n[0]+int(seed%7))
		switch seed % 20 {
		case 17: // a hair below halfway: nearest to the cell's corner, though the fraction rounds to a half
			c.start = [3]float64{0.5 - 1e-12, 0.5 - 1e-12, 1.5 - 1e-12}
			c.step = [3]float64{1, 0, 0}
		case 19:
			c.start[seed/20%3] = math.NaN()
		}
		want := c.direct()
		found += want.Len() - 1
		for _, plain := range []bool{true, false} {
			was := SetPlain(plain)
			got := c.run()
			SetPlain(was)
			if got.Len() != want.Len() {
				t.Fatalf("seed %d, plain %v: %d points, want %d", seed, plain, got.Len()-1, want.Len()-1)
			}
			w := want.rows()
			for a, row := range got.rows() {
				for i, v := range row {
					if math.Float32bits(v) != math.Float32bits(w[a][i]) && v != w[a][i] { // 0 is -0 there
						t.Fatalf("seed %d, plain %v, output %d of point %d: %#x, want %#x", seed, plain, a, i, math.Float32bits(v), math.Float32bits(w[a][i]))
					}
				}
			}
		}
	}
	if found < 1000 {
		t.Errorf("only %d points were found: the test says little", found)
	}
}

func TestLocateTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var n [3]int
		for k := range n {
			n[k] = rapid.IntRange(1, 30).Draw(t, "n")
		}
		c := newRowCase(rapid.Uint64().Draw(t, "seed"), n, rapid.SampledFrom([]int{3, 5}).Draw(t, "degree"), rapid.IntRange(0, 50).Draw(t, "count"))
		odd := rapid.OneOf(rapid.Float64Range(-40, 40), rapid.SampledFrom([]float64{0, 1, -1, 0.5, 1e300, -1e300, math.NaN(), math.Inf(1), math.Inf(-1), math.Copysign(0, -1)}))
		for k := range n {
			if rapid.IntRange(0, 3).Draw(t, "odd") == 0 {
				c.start[k] = odd.Draw(t, "start")
			}
			if rapid.IntRange(0, 5).Draw(t, "odd") == 0 {
				c.step[k] = odd.Draw(t, "step")
			}
			if rapid.IntRange(0, 9).Draw(t, "none") == 0 {
				c.f.Lo[k], c.f.Hi[k] = float64(n[k]), float64(n[k]-1)-0.5
			}
		}
		both(t, func() [][]float32 { return c.run().rows() })
	})
}

// A part of a row gives the points that the whole gives there, and nothing outside
// mask and choices is read.
func TestLocateParts(t *testing.T) {
	for seed := range uint64(40) {
		c := newRowCase(seed, [3]int{40, 9, 8}, 5, 43)
		c.f.Mask = fenced(t, c.f.Mask, seed%2 == 0)
		if c.accept != nil {
			c.accept = fenced(t, c.accept, seed%2 == 0)
		}
		whole := c.run().rows()
		for cut := range 43 {
			a, b := *c, *c
			a.count, b.first, b.count = cut, c.first+cut, c.count-cut
			if c.accept != nil {
				a.accept, b.accept = c.accept[:cut:cut], c.accept[cut:]
			}
			left, right := a.run().rows(), b.run().rows()
			for k := range whole {
				if got := append(left[k], right[k][1:]...); digest(got) != digest(whole[k]) {
					t.Fatalf("seed %d, cut at %d, output %d: %v and %v, whole %v", seed, cut, k, left[k], right[k], whole[k])
				}
			}
		}
	}
}

// Points outside, in one register with points inside, look at no voxel.
func TestLocateStaysInMask(t *testing.T) {
	n := [3]int{11, 3, 2}
	for _, front := range []bool{false, true} {
		f := Field{N: n, Hi: [3]float64{10, 2, 1}, Mask: fenced(t, make([]bool, 11*3*2), front), Pad: 3, Degree: 5}
		for i := range f.Mask {
			f.Mask[i] = true
		}
		for _, at := range [][2]float64{{0, 0}, {2, 1}} {
			var s Sites
			if got := f.Locate(&s, [3]float64{-5, at[0], at[1]}, [3]float64{1, 0, 0}, 0, 21, nil); got != 11 {
				t.Errorf("%d points, want 11", got)
			}
			s.Reset()
			if got := f.Locate(&s, [3]float64{0, at[0], at[1]}, [3]float64{1e300, 0, 0}, 0, 21, nil); got != 1 {
				t.Errorf("%d points, want 1", got)
			}
		}
	}
}

// Once there is room, nothing is allocated.
func TestLocateKeepsMemory(t *testing.T) {
	c := newRowCase(1, [3]int{64, 9, 8}, 5, 64)
	var s Sites
	s.Grow(200)
	if n := testing.AllocsPerRun(10, func() {
		s.Reset()
		for range 3 {
			c.f.Locate(&s, c.start, c.step, c.first, c.count, c.accept)
		}
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}

func TestLocatePanics(t *testing.T) {
	for name, spoil := range map[string]func(*rowCase){
		"mask":    func(c *rowCase) { c.f.Mask = c.f.Mask[1:] },
		"limits":  func(c *rowCase) { c.f.Hi[1] = 9 },
		"below":   func(c *rowCase) { c.f.Lo[2] = -0.5 },
		"NaN":     func(c *rowCase) { c.f.Hi[0] = math.NaN() },
		"choices": func(c *rowCase) { c.accept = make([]bool, c.count-1) },
		"padding": func(c *rowCase) { c.f.Pad = 2 },
		"first":   func(c *rowCase) { c.first = -1 },
	} {
		c := newRowCase(1, [3]int{25, 9, 8}, 5, 20)
		spoil(c)
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			c.run()
		}()
	}
}

func BenchmarkLocate(b *testing.B) {
	n := [3]int{64, 64, 36}
	c := newRowCase(1, n, 5, 64)
	for i := range c.f.Mask {
		c.f.Mask[i] = true
	}
	c.f.Lo, c.f.Hi = [3]float64{}, [3]float64{63, 63, 35}
	c.start, c.step, c.first, c.accept = [3]float64{0.3, 20.2, 17.3}, [3]float64{0.9999, 0.01, -0.008}, 0, nil
	white := make([]bool, 64)
	for i := range white {
		white[i] = i%2 == 0
	}
	var s Sites
	s.Grow(64)
	for _, plain := range []bool{false, true} {
		name := map[bool]string{false: "asm", true: "plain"}[plain]
		for _, half := range []bool{false, true} {
			b.Run(fmt.Sprintf("locate/half=%v/%s", half, name), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				accept := white
				if !half {
					accept = nil
				}
				per := perItem()
				for b.Loop() {
					s.Reset()
					c.f.Locate(&s, c.start, c.step, c.first, c.count, accept)
				}
				per(b, 64, "point")
			})
		}
	}
}
