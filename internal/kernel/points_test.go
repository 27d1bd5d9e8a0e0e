package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// pointSet is a volume of coefficients and points in it.
type pointSet struct {
	degree     int
	m          [3]int
	c          []float32
	base       []int32
	tx, ty, tz []float32
}

func newPoints(seed uint64, degree int, m [3]int, n int) *pointSet {
	r := random(seed)
	s := &pointSet{degree: degree, m: m, c: append(noise(r, m[0]*m[1]*m[2]), nan(Slack)...), base: make([]int32, n)}
	for i := range s.base {
		var at [3]int
		for a := range at {
			at[a] = r.IntN(m[a] - degree)
		}
		if i == n-1 { // the last that fits, next to the slack
			at = [3]int{m[0] - degree - 1, m[1] - degree - 1, m[2] - degree - 1}
		}
		s.base[i] = int32(at[0] + m[0]*(at[1]+m[1]*at[2]))
	}
	s.tx, s.ty, s.tz = fractions(r, n), fractions(r, n), fractions(r, n)
	if n > 1 {
		s.tx[0], s.ty[0], s.tz[1] = 0, 1, 0
	}
	return s
}

// run returns value, value of the gradient, and the derivatives.
func (s *pointSet) run() [][]float32 {
	var out [5][]float32
	for a := range out {
		out[a] = make([]float32, len(s.base))
	}
	mx, area := s.m[0], s.m[0]*s.m[1]
	if s.degree == 5 {
		Value5(out[0], s.c, mx, area, s.base, s.tx, s.ty, s.tz)
		Gradient5(out[1], out[2], out[3], out[4], s.c, mx, area, s.base, s.tx, s.ty, s.tz)
	} else {
		Value3(out[0], s.c, mx, area, s.base, s.tx, s.ty, s.tz)
		Gradient3(out[1], out[2], out[3], out[4], s.c, mx, area, s.base, s.tx, s.ty, s.tz)
	}
	return out[:]
}

// bspline is the centred B-spline of a degree at x by its definition as a sum of
// truncated powers (Unser 1999, eq. 3).
func bspline(degree int, x float64) float64 {
	sum, binomial, factorial := 0.0, 1.0, 1.0
	for k := 0; k <= degree+1; k++ {
		if u := x + float64(degree+1)/2 - float64(k); u > 0 {
			sum += binomial * math.Pow(u, float64(degree)) * float64(1-2*(k&1))
		}
		binomial = binomial * float64(degree+1-k) / float64(k+1)
		if k > 0 && k <= degree {
			factorial *= float64(k)
		}
	}
	return sum / factorial
}

// slope is its derivative: beta'(x) = beta_{d-1}(x + 1/2) - beta_{d-1}(x - 1/2).
func slope(degree int, x float64) float64 {
	return bspline(degree-1, x+0.5) - bspline(degree-1, x-0.5)
}

func (s *pointSet) direct(i int) (out [4]float64) {
	d := s.degree
	weight := func(f func(int, float64) float64, t float32, k int) float64 { return f(d, float64(t)+float64(d/2-k)) }
	for z := 0; z <= d; z++ {
		for y := 0; y <= d; y++ {
			for x := 0; x <= d; x++ {
				c := float64(s.c[int(s.base[i])+x+s.m[0]*(y+s.m[1]*z)])
				wx, wy, wz := weight(bspline, s.tx[i], x), weight(bspline, s.ty[i], y), weight(bspline, s.tz[i], z)
				out[0] += c * wx * wy * wz
				out[1] += c * weight(slope, s.tx[i], x) * wy * wz
				out[2] += c * wx * weight(slope, s.ty[i], y) * wz
				out[3] += c * wx * wy * weight(slope, s.tz[i], z)
			}
		}
	}
	return out
}

// Coefficients are below 1 in size and the weights of a value sum to 1, those of
// a slope to at most 2 in absolute value: some 20 roundings of 2^-24 along each path
// stay below 1e-6; the slack around a volume must not show, which is NaN here.
func TestPointsAgainstDefinition(t *testing.T) {
	for _, degree := range []int{3, 5} {
		for _, plain := range []bool{true, false} {
			s := newPoints(uint64(degree), degree, [3]int{11, 9, 8}, 300)
			was := SetPlain(plain)
			out := s.run()
			SetPlain(was)
			worst := 0.0
			for i := range s.base {
				want := s.direct(i)
				for a, w := range append([]float64{want[0]}, want[:]...) {
					worst = math.Max(worst, math.Abs(float64(out[a][i])-w))
					if !(math.Abs(float64(out[a][i])-w) < 1e-6) {
						t.Fatalf("degree %d, plain %v, point %d, output %d: %g, want %g", degree, plain, i, a, out[a][i], w)
					}
				}
			}
			t.Logf("degree %d, plain %v: worst error %.2g", degree, plain, worst)
		}
	}
}

func TestPointsTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		degree := rapid.SampledFrom([]int{3, 5}).Draw(t, "degree")
		var m [3]int
		for a := range m {
			m[a] = rapid.IntRange(degree+1, 20).Draw(t, "size")
		}
		n := rapid.IntRange(0, 40).Draw(t, "points")
		s := newPoints(rapid.Uint64().Draw(t, "seed"), degree, m, n)
		switch rapid.IntRange(0, 3).Draw(t, "content") {
		case 1: // minus zero everywhere: the sign of a sum of nothing
			for i := range s.c {
				s.c[i] = float32(math.Copysign(0, -1))
			}
		case 2: // tiny and huge
			for i := range s.c {
				s.c[i] *= [2]float32{1e-42, 1e38}[i&1]
			}
		}
		both(t, s.run)
	})
}

