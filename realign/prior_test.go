package realign_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"evenkeel/realign"
)

// precision is the Hessian of a slot that sees its shift with the SD given (mm)
// and its turn as well at 80 mm; coupled adds what a slot that sees little has.
func precision(sd, coupled float64) (h [6][6]float64) {
	for a := range 6 {
		h[a][a] = 1 / (sd * sd)
		if a >= 3 {
			h[a][a] *= 80 * 80
		}
	}
	c := coupled * 80 / (sd * sd)
	h[0][4], h[4][0] = c, c
	h[1][3], h[3][1] = -c, -c
	return h
}

// measured is what exact or noisy measurements of a path say around p.
func measured(h [6][6]float64, path, p []realign.Params) []realign.SlotData {
	out := make([]realign.SlotData, len(p))
	for s := range p {
		var d realign.Params
		for k := range d {
			d[k] = path[s][k] - p[s][k]
		}
		out[s] = realign.MakeSlot(h, d)
	}
	return out
}

// follow lets the chain find a path from rest.
func follow(c *realign.Chain, h [6][6]float64, path []realign.Params, rounds int) []realign.Params {
	p := make([]realign.Params, len(path))
	for range rounds {
		at := make([]realign.Params, len(p))
		for s := range p {
			for k, v := range c.Offset()[s%len(c.Offset())] {
				at[s][k] = p[s][k] + v
			}
		}
		c.Update(measured(h, path, at), p)
	}
	return p
}

// furthest is the largest difference of two paths, mm (turns at 80 mm).
func furthest(a, b []realign.Params) (m float64) {
	for s := range a {
		for k := range a[s] {
			d := math.Abs(a[s][k] - b[s][k])
			if k >= 3 {
				d *= 80
			}
			m = max(m, d)
		}
	}
	return m
}

// schedules of 12 shots a volume: even, with a pause at the end of every
// volume, and with uneven gaps.
func clocks(volumes int) map[string][]float64 {
	out := map[string][]float64{}
	uneven := []float64{0, 0.04, 0.25, 0.3, 0.5, 0.55, 0.8, 0.85, 0.9, 1.2, 1.5, 1.6}
	for n := range volumes {
		for s := range 12 {
			t := float64(n)
			out["even"] = append(out["even"], 2*t+float64(s)/6)
			out["pause"] = append(out["pause"], 2*t+float64(s)/12)
			out["uneven"] = append(out["uneven"], 2*t+uneven[s])
		}
	}
	return out
}

// wander is a smooth path: shifts of tenths of a millimetre, turns of
// milliradians, periods of 10 s and more.
func wander(t float64) (p realign.Params) {
	for k := range p {
		f := 0.03 + 0.013*float64(k)
		p[k] = 0.3 * math.Sin(2*math.Pi*f*t+float64(k))
		if k >= 3 {
			p[k] /= 80
		}
	}
	return p
}

func onClock(times []float64, f func(t float64) realign.Params) []realign.Params {
	p := make([]realign.Params, len(times))
	for s, t := range times {
		p[s] = f(t)
	}
	return p
}

// The bend of a straight line is zero whatever the gaps, and with equal gaps it
// is p[s-1] - 2 p[s] + p[s+1].
func TestBendOfALine(t *testing.T) {
	for name, times := range clocks(3) {
		bend := realign.NewChain(times, 12).Bend()
		for s := 1; s < len(times)-1; s++ {
			b := bend[s]
			line := b[0]*times[s-1] + b[1]*times[s] + b[2]*times[s+1]
			if sum := b[0] + b[1] + b[2]; math.Abs(sum) > 1e-12 || math.Abs(line) > 1e-12*b[2]*times[s+1] {
				t.Errorf("%s, slot %d: a constant bends by %g, a line by %g", name, s, sum, line)
			}
			if b[0] <= 0 || b[2] <= 0 {
				t.Errorf("%s, slot %d: coefficients %v", name, s, b)
			}
			if name == "even" {
				for i, want := range []float64{1, -2, 1} {
					if math.Abs(b[i]-want) > 1e-12 {
						t.Errorf("slot %d: coefficients %v, want 1 -2 1", s, b)
						break
					}
				}
			}
		}
		if bend[0] != [3]float64{} || bend[len(bend)-1] != [3]float64{} {
			t.Errorf("%s: the ends bend", name)
		}
	}
}

