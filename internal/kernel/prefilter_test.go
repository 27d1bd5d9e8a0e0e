package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// coefficients64 filters in float64, line by line: the definition, with sums over
// many periods, and no rounding in between.
func coefficients64(vol []float32, n [3]int, degree, pad int) []float64 {
	m := [3]int{n[0] + 2*pad, n[1] + 2*pad, n[2] + 2*pad}
	c := make([]float64, m[0]*m[1]*m[2])
	for i, v := range vol {
		x, y, z := i%n[0], i/n[0]%n[1], i/n[0]/n[1]
		c[x+pad+m[0]*(y+pad+m[1]*(z+pad))] = float64(v)
	}
	stride := 1
	for a := range 3 {
		for i := range c {
			// Every line starts at coordinate zero of its axis.
			if i/stride%m[a] != 0 {
				continue
			}
			line := make([]float64, n[a])
			for k := range line {
				line[k] = c[i+stride*(k+pad)]
			}
			line64(line, degree)
			for k := range m[a] {
				c[i+stride*k] = odd64(line, k-pad)
			}
		}
		stride *= m[a]
	}
	return c
}

// odd64 continues a line past its ends.
func odd64(v []float64, k int) float64 {
	n := len(v)
	switch {
	case n == 1:
		return v[0]
	case k < 0:
		return 2*v[0] - odd64(v, -k)
	case k >= n:
		return 2*v[n-1] - odd64(v, 2*(n-1)-k)
	}
	return v[k]
}

// line64 solves for coefficients by applying the inverse filter as a sum over the
// line continued: c[k] = sum over j of h[|k-j|] s[j], h the product of two-sided
// exponentials, one pole after the other.
func line64(s []float64, degree int) {
	for _, z := range poles(degree) {
		// 1/(1 - z)(1 - 1/z) ... : -6z/(1-z^2) z^|k| for the cubic, in general gain
		// (1-z)(1-1/z) times -z/(1-z^2) z^|k|.
		f := (1 - z) * (1 - 1/z) * -z / (1 - z*z)
		out := make([]float64, len(s))
		for k := range s {
			out[k] = f * s[k]
			zj := z
			for j := 1; math.Abs(zj) > 1e-17; j++ {
				out[k] += f * zj * (odd64(s, k-j) + odd64(s, k+j))
				zj *= z
			}
		}
		copy(s, out)
	}
}

func prefilterRun(vol []float32, n [3]int, degree, pad int) func() [][]float32 {
	return func() [][]float32 {
		p := NewPrefilter(n, degree, pad)
		m := p.Size()
		c := nan(m[0]*m[1]*m[2] + Slack)
		for range 2 { // the second time over used scratch
			p.Run(c, vol)
		}
		return [][]float32{c}
	}
}

// 2e-6 of the largest coefficient: what the next stage, in float32, would round
// anyway by 6e-8 of each of 216 terms.
func TestPrefilterAgainstDefinition(t *testing.T) {
	worst := 0.0
	for _, degree := range []int{3, 5} {
		for i, n := range [][3]int{{1, 1, 1}, {2, 1, 3}, {1, 2, 2}, {3, 3, 3}, {4, 5, 2}, {7, 1, 9}, {8, 8, 8}, {9, 17, 5}, {33, 3, 4}, {64, 10, 7}, {5, 40, 30}, {2, 3, 71}} {
			for _, offset := range []float32{0, 100} {
				vol := noise(random(uint64(i)), n[0]*n[1]*n[2])
				for k := range vol {
					vol[k] += offset
				}
				const pad = 3
				want := coefficients64(vol, n, degree, pad)
				largest := 0.0
				for _, v := range want {
					largest = math.Max(largest, math.Abs(v))
				}
				for _, plain := range []bool{true, false} {
					was := SetPlain(plain)
					c := prefilterRun(vol, n, degree, pad)()[0]
					SetPlain(was)
					for k, w := range want {
						d := math.Abs(float64(c[k])-w) / largest
						worst = math.Max(worst, d)
						if !(d < 2e-6) {
							t.Fatalf("degree %d, size %v, plain %v, coefficient %d: %g, want %g (largest %g)", degree, n, plain, k, c[k], w, largest)
						}
					}
				}
			}
		}
	}
	t.Logf("worst error %.2g of the largest coefficient", worst)
}

