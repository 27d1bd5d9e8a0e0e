package realign_test

import (
	"context"
	"math"
	"testing"
	"time"

	"evenkeel/phantom"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

func pathErrors(p realign.Path, truth func(t float64) realign.Pose) (rms, max float64) {
	n := len(p.Times)
	mean := make([][3]float64, len(headPoints))
	disp := make([][][3]float64, n)
	for s, t := range p.Times {
		d := truth(t).Inverse().Compose(p.Poses[s])
		for i, x := range headPoints {
			q := d.Apply(x)
			disp[s] = append(disp[s], q)
			for a := range q {
				mean[i][a] += q[a] / float64(n)
			}
		}
	}
	sum := 0.0
	for s := range disp {
		e := 0.0
		for i := range headPoints {
			for a := range 3 {
				e += math.Pow(disp[s][i][a]-mean[i][a], 2)
			}
		}
		e /= float64(len(headPoints))
		sum += e
		max = math.Max(max, math.Sqrt(e))
	}
	return 1000 * math.Sqrt(sum/float64(n)), 1000 * max
}

func TestPathDbg(t *testing.T) {
	g := axial([3]int{52, 60, 30}, [3]float64{3.5, 3.5, 4})
	c := [3]float64{}
	walk := phantom.Walk(5, 0.4*math.Sqrt(3), 0.006*math.Sqrt(3), 0.05, c)
	cases := []struct {
		name  string
		tr    float64
		times []float64
		nt    int
		m     phantom.Motion
	}{
		{"TR2 still", 2, phantom.Interleaved(30, 2), 16, nil},
		{"TR2 walk", 2, phantom.Interleaved(30, 2), 16, walk},
		{"TR2 resp", 2, phantom.Interleaved(30, 2), 16, phantom.Compose(walk, phantom.Breathing(0.3, [3]float64{0, 0.1 * math.Sqrt2, 0}, [3]float64{0.0008 * math.Sqrt2, 0, 0}, c))},
		{"TR2 step", 2, phantom.Interleaved(30, 2), 16, phantom.Jerk(walk, 15.1, [3]float64{0.5, 0.8, 0.4}, [3]float64{}, c)},
		{"TR2 big", 2, phantom.Interleaved(30, 2), 16, phantom.Walk(6, 1.5*math.Sqrt(3), 0.02*math.Sqrt(3), 0.1, c)},
		{"TR.8 walk", 0.8, phantom.Multiband(30, 3, 0.8), 24, walk},
		{"TR.8 step", 0.8, phantom.Multiband(30, 3, 0.8), 24, phantom.Jerk(walk, 9.1, [3]float64{0.5, 0.8, 0.4}, [3]float64{}, c)},
	}
	for _, k := range cases {
		s := phantom.Scan{Head: phantom.NewHead(3), N: g.N, NT: k.nt, Affine: g.Affine, TR: k.tr, SliceAxis: 2, SliceTimes: k.times, NoiseSD: 9, Seed: 1, Motion: k.m}
		data, err := s.Simulate(context.Background(), 2)
		if err != nil {
			t.Fatal(err)
		}
		truth := func(u float64) realign.Pose {
			if k.m == nil {
				return realign.Identity
			}
			return realign.FromMatrix(k.m(u))
		}
		est := estimate(t, g, data, realign.Options{})
		t0 := time.Now()
		p, err := realign.EstimatePath(context.Background(), g, data, k.nt, slicetime.Schedule{Times: k.times, Axis: 2, TR: k.tr}, est, 2)
		if err != nil {
			t.Fatal(err)
		}
		el := time.Since(t0)
		// volume poses at slots
		vol := realign.Path{}
		lin := realign.Path{}
		for n := range k.nt {
			lin.Times = append(lin.Times, float64(n)*k.tr+s.Middle())
			lin.Poses = append(lin.Poses, est.Volumes[n].Pose)
		}
		li := realign.Path{}
		for i, u := range p.Path.Times {
			vol.Times = append(vol.Times, u)
			vol.Poses = append(vol.Poses, est.Volumes[i/p.Shots].Pose)
			li.Times = append(li.Times, u)
			li.Poses = append(li.Poses, lin.At(u))
		}
		e0, _ := pathErrors(vol, truth)
		e1, _ := pathErrors(li, truth)
		e2, m2 := pathErrors(p.Path, truth)
		ex := 0.0
		for _, v := range p.Expected {
			ex += v * v
		}
		t.Logf("%-10s vol %.1f lin %.1f path %.1f / %.1f  expected %.1f  used %v %s sigma %.2f res %.3f -> %.3f expl %.5f lt %.2g lr %.2g it %d  %v", k.name, e0, e1, e2, m2, 1000*math.Sqrt(ex/float64(k.nt)), p.Used, p.Reason, p.Sigma, p.VolumeResidual, p.PathResidual, p.Explained, p.StrengthShift, p.StrengthTurn, p.Iterations, el)
	}
}
