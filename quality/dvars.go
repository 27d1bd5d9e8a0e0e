package quality

import (
	"context"
	"fmt"
	"math"

	"evenkeel/internal/kernel"
	"evenkeel/internal/parallel"
)

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
	c := NewChange(nv, nt, mask)
	err := parallel.For(ctx, workers, nt, func(_, t int) error {
		var before []float32
		if t > 0 {
			before = data[(t-1)*nv : t*nv]
		}
		c.Volume(t, before, data[t*nv:(t+1)*nv])
		return nil
	})
	if err != nil {
		return nil, err
	}
	return c.DVARS(use), nil
}

// A Change is [DVARS] of a series that comes volume by volume.
type Change struct {
	nv     int
	runs   []run
	voxels int
	level  []float64 // by volume: sum of the values
	change []float64 // by volume: sum of squared differences
}

// NewChange prepares for nt volumes of nv voxels; mask is as for [DVARS] and not kept.
func NewChange(nv, nt int, mask []bool) *Change {
	checkMask("DVARS", mask, nv)
	c := &Change{nv: nv, level: make([]float64, nt), change: make([]float64, nt)}
	c.runs, c.voxels = runsOf(mask, 0, nv)
	return c
}

// Volume takes volume t, of nv voxels, and the one before it, which is not looked at for t = 0.
// Every volume must be given once, in any order and from any goroutine; nothing is
// kept of them.
func (c *Change) Volume(t int, before, now []float32) {
	if t == 0 {
		before = now
	}
	if len(now) != c.nv || len(before) != c.nv {
		panic(fmt.Sprintf("quality: DVARS: volumes of %d and %d voxels, not %d", len(before), len(now), c.nv))
	}
	var level, change float64
	for _, r := range c.runs {
		l, d := kernel.Changes(now[r.from:r.from+r.n], before[r.from:r.from+r.n])
		level += l
		change += d
	}
	c.level[t], c.change[t] = level, change
}

// DVARS returns the measure once every volume was taken; use is as for the function [DVARS].
func (c *Change) DVARS(use []bool) []float64 {
	var total, used float64
	for t, l := range c.level {
		if use == nil || use[t] {
			total += l
			used++
		}
	}
	n := float64(c.voxels)
	mean := total / (n * used)
	dvars := make([]float64, len(c.level))
	for t := range dvars {
		dvars[t] = math.NaN()
		if t > 0 && mean > 0 {
			dvars[t] = 100 * math.Sqrt(c.change[t]/n) / mean
		}
	}
	return dvars
}