// Coefficients give the samples back. Errors as above, at most 1.3e-6 of the
// largest coefficient, pass through weights that sum to one.
func TestPrefilterInterpolates(t *testing.T) {
	n := [3]int{13, 11, 10}
	vol := noise(random(8), n[0]*n[1]*n[2])
	for _, degree := range []int{3, 5} {
		c := prefilterRun(vol, n, degree, 3)()[0]
		m := [3]int{19, 17, 16}
		largest := 0.0
		for _, v := range c[:m[0]*m[1]*m[2]] {
			largest = math.Max(largest, math.Abs(float64(v)))
		}
		out, base, zero := make([]float32, len(vol)), make([]int32, len(vol)), make([]float32, len(vol))
		for i := range vol {
			x, y, z := i%n[0], i/n[0]%n[1], i/n[0]/n[1]
			f := 3 - degree/2
			base[i] = int32(x + f + m[0]*(y+f+m[1]*(z+f)))
		}
		if degree == 5 {
			Value5(out, c, m[0], m[0]*m[1], base, zero, zero, zero)
		} else {
			Value3(out, c, m[0], m[0]*m[1], base, zero, zero, zero)
		}
		for i, v := range vol {
			if !(math.Abs(float64(out[i]-v)) < 2e-6*largest) {
				t.Fatalf("degree %d, voxel %d: %g, want %g", degree, i, out[i], v)
			}
		}
	}
}

func TestPrefilterTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var n [3]int
		for a := range n {
			n[a] = rapid.OneOf(rapid.IntRange(1, 12), rapid.IntRange(1, 40)).Draw(t, "n")
		}
		degree := rapid.SampledFrom([]int{3, 5}).Draw(t, "degree")
		vol := noise(random(rapid.Uint64().Draw(t, "seed")), n[0]*n[1]*n[2])
		both(t, prefilterRun(vol, n, degree, rapid.IntRange(0, 4).Draw(t, "pad")))
	})
}

func TestPrefilterStaysInside(t *testing.T) {
	for _, n := range [][3]int{{9, 7, 5}, {8, 8, 8}, {33, 2, 3}, {1, 9, 4}} {
		for _, front := range []bool{false, true} {
			both(t, func() [][]float32 {
				p := NewPrefilter(n, 5, 3)
				p.t, p.work = fenced(t, p.t, front), fenced(t, p.work, front)
				m := p.Size()
				c := fenced(t, make([]float32, m[0]*m[1]*m[2]), front)
				p.Run(c, fenced(t, noise(random(1), n[0]*n[1]*n[2]), front))
				return [][]float32{c}
			})
		}
	}
	c := make([]float32, 9*9*9+50)
	NewPrefilter([3]int{5, 5, 5}, 3, 2).Run(c, noise(random(1), 125))
	for _, v := range c[729:] {
		if v != 0 {
			t.Fatal("wrote past the coefficients")
		}
	}
}

// A NaN in a volume spreads to all of its coefficients, but not into the next
// volume's by way of the scratch.
func TestPrefilterForgets(t *testing.T) {
	n := [3]int{20, 9, 6}
	clean, dirty := noise(random(2), 1080), noise(random(3), 1080)
	dirty[500] = float32(math.NaN())
	p := NewPrefilter(n, 5, 3)
	m := p.Size()
	c := make([]float32, m[0]*m[1]*m[2])
	p.Run(c, clean)
	want := digest(c)
	p.Run(c, dirty)
	p.Run(c, clean)
	if got := digest(c); got != want {
		t.Error("a volume leaves something for the next")
	}
}

func TestSameBytesPrefilter(t *testing.T) {
	for _, c := range []struct {
		degree int
		want   string
	}{{3, "0b1ff07e4c514323"}, {5, "4eb37cc16a7ebf4f"}} {
		n := [3]int{37, 22, 11}
		p := NewPrefilter(n, c.degree, 3)
		m := p.Size()
		vol, out := noise(random(4), n[0]*n[1]*n[2]), make([]float32, m[0]*m[1]*m[2])
		sameBytes(t, c.want, func() [][]float32 { p.Run(out, vol); return [][]float32{out} })
	}
}

func FuzzPrefilter(f *testing.F) {
	f.Add(uint64(1), uint8(9), uint8(8), uint8(7), uint8(3), true)
	f.Fuzz(func(t *testing.T, seed uint64, nx, ny, nz, pad uint8, quintic bool) {
		n := [3]int{int(nx)%40 + 1, int(ny)%20 + 1, int(nz)%20 + 1}
		degree := 3
		if quintic {
			degree = 5
		}
		both(t, prefilterRun(noise(random(seed), n[0]*n[1]*n[2]), n, degree, int(pad)%5))
	})
}

func BenchmarkPrefilter(b *testing.B) {
	for _, n := range [][3]int{{64, 64, 36}, {104, 104, 72}} {
		for _, degree := range []int{3, 5} {
			p := NewPrefilter(n, degree, 3)
			m := p.Size()
			vol, c := noise(random(1), n[0]*n[1]*n[2]), make([]float32, m[0]*m[1]*m[2])
			for _, plain := range []bool{false, true} {
				b.Run(fmt.Sprintf("%dx%d/%d/%s", n[0], n[2], degree, map[bool]string{false: "asm", true: "plain"}[plain]), func(b *testing.B) {
					defer SetPlain(SetPlain(plain))
					per := perItem()
					for b.Loop() {
						p.Run(c, vol)
					}
					per(b, len(vol), "voxel")
				})
			}
		}
	}
}
