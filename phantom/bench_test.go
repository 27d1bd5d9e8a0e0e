package phantom

import (
	"context"
	"testing"
)

// axial is the usual left-handed axial grid, centred on the world's origin.
func axial(n [3]int, d [3]float64) [16]float64 {
	a := Identity()
	for k := range 3 {
		a[5*k] = d[k]
	}
	a[0] = -a[0]
	for k := range 3 {
		a[4*k+3] = -a[5*k] * float64(n[k]-1) / 2
	}
	return a
}

func BenchmarkHeadAt(b *testing.B) {
	h := NewHead(1)
	p := h.Points(3.7)
	var s float64
	i := 0
	for b.Loop() {
		s += h.At(p[i])
		if i++; i == len(p) {
			i = 0
		}
	}
	_ = s
}

func BenchmarkSimulateVolume(b *testing.B) {
	n := [3]int{64, 64, 36}
	for _, c := range []struct {
		name string
		sd   float64
	}{{"clean", 0}, {"noisy", 9}} {
		b.Run(c.name, func(b *testing.B) {
			s := &Scan{Head: NewHead(1), N: n, NT: 1, Affine: axial(n, [3]float64{3.3, 3.3, 3.8}), TR: 2, SliceAxis: 2,
				SliceTimes: Interleaved(36, 2), Motion: Walk(1, 1, 0.02, 0.05, [3]float64{}), NoiseSD: c.sd}
			b.SetBytes(int64(64 * 64 * 36 * 4))
			for b.Loop() {
				if _, err := s.Simulate(context.Background(), 1); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*64*64*36), "ns/point")
		})
	}
}
