package kernel

import "math"

// In three passes a volume is resampled along an affine near the identity: first
// along x, so that every sample stands at the x of the output it is for, then along y,
// then along z, each pass by the spline of one dimension (Catmull, Smith 1980, Computer
// Graphics 14(3):279-285: an image mapped axis by axis; Thevenaz, Unser, from memory,
// for splines). Six taps three times instead of 216.
//
// A shift is the same by either way. With a turn the field in between is sheared,
// which moves what is finest along one axis past the limit of the other: at 3
// degrees no more of an image than the spline loses anyway.

// steepest is by how much of a voxel a pass may slide from row to row, and widest by
// how much it may stretch: turns of 3 degrees, of voxels of one edge.
const (
	steepest = 0.055
	widest   = 0.02
)

// A Shear is an affine as its passes see it. Axes[a][0..2] times the coordinates
// that pass a knows, plus Axes[a][3], is the coordinate of axis a in the volume: the
// first pass knows output x and the volume's y and z; the second output x and y and
// the volume's z; the third the output's alone.
type Shear struct{ Axes [3][4]float64 }

// NewShear takes an affine from output to volume, voxels, row-major (the fourth row
// is not read) to pieces; ok is false if it is not near enough to the identity for
// three passes, turned by more than about 3 degrees or stretched by 2 %.
func NewShear(m *[16]float64) (s Shear, ok bool) {
	d := float64(m[5]*m[10]) - float64(m[6]*m[9])
	// x at a given place (y, z) of the volume, and y at a given z.
	p := (float64(m[1]*m[10]) - float64(m[2]*m[9])) / d
	q := (float64(m[2]*m[5]) - float64(m[1]*m[6])) / d
	r := m[6] / m[10]
	s.Axes[0] = [4]float64{
		m[0] - float64(p*m[4]) - float64(q*m[8]), p, q,
		m[3] - float64(p*m[7]) - float64(q*m[11]),
	}
	s.Axes[1] = [4]float64{m[4] - float64(r*m[8]), m[5] - float64(r*m[9]), r, m[7] - float64(r*m[11])}
	s.Axes[2] = [4]float64{m[8], m[9], m[10], m[11]}
	for a, f := range s.Axes {
		for b, v := range f[:3] {
			if a == b && !(math.Abs(v-1) <= widest) || a != b && !(math.Abs(v) <= steepest) {
				return s, false
			}
		}
		// What is farther off than any field is not counted.
		if !(math.Abs(f[3]) < 1<<30) {
			return s, false
		}
	}
	return s, true
}

// Passes resamples volumes of one size in three passes. It owns its scratch and
// belongs to one goroutine.
//
// Splines continue a volume as [Prefilter] does. A point less than a voxel outside the
// field is interpolated there, so that a pass may see outside what the result does
// not; one farther out takes the value there. What else the caller wants of points
// outside is the caller's affair.
//
// Places are rounded to float32 against the first of 64 outputs: some 2^-22 of a
// voxel.
type Passes struct {
	n, m     [3]int
	pad      int
	degree   int
	axes     [3]lineFilter
	row      int // of values between passes: n[0] rounded up to eight
	t        []float32
	lines    []float32 // coefficients of rows
	slab     []float32
	work     []float32
	table    *[passTableSize]float32
	reserved int // values in a row of lines
}

// passFront: registers loaded for lanes of another cell reach so far before a row.
const passFront = 8

// NewPasses plans for volumes of n samples, x fastest, and splines of degree 3 or 5.
func NewPasses(n [3]int, degree int) *Passes {
	p := &Passes{n: n, degree: degree, pad: degree/2 + 1, row: (n[0] + 7) / 8 * 8, table: &passTables[degree/4]}
	longest := 0
	for a := range n {
		check(n[a] >= 1 && n[a] <= 1<<16, "size of the volume")
		p.m[a] = n[a] + 2*p.pad
		p.axes[a] = newLineFilter(n[a], degree)
		longest = max(longest, n[a])
	}
	p.reserved = p.m[0] + 2*passFront
	p.t = make([]float32, (longest+2*p.pad)*stripLanes)
	p.lines = make([]float32, passFront+stripLanes*p.reserved+passFront)
	p.slab = make([]float32, n[1]*p.row)
	p.work = make([]float32, (longest+2)*stripLanes+longest*8)
	return p
}

