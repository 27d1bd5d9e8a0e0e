package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// affineCase is a line through a field.
type affineCase struct {
	degree      int
	n           [3]int
	pad         int
	c           []float32
	start, step [3]float64
	length      int
}

func newAffine(seed uint64, degree int, n [3]int, pad, length int) *affineCase {
	r := random(seed)
	a := &affineCase{degree: degree, n: n, pad: pad, length: length}
	a.c = append(noise(r, (n[0]+2*pad)*(n[1]+2*pad)*(n[2]+2*pad)), nan(Slack)...)
	for k := range n {
		a.start[k] = r.Float64()*float64(n[k]+2) - 2
		a.step[k] = (r.Float64() - 0.5) * 0.05
	}
	a.step[0]++
	return a
}

func (a *affineCase) run() [][]float32 {
	dst := nan(a.length)
	a.into(dst)
	return [][]float32{dst}
}

func (a *affineCase) into(dst []float32) {
	if a.degree == 5 {
		AffineRow5(dst, a.c, a.n, a.pad, a.start, a.step)
	} else {
		AffineRow3(dst, a.c, a.n, a.pad, a.start, a.step)
	}
}

// direct is output i by the definition.
func (a *affineCase) direct(i int) float64 {
	var at [3]float64
	for k := range at {
		at[k] = math.Min(math.Max(a.start[k]+float64(i)*a.step[k], 0), float64(a.n[k]-1))
	}
	mx, my := a.n[0]+2*a.pad, a.n[1]+2*a.pad
	sum := 0.0
	for z := range a.n[2] + 2*a.pad {
		wz := bspline(a.degree, at[2]-float64(z-a.pad))
		if wz == 0 {
			continue
		}
		for y := range my {
			wy := bspline(a.degree, at[1]-float64(y-a.pad))
			if wy == 0 {
				continue
			}
			for x := range mx {
				if wx := bspline(a.degree, at[0]-float64(x-a.pad)); wx > 1e-12 {
					sum += wx * wy * wz * float64(a.c[x+mx*(y+my*z)])
				}
			}
		}
	}
	return sum
}

// As for points: coefficients below 1, weights that sum to 1, some 20 roundings; and
// the fraction is rounded to 2^-25 at slopes below 3.
func TestAffineRowAgainstDefinition(t *testing.T) {
	for _, degree := range []int{3, 5} {
		worst := 0.0
		for seed := range uint64(12) {
			a := newAffine(seed, degree, [3]int{25, 9, 8}, degree/2+1+int(seed%2), 32)
			switch seed {
			case 9: // backwards
				a.start, a.step = [3]float64{24.5, 3, 4}, [3]float64{-1, 0.02, 0}
			case 10: // across
				a.start, a.step = [3]float64{3.2, 0, 4}, [3]float64{0.01, 1.01, 0.3}
			case 11: // from sample to sample
				a.start, a.step = [3]float64{0, 3, 4}, [3]float64{1, 0, 0}
			}
			for _, plain := range []bool{true, false} {
				was := SetPlain(plain)
				out := a.run()[0]
				SetPlain(was)
				for i, v := range out {
					want := a.direct(i)
					worst = math.Max(worst, math.Abs(float64(v)-want))
					if !(math.Abs(float64(v)-want) < 1.5e-6) {
						t.Fatalf("degree %d, seed %d, plain %v, output %d: %g, want %g", degree, seed, plain, i, v, want)
					}
				}
			}
		}
		t.Logf("degree %d: worst error %.2g", degree, worst)
	}
}

func TestAffineRowTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		degree := rapid.SampledFrom([]int{3, 5}).Draw(t, "degree")
		var n [3]int
		for k := range n {
			n[k] = rapid.IntRange(1, 30).Draw(t, "n")
		}
		a := newAffine(rapid.Uint64().Draw(t, "seed"), degree, n, rapid.IntRange(degree/2+1, 4).Draw(t, "pad"), rapid.IntRange(0, 50).Draw(t, "length"))
		odd := rapid.OneOf(rapid.Float64Range(-40, 40), rapid.SampledFrom([]float64{0, 1, -1, 0.5, 1e300, -1e300, math.NaN(), math.Inf(1), math.Inf(-1), math.Copysign(0, -1)}))
		for k := range n {
			if rapid.IntRange(0, 3).Draw(t, "odd") == 0 {
				a.start[k] = odd.Draw(t, "start")
			}
			if rapid.IntRange(0, 5).Draw(t, "odd") == 0 {
				a.step[k] = odd.Draw(t, "step")
			}
		}
		both(t, a.run)
	})
}

