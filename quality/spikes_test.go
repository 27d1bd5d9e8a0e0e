package quality

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// The golden scores come from numpy's median over whole arrays, written
// straight from the definition. Slices there have 20 to 30 voxels.
func TestSliceSpikesGolden(t *testing.T) {
	var g struct {
		Source string
		Size   [4]int
		Data   []float32
		Cases  []struct {
			Axis  int
			Score [][]float64
		}
	}
	golden(t, "spikes.json", &g)
	if len(g.Cases) != 3 {
		t.Fatalf("%d axes", len(g.Cases))
	}
	for _, c := range g.Cases {
		got, err := SliceSpikes(ctx, g.Data, g.Size[0], g.Size[1], g.Size[2], g.Size[3], c.Axis, nil, 2)
		if err != nil {
			t.Fatal(err)
		}
		if len(got) != len(c.Score) || len(got[0]) != len(c.Score[0]) || len(got[0]) != g.Size[c.Axis] {
			t.Fatalf("axis %d: %d x %d scores", c.Axis, len(got), len(got[0]))
		}
		for u := range got {
			for s := range got[u] {
				// Scores of order 1 from differences of means of order 1 that
				// agree to 1e-15, over deviations of order 0.1.
				if math.Abs(got[u][s]-c.Score[u][s]) > 1e-11*max(1, math.Abs(c.Score[u][s])) {
					t.Errorf("axis %d, volume %d, slice %d: %v, expected %v", c.Axis, u, s, got[u][s], c.Score[u][s])
				}
			}
		}
	}
}

// plant adds a checkerboard to one slice of one volume.
func plant(data []float32, nx, ny, nz, axis, t, slice int, height float32) {
	for z := range nz {
		for y := range ny {
			for x := range nx {
				if [3]int{x, y, z}[axis] == slice && (x+y+z)%2 == 0 {
					data[x+nx*(y+ny*(z+nz*t))] += height
				}
			}
		}
	}
}

// A planted spike stands out at its volume and slice and nowhere else: not in
// the neighbours in time, not at the ends of the series.
func TestSliceSpikesFindsThePlantedOne(t *testing.T) {
	const nx, ny, nz, nt = 12, 11, 10, 40
	for axis := range 3 {
		for _, at := range []int{0, 1, 2, 20, nt - 2, nt - 1} {
			r := rand.New(rand.NewPCG(uint64(axis), uint64(at)))
			data := noise(r, nx*ny*nz, nt, 800, 8)
			plant(data, nx, ny, nz, axis, at, 6, 40)
			score, err := SliceSpikes(ctx, data, nx, ny, nz, nt, axis, nil, 1)
			if err != nil {
				t.Fatal(err)
			}
			for u := range score {
				for s, v := range score[u] {
					hit := u == at && s == 6
					// Half the voxels move by five standard deviations, which
					// about triples d; chance reaches 5 once in 1e6, but d of a
					// small slice has a heavier tail, so 8 is the line.
					if hit != (v > 8) {
						t.Errorf("axis %d, spike at %d: score %.1f at volume %d, slice %d", axis, at, v, u, s)
					}
				}
			}
		}
	}
}

// In white noise the score is near to standard normal, as the doc says.
func TestSliceSpikesNull(t *testing.T) {
	const nx, ny, nz, nt = 16, 16, 20, 200
	score := first(SliceSpikes(ctx, noise(rand.New(rand.NewPCG(9, 9)), nx*ny*nz, nt, 1000, 10), nx, ny, nz, nt, 2, nil, 2))
	var v []float64
	for _, row := range score {
		v = append(v, row...)
	}
	var sum, square float64
	for _, x := range v {
		sum += x
		square += x * x
	}
	n := float64(len(v))
	sd := math.Sqrt(square/n - sum/n*sum/n)
	// 4000 scores: the mean has a standard error of 0.02 and each slice's MAD,
	// of 200 values, one of 6 %, so 0.1 and 10 % are four of them or more.
	if math.Abs(sum/n) > 0.1 || math.Abs(sd-1) > 0.1 {
		t.Errorf("mean %.3f, standard deviation %.3f, expected 0 and 1", sum/n, sd)
	}
	if top := slices.Max(v); top > 5.5 {
		t.Errorf("highest of %d scores in noise: %.2f", len(v), top)
	}
}

func TestSliceSpikesUndefined(t *testing.T) {
	const nx, ny, nz = 5, 4, 3
	r := rand.New(rand.NewPCG(2, 2))
	data := noise(r, nx*ny*nz, 6, 100, 1)
	mask := make([]bool, nx*ny*nz)
	for v := range mask {
		mask[v] = v/20 != 1 || v%20 != 7 // the middle slice is one voxel short of 20
	}
	for u, row := range first(SliceSpikes(ctx, data, nx, ny, nz, 6, 2, mask, 1)) {
		if math.IsNaN(row[0]) || !math.IsNaN(row[1]) || math.IsNaN(row[2]) {
			t.Errorf("volume %d: %v", u, row)
		}
	}
	for nt := range MinSpikeVolumes {
		for _, row := range first(SliceSpikes(ctx, data[:nx*ny*nz*nt], nx, ny, nz, nt, 2, nil, 1)) {
			for _, v := range row {
				if !math.IsNaN(v) {
					t.Errorf("%d volumes: score %v", nt, v)
				}
			}
		}
	}
	// A series without noise: finite, zero where nothing happens, high where
	// something does.
	still := slices.Repeat(data[:nx*ny*nz], 9)
	still[nx*ny*nz*4+21] += 1
	for u, row := range first(SliceSpikes(ctx, still, nx, ny, nz, 9, 2, nil, 1)) {
		for s, v := range row {
			if hit := u == 4 && s == 1; math.IsInf(v, 0) || hit != (v > 100) || !hit && v != 0 {
				t.Errorf("volume %d, slice %d: %v", u, s, v)
			}
		}
	}
	for _, row := range first(SliceSpikes(ctx, make([]float32, nx*ny*nz*9), nx, ny, nz, 9, 2, nil, 1)) {
		if slices.Max(row) != 0 || slices.Min(row) != 0 {
			t.Errorf("all zero: %v", row)
		}
	}
}

// The hull of an invented ship, sounded eight times; in the sixth sounding the
// second plank rattled.
func ExampleSliceSpikes() {
	const nx, ny, nz, nt = 5, 5, 3, 8
	series := make([]float32, nx*ny*nz*nt)
	for i := range series {
		t, v := i/(nx*ny*nz), i%(nx*ny*nz)
		series[i] = 100 + float32((7*v+3*t*t+v*t)%5)
		if t == 5 && v/(nx*ny) == 1 {
			series[i] += 20
		}
	}
	score, err := SliceSpikes(context.Background(), series, nx, ny, nz, nt, 2, nil, 1)
	if err != nil {
		fmt.Println(err)
		return
	}
	for t, row := range score {
		for s, v := range row {
			if v > 8 {
				fmt.Printf("volume %d, slice %d\n", t, s)
			}
		}
	}
	// Output: volume 5, slice 1
}
