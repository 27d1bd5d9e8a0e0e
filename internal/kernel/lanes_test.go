package kernel

import (
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// someLanes are n samples of values between -1 and 1; with odd, some are none, zeros
// of either sign, or large, each lane by itself.
func someLanes(seed uint64, n int, odd bool) []Lanes {
	r := random(seed)
	x := make([]Lanes, n)
	for t := range x {
		for l, v := range noise(r, LaneCount) {
			x[t][l] = float64(v)
			if odd {
				switch r.Uint32() % 200 {
				case 0:
					x[t][l] = math.NaN()
				case 1:
					x[t][l] = math.Inf(1)
				case 2:
					x[t][l] = math.Copysign(0, -1)
				case 3:
					x[t][l] = 1e38
				}
			}
			if seed%3 == 0 && l == 5 {
				x[t][l] = 0
			}
		}
	}
	return x
}

// bothLanes runs f as assembly and in plain Go and compares what it returns bit by bit.
func bothLanes(tb interface {
	Helper()
	Fatalf(string, ...any)
}, f func() []Lanes) {
	tb.Helper()
	defer SetPlain(SetPlain(true))
	want := f()
	SetPlain(false)
	got := f()
	if len(got) != len(want) {
		tb.Fatalf("%d samples in plain Go, %d in assembly", len(want), len(got))
	}
	for t := range want {
		for l, v := range want[t] {
			if w := got[t][l]; math.Float64bits(w) != math.Float64bits(v) && !(w != w && v != v) {
				tb.Fatalf("sample %d of %d, lane %d: %g (%#x) in assembly, %g (%#x) in plain Go", t, len(want), l, w, math.Float64bits(w), v, math.Float64bits(v))
			}
		}
	}
}

func digestLanes(x []Lanes) string {
	var rows []float32
	for _, v := range x {
		for _, f := range v {
			b := math.Float64bits(f)
			if f != f {
				b = 0x7ff8 << 48
			}
			for s := range 4 {
				rows = append(rows, float32(b>>(16*s)&0xffff))
			}
		}
	}
	return digest(rows)
}

// all is what every function on lanes makes of x.
func all(x []Lanes, q int) (out []Lanes) {
	n := len(x)
	line := slices.Clone(x)
	var level, slope, top Lanes
	Line(line, &level, &slope, &top)
	out = append(append(out, line...), level, slope, top)

	w := make([]float64, n/2)
	for k := range w {
		w[k] = x[k][3]
	}
	var sum Lanes
	SumLanes(&sum, w, x)
	out = append(out, sum)

	if n > 2*q {
		var s Autoregression
		s.Fit(line, q, .01)
		out = append(out, s.coef[:q]...)
		longer := append(slices.Clone(line), make([]Lanes, 9)...)
		s.Forward(longer, n, &top)
		out = append(out, longer...)
		both := append(make([]Lanes, 5), longer[:n+5]...)
		s.Outward(both, n, &top)
		out = append(out, both...)
	}

	const stride = 11
	narrow := make([]float32, stride*n)
	NarrowLanes(narrow, stride, x, &level, &slope, 2.5, -.3)
	wide := make([]Lanes, n)
	WidenLanes(wide, narrow, stride)
	return append(out, wide...)
}

func TestLanesTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := someLanes(rapid.Uint64().Draw(t, "seed"), rapid.IntRange(1, 60).Draw(t, "n"), rapid.Bool().Draw(t, "odd"))
		q := rapid.SampledFrom([]int{1, 3, MostOrder, MostOrder, MostOrder}).Draw(t, "q")
		bothLanes(t, func() []Lanes { return all(slices.Clone(x), q) })
	})
}

func TestSameBytesLanes(t *testing.T) {
	x := someLanes(1, 201, true)
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		got := digestLanes(all(slices.Clone(x), MostOrder))
		SetPlain(was)
		if want := "ef007784a25c99f0"; got != want {
			t.Errorf("digest %s, recorded %s (plain Go: %v)", got, want, plain)
		}
	}
}

