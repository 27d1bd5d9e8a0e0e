package nifti

import (
	"fmt"
	"math"
)

// Affine maps a voxel index (i, j, k, 1) to the world in mm (RAS+), as a
// row-major 4x4 matrix, with the translation for the *centre* of voxel 0: from
// the sform where sform_code > 0, else from the qform where qform_code > 0, else
// from the voxel sizes alone. That the sform wins where both are given is
// common practice, not part of the standard. The space unit of xyzt_units is
// taken for mm whatever it says, as is common practice too.
//
// For headers out of [ReadHeader] or [Open] the matrix is finite and not
// singular.
func (h *Header) Affine() [16]float64 {
	switch {
	case h.SformCode > 0: // nifti1.h, METHOD 3
		s := &h.Srow
		return [16]float64{
			s[0][0], s[0][1], s[0][2], s[0][3],
			s[1][0], s[1][1], s[1][2], s[1][3],
			s[2][0], s[2][1], s[2][2], s[2][3],
			0, 0, 0, 1,
		}
	case h.QformCode > 0: // nifti1.h, METHOD 2
		r := rotation(h.Quatern[0], h.Quatern[1], h.Quatern[2])
		p := [3]float64{h.Pixdim[1], h.Pixdim[2], h.Pixdim[3]}
		if h.Pixdim[0] < 0 { // qfac; 0 is read as +1
			p[2] = -p[2]
		}
		a := [16]float64{15: 1}
		for i := range 3 {
			for j := range 3 {
				a[4*i+j] = r[3*i+j] * p[j]
			}
			a[4*i+3] = h.Qoffset[i]
		}
		return a
	}
	// nifti1.h, METHOD 1.
	return [16]float64{0: h.Pixdim[1], 5: h.Pixdim[2], 10: h.Pixdim[3], 15: 1}
}

// rotation returns the matrix of the unit quaternion (a, b, c, d), a >= 0,
// nifti1.h, "QUATERNION REPRESENTATION OF ROTATION MATRIX". Where b, c and d
// leave less than 1e-7 for a squared, a is 0 and they are brought to length
// one, as the reference library does (nifti2_io.c, nifti_quatern_to_dmat44).
// No product is fused with a sum: the same bits on every processor.
func rotation(b, c, d float64) [9]float64 {
	bb, cc, dd := float64(b*b), float64(c*c), float64(d*d)
	aa := 1 - (bb + cc + dd)
	a := 0.0
	if aa < 1e-7 {
		n := 1 / math.Sqrt(bb+cc+dd)
		b, c, d = b*n, c*n, d*n
		bb, cc, dd = float64(b*b), float64(c*c), float64(d*d)
		aa = 0
	} else {
		a = math.Sqrt(aa)
	}
	ab, ac, ad := float64(a*b), float64(a*c), float64(a*d)
	bc, bd, cd := float64(b*c), float64(b*d), float64(c*d)
	return [9]float64{
		aa + bb - cc - dd, 2 * (bc - ad), 2 * (bd + ac),
		2 * (bc + ad), aa + cc - bb - dd, 2 * (cd - ab),
		2 * (bd - ac), 2 * (cd + ab), aa + dd - bb - cc,
	}
}

// maxQuatern is how long (b, c, d) may be, squared: one, plus what a hand that
// wrote three decimals makes of it (2*sqrt(3)*5e-4 < 2e-3). Rounding to float32
// takes 3e-7. Beyond it the numbers are no rotation, and to force them into one
// would turn the head in silence.
const maxQuatern = 1.002

// minVolume is the least volume of the cell spanned by the three voxel axes at
// length one. Axes that lie in one plane, written as float32, give up to about
// 1e-7; ten times that is still a shear that no scanner makes.
const minVolume = 1e-6

// checkAffine holds the fields that Affine uses against their limits and the
// result against being singular or not finite.
func (h *Header) checkAffine() *Error {
	bad := func(field, found, expected string) *Error {
		return &Error{Kind: KindAffine, Field: field, Found: found, Expected: expected}
	}
	method := "srow_x, srow_y, srow_z"
	if h.SformCode <= 0 {
		method = "pixdim"
		for i := 1; i <= 3; i++ {
			if v := h.Pixdim[i]; !finite(v) || v <= 0 {
				return bad(fmt.Sprintf("pixdim[%d]", i), fmt.Sprint(v), "a voxel size above zero")
			}
		}
		if h.QformCode > 0 {
			method = "quatern_b, quatern_c, quatern_d"
			if !finite(h.Pixdim[0]) {
				return bad("pixdim[0]", fmt.Sprint(h.Pixdim[0]), "-1, 0 or 1")
			}
			q := h.Quatern
			n := float64(q[0]*q[0]) + float64(q[1]*q[1]) + float64(q[2]*q[2])
			if !(n <= maxQuatern) {
				return bad(method, fmt.Sprint(q[0], ", ", q[1], ", ", q[2]), "part of a unit quaternion: squares that sum to 1 at most")
			}
		}
	}
	a := h.Affine()
	for i, v := range a[:12] {
		if !finite(v) {
			field := method
			if i%4 == 3 && h.SformCode <= 0 {
				field = "qoffset_" + "xyz"[i/4:i/4+1]
			}
			return bad(field, fmt.Sprintf("%v in row %d, column %d of the affine", v, i/4+1, i%4+1), "finite numbers")
		}
	}
	// Columns at length one, scaled by their largest element first so that
	// no square runs over or under.
	var u [3][3]float64
	for j := range 3 {
		big := max(math.Abs(a[j]), math.Abs(a[4+j]), math.Abs(a[8+j]))
		if big == 0 {
			return bad(method, fmt.Sprintf("an affine whose column %d is zero", j+1), "three axes that span space")
		}
		x, y, z := a[j]/big, a[4+j]/big, a[8+j]/big
		n := math.Sqrt(float64(x*x) + float64(y*y) + float64(z*z))
		u[j] = [3]float64{x / n, y / n, z / n}
	}
	cx := float64(u[1][1]*u[2][2]) - float64(u[1][2]*u[2][1])
	cy := float64(u[1][2]*u[2][0]) - float64(u[1][0]*u[2][2])
	cz := float64(u[1][0]*u[2][1]) - float64(u[1][1]*u[2][0])
	vol := float64(u[0][0]*cx) + float64(u[0][1]*cy) + float64(u[0][2]*cz)
	if !(math.Abs(vol) > minVolume) {
		return bad(method, fmt.Sprintf("axes that span a cell of volume %.3g at length one", math.Abs(vol)), "an affine that is not singular")
	}
	return nil
}
