package kernel

import (
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// turned is an affine that turns about the middle of a field, by so many radians
// about each axis to first order, and shifts.
func turned(n [3]int, turn, shift [3]float64) *[16]float64 {
	m := [16]float64{1, -turn[2], turn[1], 0, turn[2], 1, -turn[0], 0, -turn[1], turn[0], 1, 0, 0, 0, 0, 1}
	for r := range 3 {
		m[4*r+3] = shift[r]
		for c := range 3 {
			mid := float64(n[c]-1) / 2
			m[4*r+3] -= float64(m[4*r+c] * mid)
			if r == c {
				m[4*r+3] += mid
			}
		}
	}
	return &m
}

func passesRun(vol []float32, n [3]int, degree int, m *[16]float64) func() [][]float32 {
	return func() [][]float32 {
		s, ok := NewShear(m)
		if !ok {
			panic("not near")
		}
		p := NewPasses(n, degree)
		dst, scratch := nan(len(vol)), nan(p.Scratch())
		for range 2 { // the second time over used scratch
			p.Run(dst, vol, scratch, &s)
		}
		return [][]float32{dst}
	}
}

// passes64 is the definition: line after line in float64, coefficients by sums over
// many periods, the line continued where a point lies outside by up to a voxel.
func passes64(vol []float32, n [3]int, degree int, m *[16]float64) []float64 {
	v := make([]float64, len(vol))
	for i := range v {
		v[i] = float64(vol[i])
	}
	// The coordinate of axis a at output (x, y, z) where axes after a stand at the
	// volume's own samples: solved anew for every point.
	source := func(a int, at [3]float64) float64 {
		// Unknown: the output coordinates of the axes after a.
		switch a {
		case 0:
			x, j, k := at[0], at[1], at[2]
			d := m[5]*m[10] - m[6]*m[9]
			u, w := j-m[7]-m[4]*x, k-m[11]-m[8]*x
			y, z := (m[10]*u-m[6]*w)/d, (m[5]*w-m[9]*u)/d
			return m[0]*x + m[1]*y + m[2]*z + m[3]
		case 1:
			x, y, k := at[0], at[1], at[2]
			z := (k - m[11] - m[8]*x - m[9]*y) / m[10]
			return m[4]*x + m[5]*y + m[6]*z + m[7]
		}
		return m[8]*at[0] + m[9]*at[1] + m[10]*at[2] + m[11]
	}
	stride := 1
	for a := range 3 {
		out := make([]float64, len(v))
		for i := range v {
			at := [3]int{i % n[0], i / n[0] % n[1], i / n[0] / n[1]}
			if at[a] != 0 {
				continue
			}
			line := make([]float64, n[a])
			for k := range line {
				line[k] = v[i+stride*k]
			}
			if n[a] > 2 {
				line64(line, degree)
			}
			for k := range line {
				to := [3]float64{float64(at[0]), float64(at[1]), float64(at[2])}
				to[a] = float64(k)
				u := math.Min(math.Max(source(a, to), -1), float64(n[a])-1.0/64)
				for q := int(math.Floor(u)) - 2; q <= int(math.Floor(u))+3; q++ {
					out[i+stride*k] += bspline(degree, u-float64(q)) * odd64(line, q)
				}
			}
		}
		v = out
		stride *= n[a]
	}
	return v
}

var passSizes = [][3]int{{1, 1, 1}, {2, 1, 3}, {1, 2, 2}, {3, 3, 3}, {4, 5, 2}, {7, 1, 9}, {8, 8, 8}, {9, 17, 5}, {33, 3, 4}, {40, 10, 7}, {5, 40, 30}, {2, 3, 50}, {150, 3, 4}}

// Three passes, each with a filter that is within 2e-6 of the largest coefficient (see
// TestPrefilterAgainstDefinition) and a sum of six or four; a coordinate's fraction is
// rounded to 2^-25 at slopes of twice the largest coefficient, which is up to 3.6
// times the largest sample along an axis: 4e-6 of the largest value.
func TestPassesAgainstDefinition(t *testing.T) {
	worst := 0.0
	for _, degree := range []int{3, 5} {
		for i, n := range passSizes {
			for _, offset := range []float32{0, 100} {
				vol := noise(random(uint64(i)), n[0]*n[1]*n[2])
				for k := range vol {
					vol[k] += offset
				}
				shift := [3]float64{0.3 + 0.1*float64(i%5), -0.62, 0.45 * float64(i%3)}
				if i%4 == 3 {
					shift[i%3] *= 4 // well outside
				}
				m := turned(n, [3]float64{0.02, -0.015, 0.012 * float64(i%3)}, shift)
				want := passes64(vol, n, degree, m)
				largest := 0.0
				for _, v := range want {
					largest = math.Max(largest, math.Abs(v))
				}
				for _, plain := range []bool{true, false} {
					was := SetPlain(plain)
					got := passesRun(vol, n, degree, m)()[0]
					SetPlain(was)
					for k, w := range want {
						d := math.Abs(float64(got[k])-w) / largest
						worst = math.Max(worst, d)
						if !(d < 4e-6) {
							t.Fatalf("degree %d, size %v, plain %v, value %d: %g, want %g (largest %g)", degree, n, plain, k, got[k], w, largest)
						}
					}
				}
			}
		}
	}
	t.Logf("worst error %.2g of the largest value", worst)
}

func TestPassesTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		degree := rapid.SampledFrom([]int{3, 5}).Draw(t, "degree")
		var n [3]int
		var turn, shift [3]float64
		for k := range n {
			n[k] = rapid.IntRange(1, []int{140, 40, 30}[k]).Draw(t, "n")
			turn[k] = rapid.Float64Range(-0.05, 0.05).Draw(t, "turn")
			shift[k] = rapid.OneOf(rapid.Float64Range(-2, 2), rapid.Float64Range(-60, 60), rapid.SampledFrom([]float64{0, 1, 1e9, -1e9})).Draw(t, "shift")
		}
		vol := noise(random(rapid.Uint64().Draw(t, "seed")), n[0]*n[1]*n[2])
		m := turned(n, turn, shift)
		if _, ok := NewShear(m); !ok {
			return
		}
		both(t, passesRun(vol, n, degree, m))
	})
}

