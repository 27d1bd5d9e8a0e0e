package phantom

import (
	"math"
	"math/rand/v2"

	"evenkeel/internal/detmath"
)

// Tone is a sinusoidal course of activation, sin(2 pi Freq t + Phase): Freq in
// Hz, Phase in rad at t = 0, the start of the first volume. Sampled without
// correction, a slice excited at time u shows the phase Phase + 2 pi Freq u.
type Tone struct{ Freq, Phase float64 }

// At is the value at t (s), in [-1, 1].
func (c Tone) At(t float64) float64 { return detmath.Sin(turns(c.Freq, t) + c.Phase) }

// PhaseAt is the phase (rad, not wrapped) at t (s).
func (c Tone) PhaseAt(t float64) float64 { return turns(c.Freq, t) + c.Phase }

// Tones is a band-limited course: n sinusoids of equal amplitude, one at a
// random frequency in each n-th of (0, fmax] (Hz), with random phases; its
// long-time root mean square is 1.
func Tones(seed uint64, n int, fmax float64) func(t float64) float64 {
	r := rand.New(rand.NewPCG(seed, 0x746f6e65))
	c := make([]Tone, n)
	for i := range c {
		c[i].Freq = fmax * (float64(i) + r.Float64()) / float64(n)
		c[i].Phase = float64(2 * math.Pi * r.Float64())
	}
	amp := math.Sqrt(2 / float64(n))
	return func(t float64) float64 {
		var s float64
		for _, k := range c {
			s += k.At(t)
		}
		return float64(amp * s)
	}
}

// Event is one stretch of stimulation: seconds from the start of the first
// volume, as in an events table. Duration 0 is an impulse.
type Event struct{ Onset, Duration float64 }

// Response is the haemodynamic response to events: the double gamma convolved
// with each event's boxcar (height 1), evaluated in closed form at any t, and
// divided by the integral 4/5 of the double gamma, so that a long block settles
// at 1. An impulse contributes the double gamma itself over 4/5, in 1/s.
func Response(events []Event) func(t float64) float64 {
	events = append([]Event(nil), events...)
	return func(t float64) float64 {
		var s float64
		for _, e := range events {
			if e.Duration > 0 {
				s += blockResponse(t-e.Onset) - blockResponse(t-e.Onset-e.Duration)
			} else {
				s += DoubleGamma(t - e.Onset)
			}
		}
		return float64(s * (1 / (1 - dip)))
	}
}

// The response of the invented head: a gamma density that rises and one that dips, the
// form that Friston et al. 1998 (NeuroImage 7:30-40; from memory) and Glover 1999
// (NeuroImage 9:416-429) describe. The constants are invented, of whole shape so that
// the integral has a closed form: it peaks at 5.2 s and dips lowest at 17 s.
const (
	riseShape, riseScale = 5, 1.3 // scale in s
	dipShape, dipScale   = 9, 1.9
	dip                  = 0.2 // the share that dips
)

// DoubleGamma is h(t) = g(t; 5, 1.3 s) - 0.2 g(t; 9, 1.9 s) with g(t; n, s) =
// (t/s)^(n-1) e^(-t/s) / (s (n-1)!), t in s, 0 before 0.
func DoubleGamma(t float64) float64 {
	if t <= 0 {
		return 0
	}
	return gammaTerm(riseShape-1, t/riseScale)/riseScale - float64(dip/dipScale*gammaTerm(dipShape-1, t/dipScale))
}

// gammaTerm is t^k e^-t / k!: the density of a gamma variable of shape k+1, and
// the k-th probability of a Poisson variable of mean t.
func gammaTerm(k int, t float64) float64 {
	p := detmath.Exp(-t)
	for i := 1; i <= k; i++ {
		p = p * t / float64(i)
	}
	return p
}

// blockResponse is the integral of DoubleGamma from 0 to t. The integral of a
// gamma density of whole shape n is 1 less the first n Poisson terms
// (Abramowitz, Stegun 1964, 6.5.13 [number from memory]).
func blockResponse(t float64) float64 {
	if t <= 0 {
		return 0
	}
	below := func(n int, t float64) float64 {
		p := detmath.Exp(-t)
		s := p
		for i := 1; i < n; i++ {
			p = p * t / float64(i)
			s += p
		}
		return s
	}
	return (1 - below(riseShape, t/riseScale)) - float64(dip*(1-below(dipShape, t/dipScale)))
}
