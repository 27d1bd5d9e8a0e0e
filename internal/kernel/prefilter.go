package kernel

import (
	"fmt"
	"math"
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
	panic(fmt.Sprintf("kernel: spline degree %d is neither 3 nor 5", degree))
}

// stripLanes lines are filtered at a time: four registers of eight, so that one
// line's sum need not wait for its own last step.
const stripLanes = 32

// Prefilter turns volumes of one size into B-spline coefficients. Past its ends a
// line continues as f(-k) = 2 f(0) - f(k), so that a ramp stays a ramp; coefficients
// obey the same rule. It owns its scratch and belongs to one goroutine.
//
// Arithmetic is in float32. Against float64 with rounding between axes the
// coefficients of noise differ by less than 1e-6 of the largest.
type Prefilter struct {
	n, m    [3]int
	pad     int
	axes    [3]lineFilter
	t, work []float32
}

// lineFilter is what the filter along an axis of n samples needs to know.
type lineFilter struct {
	n, degree int
	// gain, n-1, n-2, and the poles.
	factors [5]float32
	// weights say how much samples 1, 2 ... of a line add to the start of the causal
	// sum, per pole.
	weights [2][]float32
}

// NewPrefilter plans for volumes of n samples, x fastest, and coefficients that
// reach pad samples past every face.
func NewPrefilter(n [3]int, degree, pad int) *Prefilter {
	p := &Prefilter{n: n, pad: pad}
	longest := 0
	for a := range n {
		check(n[a] >= 1 && pad >= 0, "size of the volume or of its padding")
		p.m[a] = n[a] + 2*pad
		p.axes[a] = newLineFilter(n[a], degree)
		longest = max(longest, n[a])
	}
	p.t = make([]float32, p.m[0]*stripLanes)
	p.work = make([]float32, (longest+2)*stripLanes+longest*8)
	return p
}

func newLineFilter(n, degree int) lineFilter {
	f := lineFilter{n: n, degree: degree}
	gain := 1.0
	for k, z := range poles(degree) {
		gain = float64(gain * float64((1-z)*(1-1/z)))
		f.factors[3+k] = float32(z)
		if n < 3 {
			continue
		}
		// c+[0] = sum over k >= 1 of z^k s[-k], where s is odd about both ends and so
		// has the period 2(n-1): s[-k] = -s[k] = s[period-k] (Unser 1999, IEEE Signal
		// Processing Magazine 16(6):22-38, box 2, for this boundary).
		w := make([]float64, n)
		period := 2 * (n - 1)
		zk := z
		for k := 1; math.Abs(zk) > 1e-18; k++ {
			if i := k % period; i < n {
				w[i] -= zk
			} else {
				w[period-i] += zk
			}
			zk = float64(zk * z)
		}
		// Samples 0 and n-1 are zero; what weighs less than 2^-30 is lost in the
		// rounding of the others.
		last := n - 2
		for last > 0 && math.Abs(w[last]) < 1.0/(1<<30) {
			last--
		}
		for i := 1; i <= last; i++ {
			f.weights[k] = append(f.weights[k], float32(w[i]))
		}
	}
	f.factors[0], f.factors[1], f.factors[2] = float32(gain), float32(n-1), float32(n-2)
	return f
}

// Size returns the number of coefficients along each axis.
func (p *Prefilter) Size() [3]int { return p.m }

// Run writes the coefficients of vol to the first elements of c, padding included.
// c may be longer (see [Slack]); it must not overlap vol.
func (p *Prefilter) Run(c, vol []float32) {
	area, pad := p.m[0]*p.m[1], p.pad
	check(len(c) >= area*p.m[2], "coefficients of another size")
	p.planes(c[area*pad:], vol)
	c = c[:area*p.m[2]]
	p.axes[2].strips(c[area*pad:], area, area, p.work)
	pads(c, area, p.n[2], pad)
}

// RunFlat does the same for a plane, whose third axis has one sample and no padding:
// c begins with m[0]*m[1] coefficients, m as by [Prefilter.Size].
func (p *Prefilter) RunFlat(c, plane []float32) {
	check(p.n[2] == 1 && len(c) >= p.m[0]*p.m[1], "not a plane, or coefficients of another size")
	p.planes(c, plane)
}

