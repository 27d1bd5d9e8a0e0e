package realign

import (
	"math"

	"evenkeel/internal/kernel"
)

// Near does what Load and Eval do in less than half the time, for maps that
// NearIdentity accepts; for others it does nothing and reports false. dst may be vol.
// What was loaded is lost.
//
// It resamples along one axis after the other. By a pure shift values differ from
// Eval's by rounding only; with a turn as two interpolations do, at 0.7 degrees by 1 %
// of the noise, at 3 by 5 %. They are as near to the truth, and as much of the noise is
// left (TestNearAgainstTruth). A run that went from one way to the other between
// volumes would show it: its caller decides once, from all its maps.
//
// Points outside the field take the value of the nearest point on its edge, as in
// Eval.
func (r *Resampler) Near(dst, vol []float32, m Map) bool {
	affine, ok := m.(affineMap)
	if !ok {
		return false
	}
	a := [16]float64(affine)
	shear, ok := kernel.NewShear(&a)
	if !ok {
		return false
	}
	n := r.s.n
	if nv := n[0] * n[1] * n[2]; len(dst) != nv || len(vol) != nv {
		panic("realign: output, volume and resampler differ in size")
	}
	if r.passes == nil {
		r.passes = kernel.NewPasses(n, r.s.degree)
	}
	r.takeFaces(vol, &a)
	scratch := r.s.c
	if need := r.passes.Scratch(); len(scratch) < need {
		r.scratch = sized(r.scratch, need)
		scratch = r.scratch
	}
	r.passes.Run(dst, vol, scratch, &shear)
	for axis := range r.faces {
		for side := range r.faces[axis].outside {
			if r.faces[axis].outside[side] {
				r.faces[axis].fill(dst, n, r.s.degree, axis, side, &a)
			}
		}
	}
	return true
}

// NearIdentity reports whether Near resamples by this map: an affine, a pose's among
// them, that turns by less than about 3 degrees, where voxels have equal edges, and
// shifts by anything. Where they have not, a turn slides the longer edge along the
// shorter one, and the limit is on that: 0.055 of a voxel from row to row.
func NearIdentity(m Map) bool {
	affine, ok := m.(affineMap)
	if !ok {
		return false
	}
	a := [16]float64(affine)
	_, ok = kernel.NewShear(&a)
	return ok
}

// faces are the two planes of voxels at the ends of an axis. On the edge of the field a spline in three
// dimensions is the spline of the plane's own samples.
type faces struct {
	outside [2]bool // whether any output lies past the lower, the upper
	plane   [2][]float32
	filter  *kernel.Prefilter
	c       []float32 // coefficients of one of them
	line    []float32
}

// slightly outside, in voxels, is inside: an affine that was multiplied out misses a
// whole number by 1e-14, and over a millionth of a voxel values change by less than
// they are rounded by.
const slightly = 1e-6

// planeAxes are the axes of the planes across an axis.
var planeAxes = [3][2]int{{1, 2}, {0, 2}, {0, 1}}

// takeFaces copies the planes that a map looks past.
func (r *Resampler) takeFaces(vol []float32, m *[16]float64) {
	n := r.s.n
	strides := [3]int{1, n[0], n[0] * n[1]}
	for axis := range r.faces {
		f := &r.faces[axis]
		// Along every axis a coordinate is furthest at a corner.
		lo, hi := m[4*axis+3], m[4*axis+3]
		for k, size := range n {
			d := float64(m[4*axis+k] * float64(size-1))
			lo, hi = lo+min(d, 0), hi+max(d, 0)
		}
		f.outside = [2]bool{lo < -slightly, hi > float64(n[axis]-1)+slightly}
		b, c := planeAxes[axis][0], planeAxes[axis][1]
		for side, from := range [2]int{0, strides[axis] * (n[axis] - 1)} {
			if !f.outside[side] {
				continue
			}
			f.plane[side] = sized(f.plane[side], n[b]*n[c])
			for j := range n[c] {
				row, src := f.plane[side][n[b]*j:][:n[b]], vol[from+strides[c]*j:]
				for i := range row {
					row[i] = src[strides[b]*i]
				}
			}
			if f.filter == nil {
				f.filter = kernel.NewPrefilter([3]int{n[b], n[c], 1}, r.s.degree, splinePad)
				m := f.filter.Size()
				f.c = make([]float32, m[0]*m[1]+kernel.Slack)
			}
		}
	}
}

// fill gives the outputs that lie past one side of an axis the values of the edge
// there. m says where outputs come from.
func (f *faces) fill(dst []float32, n [3]int, degree, axis, side int, m *[16]float64) {
	f.filter.RunFlat(f.c, f.plane[side])
	// Lines of outputs along x or, past the ends of x, along y: what is outside
	// is then long enough to be worth a kernel's while.
	along, across := 0, 1
	if axis == 0 {
		along, across = 1, 0
	}
	strides := [3]int{1, n[0], n[0] * n[1]}
	limit := float64(-slightly)
	if side == 1 {
		limit = float64(n[axis]-1) + slightly
	}
	b, c := planeAxes[axis][0], planeAxes[axis][1]
	size, step := [2]int{n[b], n[c]}, [2]float64{m[4*b+along], m[4*c+along]}
	slope := m[4*axis+along]
	// The furthest that a line goes, against its first point.
	furthest := float64(slope * float64(n[along]-1))
	if side == 0 {
		furthest = min(furthest, 0)
	} else {
		furthest = max(furthest, 0)
	}
	for k := range n[2] {
		at := [3]float64{2: float64(k)}
		o := applyAffine(m, at[0], at[1], at[2])
		first, last := beyond(o[axis]+furthest, m[4*axis+across], limit, side == 1, n[across])
		for j := first; j < last; j++ {
			at[across] = float64(j)
			o := applyAffine(m, at[0], at[1], at[2])
			from, to := beyond(o[axis], slope, limit, side == 1, n[along])
			if from >= to {
				continue
			}
			start := [2]float64{o[b] + float64(step[0]*float64(from)), o[c] + float64(step[1]*float64(from))}
			out := dst[strides[across]*j+strides[2]*k:]
			line := out[from:to:to]
			if along != 0 {
				f.line = sized(f.line, to-from)
				line = f.line
			}
			kernel.FlatRow(line, f.c, size, splinePad, start, step, degree)
			if along != 0 {
				for i, v := range line {
					out[strides[along]*(from+i)] = v
				}
			}
		}
	}
}

// beyond gives the part of a line of n points, at o + slope i, that lies past a limit.
func beyond(o, slope, limit float64, above bool, n int) (from, to int) {
	past := func(i int) bool {
		v := o + float64(slope*float64(i))
		return above && v > limit || !above && v < limit
	}
	first, last := past(0), past(n-1)
	if first == last {
		if !first {
			return 0, 0
		}
		return 0, n
	}
	// One end is outside; the division may miss by one.
	i := int(math.Ceil((limit - o) / slope))
	i = min(max(i, 1), n-1)
	for i > 1 && past(i-1) != first {
		i--
	}
	for i < n-1 && past(i) == first {
		i++
	}
	if first {
		return 0, i
	}
	return i, n
}
