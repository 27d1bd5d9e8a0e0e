package slicetime

import (
	"math"
	"testing"
)

// Against the definition X[k] = sum_n z[n] exp(-2 pi i k n/m), summed as it
// stands, at every length the plan can be asked for up to 300, and back.
func TestFFTAgainstDefinition(t *testing.T) {
	tried := 0
	for m := 1; m <= 300; m++ {
		if fftLength(m) != m {
			continue
		}
		tried++
		f := newFFT(m)
		z := make([]lanes, 2*m)
		for i := range z {
			for l := range z[i] {
				z[i][l] = 2*hashed(8*i+l) - 1
			}
		}
		keep := append([]lanes(nil), z...)
		f.forward(z)
		for k := range m {
			var re, im lanes
			for n := range m {
				sin, cos := math.Sincos(2 * math.Pi * float64(k*n%m) / float64(m))
				for l := range re {
					re[l] += keep[2*n][l]*cos + keep[2*n+1][l]*sin
					im[l] += keep[2*n+1][l]*cos - keep[2*n][l]*sin
				}
			}
			p := f.place[k]
			for l := range re {
				// The plain sum errs by about m/2 roundings of size-one terms.
				if d := math.Hypot(z[2*p][l]-re[l], z[2*p+1][l]-im[l]); d > 1e-15*float64(m+10) {
					t.Fatalf("m %d, bin %d, lane %d: off by %.1e", m, k, l, d)
				}
			}
		}
		f.inverse(z)
		for i := range z {
			for l := range z[i] {
				if d := math.Abs(z[i][l]/float64(m) - keep[i][l]); d > 2e-15 {
					t.Fatalf("m %d: there and back is off by %.1e", m, d)
				}
			}
		}
	}
	// 1, 2, ..., 256; 3, 6, ..., 192; 9, 18, ..., 288.
	if tried != 9+7+6 {
		t.Errorf("%d lengths tried", tried)
	}
}

func TestFFTLength(t *testing.T) {
	for _, c := range [][2]int{{1, 1}, {5, 6}, {7, 8}, {9, 9}, {10, 12}, {13, 16}, {17, 18}, {70, 72}, {73, 96}, {132, 144}, {145, 192}, {193, 256}, {257, 288}} {
		if got := fftLength(c[0]); got != c[1] {
			t.Errorf("%d: %d, want %d", c[0], got, c[1])
		}
	}
	defer func() {
		if recover() == nil {
			t.Error("a length with a factor 5 was planned")
		}
	}()
	newFFT(10)
}