// Scratch is how many elements [Passes.Run] wants as scratch.
func (p *Passes) Scratch() int { return p.row * p.n[1] * p.n[2] }

// Run resamples vol to dst: dst[x, y, z] is the value where s takes (x, y, z). scratch has
// [Passes.Scratch] elements or more, of any value, and overlaps neither; dst may be vol.
func (p *Passes) Run(dst, vol, scratch []float32, s *Shear) {
	nx, ny, nz := p.n[0], p.n[1], p.n[2]
	check(len(dst) == nx*ny*nz && len(vol) == nx*ny*nz && len(scratch) >= p.Scratch(), "volumes of another size, or too little scratch")
	mid := scratch[:p.Scratch()]
	for k := range nz {
		p.alongX(vol[nx*ny*k:][:nx*ny], &s.Axes[0], k)
		p.alongY(mid[p.row*ny*k:][:p.row*ny], &s.Axes[1], k)
	}
	p.alongZ(dst, mid, &s.Axes[2])
}

// alongX fills the slab from slice k of the volume.
func (p *Passes) alongX(slice []float32, f *[4]float64, k int) {
	nx, ny, mx := p.n[0], p.n[1], p.m[0]
	for j := 0; j < ny; j += stripLanes {
		rows := min(stripLanes, ny-j)
		lanes := (rows + 7) / 8 * 8
		t := p.t[:mx*lanes]
		var offsets [8]int
		for l := 0; l < lanes; l += 8 {
			for i := range offsets {
				// Lanes left over repeat the last row.
				offsets[i] = nx * min(j+l+i, ny-1)
			}
			gatherRows(t[p.pad*lanes+l:], lanes, slice, &offsets, nx)
		}
		p.axes[0].strips(t[p.pad*lanes:], lanes, lanes, p.work)
		pads(t, lanes, nx, p.pad)
		for l := 0; l < lanes; l += 8 {
			for i := range offsets {
				offsets[i] = passFront + p.reserved*(l+i)
			}
			scatterRows(p.lines, &offsets, t[l:], lanes, mx)
		}
		start := f[3] + float64(f[1]*float64(j)) + float64(f[2]*float64(k))
		p.pass(p.slab[p.row*j:], p.row, rows, nx, p.lines, p.reserved, 1, true, [3]float64{start, f[0], f[1]}, nx)
	}
}

// alongY makes slice k of what lies between the second and the third pass out of the
// slab.
func (p *Passes) alongY(slice []float32, f *[4]float64, k int) {
	p.strips(p.slab, p.row, 1, func(x, lanes int) {
		start := f[3] + float64(f[0]*float64(x)) + float64(f[2]*float64(k))
		p.pass(slice[x:], p.row, p.n[1], lanes, p.t, 0, lanes, false, [3]float64{start, f[0], f[1]}, p.n[1])
	})
}

func (p *Passes) alongZ(dst, mid []float32, f *[4]float64) {
	nx, ny, nz := p.n[0], p.n[1], p.n[2]
	for j := range ny {
		p.strips(mid[p.row*j:], p.row*ny, 2, func(x, lanes int) {
			start := f[3] + float64(f[0]*float64(x)) + float64(f[1]*float64(j))
			p.pass(dst[x+nx*j:], nx*ny, nz, min(lanes, nx-x), p.t, 0, lanes, false, [3]float64{start, f[0], f[2]}, nz)
		})
	}
}

// strips filters lines of an axis that lie across rows of src, stride apart, to p.t,
// padding included, and has each strip used.
func (p *Passes) strips(src []float32, stride, axis int, use func(x, lanes int)) {
	n := p.n[axis]
	for x := 0; x < p.row; {
		lanes := stripLanes
		if x+stripLanes > p.row {
			lanes = 8
		}
		t := p.t[:p.m[axis]*lanes]
		p.axes[axis].stripTo(t[p.pad*lanes:], lanes, src[x:], stride, p.work, lanes)
		pads(t, lanes, n, p.pad)
		use(x, lanes)
		x += lanes
	}
}

