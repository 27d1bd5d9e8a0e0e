package quality

import (
	"context"
	"fmt"
	"math"
	"slices"

	"evenkeel/internal/parallel"
)

const (
	// MinSpikeVoxels is how many voxels of the mask a slice needs for a score:
	// the mean of fewer says more about one voxel than about the slice.
	MinSpikeVoxels = 20
	// MinSpikeVolumes is how many volumes a score needs: one and its four
	// neighbours in time.
	MinSpikeVolumes = 5
)

// madScale makes the median absolute deviation of normal values estimate their
// standard deviation: 1 / 0.67449, the normal distribution's upper quartile.
const madScale = 1.4826

// spikeFloor, times the mean magnitude of a slice, is the smallest scale a
// score is divided by: one unit in the last place of a float32. Below it a
// difference is rounding; without it a noise-free series divides by zero.
const spikeFloor = 1.0 / (1 << 23)

// SliceSpikes returns how far each slice of each volume stands out from its own
// course in time: score[t][s], s counted along axis (0, 1 or 2). A spike of the
// receiver, a lost excitation or a jerk inside one strikes some slices of
// one volume; motion between volumes raises all of them together.
//
// The score is ours, and robust in both of its steps:
//
//  1. d[t][s] is the mean, over the mask's voxels of the slice, of
//     |x_t - m_t|, where m_t is the median of the voxel in the four volumes
//     nearest in time to t, t itself left out: t-2, t-1, t+1 and t+2, and at
//     the ends the other four of the first or last five. The median of four is
//     half the sum of the middle two, so that a spike in one of them hardly
//     moves it: a spike raises d of its own volume and not of its neighbours.
//  2. score[t][s] = (d[t][s] - median_t d) / (1.4826 MAD_t d), both over all
//     volumes of the slice, MAD being the median absolute deviation. The
//     divisor is never less than 2^-23 of the slice's mean magnitude.
//
// In stationary noise the scores of a long run are near to standard normal, so 5 or
// more is rare by chance; in a short run the median absolute deviation is itself
// uncertain and large scores are commoner. Scores are finite for finite data, NaN for slices with fewer
// than [MinSpikeVoxels] voxels in mask and for series of fewer than
// [MinSpikeVolumes] volumes, and 0 for a slice that never changes.
//
// data holds nt volumes of nx*ny*nz voxels, x fastest; a nil mask takes every
// voxel. At most workers goroutines are used. The only error is that of ctx.
func SliceSpikes(ctx context.Context, data []float32, nx, ny, nz, nt, axis int, mask []bool, workers int) ([][]float64, error) {
	if axis < 0 || axis > 2 {
		panic(fmt.Sprintf("quality: SliceSpikes: no axis %d", axis))
	}
	nv := nx * ny * nz
	checkSeries("SliceSpikes", data, nv, nt)
	n := [3]int{nx, ny, nz}
	stride := [3]int{1, nx, nx * ny}
	ns := n[axis]
	voxels := make([][]int, ns)
	for _, v := range inside("SliceSpikes", mask, nv) {
		s := v / stride[axis] % ns
		voxels[s] = append(voxels[s], v)
	}

	score := make([][]float64, nt)
	for t := range score {
		score[t] = make([]float64, ns)
		for s := range score[t] {
			score[t][s] = math.NaN()
		}
	}
	if nt < MinSpikeVolumes {
		return score, ctx.Err()
	}
	dev := make([]float64, nt*ns)  // d, then by slice: dev[s*nt+t]
	size := make([]float64, nt*ns) // mean magnitude, likewise
	err := parallel.For(ctx, workers, nt, func(_, t int) error {
		volume := func(t int) []float32 { return data[t*nv : (t+1)*nv] }
		now, near := volume(t), [4][]float32{}
		first := min(max(t-2, 0), nt-5)
		for k, u := 0, first; u < first+5; u++ {
			if u != t {
				near[k] = volume(u)
				k++
			}
		}
		for s, list := range voxels {
			if len(list) < MinSpikeVoxels {
				continue
			}
			var d, l float64
			for _, v := range list {
				a, b, c, e := near[0][v], near[1][v], near[2][v], near[3][v]
				// The middle two of four, unordered: the larger of the smaller
				// ones and the smaller of the larger ones of two pairs.
				low, high := max(min(a, b), min(c, e)), min(max(a, b), max(c, e))
				x := float64(now[v])
				d += math.Abs(x - float64(0.5*(float64(low)+float64(high))))
				l += math.Abs(x)
			}
			dev[s*nt+t] = d / float64(len(list))
			size[s*nt+t] = l / float64(len(list))
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	away := make([]float64, nt)
	for s, list := range voxels {
		if len(list) < MinSpikeVoxels {
			continue
		}
		d := dev[s*nt : (s+1)*nt]
		mid := median(d)
		var level float64
		for t := range d {
			away[t] = math.Abs(d[t] - mid)
			level += size[s*nt+t]
		}
		scale := max(madScale*median(away), spikeFloor*(level/float64(nt)))
		for t := range d {
			score[t][s] = 0
			if d[t] != mid {
				score[t][s] = (d[t] - mid) / scale
			}
		}
	}
	return score, nil
}

// median returns the middle value, or half the sum of the middle two; v is not
// changed and must not be empty.
func median(v []float64) float64 {
	s := slices.Clone(v)
	slices.Sort(s)
	h := len(s) / 2
	if len(s)%2 == 1 {
		return s[h]
	}
	return float64(0.5 * (s[h-1] + s[h]))
}
