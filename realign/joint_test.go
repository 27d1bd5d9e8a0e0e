package realign_test

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

// joint runs the combined interpolation on a copy.
func joint(tb testing.TB, r *session, p *realign.PathEstimate, move bool, ref float64, lost []bool, workers int) []float32 {
	tb.Helper()
	if lost == nil {
		lost = make([]bool, r.scan.NT)
	}
	out := slices.Clone(r.data)
	if err := p.Joint(context.Background(), r.grid, out, r.scan.NT, r.schedule, move, ref, slicetime.Options{}, lost, 5, workers); err != nil {
		tb.Fatal(err)
	}
	return out
}

// resting gives a run poses of a head that has not moved, and gains.
func resting(r *session, gain func(n int) [4]float64) *realign.PathEstimate {
	est := &realign.Estimate{Reference: slices.Clone(r.data[:len(r.data)/r.scan.NT]), Mask: make([]bool, len(r.data)/r.scan.NT)}
	for n := range r.scan.NT {
		v := realign.Volume{Pose: realign.Identity, State: realign.Aligned, Gain: [4]float64{1}}
		if gain != nil {
			v.Gain = gain(n)
		}
		est.Volumes = append(est.Volumes, v)
	}
	return realign.FromVolumes(r.grid, r.schedule, est, "a test")
}

func largest(a, b []float32) (d, scale float64) {
	for i := range a {
		d = max(d, math.Abs(float64(a[i])-float64(b[i])))
		scale = max(scale, math.Abs(float64(b[i])))
	}
	return d, scale
}

var brightness = func(n int) [4]float64 { return [4]float64{1 + 0.1*math.Sin(float64(n)), 0.05, -0.03, 0.02} }

// A still head and no move in time: what is taken out is put back. A spline at
// its own knots is off by some units in the last place of a float32 (6e-8), the
// difference and the sum by one more each.
func TestJointOfAStillHeadIsTheInput(t *testing.T) {
	g := axial([3]int{24, 26, 14}, [3]float64{8, 8, 9})
	for axis := range 3 {
		r := record(t, g, axis, 4, 2, phantom.Interleaved(g.N[axis], 2), nil, 9)
		for name, gain := range map[string]func(int) [4]float64{"no gain": nil, "gain": brightness} {
			out := joint(t, r, resting(r, gain), false, 1, nil, 2)
			if d, scale := largest(out, r.data); d > 1e-6*scale {
				t.Errorf("axis %d, %s: changed by %g of %g", axis, name, d, scale)
			}
		}
	}
}

// A still head is only moved in time: the same as slicetime alone. The anatomy
// that is taken out and put back is constant, and a constant is moved exactly.
func TestJointOfAStillHeadIsCorrect(t *testing.T) {
	g := axial([3]int{24, 26, 14}, [3]float64{8, 8, 9})
	for axis := range 3 {
		r := record(t, g, axis, 24, 2, phantom.Interleaved(g.N[axis], 2), nil, 9)
		want := slices.Clone(r.data)
		if err := slicetime.Correct(context.Background(), want, g.N[0], g.N[1], g.N[2], 24, r.schedule, 0.7, slicetime.Options{}, 2); err != nil {
			t.Fatal(err)
		}
		out := joint(t, r, resting(r, nil), true, 0.7, nil, 2)
		// As above; the fit of the prediction at the ends passes rounding on, up to
		// ten times.
		if d, scale := largest(out, want); d > 1e-5*scale {
			t.Errorf("axis %d: differs by %g of %g", axis, d, scale)
		}
		if d, _ := largest(want, r.data); d < 5 {
			t.Fatalf("axis %d: nothing was moved", axis)
		}
	}
}

