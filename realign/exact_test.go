package realign

// The line filter in float64, with either boundary rule: what package kernel does
// in float32 for one of them, and what published values and scipy's are compared with.

import "math"

// Boundary says how a volume continues past its first and last sample.
type Boundary int

const (
	// Odd continues f(-k) = 2 f(0) - f(k): a ramp stays a ramp, so that the
	// outermost slices are not bent (found by simulation: with the mirror, the end slices
	// of a head cut by the field cost 20 um of bias).
	Odd Boundary = iota
	// Mirror continues f(-k) = f(k), whole-sample symmetric. It is the rule of
	// most published values, and serves to check against them.
	Mirror
)

// poles of the direct B-spline filter, |z| < 1, of degree 3 and 5 (Unser,
// Aldroubi, Eden 1993, IEEE Trans. Signal Processing 41(2):821-833, Table I).
// Closed forms: sqrt(3)-2, and sqrt(135/2 -+ sqrt(17745/4)) +- sqrt(105/4) - 13/2.
func poles(degree int) []float64 {
	switch degree {
	case 3:
		return []float64{math.Sqrt(3) - 2}
	case 5:
		return []float64{
			math.Sqrt(67.5-math.Sqrt(4436.25)) + math.Sqrt(26.25) - 6.5,
			math.Sqrt(67.5+math.Sqrt(4436.25)) - math.Sqrt(26.25) - 6.5,
		}
	}
	panic("realign: spline degree must be 3 or 5")
}

// lanes is how many independent lines the line filters treat at once; loops run
// over lanes inside, so that neighbouring memory is used together.
const lanes = 16

// lineFilter turns samples into B-spline coefficients along one axis, for up to
// lanes lines at a time. It belongs to one goroutine.
type lineFilter struct {
	poles    []float64
	boundary Boundary
	buf      [][lanes]float64 // one line a lane, with padding at both ends
	pad      int
}

func newLineFilter(n, degree, pad int, b Boundary) *lineFilter {
	return &lineFilter{poles: poles(degree), boundary: b, buf: make([][lanes]float64, n+2*pad), pad: pad}
}

// run replaces the n samples in buf[pad:pad+n] by coefficients and fills the
// padding by the boundary rule, which coefficients obey as samples do.
//
// Per pole z: scale by (1-z)(1-1/z), causal c+[k] = s[k] + z c+[k-1], anticausal
// c[k] = z (c[k+1] - c+[k]) (Unser 1999, IEEE Signal Processing Magazine
// 16(6):22-38, box 2). The starts are exact sums over one period, cut where
// |z|^k falls below 1e-18.
func (f *lineFilter) run(n int) {
	c := f.buf[f.pad : f.pad+n]
	if n > 1 {
		var first, slope [lanes]float64
		if f.boundary == Odd {
			// A line is its own coefficients; what is left is odd about both
			// ends and zero there.
			first = c[0]
			for l := range slope {
				slope[l] = (c[n-1][l] - c[0][l]) / float64(n-1)
			}
			for k := range c {
				for l := range lanes {
					c[k][l] -= first[l] + float64(slope[l]*float64(k))
				}
			}
			c[n-1] = [lanes]float64{}
		}
		for _, z := range f.poles {
			f.pole(c, z)
		}
		if f.boundary == Odd {
			for k := range c {
				for l := range lanes {
					c[k][l] += first[l] + float64(slope[l]*float64(k))
				}
			}
		}
	}
	for k := 1; k <= f.pad; k++ {
		f.buf[f.pad-k] = f.outside(c, -k)
		f.buf[f.pad+n-1+k] = f.outside(c, n-1+k)
	}
}

