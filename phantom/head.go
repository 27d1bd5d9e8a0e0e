package phantom

import (
	"math"
	"math/rand/v2"
)

// The head is drawn with kernels of bounded support, all polynomials, so that a
// point costs some hundred nanoseconds and no elementary function:
//
//	bump(q) = (1-q)^4 for q = r^2/R^2 < 1, else 0. Its curvature at the top is
//	          that of a Gaussian of SD R/sqrt(8), which is what "SD" means below.
//	step(d) = the integral of (1-u^2)^4 over the edge: from 1 (deep inside) to 0,
//	          half at d = 0. The kernel's SD is its half-width / sqrt(11).
//
// An edge of SD 3 mm passes 1.7 % of the amplitude at the Nyquist frequency of
// 3.3 mm voxels (as a Gaussian: exp(-2 pi^2 f^2 s^2)), about what a point-spread
// function of one voxel leaves in a real image.

const (
	edgeSD    = 3.0                      // mm, every soft edge of the head
	edgeReach = edgeSD * 3.3166247903554 // mm, SD times sqrt(11): half-width of step
	bumpReach = 8                        // (R/SD)^2 of bump
	meanLevel = 900.0                    // mean signal inside
	cellSize  = 10.0                     // mm, of the list that says which bumps reach a point
)

// bump of q = r^2/R^2 >= 0.
func bump(q float64) float64 {
	if q >= 1 {
		return 0
	}
	p := 1 - q
	p *= p
	return float64(p * p)
}

// step of the depth d (mm, positive outside).
func step(d float64) float64 {
	u := -d * (1 / edgeReach)
	if u <= -1 {
		return 0
	}
	if u >= 1 {
		return 1
	}
	q := float64(u * u)
	s := 6./5 - float64(q*(4./7-float64(q*(1./9))))
	s = 1 - float64(q*(4./3-float64(q*s)))
	return max(0, 0.5+float64(float64((315./256)*u)*s)) // rounding must not make the edge negative
}

// wave is the sine of u turns, by its Taylor series to x^15 (error below 1e-11,
// so its joins at the quarter turns are smooth to that).
func wave(u float64) float64 {
	u -= math.Floor(u + 0.5)
	if u > 0.25 {
		u = 0.5 - u
	} else if u < -0.25 {
		u = -0.5 - u
	}
	x := float64(u * (2 * math.Pi))
	q := float64(x * x)
	s := 1 - float64(q*(1./(14*15)))
	s = 1 - float64(float64(q*(1./(12*13)))*s)
	s = 1 - float64(float64(q*(1./(10*11)))*s)
	s = 1 - float64(float64(q*(1./(8*9)))*s)
	s = 1 - float64(float64(q*(1./(6*7)))*s)
	s = 1 - float64(float64(q*(1./(4*5)))*s)
	s = 1 - float64(float64(q*(1./(2*3)))*s)
	return float64(x * s)
}

// spot is one bump of the drawing; the reciprocal squares of its three half-axes
// make it round or oval.
type spot struct {
	c, inv [3]float64
	amp    float64
}

// shape is an ellipsoid: centre, reciprocal half-axes, and the length (mm) that
// turns its dimensionless radius into a depth.
type shape struct {
	c, inv [3]float64
	length float64
}

// depth is (|x/a| - 1) length: the distance to the surface, positive outside,
// exact on a sphere and within the ratio of the axes elsewhere.
func (s *shape) depth(x [3]float64) float64 {
	var q float64
	for r := range 3 {
		e := float64((x[r] - s.c[r]) * s.inv[r])
		q += float64(e * e)
	}
	return float64((math.Sqrt(q) - 1) * s.length)
}

// Head is an analytic head: intensity at any point (world mm, head frame),
// evaluated exactly. It is about 140 x 175 x 150 mm (x, y, z) with its centre at
// (0, 0, 0): a soft-edged shell of scalp and skull, a brain with a folded grey
// rim, two ventricles, a patch of signal loss above the nose and some fifty
// smooth spots of 7 to 16 mm SD, no two heads of different seed alike. All
// intensities are positive inside and 0 outside. A Head is read-only once made
// and may be used from several goroutines.
type Head struct {
	outer, brain shape
	scale        float64
	fold         [3][4]float64 // turns per mm along x, y, z, and turns at the origin
	spots        []spot
	cells        [3]int
	low          [3]float64
	start        []int32 // by cell: where its spots begin in list
	list         []int32
}