// One step of the chain against a dense solution by gonum's mat: solution and
// evidence, the latter as a difference between two strengths (it is known up to a
// constant), at weights that differ.
func TestChainAgainstDense(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	times := clocks(2)["uneven"]
	n := len(times)
	c := realign.NewChain(times, 12)
	h := precision(0.05, 0.4)
	p, path := make([]realign.Params, n), make([]realign.Params, n)
	for s := range p {
		for k := range p[s] {
			unit := []float64{1, 80}[k/3]
			p[s][k], path[s][k] = 0.1*r.NormFloat64()/unit, 0.3*r.NormFloat64()/unit
		}
		c.Weights()[s] = 0.2 + r.Float64()
	}
	data := measured(h, path, p)
	dense := func(lt, lr float64) (delta mat.VecDense, evidence float64) {
		q := mat.NewSymDense(6*n, nil)
		for s := 1; s < n-1; s++ {
			for k := range 6 {
				l := c.Weights()[s] * []float64{lt, lr}[k/3]
				for i := range 3 {
					for j := 0; j <= i; j++ {
						a, b := 6*(s-1+i)+k, 6*(s-1+j)+k
						q.SetSym(a, b, q.At(a, b)+l*c.Bend()[s][i]*c.Bend()[s][j])
					}
				}
			}
		}
		a := mat.NewSymDense(6*n, nil)
		hh := mat.NewSymDense(6*n, nil)
		g, at := mat.NewVecDense(6*n, nil), mat.NewVecDense(6*n, nil)
		for s := range n {
			for k := range 6 {
				at.SetVec(6*s+k, p[s][k])
				for m := range 6 {
					hh.SetSym(6*s+k, 6*s+m, h[k][m])
					g.SetVec(6*s+k, g.AtVec(6*s+k)+h[k][m]*(path[s][m]-p[s][m]))
				}
			}
		}
		a.AddSym(q, hh)
		var rhs mat.VecDense
		rhs.MulVec(q, at)
		rhs.SubVec(g, &rhs)
		var chol mat.Cholesky
		if !chol.Factorize(a) {
			t.Fatal("not definite")
		}
		if err := chol.SolveVecTo(&delta, &rhs); err != nil {
			t.Fatal(err)
		}
		var to mat.VecDense
		to.AddVec(at, &delta)
		evidence = mat.Dot(g, &delta) - mat.Inner(&delta, hh, &delta)/2 - mat.Inner(&to, q, &to)/2 -
			chol.LogDet()/2 + 1.5*float64(n-2)*(math.Log(lt)+math.Log(lr))
		return delta, evidence
	}
	var first, firstDense float64
	for i, l := range [][2]float64{{1e3, 1e7}, {1e5, 1e7}, {1e3, 1e9}} {
		c.SetStrengths(l[0], l[1])
		delta, evidence, ok := c.Step(data, p)
		if !ok {
			t.Fatal("no solution")
		}
		want, wantEvidence := dense(l[0], l[1])
		for j := range delta {
			unit := []float64{1, 80}[j%6/3]
			if d := unit * math.Abs(delta[j]-want.AtVec(j)); d > 1e-10 { // mm; the path is off by 0.3 mm
				t.Errorf("strengths %g: step %d differs by %g mm", l, j, d)
			}
		}
		if i == 0 {
			first, firstDense = evidence, wantEvidence
		} else if d := (evidence - first) - (wantEvidence - firstDense); math.Abs(d) > 1e-9*math.Abs(wantEvidence) {
			t.Errorf("strengths %g: evidence differs by %g", l, d)
		}
	}
}

// The strengths found are those of the greatest evidence among many.
func TestTuneFindsTheGreatestEvidence(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	times := clocks(20)["even"]
	h := precision(0.05, 0.3)
	path := onClock(times, func(t float64) realign.Params { p := wander(t); return p })
	for s := range path {
		for k := range path[s] {
			path[s][k] += 0.05 * r.NormFloat64() / []float64{1, 80}[k/3]
		}
	}
	p := make([]realign.Params, len(path))
	data := measured(h, path, p)
	c := realign.NewChain(times, 12)
	c.Tune(data, p)
	lt, lr := c.Strengths()
	_, best, _ := c.Step(data, p)
	for _, f := range [][2]float64{{1.8, 1}, {1 / 1.8, 1}, {1, 1.8}, {1, 1 / 1.8}, {10, 1}, {0.1, 1}, {1, 10}, {1, 0.1}, {100, 100}, {0.01, 0.01}} {
		c.SetStrengths(lt*f[0], lr*f[1])
		if _, e, ok := c.Step(data, p); !ok || e > best {
			t.Errorf("strengths times %g: evidence %.3f, found %.3f", f, e, best)
		}
	}
}

