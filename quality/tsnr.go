package quality

import (
	"context"
	"fmt"
	"math"

	"evenkeel/internal/kernel"
	"evenkeel/internal/parallel"
)

// tsnrBlock is how many voxels are walked through time together: the sums of so
// many stay in a core's near cache. It does not touch the result, since voxels do not meet.
const tsnrBlock = 1024

// TSNR writes the temporal signal to noise ratio of each voxel to dst: mean
// over standard deviation in time, with the denominator n-1 and no detrending
// (Krueger and Glover 2001, Magnetic Resonance in Medicine 46:631-637, use the
// same ratio).
//
// Volume t is data[t*nv:(t+1)*nv]; use, of nt values, marks the volumes that
// count, nil counts all; dst has nv values and must not overlap data. A voxel
// whose standard deviation is zero or undefined (constant, fewer than two
// volumes, a value that is not finite) is 0, so that the map is always finite.
// At most workers goroutines are used. The only error is that of ctx; dst is
// then partly written.
func TSNR(ctx context.Context, dst []float32, data []float32, nv, nt int, use []bool, workers int) error {
	checkSeries("TSNR", data, nv, nt)
	if len(dst) != nv {
		panic(fmt.Sprintf("quality: TSNR: result of %d voxels for a volume of %d", len(dst), nv))
	}
	if use != nil && len(use) != nt {
		panic(fmt.Sprintf("quality: TSNR: %d marks for %d volumes", len(use), nt))
	}
	c := NewCourse(nv)
	vols := make([][]float32, 0, nt)
	for t := range nt {
		if use == nil || use[t] {
			vols = append(vols, data[t*nv:(t+1)*nv])
		}
	}
	if err := c.Add(ctx, vols, workers); err != nil {
		return err
	}
	c.TSNR(dst)
	return nil
}

// A Course is [TSNR] of a series that comes a few volumes at a time: sums over time
// in every voxel.
//
// The sums are of the differences to the first volume, which makes the variance
// of one pass as good as that of two: Chan, Golub, LeVeque 1983, The American Statistician
// 37(3):242-247, section 3, shifted data. Its relative error is about
// n 2^-53 (1 + m^2/s^2), m being how far the mean is from the first volume and s the standard
// deviation: 1e-11 for 500 volumes with the first thirty standard deviations off.
type Course struct {
	n      int       // volumes taken
	first  []float32 // the first of them
	d1, d2 []float64 // sums of the differences to it and of their squares
}

// NewCourse prepares for volumes of nv voxels.
func NewCourse(nv int) *Course {
	return &Course{first: make([]float32, nv), d1: make([]float64, nv), d2: make([]float64, nv)}
}

// Add takes the next volumes, of nv voxels each, in the order of time; how many come at
// once changes nothing. Nothing is kept of vols. At most workers goroutines are used. The only
// error is that of ctx; the sums are then of no use.
func (c *Course) Add(ctx context.Context, vols [][]float32, workers int) error {
	c.Begin(vols)
	return parallel.For(ctx, workers, c.Blocks(), func(_, b int) error {
		c.Block(vols, b)
		return nil
	})
}

// Begin, Blocks and Block are [Course.Add] in pieces for a caller that spreads
// the work itself: Begin first, then Block once for each b from 0 to Blocks()-1, all with
// the same vols, in any order and from any goroutine.
func (c *Course) Begin(vols [][]float32) {
	for _, v := range vols {
		if len(v) != len(c.first) {
			panic(fmt.Sprintf("quality: TSNR: a volume of %d voxels, not %d", len(v), len(c.first)))
		}
	}
	if c.n == 0 && len(vols) > 0 {
		copy(c.first, vols[0])
	}
	c.n += len(vols)
}

// Blocks is how many pieces the volume is in; see [Course.Begin].
func (c *Course) Blocks() int { return (len(c.first) + tsnrBlock - 1) / tsnrBlock }

// Block does piece b; see [Course.Begin].
func (c *Course) Block(vols [][]float32, b int) {
	lo, hi := b*tsnrBlock, min((b+1)*tsnrBlock, len(c.first))
	first, d1, d2 := c.first[lo:hi], c.d1[lo:hi], c.d2[lo:hi]
	first, d2 = first[:len(d1)], d2[:len(d1)]
	// Four volumes for one visit to the sums; added one after another, so
	// that where the fours begin does not matter.
	for ; len(vols) >= 4; vols = vols[4:] {
		kernel.Courses(d1, d2, first, &[4][]float32{vols[0][lo:hi], vols[1][lo:hi], vols[2][lo:hi], vols[3][lo:hi]})
	}
	for _, vol := range vols {
		v := vol[lo:hi][:len(d1)]
		for i, s1 := range d1 {
			d := float64(v[i]) - float64(first[i])
			d1[i] = s1 + d
			d2[i] += float64(d * d)
		}
	}
}

// TSNR writes the ratio of each voxel to dst, of nv values.
func (c *Course) TSNR(dst []float32) {
	if len(dst) != len(c.first) {
		panic(fmt.Sprintf("quality: TSNR: result of %d voxels for a volume of %d", len(dst), len(c.first)))
	}
	if c.n < 2 {
		clear(dst)
		return
	}
	n := float64(c.n)
	for i, f := range c.first {
		s1 := c.d1[i]
		mean := float64(f) + s1/n
		ratio := mean / math.Sqrt((c.d2[i]-float64(s1*s1)/n)/(n-1))
		if math.IsNaN(ratio) || math.IsInf(ratio, 0) {
			ratio = 0
		}
		dst[i] = float32(ratio)
	}
}

// Voxels is how many voxels a volume has.
func (c *Course) Voxels() int { return len(c.first) }