// A sum of squares has its least where it says: no coefficient can be moved without
// loss. A pure tone is predicted by two coefficients, exactly but for the ridge.
func TestAutoregression(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		x := someLanes(4, 60, false)
		var s Autoregression
		const share = .01
		s.Fit(x, MostOrder, share)
		for l := range LaneCount {
			diagonal := 0.0
			loss := func(a [MostOrder]float64) (sum float64) {
				diagonal = 0
				for t := MostOrder; t < len(x); t++ {
					f, b := x[t][l], x[t-MostOrder][l]
					for k, c := range a {
						f -= c * x[t-1-k][l]
						b -= c * x[t-MostOrder+1+k][l]
						diagonal += x[t-1-k][l]*x[t-1-k][l] + x[t-MostOrder+1+k][l]*x[t-MostOrder+1+k][l]
					}
					sum += f*f + b*b
				}
				for _, c := range a {
					sum += share * diagonal / MostOrder * c * c
				}
				return sum
			}
			var a [MostOrder]float64
			for k := range a {
				a[k] = s.coef[k][l]
			}
			least := loss(a)
			for k := range a {
				for _, d := range []float64{-1e-3, 1e-3} {
					b := a
					b[k] += d
					// The loss rises by the curvature, some 80 times d^2.
					if more := loss(b) - least; !(more > 1e-6) {
						t.Errorf("plain %v, lane %d, coefficient %d: moved by %g the loss grows by %g", plain, l, k, d, more)
					}
				}
				b, c := a, a
				b[k] -= 1e-3
				c[k] += 1e-3
				// At the least of a parabola both sides rise alike.
				if d := loss(b) - loss(c); !(math.Abs(d) < 1e-11) {
					t.Errorf("plain %v, lane %d, coefficient %d: not at the least, sides differ by %g", plain, l, k, d)
				}
			}
		}
		tone := make([]Lanes, 90)
		for i := range 60 {
			for l := range LaneCount {
				tone[30+i-15][l] = math.Sin(.3*float64(l+1)*float64(i) + float64(l))
			}
		}
		s.Fit(tone[15:75], MostOrder, 1e-12)
		limit := Lanes{2, 2, 2, 2, 2, 2, 2, 2}
		s.Outward(tone, 60, &limit)
		for i := range tone {
			for l := range LaneCount {
				if want := math.Sin(.3*float64(l+1)*float64(i-15) + float64(l)); math.Abs(tone[i][l]-want) > 1e-6 {
					t.Fatalf("plain %v, lane %d, sample %d: %g, want %g", plain, l, i-15, tone[i][l], want)
				}
			}
		}
		SetPlain(was)
	}
}

func TestLine(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		x := make([]Lanes, 31)
		for i := range x {
			for l := range x[i] {
				x[i][l] = float64(l+1) + .25*float64(l)*float64(i-15)
			}
		}
		x[10][0] += 3 // residuals are then known by the worked formula
		var level, slope, top Lanes
		Line(x, &level, &slope, &top)
		for l := 1; l < LaneCount; l++ {
			if level[l] != float64(l+1) || slope[l] != .25*float64(l) || top[l] != 0 {
				t.Errorf("plain %v, lane %d: level %g, slope %g, top %g", plain, l, level[l], slope[l], top[l])
			}
		}
		// 3/31 in level, 3 (10-15)/(31 (31^2-1)/12 = 2480) in slope.
		if a, b := level[0]-1-3./31, slope[0]+15./2480; math.Abs(a) > 1e-15 || math.Abs(b) > 1e-15 {
			t.Errorf("plain %v: level off by %g, slope by %g", plain, a, b)
		}
		if want := 3 - 3./31 - 75./2480; math.Abs(top[0]-want) > 1e-14 {
			t.Errorf("plain %v: top %g, want %g", plain, top[0], want)
		}
		SetPlain(was)
	}
}

// What overshoots float32 is held, and nothing is written past a row's eight values.
func TestNarrowLanes(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		dst := slices.Repeat([]float32{7}, 20)
		NarrowLanes(dst[1:18], 9, []Lanes{{1e39, -1e39, 1, math.NaN(), math.Inf(1), 3e38}, {1}}, &Lanes{1}, &Lanes{2}, .5, 10)
		want := []float32{7, math.MaxFloat32, -math.MaxFloat32, 1, float32(math.NaN()), math.MaxFloat32, 3e38, 0, 0, 7, 1 + 2*10.5 + 1, 0, 0, 0, 0, 0, 0, 0, 7, 7}
		for i, v := range want {
			if dst[i] != v && !(v != v && dst[i] != dst[i]) {
				t.Errorf("plain %v, value %d: %g, want %g", plain, i, dst[i], v)
			}
		}
		SetPlain(was)
	}
}

func twiddles(radix, q int) (w []float64) {
	for j := range q {
		for i := 1; i < radix; i++ {
			f := cmplx.Rect(1, -2*math.Pi*float64(i*j)/float64(radix*q))
			// Of 30 bits, so that no digest or product hangs on the library.
			w = append(w, math.Round(real(f)*(1<<30))/(1<<30), math.Round(imag(f)*(1<<30))/(1<<30))
		}
	}
	return w
}

func TestButterflyTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		radix, q, blocks := rapid.IntRange(2, 4).Draw(t, "radix"), rapid.IntRange(1, 9).Draw(t, "q"), rapid.IntRange(0, 4).Draw(t, "blocks")
		z := someLanes(rapid.Uint64().Draw(t, "seed"), 2*radix*q*blocks, rapid.Bool().Draw(t, "odd"))
		inverse := rapid.Bool().Draw(t, "inverse")
		bothLanes(t, func() []Lanes {
			z := slices.Clone(z)
			Butterflies(z, radix, q, twiddles(radix, q), inverse)
			return z
		})
	})
}

