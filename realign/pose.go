package realign

import (
	"math"
	"sort"

	"evenkeel/internal/detmath"
)

// Pose is a rigid map of world space, x -> R x + T (mm, RAS+). As found by
// [EstimateVolumes] it takes a point of the reference to where that point was
// in a volume. The zero value is not a pose; start from [Identity].
type Pose struct {
	Q [4]float64 // unit quaternion w, x, y, z of R
	T [3]float64 // mm
}

// Identity leaves every point where it is.
var Identity = Pose{Q: [4]float64{1, 0, 0, 0}}

// FromParams returns the pose x -> R (x-c) + c + shift with
// R = Rz(turn[2]) Ry(turn[1]) Rx(turn[0]), right-handed about the world axes
// through the centre c; shift in mm, turn in rad.
func FromParams(shiftMM, turnRad, c [3]float64) Pose {
	axis := func(i int) Pose {
		s, w := detmath.Sincos(turnRad[i] / 2)
		p := Pose{Q: [4]float64{w}}
		p.Q[1+i] = s
		return p
	}
	p := axis(2).Compose(axis(1)).Compose(axis(0))
	return p.about(c, shiftMM)
}

// about moves the rotation of p to the centre c and adds a shift.
func (p Pose) about(c, shift [3]float64) Pose {
	p.T = [3]float64{}
	rc := p.Apply(c)
	for i := range p.T {
		p.T[i] = c[i] - rc[i] + shift[i]
	}
	return p
}

// Params is the inverse of [FromParams]: shift in mm and turn in rad about c,
// turn[1] within [-pi/2, pi/2]. Where turn[1] is a right angle, turn[0] and
// turn[2] are not separable and turn[2] is given as 0.
func (p Pose) Params(c [3]float64) (shiftMM, turnRad [3]float64) {
	m := p.Matrix()
	// Entries of Rz Ry Rx: R20 = -sin y, R21 = cos y sin x, R22 = cos y cos x,
	// R10 = sin z cos y, R00 = cos z cos y.
	cosY := math.Sqrt(float64(m[9]*m[9]) + float64(m[10]*m[10]))
	turnRad[1] = detmath.Atan2(-m[8], cosY)
	if cosY > 1e-9 {
		turnRad[0] = detmath.Atan2(m[9], m[10])
		turnRad[2] = detmath.Atan2(m[4], m[0])
	} else {
		turnRad[0] = detmath.Atan2(-m[6], m[5])
	}
	at := p.Apply(c)
	for i := range shiftMM {
		shiftMM[i] = at[i] - c[i]
	}
	return shiftMM, turnRad
}

// rotation returns R, row-major.
func (p Pose) rotation() [9]float64 {
	w, x, y, z := p.Q[0], p.Q[1], p.Q[2], p.Q[3]
	xx, yy, zz := float64(x*x), float64(y*y), float64(z*z)
	xy, xz, yz := float64(x*y), float64(x*z), float64(y*z)
	wx, wy, wz := float64(w*x), float64(w*y), float64(w*z)
	return [9]float64{
		1 - 2*(yy+zz), 2 * (xy - wz), 2 * (xz + wy),
		2 * (xy + wz), 1 - 2*(xx+zz), 2 * (yz - wx),
		2 * (xz - wy), 2 * (yz + wx), 1 - 2*(xx+yy),
	}
}

// Matrix returns the 4x4 matrix of the pose, row-major.
func (p Pose) Matrix() [16]float64 {
	r := p.rotation()
	return [16]float64{
		r[0], r[1], r[2], p.T[0],
		r[3], r[4], r[5], p.T[1],
		r[6], r[7], r[8], p.T[2],
		0, 0, 0, 1,
	}
}

// FromMatrix returns the pose of a row-major 4x4 rigid matrix. The rotation is
// taken as given; what is not orthonormal in it is lost by normalising the
// quaternion.
func FromMatrix(m [16]float64) Pose {
	// The largest of the four squared components is found first, so that the
	// division is by a number of at least 1/2 (see NIfTI-1, nifti1.h, for the
	// same rule near a = 0).
	t := [4]float64{
		1 + m[0] + m[5] + m[10],
		1 + m[0] - m[5] - m[10],
		1 - m[0] + m[5] - m[10],
		1 - m[0] - m[5] + m[10],
	}
	big := 0
	for i, v := range t {
		if v > t[big] {
			big = i
		}
	}
	s := 0.5 / math.Sqrt(t[big])
	var q [4]float64
	switch big {
	case 0:
		q = [4]float64{t[0], m[9] - m[6], m[2] - m[8], m[4] - m[1]}
	case 1:
		q = [4]float64{m[9] - m[6], t[1], m[1] + m[4], m[2] + m[8]}
	case 2:
		q = [4]float64{m[2] - m[8], m[1] + m[4], t[2], m[6] + m[9]}
	default:
		q = [4]float64{m[4] - m[1], m[2] + m[8], m[6] + m[9], t[3]}
	}
	for i := range q {
		q[i] *= s
	}
	p := Pose{Q: q, T: [3]float64{m[3], m[7], m[11]}}
	return p.normalised()
}

// normalised removes what rounding did to the length of the quaternion and
// makes its first component non-negative.
func (p Pose) normalised() Pose {
	n := 0.0
	for _, v := range p.Q {
		n += float64(v * v)
	}
	n = 1 / math.Sqrt(n)
	if p.Q[0] < 0 {
		n = -n
	}
	for i := range p.Q {
		p.Q[i] *= n
	}
	return p
}

// Apply returns where the point x (mm) goes.
func (p Pose) Apply(x [3]float64) [3]float64 {
	r := p.rotation()
	var y [3]float64
	for i := range y {
		y[i] = float64(r[3*i]*x[0]) + float64(r[3*i+1]*x[1]) + float64(r[3*i+2]*x[2]) + p.T[i]
	}
	return y
}

