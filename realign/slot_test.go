package realign_test

import (
	"math"
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
)

// probes are small runs with slices along each axis.
func probes(t *testing.T, f func(axis int, r *session, p realign.Probe)) {
	t.Helper()
	for axis := range 3 {
		n := [3]int{26, 30, 28}
		g := axial(n, [3]float64{7, 6, 6.5})
		r := record(t, g, axis, 4, 2, phantom.Interleaved(n[axis], 2), slowWalk, 0)
		r.est = estimate(t, g, r.data, realign.Options{SliceAxis: axis, Workers: 2})
		p := realign.NewProbe(g, r.data, 4, r.schedule, r.est)
		for k := range n[axis] {
			p.SetGain(k, gainOfSlice(k))
		}
		f(axis, r, p)
	}
}

func gainOfSlice(k int) [4]float64 { return [4]float64{1.1 + 0.01*float64(k), 0.05, -0.08, 0.03} }

// What a pixel's prediction changes by with the pose, by differences of predictions.
func TestSlopesOfASlot(t *testing.T) {
	probes(t, func(axis int, r *session, p realign.Probe) {
		pose := realign.FromParams([3]float64{1.2, -0.7, 0.9}, [3]float64{0.05, -0.04, 0.06}, r.est.Centre)
		vol := r.data[:len(r.est.Reference)]
		seen := 0
		for shot := 2; shot < r.grid.N[axis]; shot += 7 {
			voxel, _, slope := p.Predicted(vol, 1, shot, pose)
			for k := range 6 {
				// Small beside a voxel, large beside the rounding of 900 in float32: the
				// differences are good to 1e-4/eps = 0.03 a mm.
				eps := 0.004
				if k >= 3 {
					eps /= 80
				}
				var at [2]map[int]float64
				for i, sign := range []float64{1, -1} {
					var w realign.Twist
					if k < 3 {
						w.V[k] = sign * eps
					} else {
						w.W[k-3] = sign * eps
					}
					at[i] = map[int]float64{}
					v, value, _ := p.Predicted(vol, 1, shot, pose.Compose(realign.Centred(w, r.est.Centre)))
					for q := range v {
						at[i][v[q]] = float64(value[q])
					}
				}
				unit := []float64{1, 80}[k/3]
				for q, v := range voxel {
					up, ok := at[0][v]
					down, also := at[1][v]
					if !ok || !also {
						continue
					}
					seen++
					// The point of the template moves by the opposite of the twist.
					want := -(up - down) / (2 * eps) / unit
					if got := float64(slope[k][q]) / unit; math.Abs(got-want) > 0.1+2e-3*math.Abs(want) {
						t.Fatalf("axis %d, shot %d, voxel %d: slope %d is %g a mm, by differences %g", axis, shot, v, k, got, want)
					}
				}
			}
		}
		if seen < 1000 {
			t.Errorf("axis %d: only %d slopes compared", axis, seen)
		}
	})
}

// A volume that is the template moved, at a brightness of its own, leaves no residual, and
// without a prediction taken out is the template moved.
func TestLevelOfAPredictedVolume(t *testing.T) {
	probes(t, func(axis int, r *session, p realign.Probe) {
		pose := realign.FromParams([3]float64{1.2, -0.7, 0.9}, [3]float64{0.05, -0.04, 0.06}, r.est.Centre)
		moved := make([]float32, len(r.est.Reference))
		s := realign.NewResampler(r.grid.N, 5)
		s.Load(r.est.Reference)
		s.Eval(moved, realign.PoseMap(r.grid, pose.Inverse()))
		vol := make([]float32, len(moved))
		n := r.grid.N
		gain := func(i int) float64 {
			x := [3]int{i % n[0], i / n[0] % n[1], i / (n[0] * n[1])}
			return realign.GainAt(r.grid, r.est.Centre, gainOfSlice(x[axis]), x[0], x[1], x[2])
		}
		for i, v := range moved {
			vol[i] = v * float32(gain(i))
		}
		plain := p.Level(vol, 1, pose, false)
		residual := p.Level(vol, 1, pose, true)
		// Values to 2000 in float32, a few roundings.
		const bar = 2e-3
		for i, v := range moved {
			if math.Abs(float64(plain[i]-v)) > bar {
				t.Fatalf("axis %d, voxel %d: %g, want %g", axis, i, plain[i], v)
			}
			if math.Abs(float64(residual[i])) > bar {
				t.Fatalf("axis %d, voxel %d: residual %g of %g", axis, i, residual[i], v)
			}
		}
		seen := 0
		for shot := range r.grid.N[axis] {
			voxel, value, _ := p.Predicted(vol, 1, shot, pose)
			seen += len(voxel)
			for q, i := range voxel {
				if math.Abs(float64(value[q]-vol[i])) > bar {
					t.Fatalf("axis %d, voxel %d: predicted %g, is %g", axis, i, value[q], vol[i])
				}
			}
		}
		if seen < 1000 {
			t.Errorf("axis %d: only %d pixels predicted", axis, seen)
		}
		// Something else is left as it is, where the region is seen; elsewhere nothing is.
		for i := range vol {
			vol[i] += 100
		}
		left, empty := 0, 0
		for i, v := range p.Level(vol, 1, pose, true) {
			want := 100 / gain(i)
			switch {
			case v == 0:
				empty++
			case math.Abs(float64(v)-want) > bar:
				t.Fatalf("axis %d, voxel %d: %g left, want %g", axis, i, v, want)
			default:
				left++
			}
		}
		inside := 0
		for _, in := range p.Region() {
			if in {
				inside++
			}
		}
		if left < inside*9/10 || left > inside*11/10 || empty == 0 {
			t.Errorf("axis %d: predicted are %d voxels, the region has %d", axis, left, inside)
		}
	})
}
