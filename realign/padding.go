package realign

import (
	"context"
	"slices"
)

// paddedFrom: a slice of one value beside one that shows at least this share of the
// widest slice of the head is padding: no head ends so abruptly. (4 mm below
// the crown a head shows a tenth.)
const paddedFrom = 0.25

// paddedSlices finds the slices along an axis that hold nothing but one value in
// every volume though the head goes on there: padding, not air. nil: none.
func paddedSlices(ctx context.Context, g Grid, axis int, s Series) ([]bool, error) {
	// In most runs the first volume tells that there is none.
	one, err := copyOf(ctx, s, 0)
	if err != nil {
		return nil, err
	}
	n := g.N[axis]
	dead := make([]bool, n)
	for k := range dead {
		dead[k] = flatSlice(g, axis, k, one)
	}
	if slices.Contains(dead, true) {
		err := s.Each(ctx, 1, nil, func(_, _ int, vol []float32) error {
			for k := range dead {
				dead[k] = dead[k] && flatSlice(g, axis, k, vol)
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	if !slices.Contains(dead, true) || !slices.Contains(dead, false) {
		return nil, nil
	}
	area := make([]int, n)
	widest := 0
	for i, in := range HeadMask(g, one) {
		if in {
			k := [3]int{i % g.N[0], i / g.N[0] % g.N[1], i / (g.N[0] * g.N[1])}[axis]
			area[k]++
			widest = max(widest, area[k])
		}
	}
	goesOn := func(k, step int) bool {
		for ; k >= 0 && k < n; k += step {
			if !dead[k] {
				return float64(area[k]) >= float64(paddedFrom*float64(widest))
			}
		}
		return false
	}
	out := make([]bool, n)
	for k := range out {
		out[k] = dead[k] && (goesOn(k, -1) || goesOn(k, 1))
	}
	if !slices.Contains(out, true) {
		return nil, nil
	}
	return out, nil
}

func flatSlice(g Grid, axis, k int, vol []float32) bool {
	lo, hi := [3]int{}, [3]int{g.N[0] - 1, g.N[1] - 1, g.N[2] - 1}
	lo[axis], hi[axis] = k, k
	first := vol[lo[0]+g.N[0]*(lo[1]+g.N[1]*lo[2])]
	for z := lo[2]; z <= hi[2]; z++ {
		for y := lo[1]; y <= hi[1]; y++ {
			row := g.N[0] * (y + g.N[1]*z)
			for x := lo[0]; x <= hi[0]; x++ {
				if vol[row+x] != first {
					return false
				}
			}
		}
	}
	return true
}

// withoutPadding notes padded slices: volumes are then read with them filled from
// their neighbours, so that filters and splines see no cliff, and nothing is
// compared or averaged there.
func (e *estimator) withoutPadding() (err error) {
	if e.padded, err = paddedSlices(e.ctx, e.g, e.opt.SliceAxis, e.series); e.padded == nil {
		return err
	}
	e.nearPadding = append([]bool(nil), e.padded...)
	for k, p := range e.padded {
		if p {
			e.nearPadding[max(0, k-1)] = true
			e.nearPadding[min(len(e.padded)-1, k+1)] = true
		}
	}
	e.series = patched{e.series, func(vol []float32) []float32 { return e.patch(vol, e.padded) }}
	return nil
}

// alongPadding marks the voxels of a reference beside padding.
func (e *estimator) alongPadding(unknown []bool) []bool {
	if e.padded == nil {
		return unknown
	}
	out := make([]bool, e.g.voxels())
	copy(out, unknown)
	for i := range out {
		k := [3]int{i % e.g.N[0], i / e.g.N[0] % e.g.N[1], i / (e.g.N[0] * e.g.N[1])}[e.opt.SliceAxis]
		out[i] = out[i] || e.nearPadding[k]
	}
	return out
}
