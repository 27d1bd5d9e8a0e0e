package phantom

import (
	"math"
	"math/rand/v2"

	"evenkeel/internal/detmath"
)

// Motion gives the rigid map (row-major 4x4, world mm) from the head frame to
// where the head is at time t (s, from the start of the first volume). It must
// be safe to call from several goroutines. nil stands for a still head wherever
// a Motion is taken.
type Motion func(t float64) [16]float64

func (m Motion) at(t float64) [16]float64 {
	if m == nil {
		return Identity()
	}
	return m(t)
}

// tones is how many sinusoids make up each coordinate of a Walk.
const tones = 10

// Walk is a smooth band-limited random motion: each shift and each turn is a sum
// of ten sinusoids at random frequencies, one in each tenth of (0, fmax] (Hz),
// with random phases and amplitudes falling as 1/(order), less its value at
// t = 0, so that Walk(0) is the identity. Over a long time the shift vector has
// the root mean square length shiftSD (mm) about its own mean, and the vector of
// turns about the centre turnSD (rad).
func Walk(seed uint64, shiftSD, turnSD, fmax float64, centre [3]float64) Motion {
	r := rand.New(rand.NewPCG(seed, 0x77616c6b))
	type tone struct{ f, phase, amp float64 }
	var p [6][tones]tone
	var power float64 // of one coordinate: sum of amp^2/2
	for m := range tones {
		a := 1 / float64(m+1)
		power += float64(a*a) / 2
	}
	var zero [6]float64
	for k := range p {
		sd := shiftSD
		if k >= 3 {
			sd = turnSD
		}
		unit := sd / math.Sqrt(3*power)
		for m := range p[k] {
			f := fmax * (float64(m) + r.Float64()) / tones
			phase := float64(2 * math.Pi * r.Float64())
			p[k][m] = tone{f, phase, unit / float64(m+1)}
			zero[k] += float64(p[k][m].amp * detmath.Sin(phase))
		}
	}
	return func(t float64) [16]float64 {
		var v [6]float64
		for k := range p {
			for _, s := range p[k] {
				v[k] += float64(s.amp * detmath.Sin(turns(s.f, t)+s.phase))
			}
			v[k] -= zero[k]
		}
		return Rigid([3]float64(v[:3]), [3]float64(v[3:]), centre)
	}
}

// turns is the angle 2 pi f t (rad).
func turns(f, t float64) float64 { return float64(2 * math.Pi * float64(f*t)) }

// Jerk adds a sudden rigid step (shift in mm, turn in rad about centre, as in
// [Rigid]) from time at (s) on: it moves the head from where base has it.
func Jerk(base Motion, at float64, shift, turn, centre [3]float64) Motion {
	return Compose(Steps([]Step{{at, shift, turn}}, centre), base)
}

// Step is one sudden displacement of a motion made by [Steps].
type Step struct {
	At          float64    // s
	Shift, Turn [3]float64 // mm, rad
}

// Steps holds still between sudden displacements about the centre (mm): at time
// t the head has made every step with At <= t, in the order given.
func Steps(steps []Step, centre [3]float64) Motion {
	made := make([][16]float64, len(steps))
	for i, s := range steps {
		made[i] = Rigid(s.Shift, s.Turn, centre)
	}
	steps = append([]Step(nil), steps...)
	return func(t float64) [16]float64 {
		m := Identity()
		for i, s := range steps {
			if t >= s.At {
				m = Mul(made[i], m)
			}
		}
		return m
	}
}

// Breathing swings as sin(2 pi freq t) (freq in Hz, about 0.3 in adults at rest,
// common knowledge) between the shift (mm) and turn (rad, about centre) given
// and their opposites; the identity at t = 0.
func Breathing(freq float64, shift, turn, centre [3]float64) Motion {
	return func(t float64) [16]float64 {
		s := detmath.Sin(turns(freq, t))
		var a, b [3]float64
		for k := range 3 {
			a[k], b[k] = float64(s*shift[k]), float64(s*turn[k])
		}
		return Rigid(a, b, centre)
	}
}

// Compose gives the product of motions; the last acts first. A nil motion is
// left out; without any the head is still.
func Compose(motions ...Motion) Motion {
	motions = append([]Motion(nil), motions...)
	return func(t float64) [16]float64 {
		m := Identity()
		for _, f := range motions {
			if f != nil {
				m = Mul(m, f(t))
			}
		}
		return m
	}
}