// Where the measurements are exact the path is the path measured. What it shares
// with every volume may stand in the offsets instead, so the sum is compared.
func TestChainFollowsExactMeasurements(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	for name, times := range clocks(12) {
		for shape, path := range map[string][]realign.Params{
			"smooth": onClock(times, wander),
			"rough": onClock(times, func(float64) (p realign.Params) {
				for k := range p {
					p[k] = 0.2 * r.NormFloat64() / []float64{1, 80}[k/3]
				}
				return p
			}),
		} {
			c := realign.NewChain(times, 12)
			p := follow(c, precision(1e-4, 0.3), path, 6)
			for s := range p {
				for k, v := range c.Offset()[s%12] {
					p[s][k] += v
				}
			}
			// Measured to 0.1 um: no slot may be left further off than a few of those.
			if d := furthest(p, path); d > 5e-4 {
				t.Errorf("%s, %s: off by %.2g mm", name, shape, d)
			}
		}
	}
}

// A straight path has no bends, so the prior must not pull at it however
// uncertain the measurements and uneven the gaps.
func TestStraightPathStaysStraight(t *testing.T) {
	for name, times := range clocks(10) {
		path := onClock(times, func(t float64) (p realign.Params) {
			for k := range p {
				p[k] = (0.5 - 0.02*t*float64(k+1)) / []float64{1, 80}[k/3]
			}
			return p
		})
		c := realign.NewChain(times, 12)
		if d := furthest(follow(c, precision(0.3, 0.5), path, 3), path); d > 1e-6 { // mm
			t.Errorf("%s: off by %.2g mm", name, d)
		}
	}
}

// A jerk of half a millimetre between two slots, each measured to 20 um, stays
// one, while the noise of the slots around it is averaged away: heavy tails.
// (Below some seventeen times the noise of a slot the chain alone makes a ramp
// over three to six slots of it; the images then tell, TestPathOfAJerk.)
func TestStepSurvives(t *testing.T) {
	const sd, jump, volumes = 0.02, 0.5, 12
	for name, times := range clocks(volumes) {
		at := 6*12 + 5 // the last slot before the jerk
		r := rand.New(rand.NewPCG(9, 10))
		truth := make([]realign.Params, len(times))
		for s := at + 1; s < len(truth); s++ {
			truth[s] = realign.Params{jump, -jump, jump / 2, 0, jump / 80, 0}
		}
		path := append([]realign.Params(nil), truth...)
		for s := range path {
			for k := range path[s] {
				path[s][k] += sd * r.NormFloat64() / []float64{1, 80}[k/3]
			}
		}
		p := follow(realign.NewChain(times, 12), precision(sd, 0), path, 3)
		for _, k := range []int{0, 1, 2, 4} {
			unit := []float64{1, 80}[k/3]
			got, want := unit*(p[at+1][k]-p[at][k]), unit*(truth[at+1][k]-truth[at][k])
			if math.Abs(got-want) > sd {
				t.Errorf("%s: component %d jumps by %.3f mm between the slots, want %.3f", name, k, got, want)
			}
		}
		sum := 0.0
		for s := range p {
			for k := range p[s] {
				sum += math.Pow((p[s][k]-truth[s][k])*[]float64{1, 80}[k/3], 2) / float64(6*len(p))
			}
		}
		// Two stretches of 77 and 67 slots, a line each: sd sqrt(4/144) is 0.17 sd;
		// a Gaussian prior stiff enough for that would be off by half the jump.
		if e := math.Sqrt(sum); e > 0.35*sd {
			t.Errorf("%s: rms error %.4f mm, the noise of a slot is %.4f", name, e, sd)
		}
	}
}

