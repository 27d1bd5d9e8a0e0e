package realign

import "math"

// Grid is the sampling of a volume: N voxels along each axis; Affine, row-major
// 4x4, maps a voxel index (i, j, k, 1) to world mm (RAS+). A volume on the grid
// is vol[i + N[0]*(j + N[1]*k)].
type Grid struct {
	N      [3]int
	Affine [16]float64
}

func (g Grid) voxels() int { return g.N[0] * g.N[1] * g.N[2] }

// edges returns the distance between neighbouring voxel centres along each
// axis, mm.
func (g Grid) edges() (e [3]float64) {
	for a := range e {
		for r := range 3 {
			e[a] += float64(g.Affine[4*r+a] * g.Affine[4*r+a])
		}
		e[a] = math.Sqrt(e[a])
	}
	return e
}

// world returns the mm position of a voxel index, which need not be whole.
func (g Grid) world(i, j, k float64) [3]float64 { return applyAffine(&g.Affine, i, j, k) }

func applyAffine(m *[16]float64, x, y, z float64) (p [3]float64) {
	for r := range p {
		p[r] = float64(m[4*r]*x) + float64(m[4*r+1]*y) + float64(m[4*r+2]*z) + m[4*r+3]
	}
	return p
}

// mul returns the product of two affine maps (last row 0 0 0 1).
func mul(a, b [16]float64) (c [16]float64) {
	for r := range 3 {
		for s := range 4 {
			v := float64(a[4*r]*b[s]) + float64(a[4*r+1]*b[4+s]) + float64(a[4*r+2]*b[8+s])
			if s == 3 {
				v += a[4*r+3]
			}
			c[4*r+s] = v
		}
	}
	c[15] = 1
	return c
}

// invert returns the inverse of an affine map by the adjugate; ok is false if
// it has none.
func invert(m [16]float64) (inv [16]float64, ok bool) {
	c := func(r, s int) float64 {
		r1, r2, s1, s2 := (r+1)%3, (r+2)%3, (s+1)%3, (s+2)%3
		return float64(m[4*r1+s1]*m[4*r2+s2]) - float64(m[4*r1+s2]*m[4*r2+s1])
	}
	det := float64(m[0]*c(0, 0)) + float64(m[1]*c(0, 1)) + float64(m[2]*c(0, 2))
	if det == 0 || math.IsNaN(det) || math.IsInf(det, 0) {
		return inv, false
	}
	for r := range 3 {
		for s := range 3 {
			inv[4*r+s] = c(s, r) / det
		}
		t := float64(inv[4*r]*m[3]) + float64(inv[4*r+1]*m[7]) + float64(inv[4*r+2]*m[11])
		inv[4*r+3] = -t
	}
	inv[15] = 1
	return inv, true
}

// mustInvert is for affines that were checked at the border.
func mustInvert(m [16]float64) [16]float64 {
	inv, ok := invert(m)
	if !ok {
		panic("realign: singular affine")
	}
	return inv
}

// Map says where each output voxel comes from, so that poses, pose paths and
// spatial distortions can share one resampling.
type Map interface {
	// Row fills x, y and z, of the length of an output row, with the source
	// voxel coordinates of the output voxels (0..len-1, j, k).
	Row(j, k int, x, y, z []float64)
}

// affineMap maps output voxel indices to source voxel indices.
type affineMap [16]float64

func (m affineMap) Row(j, k int, x, y, z []float64) {
	fj, fk := float64(j), float64(k)
	var o [3]float64
	for r := range o {
		o[r] = float64(m[4*r+1]*fj) + float64(m[4*r+2]*fk) + m[4*r+3]
	}
	for i := range x {
		fi := float64(i)
		x[i] = float64(m[0]*fi) + o[0]
		y[i] = float64(m[4]*fi) + o[1]
		z[i] = float64(m[8]*fi) + o[2]
	}
}

// PoseMap returns the map that takes a voxel of the reference to the place in
// a volume, on the same grid, where its point was at pose p.
func PoseMap(g Grid, p Pose) Map {
	if p == Identity {
		return affineMap{0: 1, 5: 1, 10: 1, 15: 1}
	}
	return affineMap(mul(mustInvert(g.Affine), mul(p.Matrix(), g.Affine)))
}