// A pass of one block leaves in block i, at j, the sum of z[j + q r] exp(-2 pi i i r/radix)
// over r, times exp(-2 pi i i j/(radix q)); the inverse gives radix times what went in.
func TestButterflies(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		for radix := 2; radix <= 4; radix++ {
			for _, q := range []int{1, 2, 5} {
				z := someLanes(8, 4*radix*q, false)
				in := slices.Clone(z)
				w := twiddles(radix, q)
				Butterflies(z, radix, q, w, false)
				for b := range 2 {
					for i := range radix {
						for j := range q {
							for l := range LaneCount {
								var sum complex128
								for r := range radix {
									at := 2 * (b*radix*q + j + q*r)
									sum += complex(in[at][l], in[at+1][l]) * cmplx.Rect(1, -2*math.Pi*float64(i*r)/float64(radix))
								}
								sum *= cmplx.Rect(1, -2*math.Pi*float64(i*j)/float64(radix*q))
								at := 2 * (b*radix*q + i*q + j)
								// Factors of 30 bits, of sums below 6.
								if got := complex(z[at][l], z[at+1][l]); !(cmplx.Abs(got-sum) < 6e-9) {
									t.Fatalf("plain %v, radix %d, q %d, block %d, bin %d, sample %d: %g, want %g", plain, radix, q, b, i, j, got, sum)
								}
							}
						}
					}
				}
				Butterflies(z, radix, q, w, true)
				for at := range z {
					for l := range LaneCount {
						if d := math.Abs(z[at][l] - float64(radix)*in[at][l]); !(d < 2e-8) {
							t.Fatalf("plain %v, radix %d, q %d: there and back %g, want %g", plain, radix, q, z[at][l], float64(radix)*in[at][l])
						}
					}
				}
			}
		}
		SetPlain(was)
	}
}

func TestMirrored(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		m := rapid.IntRange(1, 20).Draw(t, "m")
		seed := rapid.Uint64().Draw(t, "seed")
		z := someLanes(seed, 2*m, false)
		place := rapid.Permutation(slices.Collect(func(yield func(int) bool) {
			for k := range m {
				if !yield(k) {
					return
				}
			}
		})).Draw(t, "place")
		table := make([]float64, 4*m)
		for i, v := range noise(random(seed), len(table)) {
			table[i] = float64(v)
		}
		out := slices.Clone(z)
		Mirrored(out, place, table)
		for k := range m {
			c := func(k, l int) complex128 { return complex(z[2*place[k]][l], z[2*place[k]+1][l]) }
			for l := range LaneCount {
				want := c(k, l)
				if k > 0 && 2*k != m {
					want = complex(table[4*k], table[4*k+1])*c(k, l) + complex(table[4*k+2], table[4*k+3])*cmplx.Conj(c(m-k, l))
				}
				if got := complex(out[2*place[k]][l], out[2*place[k]+1][l]); !(cmplx.Abs(got-want) < 1e-14) {
					t.Fatalf("bin %d of %d: %g, want %g", k, m, got, want)
				}
			}
		}
		bothLanes(t, func() []Lanes {
			z := slices.Clone(z)
			Mirrored(z, place, table)
			return z
		})
	})
}

func TestSameBytesTransform(t *testing.T) {
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		z := someLanes(2, 2*72, false)
		for _, radix := range []int{2, 3, 4} {
			Butterflies(z, radix, 6, twiddles(radix, 6), radix == 3)
		}
		SetPlain(was)
		if got, want := digestLanes(z), "7fcf9bae86acbeaa"; got != want {
			t.Errorf("digest %s, recorded %s (plain Go: %v)", got, want, plain)
		}
	}
}

// The work of one batch of a run of 200 volumes.
func BenchmarkLanes(b *testing.B) {
	x := someLanes(1, 264, false)
	var level, slope, top Lanes
	var s Autoregression
	z, w3, w4 := someLanes(1, 288, false), twiddles(3, 48), twiddles(4, 4)
	place, table := make([]int, 144), make([]float64, 4*144)
	for k := range place {
		place[k] = k
	}
	rows := make([]float32, 64*200)
	for _, plain := range []bool{false, true} {
		name := map[bool]string{false: "/asm", true: "/plain"}[plain]
		for _, c := range []struct {
			name string
			f    func()
		}{
			{"line", func() { Line(x[32:232], &level, &slope, &top) }},
			{"fit", func() { s.Fit(x[32:232], MostOrder, .01) }},
			{"fit-40", func() { s.Fit(x[32:72], MostOrder, .01) }},
			{"outward", func() { s.Outward(x, 200, &top) }},
			{"radix-3", func() { Butterflies(z, 3, 48, w3, false) }},
			{"radix-4", func() { Butterflies(z, 4, 4, w4, true) }},
			{"mirrored", func() { Mirrored(z, place, table) }},
			{"narrow", func() { NarrowLanes(rows, 64, x[32:232], &level, &slope, 99.5, .3) }},
			{"widen", func() { WidenLanes(x[32:232], rows, 64) }},
		} {
			b.Run(c.name+name, func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				copy(x, someLanes(1, 264, false))
				copy(z, someLanes(1, 288, false))
				clear(table)
				for b.Loop() {
					c.f()
				}
			})
		}
	}
}