// What a shot sees in the same way in all volumes is the template's fault and
// does not enter the path.
func TestOffsetsAreTakenOut(t *testing.T) {
	times := clocks(16)["even"]
	r := rand.New(rand.NewPCG(11, 12))
	var off [12]realign.Params
	var mean realign.Params
	for s := range off {
		for k := range off[s] {
			off[s][k] = 0.02 * r.NormFloat64() / []float64{1, 80}[k/3]
			mean[k] += off[s][k] / 12
		}
	}
	truth := onClock(times, wander)
	path := append([]realign.Params(nil), truth...)
	with := make([]realign.Params, len(times)) // the truth and what all offsets share
	for s := range path {
		for k := range path[s] {
			path[s][k] += off[s%12][k]
			with[s][k] = truth[s][k] + mean[k]
		}
	}
	c := realign.NewChain(times, 12)
	p := follow(c, precision(0.01, 0.2), path, 5)
	// A slow drift of the head and offsets that rise from shot to shot look alike
	// over a run this short, so a little of one passes for the other: a tenth of
	// what was put in.
	rest := 0.0
	for s := range p {
		for k := range p[s] {
			rest += math.Pow((p[s][k]-with[s][k])*[]float64{1, 80}[k/3], 2) / float64(6*len(p))
		}
	}
	if rest = math.Sqrt(rest); rest > 0.002 {
		t.Errorf("the path is off by %.4f mm", rest)
	}
	var sum realign.Params
	for s, o := range c.Offset() {
		for k := range o {
			sum[k] += o[k]
			if d := math.Abs(o[k]-(off[s][k]-mean[k])) * []float64{1, 80}[k/3]; d > 0.008 { // the largest of 72
				t.Errorf("shot %d, component %d: offset off by %.4f mm", s, k, d)
			}
		}
	}
	for k, v := range sum {
		if math.Abs(v) > 1e-12 {
			t.Errorf("component %d: the offsets have the sum %g", k, v)
		}
	}
}

// A quadratic around a point further on: its gradient there is that of the first
// one.
func TestSlotDataMoved(t *testing.T) {
	h := precision(0.1, 0.4)
	d := realign.Params{0.1, -0.2, 0.3, 0.001, 0.002, -0.003}
	want := realign.Params{0.4, 0.1, 0.2, 0.004, -0.001, 0.002}
	rest := want
	for k := range rest {
		rest[k] -= d[k]
	}
	got := realign.MakeSlot(h, want).Moved(&d).Gradient()
	for k, v := range realign.MakeSlot(h, rest).Gradient() {
		if math.Abs(got[k]-v) > 1e-9*math.Abs(v) {
			t.Errorf("component %d: %g, want %g", k, got[k], v)
		}
	}
}

// Slots without data are bridged in a straight line.
func TestGapIsBridged(t *testing.T) {
	times := clocks(10)["uneven"]
	path := onClock(times, func(t float64) realign.Params { return realign.Params{0.1 * t, 1, 0, 0, 0, 0.001 * t} })
	p := make([]realign.Params, len(path))
	data := measured(precision(0.05, 0), path, p)
	for s := 40; s < 64; s++ {
		data[s] = realign.SlotData{}
	}
	realign.NewChain(times, 12).Update(data, p)
	if d := furthest(p, path); d > 1e-6 {
		t.Errorf("off by %g mm", d)
	}
}

// Offsets tell shots from each other; what they share is where the reference stands
// and is none of theirs, however unequally the shots see.
func TestOffsetsHaveNoMean(t *testing.T) {
	times := clocks(10)["even"]
	r := rand.New(rand.NewPCG(13, 14))
	var off [12]realign.Params
	var h [12][6][6]float64
	for s := range off {
		h[s] = precision(0.01*(1+5*r.Float64()), 0.2)
		for k := range off[s] {
			off[s][k] = 0.02 * r.NormFloat64() / []float64{1, 80}[k/3]
		}
	}
	c := realign.NewChain(times, 12)
	p := make([]realign.Params, len(times))
	for range 3 {
		data := make([]realign.SlotData, len(times))
		for s := range data {
			d := wander(times[s])
			for k := range d {
				d[k] += off[s%12][k] - p[s][k] - c.Offset()[s%12][k]
			}
			data[s] = realign.MakeSlot(h[s%12], d)
		}
		c.Update(data, p)
	}
	for k := range 6 {
		sum, most := 0.0, 0.0
		for _, o := range c.Offset() {
			sum += o[k]
			most = max(most, math.Abs(o[k]))
		}
		if math.Abs(sum) > 1e-9*most || most == 0 {
			t.Errorf("component %d: offsets up to %g have the sum %g", k, most, sum)
		}
	}
}
