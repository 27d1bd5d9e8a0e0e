package quality

import (
	"context"
	"fmt"
	"math"

	"evenkeel/internal/parallel"
)

// sumBlock is how many terms are added before the partial sum is put aside:
// it keeps rounding small and is part of the definition of the result's bits.
const sumBlock = 4096

// DVARS returns, for each volume t, the root mean square over the voxels of
// mask of x_t - x_(t-1), in percent of the mean of all values of mask and
// volumes (Smyser et al. 2010, Cerebral Cortex 20(12):2852-2862; Power et al.
// 2012, NeuroImage 59(3):2142-2154).
//
// Volume t is data[t*nv:(t+1)*nv]; mask has nv values, nil takes every voxel;
// use, of nt values, marks the volumes that the mean is taken over, nil all.
// Differences are given for every volume. The first value is NaN; all are if
// mask is empty or the mean is not above zero. At most workers goroutines are used. The only error is that of ctx.
func DVARS(ctx context.Context, data []float32, nv, nt int, mask, use []bool, workers int) ([]float64, error) {
	checkSeries("DVARS", data, nv, nt)
	if use != nil && len(use) != nt {
		panic(fmt.Sprintf("quality: DVARS: %d marks for %d volumes", len(use), nt))
	}
	voxels := inside("DVARS", mask, nv)
	level := make([]float64, nt)  // sum of the values
	change := make([]float64, nt) // sum of squared differences
	err := parallel.For(ctx, workers, nt, func(_, t int) error {
		now := data[t*nv : (t+1)*nv]
		before := now
		if t > 0 {
			before = data[(t-1)*nv : t*nv]
		}
		for rest := voxels; len(rest) > 0; {
			n := min(sumBlock, len(rest))
			var l, c float64
			for _, v := range rest[:n] {
				x := float64(now[v])
				d := x - float64(before[v])
				l += x
				c += float64(d * d)
			}
			level[t] += l
			change[t] += c
			rest = rest[n:]
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	var total, used float64
	for t, l := range level {
		if use == nil || use[t] {
			total += l
			used++
		}
	}
	n := float64(len(voxels))
	mean := total / (n * used)
	dvars := make([]float64, nt)
	for t := range dvars {
		dvars[t] = math.NaN()
		if t > 0 && mean > 0 {
			dvars[t] = 100 * math.Sqrt(change[t]/n) / mean
		}
	}
	return dvars, nil
}

// checkSeries panics unless data holds nt volumes of nv voxels.
func checkSeries(who string, data []float32, nv, nt int) {
	if nv < 0 || nt < 0 || len(data) != nv*nt {
		panic(fmt.Sprintf("quality: %s: %d values for %d volumes of %d voxels", who, len(data), nt, nv))
	}
}

// inside returns the indices of the voxels of mask in increasing order; every
// voxel if mask is nil.
func inside(who string, mask []bool, nv int) []int {
	if mask != nil && len(mask) != nv {
		panic(fmt.Sprintf("quality: %s: mask of %d voxels for a volume of %d", who, len(mask), nv))
	}
	voxels := make([]int, 0, nv)
	for v := range nv {
		if mask == nil || mask[v] {
			voxels = append(voxels, v)
		}
	}
	return voxels
}
