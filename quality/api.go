package quality

import "context"

// FramewiseDisplacement: params rows are shift (mm) x,y,z and turn (rad) x,y,z; nil row = lost volume. Result NaN where undefined (first, or either neighbour lost).
func FramewiseDisplacement(params [][]float64, radiusMM float64) []float64 { panic("todo") }

// RMSDeviation of a pair of rigid maps (row-major 4x4, world mm) over a solid ball. Jenkinson 1999.
func RMSDeviation(a, b [16]float64, centre [3]float64, radiusMM float64) float64 { panic("todo") }

// DVARS per volume over the voxels of mask, in percent of the mean (over mask and volumes) signal; volume t is data[t*nv:(t+1)*nv]; [0] is NaN.
func DVARS(ctx context.Context, data []float32, nv, nt int, mask []bool, workers int) ([]float64, error) {
	panic("todo")
}

// TSNR writes temporal mean / temporal SD (n-1 denominator, no detrending) per voxel to dst (0 where SD is 0); use marks volumes that count (nil: all).
func TSNR(ctx context.Context, dst []float32, data []float32, nv, nt int, use []bool, workers int) error {
	panic("todo")
}

// SliceSpikes gives a robust spike score per volume and slice: score[t][s].
func SliceSpikes(ctx context.Context, data []float32, nx, ny, nz, nt, axis int, mask []bool, workers int) ([][]float64, error) {
	panic("todo")
}

// Summary of a figure over volumes, NaN left out.
type Summary struct {
	Mean, Median, Max float64
	N                 int
}

func Summarise(v []float64) Summary { panic("todo") }
