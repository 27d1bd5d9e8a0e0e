package kernel

import "math"

// A Field is what points are looked for in by [Field.Locate]: N samples along each
// axis, x fastest. It is only read.
type Field struct {
	N [3]int
	// Lo and Hi limit the voxel coordinates that are accepted, bounds included;
	// 0 <= Lo and Hi <= N-1. Axes with Lo > Hi accept nothing.
	Lo, Hi [3]float64
	// Mask says for each voxel whether points nearest to it are accepted.
	Mask []bool
	// Pad is how far coefficients reach past every face, and Degree that of the
	// spline, 3 or 5, whose first taps are wanted.
	Pad, Degree int
}

// Sites are points of a field, in slices of one length: what [Value5], [Gradient5]
// and their cubic fellows take, and where the points came from. The zero value is
// empty and ready. What lies between length and capacity is scratch.
type Sites struct {
	Base    []int32   // first tap of the point: its index in the coefficients
	X, Y, Z []float32 // how far the point lies past its cell's corner, 0 to 1
	Near    []int32   // nearest voxel, halves upwards: its index in Field.Mask
	Index   []int32   // which of the row's points it is
}

// Reset empties s and keeps its memory.
func (s *Sites) Reset() { s.setLen(0) }

// Len is the number of points.
func (s *Sites) Len() int { return len(s.Base) }

// Grow makes room for n more points, so that finding them does not allocate.
func (s *Sites) Grow(n int) {
	have := len(s.Base)
	if need := have + n + 7; need > cap(s.Base) {
		need += need / 2
		for _, v := range []*[]int32{&s.Base, &s.Near, &s.Index} {
			*v = append(make([]int32, 0, need), *v...)
		}
		for _, v := range []*[]float32{&s.X, &s.Y, &s.Z} {
			*v = append(make([]float32, 0, need), *v...)
		}
	}
}

func (s *Sites) setLen(n int) {
	s.Base, s.Near, s.Index = s.Base[:n], s.Near[:n], s.Index[:n]
	s.X, s.Y, s.Z = s.X[:n], s.Y[:n], s.Z[:n]
}

// Locate appends to s the points of a row that lie within the limits and whose
// nearest voxel is in the mask, in their order, and returns how many. Point i, first
// <= i < first+count, is at start + float64(i)*step, voxel coordinates in float64, so
// that a part of a row gives the same points as the whole; i becomes its Index. NaN
// and infinities are not accepted.
//
// accept, if not nil, leaves out further points: i stays if accept[i-first]. It has
// at least count elements.
//
// The fraction of a coordinate is rounded to float32 once found; the voxel is the
// nearest by the fraction before that. A point on the last sample has its cell
// there.
func (f *Field) Locate(s *Sites, start, step [3]float64, first, count int, accept []bool) int {
	nx, ny, nz := f.N[0], f.N[1], f.N[2]
	check(nx > 0 && ny > 0 && nz > 0 && len(f.Mask) == nx*ny*nz, "mask of another size")
	check(f.Pad > f.Degree/2 && f.Degree >= 0, "too little padding")
	mx, my, mz := nx+2*f.Pad, ny+2*f.Pad, nz+2*f.Pad
	check(mx*my*mz <= 1<<31-1 && first >= 0 && first <= 1<<31-1-count, "more than an int32 can count")
	for a, n := range f.N {
		check(f.Lo[a] >= 0 && f.Hi[a] <= float64(n-1), "limits outside the field")
	}
	check(accept == nil || len(accept) >= count, "fewer choices than points")
	if count <= 0 {
		return 0
	}
	s.Grow(count)
	to := len(s.Base)
	l := locator{
		start: start, step: step, lo: f.Lo, hi: f.Hi,
		strides: [4]int32{int32(nx), int32(nx * ny), int32(mx), int32(mx * my)},
		origin:  int32((f.Pad - f.Degree/2) * (1 + mx + mx*my)),
	}
	found := 0
	if useAssembly {
		s.setLen(to + (count+7)/8*8)
		whole := count
		if accept != nil {
			whole = count / 8 * 8 // the assembly reads choices by eights
		}
		run := func(first, count int, accept *bool) {
			at := to + found
			found += locate(&s.Base[at], &s.Near[at], &s.Index[at], &s.X[at], &s.Y[at], &s.Z[at], first, count, &l.start[0], &l.strides[0], &f.Mask[0], accept, &locateTable[0], &locateOrder[0])
		}
		switch {
		case accept == nil:
			run(first, count, nil)
		case whole > 0:
			run(first, whole, &accept[0])
		}
		if rest := count - whole; rest > 0 {
			var last [8]bool
			copy(last[:], accept[whole:count])
			run(first+whole, rest, &last[0])
		}
	} else {
		s.setLen(to + count)
		found = l.plain(s, to, f.Mask, first, count, accept)
	}
	s.setLen(to + found)
	return found
}

// locator is laid out as the assembly reads it.
type locator struct {
	start, step, lo, hi [3]float64
	strides             [4]int32 // of the mask: y, z; of the coefficients: y, z
	origin              int32    // first tap of a point on the first sample
}

func (l *locator) plain(s *Sites, to int, mask []bool, first, count int, accept []bool) int {
	base, near, index := s.Base[to:], s.Near[to:], s.Index[to:]
	tx, ty, tz := s.X[to:], s.Y[to:], s.Z[to:]
	n := 0
	for i := range count {
		if accept != nil && !accept[i] {
			continue
		}
		at := float64(first + i)
		x := float64(l.step[0]*at) + l.start[0]
		y := float64(l.step[1]*at) + l.start[1]
		z := float64(l.step[2]*at) + l.start[2]
		if !(x >= l.lo[0] && x <= l.hi[0] && y >= l.lo[1] && y <= l.hi[1] && z >= l.lo[2] && z <= l.hi[2]) {
			continue
		}
		cx, cy, cz := int32(x), int32(y), int32(z)
		fx, fy, fz := x-float64(cx), y-float64(cy), z-float64(cz)
		v := cx + l.strides[0]*cy + l.strides[1]*cz
		if fx >= 0.5 {
			v++
		}
		if fy >= 0.5 {
			v += l.strides[0]
		}
		if fz >= 0.5 {
			v += l.strides[1]
		}
		if !mask[v] {
			continue
		}
		base[n] = l.origin + cx + l.strides[2]*cy + l.strides[3]*cz
		near[n], index[n] = v, int32(first+i)
		tx[n], ty[n], tz[n] = float32(fx), float32(fy), float32(fz)
		n++
	}
	return n
}

// locateTable: 0 to 7 as float64, a half four times, 0 to 7 as int32.
var locateTable [12 + 4]float64

// locateOrder holds for each set of eight lanes their numbers, first those in the
// set.
var locateOrder [256 * 8]uint8

func init() {
	for l := range 8 {
		locateTable[l] = float64(l)
		locateTable[8+l/2] = 0.5
	}
	for l := range 4 {
		locateTable[12+l] = pairOf(int32(2*l), int32(2*l+1))
	}
	for set := range 256 {
		at := 8 * set
		for l := range 8 {
			if set>>l&1 == 1 {
				locateOrder[at] = uint8(l)
				at++
			}
		}
	}
}

// pairOf puts two int32 where a float64 is.
func pairOf(lo, hi int32) float64 {
	return math.Float64frombits(uint64(uint32(lo)) | uint64(uint32(hi))<<32)
}