func (f *lineFilter) pole(c [][lanes]float64, z float64) {
	n := len(c)
	gain := float64((1 - z) * (1 - 1/z))
	for k := range c {
		for l := range lanes {
			c[k][l] *= gain
		}
	}
	// c+[0] = sum over k >= 0 of z^k s[-k].
	var start [lanes]float64
	sign := 1.0
	if f.boundary == Odd {
		sign = -1
	} else {
		start = c[0]
	}
	period := 2 * (n - 1)
	zk := z
	for k := 1; math.Abs(zk) > 1e-18; k++ {
		i, s := k%period, sign
		if i >= n {
			i, s = period-i, 1 // also where odd: s[-k] = -s[k] = s[period-k]
		}
		w := float64(zk * s)
		for l := range lanes {
			start[l] += float64(w * c[i][l])
		}
		zk *= z
	}
	c[0] = start
	for k := 1; k < n; k++ {
		for l := range lanes {
			c[k][l] += float64(z * c[k-1][l])
		}
	}
	if f.boundary == Odd {
		// The filter is symmetric, so what was odd stays odd: zero at both ends.
		c[n-1] = [lanes]float64{}
	} else {
		s := z / (float64(z*z) - 1)
		for l := range lanes {
			c[n-1][l] = float64(s * (c[n-1][l] + float64(z*c[n-2][l])))
		}
	}
	for k := n - 2; k >= 0; k-- {
		for l := range lanes {
			c[k][l] = float64(z * (c[k+1][l] - c[k][l]))
		}
	}
	if f.boundary == Odd {
		c[0] = [lanes]float64{}
	}
}

// outside gives the coefficient at an index outside [0, n).
func (f *lineFilter) outside(c [][lanes]float64, k int) [lanes]float64 {
	n := len(c)
	if n == 1 {
		return c[0]
	}
	switch {
	case k < 0:
		v := f.outside(c, -k)
		if f.boundary == Odd {
			for l := range v {
				v[l] = 2*c[0][l] - v[l]
			}
		}
		return v
	case k >= n:
		v := f.outside(c, 2*(n-1)-k)
		if f.boundary == Odd {
			for l := range v {
				v[l] = 2*c[n-1][l] - v[l]
			}
		}
		return v
	}
	return c[k]
}

// loadExactly computes the coefficients of vol, filtering along x, y and z in turn.
func (s *spline) loadExactly(vol []float32, boundary Boundary) {
	var lines [3]*lineFilter
	for a := range lines {
		lines[a] = newLineFilter(s.n[a], s.degree, splinePad, boundary)
	}
	if len(vol) != s.n[0]*s.n[1]*s.n[2] {
		panic("realign: volume and spline differ in size")
	}
	nx, ny, nz := s.n[0], s.n[1], s.n[2]
	mx, my := s.m[0], s.m[1]
	const p = splinePad
	// Along x: lanes are neighbouring rows.
	f := lines[0]
	for k := range nz {
		for j0 := 0; j0 < ny; j0 += lanes {
			w := min(lanes, ny-j0)
			for l := range w {
				for i, v := range vol[nx*(j0+l+ny*k):][:nx] {
					f.buf[p+i][l] = float64(v)
				}
			}
			f.run(nx)
			for l := range w {
				row := s.c[mx*(p+j0+l+my*(p+k)):][:mx]
				for i := range row {
					row[i] = float32(f.buf[i][l])
				}
			}
		}
	}
	// Along y: lanes are neighbouring columns, padding in x included.
	f = lines[1]
	for k := range nz {
		slab := s.c[mx*my*(p+k):][:mx*my]
		for i0 := 0; i0 < mx; i0 += lanes {
			w := min(lanes, mx-i0)
			for j := range ny {
				for l, v := range slab[mx*(p+j)+i0:][:w] {
					f.buf[p+j][l] = float64(v)
				}
			}
			f.run(ny)
			for j := range my {
				row := slab[mx*j+i0:][:w]
				for l := range row {
					row[l] = float32(f.buf[j][l])
				}
			}
		}
	}
	f = lines[2]
	area := mx * my
	for i0 := 0; i0 < area; i0 += lanes {
		w := min(lanes, area-i0)
		for k := range nz {
			for l, v := range s.c[area*(p+k)+i0:][:w] {
				f.buf[p+k][l] = float64(v)
			}
		}
		f.run(nz)
		for k := range s.m[2] {
			row := s.c[area*k+i0:][:w]
			for l := range row {
				row[l] = float32(f.buf[k][l])
			}
		}
	}
}
