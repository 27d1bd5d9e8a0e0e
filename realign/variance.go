package realign

import (
	"math"
	"slices"
)

// Voxels that change of themselves (activation, vessels, eyes) pull at the
// poses. They are recognised by residuals that vary more over time than elsewhere
// in the head, and count less: with q the lower quartile of the variance in
// the head and x its excess over quietShare q, by noise / (noise + excessCost x).
const (
	quietShare = 1.3
	excessCost = 12 // from a simulation study that preceded this code, where 22 um became 12.5 with many active spots
	// restlessShare: with fewer voxels of the head than this that lose half of
	// their weight there is nothing to gain from weights.
	restlessShare = 0.005
)

// quietWeights turns the variance of the residuals, by voxel, into weights. It
// is smoothed by a voxel, for that of a single one is too uncertain.
// noise is the variance of the noise; 0: as the quartile says. level is the mean
// square of the signal in the head: what interpolation leaves in a run
// without noise is no activity. nil: nothing known.
func quietWeights(g Grid, variance []float32, mask []bool, level, noise float64) (weights []float32, restless bool) {
	edge := g.edges()
	s := newSmoother(g, max(edge[0], edge[1], edge[2]), [3]int{1, 1, 1})
	smooth := make([]float32, len(variance))
	s.run(smooth, variance)
	var inside []float32
	for i, in := range mask {
		if in {
			inside = append(inside, smooth[i])
		}
	}
	if len(inside) == 0 {
		return nil, false
	}
	quiet := float64(quartile(inside))
	if noise == 0 {
		noise = quiet
	}
	noise = max(noise, float64(quietest*quietest*level))
	weights = make([]float32, len(smooth))
	low := 0
	for i := range weights {
		x := max(0, float64(smooth[i])-float64(quietShare*quiet))
		weights[i] = float32(noise / (noise + float64(excessCost*x)))
		if mask[i] && weights[i] < 0.5 {
			low++
		}
	}
	return weights, float64(low) > float64(restlessShare*float64(len(inside)))
}

// quartile returns the lower quartile and reorders v.
func quartile(v []float32) float32 {
	slices.Sort(v)
	return v[len(v)/4]
}

// meanSquare is that of an image inside a mask.
func meanSquare(image []float32, mask []bool) float64 {
	sum, n := 0.0, 0.0
	for i, in := range mask {
		if in {
			sum += float64(float64(image[i]) * float64(image[i]))
			n++
		}
	}
	return sum / max(n, 1)
}

// leftovers sums the residuals of matches, and their squares, by voxel of the
// template: in whole numbers of a small unit, so that the order in which workers
// add does not matter.
type leftovers struct {
	unit      float64
	sum, sum2 []int64
	count     []int32
}

// newLeftovers prepares for n voxels of a reference whose greatest value is
// peak: residuals of up to twice that are kept, to 2^-21 of it; the squares of a
// hundred thousand volumes then fit.
func newLeftovers(n int, peak float32) *leftovers {
	return &leftovers{unit: float64(peak) / (1 << 21), sum: make([]int64, n), sum2: make([]int64, n), count: make([]int32, n)}
}

// add takes the residuals of the match that m has just ended with, less the
// slices that stand out.
func (l *leftovers) add(m *matcher, f *found) {
	if !(l.unit > 0) {
		return
	}
	w := sliceWeights(f.slices)
	over := 1 / l.unit
	m.bySlice(func(s int32, from, to int) {
		if w[s] < weakBelow {
			return
		}
		for q := from; q < to; q++ {
			v := float64(float64(m.res[q]) * over)
			if m.in[q] == 0 || !(math.Abs(v) < 1<<22) {
				continue
			}
			k, at := int64(v), m.t.voxel[q]
			l.sum[at] += k
			l.sum2[at] += k * k
			l.count[at]++
		}
	})
}

// merge adds what another worker has summed.
func (l *leftovers) merge(o *leftovers) {
	for i := range l.sum {
		l.sum[i] += o.sum[i]
		l.sum2[i] += o.sum2[i]
		l.count[i] += o.count[i]
	}
}

// variance is that of the residuals over time, by voxel; 0 where fewer than three
// are known.
func (l *leftovers) variance() []float32 {
	out := make([]float32, len(l.sum))
	for i, n := range l.count {
		if n > 2 {
			s, s2 := float64(l.sum[i]), float64(l.sum2[i])
			out[i] = float32(float64(l.unit*l.unit) * (s2 - float64(s*s)/float64(n)) / float64(n-1))
		}
	}
	return out
}