// pass interpolates along one axis, of n samples: output i of row r lies at axes[0] + axes[1] i +
// axes[2] r. Taps are tapStride apart in c, and follow the row (along), or lie in the
// column of their output.
func (p *Passes) pass(dst []float32, dstStride, rows, width int, c []float32, rowStride, tapStride int, along bool, axes [3]float64, n int) {
	reach := (n+p.degree)*tapStride + (width+7)/8*8
	if along {
		check(rowStride >= p.m[0]+2*passFront, "rows too near")
		reach = p.m[0] + 2*passFront
	}
	check(len(dst) >= dstStride*(rows-1)+width && len(c) >= rowStride*(rows-1)+reach, "pass of another size")
	// Counted from the first tap of a point one voxel before the field, so that none
	// has a number below zero. Start, step, step from row to row; where a start is
	// farther out than 64 outputs reach; the last place; step against the taps.
	a := [7]float64{axes[0] + 1, axes[1], axes[2], -72, float64(n + 8), float64(n+1) - 1.0/64, axes[1]}
	follow := &passFollow[8]
	if along {
		c, follow = c[passFront:], &passFollow[0]
		a[6]--
	}
	switch {
	case useAssembly && p.degree == 5:
		pass5(&dst[0], dstStride, rows, width, &c[0], rowStride, tapStride, follow, &a[0], &p.table[0], &masks[0])
	case useAssembly:
		pass3(&dst[0], dstStride, rows, width, &c[0], rowStride, tapStride, follow, &a[0], &p.table[0], &masks[0])
	default:
		passPlain(dst, dstStride, rows, width, c, rowStride, tapStride, along, &a, p.degree)
	}
}

// passPieces5 are the B-splines over the upper three taps of six, outermost first,
// as polynomials of s, a point's distance from the middle of its cell: the even powers, the fourth
// first, then the odd ones. The lower taps are their mirror images.
// passPieces3 likewise for the upper two of four.
var (
	passPieces5 [3][2][3]float32
	passPieces3 [2][2][2]float32
)

// passTables are what the assembly reads, per degree.
const passTableSize = 8*3 + 8*3*2*3

var passTables [2][passTableSize]float32

// passFollow masks by how much the taps of outputs go along with the row: all, or not
// at all.
var passFollow = [16]int32{-1, -1, -1, -1, -1, -1, -1, -1}

func init() {
	// By the distance t from the cell's corner, as in bsplines5 and bsplines3.
	for p, by := range [3][6]float64{{0, 0, 0, 0, 0, 1}, {1, 5, 10, 10, 5, -5}, {26, 50, 20, -20, -20, 10}} {
		c := aboutMiddle(by[:])
		for k := range 3 {
			passPieces5[p][0][k], passPieces5[p][1][k] = float32(c[4-2*k]/120), float32(c[5-2*k]/120)
		}
	}
	for p, by := range [2][4]float64{{0, 0, 0, 1}, {1, 3, 3, -3}} {
		c := aboutMiddle(by[:])
		for k := range 2 {
			passPieces3[p][0][k], passPieces3[p][1][k] = float32(c[2-2*k]/6), float32(c[3-2*k]/6)
		}
	}
	for d := range passTables {
		t := passTables[d][:0]
		for l := range 8 {
			t = append(t, float32(l))
		}
		eight := func(v float32) {
			for range 8 {
				t = append(t, v)
			}
		}
		eight(8)
		eight(half)
		if d == 1 {
			for _, p := range passPieces5 {
				for _, v := range []float32{p[0][0], p[0][1], p[0][2], p[1][0], p[1][1], p[1][2]} {
					eight(v)
				}
			}
			continue
		}
		for _, p := range passPieces3 {
			for _, v := range []float32{p[0][0], p[0][1], p[1][0], p[1][1]} {
				eight(v)
			}
		}
	}
}

