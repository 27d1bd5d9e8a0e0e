package realign_test

import (
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
)

// An external reference may have any brightness: poses of volumes and path are the
// same, to the bit where it is brighter by a power of two, and what is recorded of
// the scale undoes it.
func TestBrightnessOfTheReference(t *testing.T) {
	g := axial([3]int{38, 44, 22}, [3]float64{4.8, 4.8, 5.2})
	m := phantom.Walk(5, 0.7, 0.01, 0.05, [3]float64{})
	r := record(t, g, 2, 8, 2, phantom.Interleaved(22, 2), m, 8)
	nv := len(r.data) / 8
	find := func(k float32) *session {
		ref := make([]float32, nv)
		for i, v := range r.data[:nv] {
			ref[i] = k * v
		}
		s := &session{grid: r.grid, schedule: r.schedule, scan: r.scan, data: r.data}
		s.find(t, realign.Options{Reference: realign.External, External: ref}, 2)
		if got := s.est.Reference[nv/2] / s.est.Scale; got != ref[nv/2] {
			t.Errorf("reference times %g: %g comes back as %g", k, ref[nv/2], got)
		}
		return s
	}
	base := find(1)
	if !base.path.Used {
		t.Fatal(base.path.Reason)
	}
	for _, k := range []float32{0.5, 1024, 3, 0.01} {
		s := find(k)
		exact := k == 0.5 || k == 1024
		worst := 0.0
		for n, v := range s.est.Volumes {
			worst = max(worst, apart(v.Pose, base.est.Volumes[n].Pose))
		}
		for i, p := range s.path.Path.Poses {
			worst = max(worst, apart(p, base.path.Path.Poses[i]))
		}
		// Otherwise a gain between 0.7 and 1.4 is left: other roundings, other last steps. A
		// slot is uncertain by some 15 um here; a tenth of that would be too much.
		if exact && worst != 0 || worst > 1.5 {
			t.Errorf("reference times %g: a pose is %.3f um elsewhere", k, worst)
		}
	}
}

// apart is the rms displacement over the head between two poses, um.
func apart(a, b realign.Pose) float64 {
	var d []float64
	for _, x := range headPoints {
		p, q := a.Apply(x), b.Apply(x)
		for k := range p {
			d = append(d, 1000*(p[k]-q[k]))
		}
	}
	return rms(d) * 1.7320508 // three coordinates a point
}
