package realign

import "evenkeel/internal/kernel"

// A volume continues past its first and last sample as f(-k) = 2 f(0) - f(k): a
// ramp stays a ramp, so that the outermost slices are not bent (found by simulation:
// with the mirror f(-k) = f(k), the end slices of a head cut by the field cost 20 um
// of bias).

// splinePad is how far coefficients reach past the field: a point on the last
// sample needs three more for degree 5.
const splinePad = 3

// spline holds the coefficients of one volume and interpolates in it. load is
// exclusive; afterwards any number of goroutines may read.
type spline struct {
	n      [3]int
	degree int
	m      [3]int // padded size
	c      []float32
	filter *kernel.Prefilter
}

func newSpline(n [3]int, degree int) *spline {
	s := &spline{n: n, degree: degree, filter: kernel.NewPrefilter(n, degree, splinePad)}
	s.m = s.filter.Size()
	s.c = make([]float32, s.m[0]*s.m[1]*s.m[2]+kernel.Slack)
	return s
}

// load computes the coefficients of vol.
func (s *spline) load(vol []float32) {
	if len(vol) != s.n[0]*s.n[1]*s.n[2] {
		panic("realign: volume and spline differ in size")
	}
	s.filter.Run(s.c, vol)
}

// row interpolates along a row of outputs whose source coordinates m gives: those of
// (0..len(dst)-1, j, k).
func (s *spline) row(dst []float32, m *[16]float64, j, k int) {
	s.line(dst, applyAffine(m, 0, float64(j), float64(k)), [3]float64{m[0], m[4], m[8]})
}

// line interpolates along a line of points: start, start + step and so on.
func (s *spline) line(dst []float32, start, step [3]float64) {
	if s.degree == 5 {
		kernel.AffineRow5(dst, s.c, s.n, splinePad, start, step)
	} else {
		kernel.AffineRow3(dst, s.c, s.n, splinePad, start, step)
	}
}

// valuesAt interpolates at many points.
func (s *spline) valuesAt(v []float32, p *kernel.Sites) {
	mx, area := s.m[0], s.m[0]*s.m[1]
	if s.degree == 5 {
		kernel.Value5(v, s.c, mx, area, p.Base, p.X, p.Y, p.Z)
	} else {
		kernel.Value3(v, s.c, mx, area, p.Base, p.X, p.Y, p.Z)
	}
}

// gradientsAt does so with derivatives: value, and those by x, y and z.
func (s *spline) gradientsAt(to *[4][]float32, p *kernel.Sites) {
	mx, area := s.m[0], s.m[0]*s.m[1]
	if s.degree == 5 {
		kernel.Gradient5(to[0], to[1], to[2], to[3], s.c, mx, area, p.Base, p.X, p.Y, p.Z)
	} else {
		kernel.Gradient3(to[0], to[1], to[2], to[3], s.c, mx, area, p.Base, p.X, p.Y, p.Z)
	}
}

// cell splits a coordinate, clamped to the field, into the first tap's index in
// padded coordinates and the fraction.
func cell(x float64, n, degree int) (first int, t float64) {
	switch {
	case !(x > 0): // NaN as well
		x = 0
	case x > float64(n-1):
		x = float64(n - 1)
	}
	i := int(x)
	return i + splinePad - degree/2, x - float64(i)
}