// The value of a gradient is that of Value5, to the bit.
func TestPointsValueIsOne(t *testing.T) {
	for _, degree := range []int{3, 5} {
		s := newPoints(9, degree, [3]int{12, 10, 9}, 500)
		out := s.run()
		for i, v := range out[0] {
			if v != out[1][i] {
				t.Fatalf("degree %d, point %d: %g and %g", degree, i, v, out[1][i])
			}
		}
	}
}

// A NaN that no tap touches stays where it is, in whichever lane it may come along.
func TestPointsContainNaN(t *testing.T) {
	for _, degree := range []int{3, 5} {
		s := newPoints(4, degree, [3]int{degree + 9, degree + 1, degree + 1}, 1)
		for first := 0; first <= 8; first++ {
			s.base[0] = int32(first)
			for i := range s.c {
				if x := i % s.m[0]; x < first || x > first+degree {
					s.c[i] = float32(math.NaN())
				} else {
					s.c[i] = 1
				}
			}
			for a, v := range s.run() {
				if want := []float32{1, 1, 0, 0, 0}[a]; !(math.Abs(float64(v[0]-want)) < 1e-6) {
					t.Errorf("degree %d, first tap %d, output %d: %g, want %g", degree, first, a, v[0], want)
				}
			}
		}
	}
}

func TestPointsStayInside(t *testing.T) {
	for _, degree := range []int{3, 5} {
		for _, front := range []bool{false, true} {
			s := newPoints(5, degree, [3]int{9, 8, 7}, 33)
			s.base[0] = 0
			s.c, s.base = fenced(t, s.c, front), fenced(t, s.base, front)
			s.tx, s.ty, s.tz = fenced(t, s.tx, front), fenced(t, s.ty, front), fenced(t, s.tz, front)
			both(t, s.run)
		}
	}
}

func TestPointsRefuse(t *testing.T) {
	refused := func(name string, f func(s *pointSet)) {
		t.Helper()
		defer func() {
			if recover() == nil {
				t.Errorf("%s: no panic", name)
			}
		}()
		s := newPoints(6, 5, [3]int{9, 8, 7}, 10)
		f(s)
		s.run()
	}
	refused("tap before the array", func(s *pointSet) { s.base[3] = -1 })
	refused("tap past the array", func(s *pointSet) { s.base[9]++ })
	refused("no slack", func(s *pointSet) { s.c = s.c[:len(s.c)-1] })
	refused("fractions", func(s *pointSet) { s.ty = s.ty[1:] })
}

func TestSameBytesPoints(t *testing.T) {
	for _, c := range []struct {
		degree int
		want   string
	}{{3, "89b3c2df042818ca"}, {5, "9ad1c917aae1a7a4"}} {
		sameBytes(t, c.want, newPoints(77, c.degree, [3]int{21, 19, 17}, 4000).run)
	}
}

func FuzzPoints(f *testing.F) {
	f.Add(uint64(1), uint8(9), uint8(8), uint8(7), uint8(20), true)
	f.Fuzz(func(t *testing.T, seed uint64, mx, my, mz, n uint8, quintic bool) {
		degree := 3
		if quintic {
			degree = 5
		}
		m := [3]int{int(mx)%24 + degree + 1, int(my)%24 + degree + 1, int(mz)%24 + degree + 1}
		both(t, newPoints(seed, degree, m, int(n)).run)
	})
}

// BenchmarkPoints walks a head's worth of points in order, as a match does.
func BenchmarkPoints(b *testing.B) {
	for _, degree := range []int{3, 5} {
		s := newPoints(1, degree, [3]int{70, 70, 42}, 20000)
		for i := range s.base {
			s.base[i] = int32(i%60 + 70*(i/60%60+3) + 4900*(i/3600+10))
		}
		n := len(s.base)
		v, gx, gy, gz := make([]float32, n), make([]float32, n), make([]float32, n), make([]float32, n)
		if degree == 5 {
			b.Run("value5/scalar", func(b *testing.B) {
				per := perItem()
				for b.Loop() {
					for i, at := range s.base {
						v[i] = scalarValue5(s.c, 70, 4900, int(at), float64(s.tx[i]), float64(s.ty[i]), float64(s.tz[i]))
					}
				}
				per(b, n, "point")
			})
			b.Run("gradient5/scalar", func(b *testing.B) {
				per := perItem()
				for b.Loop() {
					for i, at := range s.base {
						var d [3]float32
						v[i], d = scalarGradient5(s.c, 70, 4900, int(at), float64(s.tx[i]), float64(s.ty[i]), float64(s.tz[i]))
						gx[i], gy[i], gz[i] = d[0], d[1], d[2]
					}
				}
				per(b, n, "point")
			})
		}
		for _, plain := range []bool{false, true} {
			name := map[bool]string{false: "asm", true: "plain"}[plain]
			b.Run(fmt.Sprintf("value%d/%s", degree, name), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				per := perItem()
				for b.Loop() {
					if degree == 5 {
						Value5(v, s.c, 70, 4900, s.base, s.tx, s.ty, s.tz)
					} else {
						Value3(v, s.c, 70, 4900, s.base, s.tx, s.ty, s.tz)
					}
				}
				per(b, n, "point")
			})
			b.Run(fmt.Sprintf("gradient%d/%s", degree, name), func(b *testing.B) {
				defer SetPlain(SetPlain(plain))
				per := perItem()
				for b.Loop() {
					if degree == 5 {
						Gradient5(v, gx, gy, gz, s.c, 70, 4900, s.base, s.tx, s.ty, s.tz)
					} else {
						Gradient3(v, gx, gy, gz, s.c, 70, 4900, s.base, s.tx, s.ty, s.tz)
					}
				}
				per(b, n, "point")
			})
		}
	}
}
