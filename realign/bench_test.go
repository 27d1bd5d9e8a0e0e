package realign_test

import (
	"context"
	"slices"
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

// benchRun is a walking head, 64x64x36 at 3.3x3.3x3.6 mm, tSNR 100.
func benchRun(tb testing.TB, nt int) (realign.Grid, []float32) {
	tb.Helper()
	g := axial([3]int{64, 64, 36}, [3]float64{3.3, 3.3, 3.6})
	s := phantom.Scan{
		Head: phantom.NewHead(7), N: g.N, NT: nt, Affine: g.Affine, TR: 2, SliceAxis: 2, SliceTimes: phantom.Interleaved(36, 2),
		Motion: phantom.Walk(5, 0.5, 0.008, 0.05, [3]float64{}), NoiseSD: 9, Seed: 4,
	}
	data, err := s.Simulate(context.Background(), 2)
	if err != nil {
		tb.Fatal(err)
	}
	return g, data
}

func BenchmarkEstimate(b *testing.B) {
	const nt = 20
	g, data := benchRun(b, nt)
	for _, ref := range []struct {
		name string
		kind realign.Reference
	}{{"first", realign.First}, {"mean", realign.Mean}} {
		b.Run(ref.name, func(b *testing.B) {
			b.SetBytes(int64(4 * len(data)))
			for b.Loop() {
				if _, err := realign.EstimateVolumes(context.Background(), g, realign.Floats(data, nt), realign.Options{Reference: ref.kind, SliceAxis: 2, Workers: 1}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Milliseconds())/float64(b.N*nt), "ms/volume")
		})
	}
}

func BenchmarkResample(b *testing.B) {
	g, data := benchRun(b, 2)
	p := realign.FromParams([3]float64{0.4, -0.3, 0.6}, [3]float64{0.01, -0.008, 0.012}, [3]float64{})
	nv := len(data) / 2
	dst := make([]float32, nv)
	for _, degree := range []int{3, 5} {
		r := realign.NewResampler(g.N, degree)
		b.Run(map[int]string{3: "cubic", 5: "quintic"}[degree], func(b *testing.B) {
			b.SetBytes(int64(4 * nv))
			for i := 0; b.Loop(); i++ {
				r.Load(data[i%2*nv:][:nv])
				r.Eval(dst, realign.PoseMap(g, p))
			}
		})
		b.Run(map[int]string{3: "cubic-near", 5: "quintic-near"}[degree], func(b *testing.B) {
			b.SetBytes(int64(4 * nv))
			for i := 0; b.Loop(); i++ {
				r.Near(dst, data[i%2*nv:][:nv], realign.PoseMap(g, p))
			}
		})
		b.Run(map[int]string{3: "cubic-prefilter", 5: "quintic-prefilter"}[degree], func(b *testing.B) {
			b.SetBytes(int64(4 * nv))
			for i := 0; b.Loop(); i++ {
				r.Load(data[i%2*nv:][:nv])
			}
		})
	}
}

func BenchmarkPath(b *testing.B) {
	const nt = 20
	g, data := benchRun(b, nt)
	est := estimate(b, g, data, realign.Options{SliceAxis: 2, Workers: 1})
	s := slicetime.Schedule{Times: phantom.Interleaved(36, 2), Axis: 2, TR: 2}
	var path *realign.PathEstimate
	b.Run("estimate", func(b *testing.B) {
		for b.Loop() {
			var err error
			if path, err = realign.EstimatePath(context.Background(), g, realign.Floats(data, nt), s, est, 1); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.Elapsed().Milliseconds())/float64(b.N*nt), "ms/volume")
	})
	b.Run("joint", func(b *testing.B) {
		for b.Loop() {
			if err := path.Joint(context.Background(), g, slices.Clone(data), nt, s, true, s.Middle(), slicetime.Options{}, make([]bool, nt), 5, 1); err != nil {
				b.Fatal(err)
			}
		}
		b.ReportMetric(float64(b.Elapsed().Milliseconds())/float64(b.N*nt), "ms/volume")
	})
}