// The pose is that of the instant asked for, the gain that of the scanner point
// where the voxel was: against a plain evaluation of the formula, voxel by voxel,
// with no noise and the residual therefore nearly nothing.
func TestJointFollowsThePathAndTheGain(t *testing.T) {
	g := medium
	m := phantom.Walk(5, 2, 0.03, 0.05, [3]float64{})
	const nt = 12
	r := record(t, g, 2, nt, 2, phantom.Interleaved(24, 2), m, 0)
	// A brightness that drifts and sways, and shading that stands still.
	r.scan.Gain = func(tt float64, x [3]float64) float64 {
		return 1 + 0.005*tt + 0.02*math.Sin(0.5*tt) + 0.03*x[1]/80
	}
	r.simulate(t)
	r.find(t, realign.Options{}, 2)
	nv := len(r.data) / nt
	for _, ref := range []float64{0, 1.3} {
		out := joint(t, r, r.path, true, ref, nil, 2)
		sum, count, plain := 0.0, 0.0, 0.0
		for n := 1; n < nt-1; n++ { // nobody knows how brightness went on past the ends
			u := 2*float64(n) + ref
			pose := r.path.At(n, u)
			i := 0
			for z := range g.N[2] {
				for y := range g.N[1] {
					for x := range g.N[0] {
						q := at(g, x, y, z)
						if q[0]*q[0]/2500+q[1]*q[1]/4500+q[2]*q[2]/1600 < 1 {
							p := pose.Apply(q)
							// What a scanner would have seen there at that instant.
							want := r.scan.Head.At(poseAt(m)(u).Inverse().Apply(p)) * r.scan.Gain(u, p)
							sum += math.Pow(float64(out[n*nv+i])-want, 2)
							plain += math.Pow(float64(r.data[n*nv+i])-want, 2)
							count++
						}
						i++
					}
				}
			}
		}
		e, before := math.Sqrt(sum/count), math.Sqrt(plain/count)
		t.Logf("instant %g s: rms %.2f, untouched %.1f", ref, e, before)
		if e > 1.5 || before < 8*e { // of 900; what a spline cannot follow in this coarse grid
			t.Errorf("instant %g s: rms %.2f, untouched %.1f", ref, e, before)
		}
	}
}

// A lost volume is not used for its neighbours, whatever is in it, and is not
// moved in time itself.
func TestJointLeavesLostVolumesOut(t *testing.T) {
	g := axial([3]int{24, 26, 14}, [3]float64{8, 8, 9})
	const nt = 24
	r := record(t, g, 2, nt, 2, phantom.Interleaved(14, 2), nil, 9)
	nv := len(r.data) / nt
	lost := make([]bool, nt)
	lost[0], lost[11], lost[12] = true, true, true
	p := resting(r, nil)
	p.Reference = slices.Clone(r.data[nv:][:nv])
	a := joint(t, r, p, true, 1, lost, 2)
	rnd := rand.New(rand.NewPCG(1, 1))
	before := slices.Clone(r.data)
	for n, l := range lost {
		if l {
			for i := range nv {
				r.data[n*nv+i] = float32(2000 * rnd.Float64())
			}
		}
	}
	b := joint(t, r, p, true, 1, lost, 2)
	for n, l := range lost {
		x, y := a[n*nv:][:nv], b[n*nv:][:nv]
		if l {
			if d, scale := largest(y, r.data[n*nv:][:nv]); d > 1e-6*scale {
				t.Errorf("lost volume %d was changed by %g", n, d)
			}
			if d, _ := largest(x, before[n*nv:][:nv]); d > 1e-3 {
				t.Errorf("lost volume %d was changed by %g", n, d)
			}
		} else if !slices.Equal(x, y) {
			t.Errorf("volume %d depends on what is in a lost one", n)
		}
	}
	// All lost: nothing to bridge from, and nothing breaks.
	for n := range lost {
		lost[n] = true
	}
	for _, v := range joint(t, r, p, true, 1, lost, 2) {
		if math.IsNaN(float64(v)) {
			t.Fatal("a value is no number")
		}
	}
}