// The identity gives every sample back: weights at a sample are 1/120, 26/120 ... of
// coefficients that the filter found, three times, at coefficients up to 3.6^3 times the largest
// sample.
func TestPassesIdentity(t *testing.T) {
	for _, degree := range []int{3, 5} {
		for i, n := range passSizes {
			vol := noise(random(uint64(i)), n[0]*n[1]*n[2])
			for k, v := range passesRun(vol, n, degree, turned(n, [3]float64{}, [3]float64{}))()[0] {
				if !(math.Abs(float64(v-vol[k])) < 4e-6) {
					t.Fatalf("degree %d, size %v, value %d: %g, want %g", degree, n, k, v, vol[k])
				}
			}
		}
	}
}

// A ramp stays one wherever no pass looks past the field by more than it continues:
// at any turn, since all that is asked is linear.
func TestPassesKeepRamps(t *testing.T) {
	n := [3]int{21, 18, 12}
	f := func(x, y, z float64) float64 { return 10 + 3*x - 2*y + 5*z }
	vol := make([]float32, n[0]*n[1]*n[2])
	for i := range vol {
		vol[i] = float32(f(float64(i%n[0]), float64(i/n[0]%n[1]), float64(i/n[0]/n[1])))
	}
	m := turned(n, [3]float64{0.03, -0.025, 0.02}, [3]float64{0.2, -0.3, 0.1})
	for _, degree := range []int{3, 5} {
		got := passesRun(vol, n, degree, m)()[0]
		for i, v := range got {
			x, y, z := float64(i%n[0]), float64(i/n[0]%n[1]), float64(i/n[0]/n[1])
			var at [3]float64
			inside := true
			for a := range at {
				at[a] = m[4*a]*x + m[4*a+1]*y + m[4*a+2]*z + m[4*a+3]
				// 0.4 voxel: what the passes before see differs by at most 0.05 a row
				// over the taps that count.
				inside = inside && at[a] >= -0.4 && at[a] <= float64(n[a]-1)+0.4
			}
			// 2^-24 of 150, twenty times.
			if want := f(at[0], at[1], at[2]); inside && !(math.Abs(float64(v)-want) < 2e-4) {
				t.Fatalf("degree %d, voxel %v %v %v: %g, want %g", degree, x, y, z, v, want)
			}
		}
	}
}