// aboutMiddle expands a polynomial of t by powers of s = t - 1/2. Whole numbers and
// halves: exact in float64.
func aboutMiddle(by []float64) []float64 {
	c := make([]float64, len(by))
	for k := len(by) - 1; k >= 0; k-- { // Horner: c = c*(s + 1/2) + by[k]
		for i := len(c) - 1; i > 0; i-- {
			c[i] = c[i-1] + float64(c[i]/2)
		}
		c[0] = float64(c[0]/2) + by[k]
	}
	return c
}

func passPlain(dst []float32, dstStride, rows, width int, c []float32, rowStride, tapStride int, along bool, axes *[7]float64, degree int) {
	var first [64]int // of an output's taps
	var s [64]float32 // its distance from the middle of its cell
	sigma := float32(axes[6])
	for r := range rows {
		origin := float64(axes[2]*float64(r)) + axes[0]
		row := dst[dstStride*r:][:width]
		for i := 0; i < width; i += 64 {
			u := float64(axes[1]*float64(i)) + origin
			u = min(max(u, axes[3]), axes[4])
			k := math.Floor(u)
			f, lo, hi := float32(u-k), float32(-k), float32(axes[5]-k)
			out := row[i:min(i+64, width)]
			for l := range out {
				n := float32(l)
				v := float32(sigma*n) + f
				if along {
					v = min(max(v, lo-n), hi-n)
				} else {
					v = min(max(v, lo), hi)
				}
				cell := int(v)
				if float32(cell) > v {
					cell--
				}
				s[l] = (v - float32(cell)) - half
				first[l] = int(k) + cell // a column's
				if along {
					first[l] += rowStride*r + l
				} else {
					first[l] = first[l]*tapStride + i + l
				}
			}
			if degree == 5 {
				taps5Plain(out, c, first[:], s[:], tapStride)
			} else {
				taps3Plain(out, c, first[:], s[:], tapStride)
			}
		}
	}
}

func taps5Plain(out, c []float32, first []int, s []float32, stride int) {
	a, b, d := &passPieces5[0], &passPieces5[1], &passPieces5[2]
	first, s = first[:len(out)], s[:len(out)]
	for i := range out {
		at, s := first[i], s[i]
		q := float32(s * s)
		e0 := float32(q*(float32(a[0][0]*q)+a[0][1])) + a[0][2]
		o0 := float32(s * (float32(q*(float32(a[1][0]*q)+a[1][1])) + a[1][2]))
		e1 := float32(q*(float32(b[0][0]*q)+b[0][1])) + b[0][2]
		o1 := float32(s * (float32(q*(float32(b[1][0]*q)+b[1][1])) + b[1][2]))
		e2 := float32(q*(float32(d[0][0]*q)+d[0][1])) + d[0][2]
		o2 := float32(s * (float32(q*(float32(d[1][0]*q)+d[1][1])) + d[1][2]))
		lo := float32((e0-o0)*c[at]) + float32((e1-o1)*c[at+stride]) + float32((e2-o2)*c[at+2*stride])
		hi := float32((e2+o2)*c[at+3*stride]) + float32((e1+o1)*c[at+4*stride]) + float32((e0+o0)*c[at+5*stride])
		out[i] = lo + hi
	}
}

func taps3Plain(out, c []float32, first []int, s []float32, stride int) {
	a, b := &passPieces3[0], &passPieces3[1]
	first, s = first[:len(out)], s[:len(out)]
	for i := range out {
		at, s := first[i], s[i]
		q := float32(s * s)
		e0 := float32(a[0][0]*q) + a[0][1]
		o0 := float32(s * (float32(a[1][0]*q) + a[1][1]))
		e1 := float32(b[0][0]*q) + b[0][1]
		o1 := float32(s * (float32(b[1][0]*q) + b[1][1]))
		lo := float32((e0-o0)*c[at]) + float32((e1-o1)*c[at+stride])
		hi := float32((e1+o1)*c[at+2*stride]) + float32((e0+o0)*c[at+3*stride])
		out[i] = lo + hi
	}
}