// Errors of the interpolation in time are passed on.
func TestJointRefuses(t *testing.T) {
	g := axial([3]int{24, 26, 14}, [3]float64{8, 8, 9})
	r := record(t, g, 2, 4, 2, phantom.Interleaved(14, 2), nil, 9)
	p := resting(r, nil)
	if err := p.Joint(context.Background(), g, r.data, 4, r.schedule, true, 100, slicetime.Options{}, make([]bool, 4), 5, 2); err == nil {
		t.Error("an instant fifty volumes away was taken")
	}
}

const sameBytesJointDigest = "d7a28004c54b0988"

func TestSameBytesJoint(t *testing.T) {
	r := digestRun(t).find(t, realign.Options{}, 2)
	lost := make([]bool, r.scan.NT)
	lost[1] = true
	first := ""
	for _, workers := range []int{1, 2, 5} {
		h := sha256.New()
		_ = binary.Write(h, binary.LittleEndian, joint(t, r, r.path, true, 0.9, lost, workers))
		d := fmt.Sprintf("%x", h.Sum(nil)[:8])
		if first == "" {
			first = d
		}
		if d != first {
			t.Errorf("%d workers give %s, one gives %s", workers, d, first)
		}
	}
	if first != sameBytesJointDigest {
		t.Errorf("digest %s, recorded %s: after an intended change of the method record the new one", first, sameBytesJointDigest)
	}
}

// A still head whose brightness sways, as a global signal does: combined
// interpolation carries it through time as well as plain interpolation in time, to
// the few thousandths of 900 that poses of a still head leave.
func TestJointMovesAGlobalSignal(t *testing.T) {
	const nt, tr = 32, 2.0
	g := axial([3]int{24, 26, 14}, [3]float64{8, 8, 9})
	for _, f := range []float64{0.05, 0.1, 0.2} {
		r := record(t, g, 2, nt, tr, phantom.Interleaved(14, tr), nil, 0)
		gain := func(u float64) float64 { return 1 + 0.005*math.Sin(2*math.Pi*f*u) }
		r.scan.Gain = func(u float64, _ [3]float64) float64 { return gain(u) }
		r.simulate(t)
		r.find(t, realign.Options{}, 2)
		ref := r.schedule.Middle()
		timed := slices.Clone(r.data)
		if err := slicetime.Correct(context.Background(), timed, g.N[0], g.N[1], g.N[2], nt, r.schedule, ref, slicetime.Options{}, 2); err != nil {
			t.Fatal(err)
		}
		rs := realign.NewResampler(g.N, 5)
		nv := len(timed) / nt
		for n, v := range r.est.Volumes {
			rs.Load(timed[n*nv:][:nv])
			rs.Eval(timed[n*nv:][:nv], realign.PoseMap(g, v.Pose))
		}
		// Interior volumes: how a signal goes on past the ends nobody knows.
		off := func(d []float32) float64 {
			sum, count := 0.0, 0.0
			for i, in := range r.est.Mask {
				if !in {
					continue
				}
				base := r.scan.Head.At(atIndex(g, i))
				e := make([]float64, 0, nt)
				m := 0.0
				for n := 8; n < nt-8; n++ {
					v := float64(d[n*nv+i]) - base*gain(tr*float64(n)+ref)
					e = append(e, v)
					m += v / (nt - 16)
				}
				for _, v := range e {
					sum += (v - m) * (v - m)
				}
				count += float64(len(e))
			}
			return math.Sqrt(sum / count)
		}
		untouched, plain, both := off(r.data), off(timed), off(joint(t, r, r.path, true, ref, nil, 2))
		t.Logf("%g Hz: untouched %.4f, time-first %.4f, joint %.4f; path used %v", f, untouched, plain, both, r.path.Used)
		if both > 1.05*plain+0.005 {
			t.Errorf("%g Hz: joint %.4f, time-first %.4f", f, both, plain)
		}
	}
}

// atIndex is where a voxel lies, by its flat index.
func atIndex(g realign.Grid, i int) [3]float64 {
	return at(g, i%g.N[0], i/g.N[0]%g.N[1], i/(g.N[0]*g.N[1]))
}