func TestNewShear(t *testing.T) {
	n := [3]int{64, 64, 36}
	for _, c := range []struct {
		turn [3]float64
		ok   bool
	}{
		{[3]float64{}, true},
		{[3]float64{0.05, 0, 0}, true},
		{[3]float64{0, -0.05, 0}, true},
		{[3]float64{0, 0, 0.06}, false},
		{[3]float64{0, 0.06, 0}, false},
		{[3]float64{-0.06, 0, 0}, false},
		{[3]float64{math.NaN(), 0, 0}, false},
	} {
		if _, ok := NewShear(turned(n, c.turn, [3]float64{1, 2, 3})); ok != c.ok {
			t.Errorf("turn %v: %v", c.turn, ok)
		}
	}
	for _, i := range []int{0, 5, 10, 3, 7, 11} {
		m := turned(n, [3]float64{}, [3]float64{})
		m[i] += 0.03
		if _, ok := NewShear(m); ok != (i%4 == 3) {
			t.Errorf("element %d: %v", i, ok)
		}
		m[i] = math.Inf(1)
		if _, ok := NewShear(m); ok {
			t.Errorf("element %d infinite: accepted", i)
		}
	}
	if _, ok := NewShear(&[16]float64{}); ok {
		t.Error("a map without an inverse was accepted")
	}
}

// Neither scratch nor what lies beside volumes is read or written out of bounds.
func TestPassesStayInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for i, n := range passSizes[:10] {
			for _, degree := range []int{3, 5} {
				vol := fenced(t, noise(random(uint64(i)), n[0]*n[1]*n[2]), front)
				dst := fenced(t, make([]float32, len(vol)), front)
				p := NewPasses(n, degree)
				scratch := fenced(t, make([]float32, p.Scratch()), front)
				for _, b := range []*[]float32{&p.t, &p.lines, &p.slab, &p.work} {
					*b = fenced(t, *b, front)
				}
				for _, shift := range []float64{0, 0.4, -0.4, 50, -50} {
					s, _ := NewShear(turned(n, [3]float64{0.05, -0.05, 0.05}, [3]float64{shift, shift, shift}))
					p.Run(dst, vol, scratch, &s)
				}
			}
		}
	}
}

func TestSameBytesPasses(t *testing.T) {
	n := [3]int{37, 22, 11}
	vol := noise(random(4), n[0]*n[1]*n[2])
	m := turned(n, [3]float64{0.02, -0.03, 0.01}, [3]float64{0.25, 1.5, -0.75})
	sameBytes(t, "6580d8be8c72a502", passesRun(vol, n, 3, m))
	sameBytes(t, "e8d54083af5b70ca", passesRun(vol, n, 5, m))
}

func BenchmarkPasses(b *testing.B) {
	for _, n := range [][3]int{{64, 64, 36}, {104, 104, 72}} {
		vol := noise(random(1), n[0]*n[1]*n[2])
		dst := make([]float32, len(vol))
		m := turned(n, [3]float64{0.01, -0.008, 0.012}, [3]float64{0.2, -0.3, 0.25})
		for _, degree := range []int{5, 3} {
			for _, plain := range []bool{false, true} {
				name := map[bool]string{false: "asm", true: "plain"}[plain]
				b.Run(fmt.Sprintf("passes%d/%d/%s", degree, n[0], name), func(b *testing.B) {
					defer SetPlain(SetPlain(plain))
					p := NewPasses(n, degree)
					scratch := make([]float32, p.Scratch())
					s, _ := NewShear(m)
					per := perItem()
					for b.Loop() {
						p.Run(dst, vol, scratch, &s)
					}
					per(b, len(vol), "voxel")
				})
				b.Run(fmt.Sprintf("tensor%d/%d/%s", degree, n[0], name), func(b *testing.B) {
					defer SetPlain(SetPlain(plain))
					const pad = 3
					p := NewPrefilter(n, degree, pad)
					size := p.Size()
					c := make([]float32, size[0]*size[1]*size[2]+Slack)
					per := perItem()
					for b.Loop() {
						p.Run(c, vol)
						for r := range n[1] * n[2] {
							j, k := float64(r%n[1]), float64(r/n[1])
							var start [3]float64
							for a := range start {
								start[a] = m[4*a+1]*j + m[4*a+2]*k + m[4*a+3]
							}
							affineRow(dst[r*n[0]:][:n[0]], c, n, pad, start, [3]float64{m[0], m[4], m[8]}, degree)
						}
					}
					per(b, len(vol), "voxel")
				})
			}
		}
	}
}