// planes filters along x and y, and pads there: plane k to c[m[0]*m[1]*k:].
func (p *Prefilter) planes(c, vol []float32) {
	nx, ny, nz := p.n[0], p.n[1], p.n[2]
	mx, my := p.m[0], p.m[1]
	area, pad := mx*my, p.pad
	check(len(vol) == nx*ny*nz, "volume of another size")
	// Along x, lanes are rows.
	line := func(r int) int { return pad + mx*(pad+r%ny+my*(r/ny)) } // in c
	for r0 := 0; r0 < ny*nz; r0 += stripLanes {
		lanes := min(stripLanes, (ny*nz-r0+7)/8*8)
		t := p.t[:mx*lanes]
		for l := 0; l < lanes; l += 8 {
			var offsets [8]int
			for k := range offsets {
				// Lanes left over repeat the last row.
				offsets[k] = nx * min(r0+l+k, ny*nz-1)
			}
			gatherRows(t[pad*lanes+l:], lanes, vol, &offsets, nx)
		}
		p.axes[0].strips(t[pad*lanes:], lanes, lanes, p.work)
		pads(t, lanes, nx, pad)
		for l := 0; l < lanes; l += 8 {
			var offsets [8]int
			for k := range offsets {
				offsets[k] = line(min(r0+l+k, ny*nz-1)) - pad
			}
			scatterRows(c, &offsets, t[l:], lanes, mx)
		}
	}
	for k := range nz {
		slab := c[area*k:][:area]
		p.axes[1].strips(slab[mx*pad:], mx, mx, p.work)
		pads(slab, mx, ny, pad)
	}
}

// strips filters, in place, lines that lie across rows: row k at c[stride*k:], of
// so many values.
func (f *lineFilter) strips(c []float32, stride, width int, work []float32) {
	if f.n < 3 {
		return // the ends are their own coefficients
	}
	x := 0
	for ; x+stripLanes <= width; x += stripLanes {
		f.strip(c[x:], stride, work, stripLanes)
	}
	for ; x+8 <= width; x += 8 {
		f.strip(c[x:], stride, work, 8)
	}
	if rest := width - x; rest > 0 {
		t := work[(f.n+2)*8:][:f.n*8]
		for k := range f.n {
			copy(t[8*k:][:8], c[stride*k+x:][:rest])
		}
		f.strip(t, 8, work, 8)
		for k := range f.n {
			copy(c[stride*k+x:][:rest], t[8*k:][:rest])
		}
	}
}

// strip filters 32 or 8 lines in place.
func (f *lineFilter) strip(c []float32, stride int, work []float32, lanes int) {
	f.stripTo(c, stride, c, stride, work, lanes)
}

// stripTo filters 32 or 8 lines of src, row k at src[srcStride*k:], to dst, which
// is src or does not overlap it.
func (f *lineFilter) stripTo(dst []float32, dstStride int, src []float32, srcStride int, work []float32, lanes int) {
	check(len(dst) >= dstStride*(f.n-1)+lanes && len(src) >= srcStride*(f.n-1)+lanes && len(work) >= (f.n+2)*lanes, "strip of another size")
	if f.n < 3 {
		for k := range f.n { // the ends are their own coefficients
			copy(dst[dstStride*k:][:lanes], src[srcStride*k:][:lanes])
		}
		return
	}
	if !useAssembly {
		for l := 0; l < lanes; l += 8 {
			f.eightPlain(dst[l:], dstStride, src[l:], srcStride, work)
		}
		return
	}
	var w [2]*float32
	for k := range w {
		w[k] = &f.factors[0] // not read where there are no weights
		if len(f.weights[k]) > 0 {
			w[k] = &f.weights[k][0]
		}
	}
	run := strip5x32
	switch {
	case f.degree == 5 && lanes == 8:
		run = strip5x8
	case f.degree == 3 && lanes == 32:
		run = strip3x32
	case f.degree == 3:
		run = strip3x8
	}
	run(&dst[0], dstStride, &src[0], srcStride, &work[0], f.n, &f.factors[0], w[0], len(f.weights[0]), w[1], len(f.weights[1]))
}

