package quality

import (
	"context"
	"fmt"
	"math"

	"evenkeel/internal/parallel"
)

// tsnrBlock is how many voxels are walked through time together: three
// accumulators of that length stay in a core's near cache. It does not touch
// the result, since voxels do not meet.
const tsnrBlock = 2048

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
//
// The variance is the corrected two-pass one (Chan, Golub, LeVeque 1983, The
// American Statistician 37(3):242-247, eq. 1.7), which loses nothing however
// large the mean is beside the standard deviation.
func TSNR(ctx context.Context, dst []float32, data []float32, nv, nt int, use []bool, workers int) error {
	checkSeries("TSNR", data, nv, nt)
	if len(dst) != nv {
		panic(fmt.Sprintf("quality: TSNR: result of %d voxels for a volume of %d", len(dst), nv))
	}
	if use != nil && len(use) != nt {
		panic(fmt.Sprintf("quality: TSNR: %d marks for %d volumes", len(use), nt))
	}
	var volumes [][]float32
	for t := range nt {
		if use == nil || use[t] {
			volumes = append(volumes, data[t*nv:(t+1)*nv])
		}
	}
	if len(volumes) < 2 {
		clear(dst)
		return ctx.Err()
	}
	n := float64(len(volumes))
	type scratch struct{ mean, d1, d2 [tsnrBlock]float64 }
	blocks := (nv + tsnrBlock - 1) / tsnrBlock
	work := make([]scratch, max(1, min(workers, blocks)))
	return parallel.For(ctx, workers, blocks, func(worker, b int) error {
		lo, hi := b*tsnrBlock, min((b+1)*tsnrBlock, nv)
		w := &work[worker]
		*w = scratch{}
		mean, d1, d2 := w.mean[:hi-lo], w.d1[:hi-lo], w.d2[:hi-lo]
		for _, vol := range volumes {
			for i, x := range vol[lo:hi] {
				mean[i] += float64(x)
			}
		}
		for i := range mean {
			mean[i] /= n
		}
		for _, vol := range volumes {
			for i, x := range vol[lo:hi] {
				d := float64(x) - mean[i]
				d1[i] += d
				d2[i] += float64(d * d)
			}
		}
		for i, m := range mean {
			// Chan et al. (1983), eq. 1.7: d1 is what rounding of the mean left.
			ratio := m / math.Sqrt((d2[i]-float64(d1[i]*d1[i])/n)/(n-1))
			if math.IsNaN(ratio) || math.IsInf(ratio, 0) {
				ratio = 0
			}
			dst[lo+i] = float32(ratio)
		}
		return nil
	})
}
