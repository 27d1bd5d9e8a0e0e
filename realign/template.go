package realign

import "math"

// template is a reference that slices are matched with along a path, pixel by pixel. It
// is read-only once made.
type template struct {
	g      Grid
	inv    [16]float64 // world mm to voxel index
	s      *spline     // the smoothed reference
	usable []bool      // by nearest voxel: the head and a rim, less what the margins and gaps forbid
	head   []bool      // by nearest voxel: the head
	centre [3]float64  // world mm
	margin [3]float64  // voxels left out at each field edge
	box    [2][3]int   // first and last usable voxel along each axis
	room   int         // usable voxels and some more: how many points a volume may have
}

// newTemplate takes the smoothed reference vol and the head on its grid.
// unknown marks voxels where the reference is not known (outside the field of
// most volumes averaged), or is nil.
func newTemplate(g Grid, vol []float32, head, unknown []bool, rim int, margin [3]float64, centre [3]float64, degree int) *template {
	t := &template{g: g, inv: mustInvert(g.Affine), head: head, centre: centre, margin: margin}
	t.s = newSpline(g.N, degree)
	t.s.load(vol)
	t.usable = dilate(head, g.N, rim)
	if unknown != nil {
		// A spline and a filter reach about two voxels.
		for i, u := range dilate(unknown, g.N, 2) {
			t.usable[i] = t.usable[i] && !u
		}
	}
	t.box = boxOf(t.usable, g.N)
	for _, u := range t.usable {
		if u {
			t.room++
		}
	}
	t.room += t.room / 8
	return t
}

// boxOf gives the first and last voxel of a mask along each axis; first > last for
// an empty one.
func boxOf(mask []bool, n [3]int) (box [2][3]int) {
	box[0] = n
	box[1] = [3]int{-1, -1, -1}
	i := 0
	for z := range n[2] {
		for y := range n[1] {
			for x := range n[0] {
				if mask[i] {
					for a, v := range [3]int{x, y, z} {
						box[0][a], box[1][a] = min(box[0][a], v), max(box[1][a], v)
					}
				}
				i++
			}
		}
	}
	return box
}

// reached narrows a range of voxels of a volume to those whose points can be usable
// at a pose: forth takes voxels of the template to voxels of the volume.
func (t *template) reached(forth *[16]float64, lo, hi [3]int) (from, to [3]int) {
	from, to = hi, lo
	for corner := range 8 {
		var v [3]float64
		for a := range v {
			v[a] = float64(t.box[0][a]) - 0.5
			if corner>>a&1 == 1 {
				v[a] = float64(t.box[1][a]) + 0.5
			}
		}
		p := applyAffine(forth, v[0], v[1], v[2])
		for a := range p {
			from[a], to[a] = min(from[a], int(math.Floor(p[a]))), max(to[a], int(math.Ceil(p[a])))
		}
	}
	for a := range from {
		from[a], to[a] = max(from[a], lo[a]), min(to[a], hi[a])
	}
	return from, to
}

// edgeMargin is how many voxels are left out at each end of an axis of n
// voxels: want, but never so many that fewer than four planes are left. Margins
// matter because nothing is known past the field: whatever continues the data
// there bends the outermost planes (found by simulation).
func edgeMargin(n int, want float64) float64 {
	return max(0, min(want, float64(n-4)/2))
}

func edgeMargins(n [3]int, want float64) (m [3]float64) {
	for a := range m {
		m[a] = edgeMargin(n[a], want)
	}
	return m
}

// nearest is the flat index of the voxel nearest to a coordinate in the field.
func (t *template) nearest(x [3]float64) int {
	i, j, k := int(x[0]+0.5), int(x[1]+0.5), int(x[2]+0.5)
	return i + t.g.N[0]*(j+t.g.N[1]*k)
}

// thinMask carries a head mask to a thinned grid: a voxel is inside if the
// nearest voxel of the full grid is.
func thinMask(mask []bool, n [3]int, s *smoother) []bool {
	out := make([]bool, s.out[0]*s.out[1]*s.out[2])
	i := 0
	for z := range s.out[2] {
		for y := range s.out[1] {
			for x := range s.out[0] {
				at := [3]int{x, y, z}
				for a := range at {
					at[a] = s.first[a] + at[a]*s.stride[a]
				}
				out[i] = mask[at[0]+n[0]*(at[1]+n[1]*at[2])]
				i++
			}
		}
	}
	return out
}
