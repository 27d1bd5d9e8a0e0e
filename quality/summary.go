package quality

import (
	"fmt"
	"math"
)

// Summary is a figure over the volumes, or the voxels, in which it is defined.
type Summary struct {
	Mean, Median, Max float64 // NaN if N is 0
	N                 int     // how many values were defined
}

// Summarise gives the mean, median and maximum of v, NaN left out. The mean is
// the sum in index order over the number of values; the median of an even
// number is half the sum of the middle two.
func Summarise(v []float64) Summary {
	kept := make([]float64, 0, len(v))
	var sum float64
	top := math.Inf(-1)
	for _, x := range v {
		if math.IsNaN(x) {
			continue
		}
		kept = append(kept, x)
		sum += x
		top = max(top, x)
	}
	if len(kept) == 0 {
		return Summary{Mean: math.NaN(), Median: math.NaN(), Max: math.NaN()}
	}
	return Summary{Mean: sum / float64(len(kept)), Median: median(kept), Max: top, N: len(kept)}
}

// SummariseInside is [Summarise] of a map over the voxels of mask; a nil mask
// takes every voxel.
func SummariseInside(vol []float32, mask []bool) Summary {
	if mask != nil && len(mask) != len(vol) {
		panic(fmt.Sprintf("quality: SummariseInside: mask of %d voxels for a volume of %d", len(mask), len(vol)))
	}
	v := make([]float64, 0, len(vol))
	for i, x := range vol {
		if mask == nil || mask[i] {
			v = append(v, float64(x))
		}
	}
	return Summarise(v)
}