// eightPlain: what is left of a line less the straight one between its ends is odd
// about both, and the filter, being symmetric, leaves it so. Per pole z: causal c+[k] = s[k] + z c+[k-1],
// anticausal c[k] = z (c[k+1] - c+[k]), zero at the end (Unser 1999, box 2).
// The first sample is taken off by itself, before the slope: what an offset would
// lose by rounding, the filter would amplify.
func (f *lineFilter) eightPlain(dst []float32, dstStride int, src []float32, srcStride int, work []float32) {
	n := f.n
	inner := work[:8*(n-2)] // rows 1 to n-2
	first, end := *(*[8]float32)(src), *(*[8]float32)(src[srcStride*(n-1):])
	var slope, u [8]float32
	for l, v := range first {
		slope[l] = (end[l] - v) / f.factors[1]
	}
	gain := f.factors[0]
	for k := 1; k <= n-2; k++ {
		kf := float32(k)
		s, in := (*[8]float32)(inner[8*(k-1):]), (*[8]float32)(src[srcStride*k:])
		for l := range first {
			s[l] = float32(gain * ((in[l] - first[l]) - float32(slope[l]*kf)))
		}
	}
	for pole := range f.degree / 2 {
		z := f.factors[3+pole]
		u = [8]float32{}
		for i, w := range f.weights[pole] {
			r := (*[8]float32)(inner[8*i:])
			for l := range r {
				u[l] += float32(w * r[l])
			}
		}
		u0, u1, u2, u3, u4, u5, u6, u7 := u[0], u[1], u[2], u[3], u[4], u[5], u[6], u[7]
		for r := inner; len(r) >= 8; r = r[8:] {
			r := (*[8]float32)(r)
			u0 = float32(z*u0) + r[0]
			r[0] = u0
			u1 = float32(z*u1) + r[1]
			r[1] = u1
			u2 = float32(z*u2) + r[2]
			r[2] = u2
			u3 = float32(z*u3) + r[3]
			r[3] = u3
			u4 = float32(z*u4) + r[4]
			r[4] = u4
			u5 = float32(z*u5) + r[5]
			r[5] = u5
			u6 = float32(z*u6) + r[6]
			r[6] = u6
			u7 = float32(z*u7) + r[7]
			r[7] = u7
		}
		u0, u1, u2, u3, u4, u5, u6, u7 = 0, 0, 0, 0, 0, 0, 0, 0
		for k := n - 3; k >= 0; k-- {
			r := (*[8]float32)(inner[8*k:])
			u0 = float32(z * (u0 - r[0]))
			r[0] = u0
			u1 = float32(z * (u1 - r[1]))
			r[1] = u1
			u2 = float32(z * (u2 - r[2]))
			r[2] = u2
			u3 = float32(z * (u3 - r[3]))
			r[3] = u3
			u4 = float32(z * (u4 - r[4]))
			r[4] = u4
			u5 = float32(z * (u5 - r[5]))
			r[5] = u5
			u6 = float32(z * (u6 - r[6]))
			r[6] = u6
			u7 = float32(z * (u7 - r[7]))
			r[7] = u7
		}
	}
	copy(dst[:8], first[:])
	copy(dst[dstStride*(n-1):][:8], end[:])
	for k := 1; k <= n-2; k++ {
		kf := float32(k)
		r, out := (*[8]float32)(inner[8*(k-1):]), (*[8]float32)(dst[dstStride*k:])
		for l := range first {
			out[l] = (r[l] + float32(slope[l]*kf)) + first[l]
		}
	}
}

// pads fills pad rows before and after n rows of width values.
func pads(c []float32, width, n, pad int) {
	row := func(k int) []float32 { return c[width*(pad+k):][:width] }
	for k := 1; k <= pad; k++ {
		if n == 1 {
			copy(row(-k), row(0))
			copy(row(k), row(0))
			continue
		}
		// If the axis is short, row k is a row of padding, filled by now.
		reflectRow(row(-k), row(0), row(k))
		reflectRow(row(n-1+k), row(n-1), row(n-1-k))
	}
}

// reflectRow sets dst to 2 end - inner.
func reflectRow(dst, end, inner []float32) {
	if useAssembly {
		reflect(&dst[0], &end[0], &inner[0], len(dst), &masks[0])
		return
	}
	reflectPlain(dst, end, inner)
}

func reflectPlain(dst, end, inner []float32) {
	dst, inner = dst[:len(end)], inner[:len(end)]
	for i, v := range end {
		dst[i] = (v + v) - inner[i]
	}
}

// gatherRows copies rows of n values, which begin at offsets, to eight lanes of t,
// whose rows are stride apart.
func gatherRows(t []float32, stride int, rows []float32, offsets *[8]int, n int) {
	if !useAssembly || n < 8 {
		gatherPlain(t, stride, rows, offsets, n)
		return
	}
	check(len(t) >= stride*(n-1)+8 && len(rows) >= largest(offsets)+n, "rows or lanes of another size")
	gather(&t[0], stride, &rows[0], &offsets[0], n)
}

func gatherPlain(t []float32, stride int, rows []float32, offsets *[8]int, n int) {
	for l, o := range offsets {
		for i, v := range rows[o:][:n] {
			t[stride*i+l] = v
		}
	}
}

// scatterRows is the way back.
func scatterRows(rows []float32, offsets *[8]int, t []float32, stride int, n int) {
	if !useAssembly || n < 8 {
		scatterPlain(rows, offsets, t, stride, n)
		return
	}
	check(len(t) >= stride*(n-1)+8 && len(rows) >= largest(offsets)+n, "rows or lanes of another size")
	scatter(&rows[0], &offsets[0], &t[0], stride, n)
}

func scatterPlain(rows []float32, offsets *[8]int, t []float32, stride int, n int) {
	for l, o := range offsets {
		row := rows[o:][:n]
		for i := range row {
			row[i] = t[stride*i+l]
		}
	}
}

func largest(offsets *[8]int) int {
	hi := offsets[0]
	for _, o := range offsets {
		hi = max(hi, o)
	}
	return hi
}
