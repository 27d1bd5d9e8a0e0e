package phantom

import (
	"math"
	"math/rand/v2"
	"testing"
)

func TestKernels(t *testing.T) {
	for i := -4000; i <= 4000; i++ {
		u := float64(i) / 977
		near(t, "wave", wave(u), math.Sin(2*math.Pi*u), 1e-11) // the Taylor remainder, (pi/2)^17/17! = 6e-12
	}
	// step is the integral of (1-u^2)^4, here by Simpson's rule on 2000 intervals
	// (error below h^4 = 1e-12), and its kernel has the SD it is named for.
	const n = 2000
	kernel := func(u float64) float64 { return math.Pow(max(0, 1-u*u), 4) }
	var total, second float64
	sum := make([]float64, n+1)
	for i := range n {
		a, h := -1+2*float64(i)/n, 2./n
		total += h / 6 * (kernel(a) + 4*kernel(a+h/2) + kernel(a+h))
		second += h * kernel(a+h/2) * (a + h/2) * (a + h/2)
		sum[i+1] = total
	}
	for i := 0; i <= n; i++ {
		d := edgeReach * (-1 + 2*float64(i)/n)
		near(t, "step", step(d), 1-sum[i]/total, 1e-10)
	}
	near(t, "SD of the edge", edgeReach*math.Sqrt(second/total), edgeSD, 1e-6)
	if step(edgeReach) != 0 || step(-edgeReach) != 1 || step(math.Inf(-1)) != 1 || step(math.Inf(1)) != 0 {
		t.Error("step does not end at 1 and 0")
	}
	// Curvature at the top of bump(r^2/(8 SD^2)): -1/SD^2.
	const h = 1e-3
	near(t, "curvature of bump", (2*bump(h*h/bumpReach)-2)/(h*h), -1, 1e-6)
	if bump(1) != 0 || bump(0) != 1 || bump(7) != 0 {
		t.Error("bump does not run from 1 to 0")
	}
}

// plainAt is the twin of Head.At without the list of cells: every spot is asked.
func plainAt(h *Head, x [3]float64) float64 {
	out := h.outer.depth(x)
	var w, t float64
	for _, f := range h.fold {
		w += wave(f[0]*x[0]+f[1]*x[1]+f[2]*x[2]+f[3]) / 3
	}
	db := h.brain.depth(x)
	t = 800 - 170*step(db+11+6*w)
	for _, s := range h.spots {
		var q float64
		for k := range x {
			q += (x[k] - s.c[k]) * (x[k] - s.c[k]) * s.inv[k]
		}
		t += s.amp * bump(q)
	}
	return h.scale * step(out) * (560 - 330*step(out+5.5) + step(db+1.5*w)*t)
}

func TestHeadLooksAtEverySpotThatReaches(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for seed := range uint64(4) {
		h := NewHead(seed)
		inside := 0
		for range 20000 {
			x := [3]float64{200 * (r.Float64() - 0.5), 220 * (r.Float64() - 0.5), 200 * (r.Float64() - 0.5)}
			near(t, "intensity", h.At(x), plainAt(h, x), 1e-9) // sums of ten terms of up to 1600
			if h.Inside(x) {
				inside++
			}
		}
		if inside < 3000 {
			t.Errorf("seed %d: only %d points inside", seed, inside)
		}
	}
}

func TestHeadHasTheSizeAndLevelPromised(t *testing.T) {
	for seed := range uint64(6) {
		h := NewHead(seed)
		for k, want := range [3]float64{70, 87.5, 75} {
			// Half-axes are drawn within 1.5 %.
			lo, hi := [3]float64{}, [3]float64{}
			lo[k], hi[k] = 0.985*want-1e-9, 1.015*want+1e-9
			if !h.Inside(lo) || h.Inside(hi) {
				t.Errorf("seed %d, axis %d: the edge is not at %g mm", seed, k, want)
			}
			for _, sign := range [2]float64{-1, 1} {
				far := [3]float64{}
				far[k] = sign * (1.015*want + edgeReach*1.2)
				if v := h.At(far); v != 0 {
					t.Errorf("seed %d: %g at %v, expected background", seed, v, far)
				}
			}
		}
		var sum float64
		points := h.Points(4.3) // not the grid the level was set on
		lowest, highest := math.Inf(1), 0.0
		for _, p := range points {
			v := h.At(p)
			sum += v
			lowest, highest = min(lowest, v), max(highest, v)
		}
		near(t, "mean inside", sum/float64(len(points)), meanLevel, 0.005*meanLevel)
		if lowest <= 50 || highest > 2000 || highest < 1200 {
			t.Errorf("seed %d: intensities from %g to %g", seed, lowest, highest)
		}
		for z := -90.0; z <= 90; z += 5 {
			for y := -110.0; y <= 110; y += 5 {
				for x := -90.0; x <= 90; x += 5 {
					if v := h.At([3]float64{x, y, z}); !(v >= 0) {
						t.Fatalf("seed %d: intensity %g at %g %g %g", seed, v, x, y, z)
					}
				}
			}
		}
	}
	a, b := NewHead(1), NewHead(2)
	differ := 0
	for _, p := range a.Points(10) {
		if math.Abs(a.At(p)-b.At(p)) > 10 {
			differ++
		}
		if a.At(p) != head1.At(p) {
			t.Fatalf("the same seed draws another head at %v", p)
		}
	}
	if differ < 1000 {
		t.Errorf("heads of two seeds differ at only %d points", differ)
	}
}

// head1 is a head that only reading tests share.
var head1 = NewHead(1)

// A line through the head has next to nothing beyond the Nyquist frequency of
// 3.3 mm voxels, and something at half of it: the scan is neither aliased noise
// nor a featureless ball.
func TestHeadIsNearlyBandLimited(t *testing.T) {
	const n, d = 1024, 0.25 // mm
	for seed := range uint64(3) {
		h := NewHead(seed)
		for axis := range 3 {
			f := func(u float64) float64 {
				x := [3]float64{7, -5, 9}
				x[axis] = u - n*d/2
				return h.At(x)
			}
			if l := leak(f, n, d, 1/6.6); l > 4e-6 { // amplitude: 0.2 %
				t.Errorf("seed %d, axis %d: share of power beyond 1/6.6 mm is %g", seed, axis, l)
			}
			if l := leak(f, n, d, 1/26.4); l < 1e-3 {
				t.Errorf("seed %d, axis %d: share of power beyond 1/26.4 mm is %g", seed, axis, l)
			}
		}
	}
}

// Value changes by less than 1 between points 1/100 mm apart anywhere: no cell
// boundary, kernel end or fold leaves a seam.
func TestHeadHasNoSeams(t *testing.T) {
	h := head1
	r := rand.New(rand.NewPCG(3, 4))
	for range 50000 {
		x := [3]float64{170 * (r.Float64() - 0.5), 200 * (r.Float64() - 0.5), 180 * (r.Float64() - 0.5)}
		if r.IntN(2) == 0 { // onto a cell boundary
			k := r.IntN(3)
			x[k] = h.low[k] + math.Floor((x[k]-h.low[k])/cellSize)*cellSize - 0.005
		}
		d := direction(r)
		y := x
		for k := range y {
			y[k] += 0.01 * d[k]
		}
		if j := math.Abs(h.At(x) - h.At(y)); j > 3 { // the steepest edge: 1100/(3 sqrt(2 pi)) a mm, and twice that for luck
			t.Fatalf("jump of %g at %v", j, x)
		}
	}
}
