package realign_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"evenkeel/realign"
)

// Rows cut into lines lie where the map says, point by point, to the tolerance of the
// cuts: with poses that wander, and with a jerk between two slices, which a row that is
// tilted crosses at either side of its middle.
func TestLinesFollowTheMap(t *testing.T) {
	g := axial([3]int{40, 40, 40}, [3]float64{3, 3, 3})
	wander := func(k int) realign.Pose {
		a := float64(k) / 4
		return realign.FromParams([3]float64{0.2 * math.Sin(a), 0.1 * math.Cos(a/2), 0.2 * math.Sin(a/3)}, [3]float64{0.06, 0.05 + 0.002*math.Sin(a/2), 0.02}, [3]float64{})
	}
	poses := map[string]func(k int) realign.Pose{
		"still":  func(int) realign.Pose { return wander(3) },
		"wander": wander,
		"jerk": func(k int) realign.Pose {
			if k < 20 {
				return realign.FromParams([3]float64{0.2, 0, -0.1}, [3]float64{0.06, 0.055, 0.02}, [3]float64{})
			}
			return realign.FromParams([3]float64{0.3, 0.2, -0.35}, [3]float64{0.06, 0.058, 0.021}, [3]float64{})
		},
	}
	for axis := range 3 {
		for name, pose := range poses {
			m := realign.SlotMap(g, axis, pose)
			var rows [][4]int
			for z := range 40 {
				for y := z % 3; y < 40; y += 3 {
					rows = append(rows, [4]int{z % 5, 40 - z%7 - z%5, y, z})
				}
			}
			rows = append(rows, [4]int{7, 1, 20, 20}, [4]int{7, 2, 20, 20})
			got, lines := realign.Lines(m, rows)
			x, y, z := make([]float64, 40), make([]float64, 40), make([]float64, 40)
			q, worst := 0, 0.0
			for _, r := range rows {
				m.Row(r[2], r[3], x, y, z)
				for i := r[0]; i < r[0]+r[1]; i++ {
					for k, want := range [3]float64{x[i], y[i], z[i]} {
						worst = max(worst, math.Abs(got[q][k]-want))
					}
					q++
				}
			}
			// A thousandth; the map itself stops within a ten-thousandth, and so do the ends of lines.
			if worst > 1.3e-3 {
				t.Errorf("axis %d, %s: off by %.2g voxels", axis, name, worst)
			}
			if per := float64(lines) / float64(len(rows)); name == "still" && axis > 0 && per > 12 || per < 1 {
				t.Errorf("axis %d, %s: %.1f lines a row", axis, name, per)
			}
		}
	}
}

// A row that crosses a jerk with its middle half-way is straight at its ends and its middle,
// and nowhere else.
func TestLinesFollowABendAndBack(t *testing.T) {
	g := axial([3]int{40, 40, 40}, [3]float64{3, 3, 3})
	m := realign.SlotMap(g, 2, func(k int) realign.Pose {
		shift := [3]float64{0, 0, 1.5}
		if k >= 20 {
			shift[0] = 0.3
		}
		// About the middle of the row, so that it lies at slice 19.5.
		return realign.FromParams(shift, [3]float64{0, 0.06, 0}, g.World(19, 20, 19))
	})
	x, y, z := make([]float64, 40), make([]float64, 40), make([]float64, 40)
	m.Row(20, 19, x, y, z)
	if d := x[19] - (x[0]+x[38])/2; math.Abs(z[19]-19.5) > 0.01 || math.Abs(d) > 2e-4 || math.Abs(x[10]-x[0]-10*(x[38]-x[0])/38) < 0.01 {
		t.Fatalf("not the row that was meant: its middle lies at slice %.3f and is off its ends' line by %.2g", z[19], d)
	}
	got, _ := realign.Lines(m, [][4]int{{0, 39, 20, 19}})
	for i, p := range got {
		if d := math.Abs(p[0] - x[i]); d > 1.3e-3 {
			t.Errorf("voxel %d is off by %.2g", i, d)
		}
	}
}

// The median does not hang on the guess that it is sought with.
func TestMedianNear(t *testing.T) {
	r := rand.New(rand.NewPCG(21, 22))
	for n := range 300 {
		v := make([]float32, n)
		for i := range v {
			v[i] = float32(math.Abs(r.NormFloat64()))
			if n%3 == 0 {
				v[i] = float32(int(4 * v[i])) // ties
			}
		}
		if n > 20 && n%7 == 0 {
			v[3], v[11] = float32(math.NaN()), float32(math.Inf(1))
		}
		_, want := realign.Medians(v, 0)
		for _, guess := range []float32{want, 0.95 * want, 1.08 * want, 2 * want, 0.3 * want, 0, 1e30, 3e38} {
			if got, _ := realign.Medians(v, guess); got != want {
				t.Errorf("%d values, guess %g: median %g, want %g", n, guess, got, want)
			}
		}
	}
}

// A line counts in full where all of it is well inside and no slice at it is weak; and
// what its points count is what edgeWeight says of each.
func TestLineWeights(t *testing.T) {
	g := axial([3]int{20, 20, 20}, [3]float64{3, 3, 3})
	weak := make([]bool, 20)
	weight := func(start, step [3]float64) ([]float32, bool) {
		return realign.LineWeights(g, 2, 10, start, step, weak)
	}
	if _, full := weight([3]float64{4, 9, 5}, [3]float64{1, 0.01, 0.02}); !full {
		t.Error("a line well inside does not count in full")
	}
	weak[6] = true
	if w, full := weight([3]float64{4, 9, 5.01}, [3]float64{1, 0, 0.01}); full || w[0] != 0 || w[9] != 0 {
		t.Errorf("a line beside a weak slice counts %v", w)
	}
	if w, full := weight([3]float64{4, 9, 4.5}, [3]float64{1, 0, 0.1}); full || w[4] != 1 || w[5] != 0 || w[6] != 0 {
		t.Errorf("a line that runs into a weak slice counts %v", w)
	}
	weak[6] = false
	w, full := weight([3]float64{-1.25, 9, 5}, [3]float64{0.5, 0, 0})
	for i, got := range w {
		deep := -1.25 + 0.5*float64(i)
		want := float32(0)
		if deep >= -0.5 {
			want = float32(realign.EdgeWeight(deep))
		}
		if full || got != want {
			t.Errorf("%g voxels inside: %g, want %g", deep, got, want)
		}
	}
}