// An output depends on its coordinate alone: not on the length of the row, nor on
// what its neighbours are.
func TestAffineRowIsPointwise(t *testing.T) {
	for _, degree := range []int{3, 5} {
		a := newAffine(3, degree, [3]int{40, 9, 8}, 3, 40)
		whole := a.run()[0]
		for a.length = 1; a.length < 40; a.length++ {
			for i, v := range a.run()[0] {
				if v != whole[i] {
					t.Fatalf("degree %d, length %d, output %d: %g, alone %g", degree, a.length, i, v, whole[i])
				}
			}
		}
	}
}

// Coefficients that no tap of a point touches may be NaN.
func TestAffineRowContainsNaN(t *testing.T) {
	for _, degree := range []int{3, 5} {
		a := newAffine(3, degree, [3]int{30, 9, 8}, 3, 30)
		a.start, a.step = [3]float64{0.3, 4.2, 3.1}, [3]float64{1, 0.01, 0}
		whole := a.run()[0]
		hit := 15 + 3 // sample 15
		for z := range 14 {
			for y := range 15 {
				a.c[hit+36*(y+15*z)] = float32(math.NaN())
			}
		}
		for i, v := range a.run()[0] {
			// Outputs whose first to last tap take in sample 15.
			touched := i-degree/2 <= 15 && 15 <= i+degree/2+1
			if touched != (v != v) || !touched && v != whole[i] {
				t.Errorf("degree %d, output %d: %g, without NaN %g", degree, i, v, whole[i])
			}
		}
	}
}

func TestAffineRowStaysInside(t *testing.T) {
	for _, degree := range []int{3, 5} {
		for _, front := range []bool{false, true} {
			for seed := range uint64(40) {
				a := newAffine(seed, degree, [3]int{9, 4, 3}, degree/2+1, int(seed)%19+1)
				if seed%2 == 0 { // into the last corner
					a.start = [3]float64{float64(seed) / 4, 3, 2}
				}
				a.c = fenced(t, a.c, front)
				dst := fenced(t, make([]float32, a.length), front)
				both(t, func() [][]float32 { a.into(dst); return [][]float32{append([]float32(nil), dst...)} })
			}
		}
	}
}

func TestAffineRowRefuses(t *testing.T) {
	for name, f := range map[string]func(a *affineCase){
		"no slack":   func(a *affineCase) { a.c = a.c[:len(a.c)-1] },
		"no padding": func(a *affineCase) { a.pad = 2; a.c = make([]float32, 14*14*14+Slack) },
		"no samples": func(a *affineCase) { a.n[1] = 0 },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			a := newAffine(1, 5, [3]int{10, 10, 10}, 3, 10)
			f(a)
			a.run()
		}()
	}
}

func TestSameBytesAffineRow(t *testing.T) {
	for _, c := range []struct {
		degree int
		want   string
	}{{3, "4923586bf26bb894"}, {5, "0e41fe7340e856d2"}} {
		sameBytes(t, c.want, func() [][]float32 {
			var out [][]float32
			for seed := range uint64(40) {
				a := newAffine(seed, c.degree, [3]int{32, 12, 11}, 3, 33)
				if seed >= 20 { // on sample 1 if the product is rounded, else just before or after
					a.start[0] = 1 - float64(a.step[0]*float64(seed-15))
				}
				out = append(out, a.run()...)
			}
			return out
		})
	}
}

func FuzzAffineRow(f *testing.F) {
	f.Add(uint64(1), uint8(9), uint8(8), uint8(7), uint8(3), true, 1.5, 1.01, 0.01)
	f.Fuzz(func(t *testing.T, seed uint64, nx, ny, nz, length uint8, quintic bool, start, step, tilt float64) {
		n := [3]int{int(nx)%40 + 1, int(ny)%20 + 1, int(nz)%20 + 1}
		degree := 3
		if quintic {
			degree = 5
		}
		a := newAffine(seed, degree, n, 3, int(length))
		a.start[0], a.step[0], a.step[1] = start, step, tilt
		both(t, a.run)
	})
}

