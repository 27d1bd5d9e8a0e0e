package quality

import "fmt"

// runLength is the longest run: sums are put aside after so many terms, which keeps
// rounding small. It is part of the definition of the results' bits.
const runLength = 4096

// A run is so many voxels of a mask that follow each other in memory.
type run struct{ from, n int }

// runsOf returns the runs of mask between two voxels, in increasing order; every voxel if mask
// is nil.
func runsOf(mask []bool, from, to int) (runs []run, voxels int) {
	for v := from; v < to; {
		if mask != nil && !mask[v] {
			v++
			continue
		}
		end := min(v+runLength, to)
		for k := v + 1; mask != nil && k < end; k++ {
			if !mask[k] {
				end = k
			}
		}
		runs = append(runs, run{v, end - v})
		voxels += end - v
		v = end
	}
	return runs, voxels
}

// checkMask panics unless mask is nil or has nv values.
func checkMask(who string, mask []bool, nv int) {
	if mask != nil && len(mask) != nv {
		panic(fmt.Sprintf("quality: %s: mask of %d voxels for a volume of %d", who, len(mask), nv))
	}
}

// checkSeries panics unless data holds nt volumes of nv voxels.
func checkSeries(who string, data []float32, nv, nt int) {
	if nv < 0 || nt < 0 || len(data) != nv*nt {
		panic(fmt.Sprintf("quality: %s: %d values for %d volumes of %d voxels", who, len(data), nt, nv))
	}
}