// NewHead draws an invented head from a seed. The mean over the inside is 900,
// the background 0.
func NewHead(seed uint64) *Head {
	r := rand.New(rand.NewPCG(seed, 0x68656164))
	between := func(lo, hi float64) float64 { return lo + float64((hi-lo)*r.Float64()) }
	h := &Head{scale: 1}
	for i, a := range [3]float64{70, 87.5, 75} {
		h.outer.inv[i] = 1 / float64(a*between(0.985, 1.015))
	}
	h.outer.length = 77
	for i, a := range [3]float64{60, 77, 64} {
		h.brain.inv[i] = 1 / float64(a*between(0.985, 1.015))
	}
	h.brain.c = [3]float64{between(-1, 1), between(-2, 0), between(1, 2.5)}
	h.brain.length = 66
	for i := range h.fold {
		d := direction(r)
		f := 1 / between(21, 29) // wavelengths in mm
		for k := range d {
			h.fold[i][k] = d[k] * f
		}
		h.fold[i][3] = r.Float64()
	}
	oval := func(c, sd [3]float64, amp float64) {
		s := spot{c: c, amp: amp}
		for k := range 3 {
			s.inv[k] = 1 / float64(bumpReach*float64(sd[k]*sd[k]))
		}
		h.spots = append(h.spots, s)
	}
	for _, side := range [2]float64{-1, 1} { // ventricles: bright fluid
		x, y, z := float64(side*between(9, 12)), between(-8, 0), between(6, 11)
		oval([3]float64{x, y, z}, [3]float64{6.5, 17, between(8, 10)}, between(300, 380))
	}
	x, y, z := between(-4, 4), between(52, 58), between(-34, -28) // air above the nose
	oval([3]float64{x, y, z}, [3]float64{13, 10, 9}, between(-420, -350))
	const round = 50
	for i := range round {
		d := direction(r)
		// A cube root would spread the centres evenly over the ball; the power
		// 3/8 is near enough and made of square roots, the same everywhere.
		u := math.Sqrt(r.Float64())
		rad := 0.95 * math.Sqrt(u*math.Sqrt(u))
		var c [3]float64
		for k := range c {
			c[k] = h.brain.c[k] + float64(d[k]*rad)/h.brain.inv[k]
		}
		sd := between(7, 16)
		amp := between(70, 170)
		if i%2 == 1 {
			amp = -amp
		}
		oval(c, [3]float64{sd, sd, sd}, amp)
	}
	h.index()
	// Bring the mean inside to its level: a sum in fixed order over a fixed grid.
	var sum float64
	points := h.Points(5)
	for _, p := range points {
		sum += h.At(p)
	}
	h.scale = meanLevel * float64(len(points)) / sum
	return h
}

// direction is uniform on the sphere (Marsaglia 1972, Ann. Math. Statist.
// 43(2):645-646 [from memory]), with square roots only.
func direction(r *rand.Rand) [3]float64 {
	for {
		a, b := float64(2*r.Float64())-1, float64(2*r.Float64())-1
		s := float64(a*a) + float64(b*b)
		if s < 1 {
			f := 2 * math.Sqrt(1-s)
			return [3]float64{float64(a * f), float64(b * f), 1 - float64(2*s)}
		}
	}
}

// index lists, for each cell of a grid over the head, the spots that reach it.
func (h *Head) index() {
	for k := range 3 {
		reach := float64((1+edgeReach/h.outer.length)/h.outer.inv[k]) + 1
		h.low[k] = -reach
		h.cells[k] = int(math.Ceil(2 * reach / cellSize))
	}
	for cz := range h.cells[2] {
		for cy := range h.cells[1] {
			for cx := range h.cells[0] {
				h.start = append(h.start, int32(len(h.list)))
				for i, s := range h.spots {
					var q float64 // of the nearest point of the cell's box
					for k, c := range [3]int{cx, cy, cz} {
						lo := h.low[k] + float64(float64(c)*cellSize)
						e := s.c[k] - max(lo, min(lo+cellSize, s.c[k]))
						q += float64(float64(e*e) * s.inv[k])
					}
					if q < 1 {
						h.list = append(h.list, int32(i))
					}
				}
			}
		}
	}
	h.start = append(h.start, int32(len(h.list)))
}

// At is the intensity at a point of the head frame (mm).
func (h *Head) At(x [3]float64) float64 {
	out := h.outer.depth(x)
	if !(out < edgeReach) {
		return 0
	}
	v := 560 - float64(330*step(out+5.5)) // scalp, and the dark skull under it
	db := h.brain.depth(x)
	if db < edgeReach+2 {
		var w float64
		for i := range h.fold {
			f := &h.fold[i]
			w += wave(float64(f[0]*x[0]) + float64(f[1]*x[1]) + float64(f[2]*x[2]) + f[3])
		}
		w *= 1. / 3
		in := step(db + float64(1.5*w))
		t := 800 - float64(170*step(db+11+float64(6*w))) // grey rim, white core
		c := 0
		for k := 2; k >= 0; k-- {
			c = c*h.cells[k] + int((x[k]-h.low[k])*(1/cellSize))
		}
		for _, i := range h.list[h.start[c]:h.start[c+1]] {
			s := &h.spots[i]
			a, b, d := x[0]-s.c[0], x[1]-s.c[1], x[2]-s.c[2]
			q := float64(float64(a*a)*s.inv[0]) + float64(float64(b*b)*s.inv[1]) + float64(float64(d*d)*s.inv[2])
			t += float64(s.amp * bump(q))
		}
		v += float64(in * t)
	}
	return float64(float64(h.scale*step(out)) * v)
}

// Inside reports whether the point lies inside the head: where the outer edge
// has half its intensity or more.
func (h *Head) Inside(x [3]float64) bool { return h.outer.depth(x) <= 0 }

// Points gives the points of a cubic grid of the given spacing (mm) that lie
// inside the head, x fastest: what a displacement is averaged over.
func (h *Head) Points(spacing float64) [][3]float64 {
	var p [][3]float64
	n := int(100 / spacing)
	for k := -n; k <= n; k++ {
		for j := -n; j <= n; j++ {
			for i := -n; i <= n; i++ {
				x := [3]float64{float64(float64(i) * spacing), float64(float64(j) * spacing), float64(float64(k) * spacing)}
				if h.Inside(x) {
					p = append(p, x)
				}
			}
		}
	}
	return p
}