// BenchmarkAffineRow resamples a volume shifted and turned by a little and by as much
// as a head turns in a bad run: the more a row climbs, the shorter its runs of cells.
func BenchmarkAffineRow(b *testing.B) {
	n := [3]int{64, 64, 36}
	for _, degree := range []int{3, 5} {
		for _, turn := range []float64{0.003, 0.015} {
			a := newAffine(1, degree, n, 3, n[0])
			dst := make([]float32, n[0])
			for _, plain := range []bool{false, true} {
				b.Run(fmt.Sprintf("%d/%g/%s", degree, turn, map[bool]string{false: "asm", true: "plain"}[plain]), func(b *testing.B) {
					defer SetPlain(SetPlain(plain))
					per := perItem()
					for b.Loop() {
						for k := range n[2] {
							for j := range n[1] {
								y, z := float64(j), float64(k)
								a.start = [3]float64{0.3 - turn*y + turn/4*z, 0.4 + y - turn*z, -0.2 + turn*y + z}
								a.step = [3]float64{0.9998, turn, -turn * 2 / 3}
								a.into(dst)
							}
						}
					}
					per(b, n[0]*n[1]*n[2], "output")
				})
			}
		}
	}
}

// A plane is a field of one sample along z: weights there sum to 1, to the rounding of six
// terms, at values below 1.
func TestFlatRow(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		degree := rapid.SampledFrom([]int{3, 5}).Draw(t, "degree")
		n := [3]int{rapid.IntRange(1, 40).Draw(t, "nx"), rapid.IntRange(1, 40).Draw(t, "ny"), 1}
		const pad = 3
		p := NewPrefilter(n, degree, pad)
		m := p.Size()
		plane := noise(random(rapid.Uint64().Draw(t, "seed")), n[0]*n[1])
		solid, flat := nan(m[0]*m[1]*m[2]+Slack), nan(m[0]*m[1]+Slack)
		p.Run(solid, plane)
		p.RunFlat(flat, plane)
		for i, v := range flat[:m[0]*m[1]] {
			if v != solid[m[0]*m[1]*pad+i] {
				t.Fatalf("coefficient %d: %g, in a field %g", i, v, solid[m[0]*m[1]*pad+i])
			}
		}
		r := random(rapid.Uint64().Draw(t, "line"))
		var start, step [2]float64
		for a := range start {
			start[a], step[a] = r.Float64()*float64(n[a]+4)-2, (r.Float64()-0.5)*0.1
			if r.IntN(10) == 0 {
				start[a] = []float64{math.NaN(), math.Inf(1), 1e300, 0}[r.IntN(4)]
			}
		}
		step[r.IntN(2)]++
		length := r.IntN(50)
		both(t, func() [][]float32 {
			got, want := nan(length), nan(length)
			FlatRow(got, flat, [2]int(n[:2]), pad, start, step, degree)
			a := affineCase{degree: degree, n: n, pad: pad, c: solid, start: [3]float64{start[0], start[1], 0}, step: [3]float64{step[0], step[1], 0}}
			a.into(want)
			for i, w := range want {
				if !(math.Abs(float64(got[i]-w)) < 4e-6) { // coefficients up to 12 times a value
					panic(fmt.Sprintf("output %d: %g, in a field %g", i, got[i], w))
				}
			}
			return [][]float32{got}
		})
	})
}

func TestFlatRowStaysInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for _, degree := range []int{3, 5} {
			n := [2]int{9, 7}
			c := fenced(t, append(noise(random(1), 15*13), nan(Slack)...), front)
			for length := 1; length < 20; length++ {
				dst := fenced(t, make([]float32, length), front)
				FlatRow(dst, c, n, 3, [2]float64{-3, 5.5}, [2]float64{1, 0.1}, degree)
				FlatRow(dst, c, n, 3, [2]float64{8, 6}, [2]float64{-1, -0.4}, degree)
			}
		}
	}
}
