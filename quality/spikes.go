package quality

import (
	"context"
	"fmt"
	"math"
	"slices"

	"evenkeel/internal/kernel"
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
	s := NewSpikes(nx, ny, nz, nt, axis, mask)
	nv := nx * ny * nz
	checkSeries("SliceSpikes", data, nv, nt)
	err := parallel.For(ctx, workers, nt, func(_, t int) error {
		s.Volume(t, func(u int) []float32 { return data[u*nv : (u+1)*nv] })
		return nil
	})
	if err != nil {
		return nil, err
	}
	return s.Scores(), nil
}

// Spikes is [SliceSpikes] of a series that comes volume by volume.
type Spikes struct {
	nv, nt, ns int
	runs       [][]run   // by slice
	voxels     []int     // by slice
	dev        []float64 // d of step 1: dev[t*ns+s]
	size       []float64 // mean magnitude, likewise
}

// NewSpikes prepares for nt volumes of nx*ny*nz voxels; axis and mask are as for [SliceSpikes],
// and mask is not kept.
func NewSpikes(nx, ny, nz, nt, axis int, mask []bool) *Spikes {
	if axis < 0 || axis > 2 {
		panic(fmt.Sprintf("quality: SliceSpikes: no axis %d", axis))
	}
	nv := nx * ny * nz
	checkMask("SliceSpikes", mask, nv)
	inner := [3]int{1, nx, nx * ny}[axis]
	ns := [3]int{nx, ny, nz}[axis]
	s := &Spikes{nv: nv, nt: nt, ns: ns, runs: make([][]run, ns), voxels: make([]int, ns), dev: make([]float64, nt*ns), size: make([]float64, nt*ns)}
	for v := 0; v < nv; v += inner {
		k := v / inner % ns
		runs, n := runsOf(mask, v, v+inner)
		s.runs[k] = append(s.runs[k], runs...)
		s.voxels[k] += n
	}
	for k, n := range s.voxels {
		if n < MinSpikeVoxels {
			s.runs[k] = nil
		}
	}
	return s
}

// SpikeSpan returns the first and the last of the volumes that volume t of nt is held
// against, itself among them; both grow with t.
func SpikeSpan(t, nt int) (first, last int) {
	if nt < MinSpikeVolumes {
		return t, t
	}
	first = min(max(t-2, 0), nt-MinSpikeVolumes)
	return first, first + MinSpikeVolumes - 1
}

// Volume measures volume t; at returns the volumes of [SpikeSpan]. Every volume must be
// measured once, in any order and from any goroutine; nothing is kept of them.
func (s *Spikes) Volume(t int, at func(t int) []float32) {
	if s.nt < MinSpikeVolumes {
		return
	}
	var near [4][]float32
	first, last := SpikeSpan(t, s.nt)
	for k, u := 0, first; u <= last; u++ {
		if u != t {
			near[k] = at(u)[:s.nv]
			k++
		}
	}
	now := at(t)[:s.nv]
	for k, runs := range s.runs {
		var d, l float64
		for _, r := range runs {
			to := r.from + r.n
			rd, rl := kernel.Apart(now[r.from:to], &[4][]float32{near[0][r.from:to], near[1][r.from:to], near[2][r.from:to], near[3][r.from:to]})
			d += rd
			l += rl
		}
		s.dev[t*s.ns+k] = d / float64(s.voxels[k])
		s.size[t*s.ns+k] = l / float64(s.voxels[k])
	}
}

// Scores returns score[t][s] as [SliceSpikes] does, once every volume was measured.
func (s *Spikes) Scores() [][]float64 {
	score := make([][]float64, s.nt)
	for t := range score {
		score[t] = make([]float64, s.ns)
		for k := range score[t] {
			score[t][k] = math.NaN()
		}
	}
	if s.nt < MinSpikeVolumes {
		return score
	}
	d, away := make([]float64, s.nt), make([]float64, s.nt)
	for k, n := range s.voxels {
		if n < MinSpikeVoxels {
			continue
		}
		var level float64
		for t := range d {
			d[t] = s.dev[t*s.ns+k]
			level += s.size[t*s.ns+k]
		}
		mid := median(d)
		for t := range d {
			away[t] = math.Abs(d[t] - mid)
		}
		scale := max(madScale*median(away), spikeFloor*(level/float64(s.nt)))
		for t := range d {
			score[t][k] = 0
			if d[t] != mid {
				score[t][k] = (d[t] - mid) / scale
			}
		}
	}
	return score
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
