package realign

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
	lines  [3]*lineFilter
}

func newSpline(n [3]int, degree int, b Boundary) *spline {
	s := &spline{n: n, degree: degree}
	for a := range n {
		s.m[a] = n[a] + 2*splinePad
		s.lines[a] = newLineFilter(n[a], degree, splinePad, b)
	}
	s.c = make([]float32, s.m[0]*s.m[1]*s.m[2])
	return s
}

// load computes the coefficients of vol, filtering along x, y and z in turn.
func (s *spline) load(vol []float32) {
	if len(vol) != s.n[0]*s.n[1]*s.n[2] {
		panic("realign: volume and spline differ in size")
	}
	nx, ny, nz := s.n[0], s.n[1], s.n[2]
	mx, my := s.m[0], s.m[1]
	const p = splinePad
	// Along x: lanes are neighbouring rows.
	f := s.lines[0]
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
	f = s.lines[1]
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
	f = s.lines[2]
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

// weights5 are the values of the quintic B-spline at the six taps around a
// point a fraction t past its third tap (products with reciprocals, as divisions
// would take half of the time of an interpolation): beta5(x) = 11/20 - x^2/2 + x^4/4 -
// |x|^5/12 for |x| < 1, and so on (Unser 1999). Horner forms in t.
func weights5(t float64) (w [6]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	t4, u4 := float64(t2*t2), float64(u2*u2)
	w[0] = float32(float64(float64(u4*u) * (1.0 / 120)))
	w[5] = float32(float64(float64(t4*t) * (1.0 / 120)))
	w[2] = float32(centre5(t2, t4, t))
	w[3] = float32(centre5(u2, u4, u))
	w[1] = float32(side5(t))
	w[4] = float32(side5(u))
	return w
}

func centre5(x2, x4, x float64) float64 {
	return 0.55 - x2/2 + x4/4 - float64(float64(x4*x)*(1.0/12))
}

// side5 is beta5(1+x) for x in [0, 1): 13/60 - 5x/12 + x^2/6 + x^3/6 - x^4/6 + x^5/24.
func side5(x float64) float64 {
	r := float64(1.0/24*x) - 1.0/6
	r = float64(r*x) + 1.0/6
	r = float64(r*x) + 1.0/6
	r = float64(r*x) - 5.0/12
	return float64(r*x) + 13.0/60
}

// slopes5 are the derivatives of weights5 with respect to the point.
func slopes5(t float64) (w [6]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	w[0] = float32(-float64(float64(u2*u2) * (1.0 / 24)))
	w[5] = float32(float64(float64(t2*t2) * (1.0 / 24)))
	w[2] = float32(centreSlope5(t, t2))
	w[3] = float32(-centreSlope5(u, u2))
	w[1] = float32(sideSlope5(t))
	w[4] = float32(-sideSlope5(u))
	return w
}

func centreSlope5(x, x2 float64) float64 {
	return -x + float64(x2*x) - float64(float64(x2*x2)*(5.0/12))
}

func sideSlope5(x float64) float64 {
	r := float64(5.0/24*x) - 4.0/6
	r = float64(r*x) + 0.5
	r = float64(r*x) + 1.0/3
	return float64(r*x) - 5.0/12
}

// weights3 and slopes3 likewise for the cubic B-spline: 2/3 - x^2 + |x|^3/2 for
// |x| < 1, (2-|x|)^3/6 for 1 <= |x| < 2.
func weights3(t float64) (w [4]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	w[0] = float32(float64(float64(u2*u) * (1.0 / 6)))
	w[1] = float32(2.0/3 - t2 + float64(t2*t)/2)
	w[2] = float32(2.0/3 - u2 + float64(u2*u)/2)
	w[3] = float32(float64(float64(t2*t) * (1.0 / 6)))
	return w
}

func slopes3(t float64) (w [4]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	w[0] = float32(-u2 / 2)
	w[1] = float32(-2*t + float64(1.5*t2))
	w[2] = float32(2*u - float64(1.5*u2))
	w[3] = float32(t2 / 2)
	return w
}

// value interpolates at a voxel coordinate; outside the field it gives the
// value at the nearest point of the edge.
func (s *spline) value(x, y, z float64) float32 {
	if s.degree == 5 {
		return s.value5(x, y, z)
	}
	return s.value3(x, y, z)
}

func (s *spline) value5(x, y, z float64) float32 {
	i, tx := cell(x, s.n[0], 5)
	j, ty := cell(y, s.n[1], 5)
	k, tz := cell(z, s.n[2], 5)
	wx, wy, wz := weights5(tx), weights5(ty), weights5(tz)
	// Scalars, because the compiler keeps no array in registers.
	w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
	mx := s.m[0]
	area := mx * s.m[1]
	base := i + mx*j + area*k
	var sum float32
	for c := range wz {
		rows := s.c[base : base+5*mx+6]
		var plane float32
		for b := range wy {
			r := rows[b*mx:][:6]
			// Two chains of three keep the adder busy; the order is fixed.
			p := float32(w0*r[0]) + float32(w1*r[1]) + float32(w2*r[2])
			q := float32(w3*r[3]) + float32(w4*r[4]) + float32(w5*r[5])
			plane += float32(wy[b] * (p + q))
		}
		sum += float32(wz[c] * plane)
		base += area
	}
	return sum
}

func (s *spline) value3(x, y, z float64) float32 {
	i, tx := cell(x, s.n[0], 3)
	j, ty := cell(y, s.n[1], 3)
	k, tz := cell(z, s.n[2], 3)
	wx, wy, wz := weights3(tx), weights3(ty), weights3(tz)
	mx, my := s.m[0], s.m[1]
	var sum float32
	for c := range 4 {
		base := i + mx*(j+my*(k+c))
		var plane float32
		for b := range 4 {
			r := s.c[base:][:4]
			p := float32(wx[0]*r[0]) + float32(wx[1]*r[1])
			q := float32(wx[2]*r[2]) + float32(wx[3]*r[3])
			plane += float32(wy[b] * (p + q))
			base += mx
		}
		sum += float32(wz[c] * plane)
	}
	return sum
}

// gradient gives the value and its derivatives with respect to the voxel
// coordinates.
func (s *spline) gradient(x, y, z float64) (v float32, g [3]float32) {
	if s.degree == 5 {
		return s.gradient5(x, y, z)
	}
	return s.gradient3(x, y, z)
}

func (s *spline) gradient5(x, y, z float64) (v float32, g [3]float32) {
	i, tx := cell(x, s.n[0], 5)
	j, ty := cell(y, s.n[1], 5)
	k, tz := cell(z, s.n[2], 5)
	wx, wy, wz := weights5(tx), weights5(ty), weights5(tz)
	dx, dy, dz := slopes5(tx), slopes5(ty), slopes5(tz)
	w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
	d0, d1, d2, d3, d4, d5 := dx[0], dx[1], dx[2], dx[3], dx[4], dx[5]
	mx := s.m[0]
	area := mx * s.m[1]
	base := i + mx*j + area*k
	var gx, gy, gz float32
	for c := range wz {
		rows := s.c[base : base+5*mx+6]
		var pv, px, py float32
		for b := range wy {
			r := rows[b*mx:][:6]
			r0, r1, r2, r3, r4, r5 := r[0], r[1], r[2], r[3], r[4], r[5]
			p := float32(w0*r0) + float32(w1*r1) + float32(w2*r2)
			q := float32(w3*r3) + float32(w4*r4) + float32(w5*r5)
			dp := float32(d0*r0) + float32(d1*r1) + float32(d2*r2)
			dq := float32(d3*r3) + float32(d4*r4) + float32(d5*r5)
			row := p + q
			pv += float32(wy[b] * row)
			py += float32(dy[b] * row)
			px += float32(wy[b] * (dp + dq))
		}
		v += float32(wz[c] * pv)
		gx += float32(wz[c] * px)
		gy += float32(wz[c] * py)
		gz += float32(dz[c] * pv)
		base += area
	}
	return v, [3]float32{gx, gy, gz}
}

func (s *spline) gradient3(x, y, z float64) (v float32, g [3]float32) {
	i, tx := cell(x, s.n[0], 3)
	j, ty := cell(y, s.n[1], 3)
	k, tz := cell(z, s.n[2], 3)
	wx, wy, wz := weights3(tx), weights3(ty), weights3(tz)
	dx, dy, dz := slopes3(tx), slopes3(ty), slopes3(tz)
	mx, my := s.m[0], s.m[1]
	for c := range 4 {
		base := i + mx*(j+my*(k+c))
		var pv, px, py float32
		for b := range 4 {
			r := s.c[base:][:4]
			p := float32(wx[0]*r[0]) + float32(wx[1]*r[1])
			q := float32(wx[2]*r[2]) + float32(wx[3]*r[3])
			dp := float32(dx[0]*r[0]) + float32(dx[1]*r[1])
			dq := float32(dx[2]*r[2]) + float32(dx[3]*r[3])
			row := p + q
			pv += float32(wy[b] * row)
			py += float32(dy[b] * row)
			px += float32(wy[b] * (dp + dq))
			base += mx
		}
		v += float32(wz[c] * pv)
		g[0] += float32(wz[c] * px)
		g[1] += float32(wz[c] * py)
		g[2] += float32(dz[c] * pv)
	}
	return v, g
}