// Compose returns the pose that does q first and then p.
func (p Pose) Compose(q Pose) Pose {
	a, b := p.Q, q.Q
	return Pose{
		Q: [4]float64{
			float64(a[0]*b[0]) - float64(a[1]*b[1]) - float64(a[2]*b[2]) - float64(a[3]*b[3]),
			float64(a[0]*b[1]) + float64(a[1]*b[0]) + float64(a[2]*b[3]) - float64(a[3]*b[2]),
			float64(a[0]*b[2]) - float64(a[1]*b[3]) + float64(a[2]*b[0]) + float64(a[3]*b[1]),
			float64(a[0]*b[3]) + float64(a[1]*b[2]) - float64(a[2]*b[1]) + float64(a[3]*b[0]),
		},
		T: p.Apply(q.T),
	}.normalised()
}

// Inverse returns the pose that undoes p.
func (p Pose) Inverse() Pose {
	q := Pose{Q: [4]float64{p.Q[0], -p.Q[1], -p.Q[2], -p.Q[3]}}
	t := q.Apply(p.T)
	for i := range t {
		q.T[i] = -t[i]
	}
	return q
}

// Twist is an element of the Lie algebra of rigid maps: V in mm, W in rad.
type Twist struct{ V, W [3]float64 }

// Exp returns the rigid map of a twist, exp(W, V) = [R, G V], with
// G = I + (1-cos t)/t^2 K + (t-sin t)/t^3 K^2, K = [W]x, t = |W|
// (Murray, Li, Sastry 1994, A Mathematical Introduction to Robotic
// Manipulation, eq. 2.36; from memory, tested against a matrix exponential).
func Exp(tw Twist) Pose {
	w := tw.W
	t2 := float64(w[0]*w[0]) + float64(w[1]*w[1]) + float64(w[2]*w[2])
	t := math.Sqrt(t2)
	var a, b, half, cw float64 // (1-cos t)/t^2, (t-sin t)/t^3, sin(t/2)/t
	if t < 1e-3 {
		// Series to t^4; the terms left out are below 1e-20.
		t4 := float64(t2 * t2)
		a = 0.5 - t2/24 + t4/720
		b = 1.0/6 - t2/120 + t4/5040
		half = 0.5 - t2/48 + t4/3840
		cw = detmath.Cos(t / 2)
	} else {
		s, c := detmath.Sincos(t)
		a = (1 - c) / t2
		b = (t - s) / float64(t2*t)
		sh, ch := detmath.Sincos(t / 2)
		half, cw = sh/t, ch
	}
	kv := cross(w, tw.V)
	kkv := cross(w, kv)
	p := Pose{Q: [4]float64{cw, float64(w[0] * half), float64(w[1] * half), float64(w[2] * half)}}
	for i := range p.T {
		p.T[i] = tw.V[i] + float64(a*kv[i]) + float64(b*kkv[i])
	}
	return p.normalised()
}

// Log is the inverse of [Exp] for rotations below half a turn.
func (p Pose) Log() Twist {
	q := p.normalised().Q
	n := math.Sqrt(float64(q[1]*q[1]) + float64(q[2]*q[2]) + float64(q[3]*q[3]))
	t := 2 * detmath.Atan2(n, q[0])
	scale := 2.0
	if n > 1e-12 {
		scale = t / n
	}
	var tw Twist
	for i := range tw.W {
		tw.W[i] = float64(scale * q[1+i])
	}
	// G^-1 = I - K/2 + (1/t^2)(1 - (t/2) cot(t/2)) K^2.
	e := 1.0 / 12
	if t > 1e-3 {
		s, c := detmath.Sincos(t / 2)
		e = (1 - float64(t/2*c)/s) / float64(t*t)
	} else {
		e += float64(t*t) / 720
	}
	kv := cross(tw.W, p.T)
	kkv := cross(tw.W, kv)
	for i := range tw.V {
		tw.V[i] = p.T[i] - float64(kv[i]/2) + float64(e*kkv[i])
	}
	return tw
}

func cross(a, b [3]float64) [3]float64 {
	return [3]float64{
		float64(a[1]*b[2]) - float64(a[2]*b[1]),
		float64(a[2]*b[0]) - float64(a[0]*b[2]),
		float64(a[0]*b[1]) - float64(a[1]*b[0]),
	}
}

// Between returns the pose a share u of the way from p (u = 0) to q (u = 1)
// along the screw motion that joins them; it does not depend on the choice of
// a centre or of axes.
func (p Pose) Between(q Pose, u float64) Pose {
	switch u {
	case 0:
		return p
	case 1:
		return q
	}
	tw := p.Inverse().Compose(q).Log()
	for i := range tw.V {
		tw.V[i] *= u
		tw.W[i] *= u
	}
	return p.Compose(Exp(tw))
}

// Path is the pose as a function of time: Poses[i] holds at Times[i] (s,
// increasing). One pose a volume is the special case with one time a volume.
type Path struct {
	Times []float64
	Poses []Pose
}

// At returns the pose at time t: interpolated between the neighbours, and the
// first or last pose outside the times known. A path without poses stands
// still.
func (p Path) At(t float64) Pose {
	n := len(p.Times)
	if n == 0 {
		return Identity
	}
	i := sort.Search(n, func(i int) bool { return p.Times[i] > t })
	switch i {
	case 0:
		return p.Poses[0]
	case n:
		return p.Poses[n-1]
	}
	return p.Poses[i-1].Between(p.Poses[i], (t-p.Times[i-1])/(p.Times[i]-p.Times[i-1]))
}
