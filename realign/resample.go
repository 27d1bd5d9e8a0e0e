package realign

import "evenkeel/internal/kernel"

// Resampler interpolates volumes of one size by B-splines with exact prefilter
// and the boundary rule of [kernel.Prefilter]. It owns its scratch and belongs to one
// goroutine.
type Resampler struct {
	s       *spline
	x, y, z []float64
	b       batch

	// Of Near, made when first wanted.
	passes  *kernel.Passes
	faces   [3]faces
	scratch []float32
}

// NewResampler prepares for volumes of n voxels. Degree 3 is cubic, 5 quintic;
// any other panics.
func NewResampler(n [3]int, degree int) *Resampler {
	return &Resampler{
		s: newSpline(n, degree),
		x: make([]float64, n[0]), y: make([]float64, n[0]), z: make([]float64, n[0]),
	}
}

// Load takes a volume and computes its spline coefficients; vol is not kept.
func (r *Resampler) Load(vol []float32) { r.s.load(vol) }

// Move resamples vol into dst, which may be vol, as [Resampler.Near] does with passes, or
// by Load and Eval. Near must take the map.
func (r *Resampler) Move(dst, vol []float32, m Map, passes bool) {
	if !passes {
		r.Load(vol)
		r.Eval(dst, m)
		return
	}
	if !r.Near(dst, vol, m) {
		panic("realign: three passes were decided on for a map that they do not take")
	}
}

// Eval fills dst, of the size of the volume loaded, with values at the places
// m gives. A point outside the field takes the value of the nearest point on
// the field's edge (the centre of its outermost voxel), so that every value is
// finite; how much of the head that concerns is reported as Outside.
func (r *Resampler) Eval(dst []float32, m Map) {
	nx, ny, nz := r.s.n[0], r.s.n[1], r.s.n[2]
	if len(dst) != nx*ny*nz {
		panic("realign: output and volume differ in size")
	}
	if affine, ok := m.(affineMap); ok {
		a := [16]float64(affine)
		for row := range ny * nz {
			r.s.row(dst[nx*row:][:nx], &a, row%ny, row/ny)
		}
		return
	}
	for k := range nz {
		// A plane at a time: enough for the kernels, and little scratch.
		r.b.reset()
		for j := range ny {
			m.Row(j, k, r.x, r.y, r.z)
			for i := range nx {
				r.s.add(&r.b, r.x[i], r.y[i], r.z[i])
			}
		}
		r.s.valuesInto(dst[nx*ny*k:][:nx*ny], &r.b)
	}
}
