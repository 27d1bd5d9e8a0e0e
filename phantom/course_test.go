package phantom

import (
	"fmt"
	"math"
	"testing"
)

// rounding covers the last bits of two double-precision evaluations of values of
// about 1 (some ten operations each).
const rounding = 1e-14

func TestDoubleGammaAgainstScipy(t *testing.T) {
	g := readGolden(t).DoubleGamma
	for i, x := range g.T {
		near(t, fmt.Sprintf("h(%g)", x), DoubleGamma(x), g.H[i], rounding)
	}
	// Peak and trough as scipy has them on a grid of 0.1 ms; a grid of 1 ms finds the
	// times to 1 ms, and the values, flat there, to 1e-8.
	at, peak, low, trough := 0.0, 0.0, 0.0, 0.0
	for i := range 32000 {
		x := float64(i) / 1000
		if h := DoubleGamma(x); h > peak {
			at, peak = x, h
		} else if h < trough {
			low, trough = x, h
		}
	}
	near(t, "peak", peak, g.Peak, 5e-8)
	near(t, "time of the peak", at, g.PeakT, 1e-3)
	near(t, "trough", trough, g.Trough, 5e-8)
	near(t, "time of the trough", low, g.TroughT, 1e-3)
}

func TestResponseAgainstQuadrature(t *testing.T) {
	g := readGolden(t).Response
	var events []Event
	for _, e := range g.Events {
		events = append(events, Event{e[0], e[1]})
	}
	r := Response(events)
	for i, x := range g.T {
		near(t, fmt.Sprintf("response at %g s", x), r(x), g.Value[i], 1e-12) // scipy's quad was asked for 1e-13
	}
	// Integral 4/5 of the double gamma: a block that never ends settles at 1.
	near(t, "plateau", Response([]Event{{0, 1e4}})(500), 1, rounding)
}

func TestTone(t *testing.T) {
	c := Tone{Freq: 0.043, Phase: 0.6}
	for i := range 200 {
		x := float64(i) * 1.37
		// The argument reaches 74 rad, whose last place is 1.4e-14.
		near(t, "tone", c.At(x), math.Sin(2*math.Pi*0.043*x+0.6), 5e-14)
		near(t, "phase", math.Sin(c.PhaseAt(x)), c.At(x), rounding)
	}
}

// leak is the share of the power of a course, windowed by a Hann window, that
// lies above a frequency. n samples dt apart, mean removed.
func leak(f func(t float64) float64, n int, dt, above float64) float64 {
	x := make([]float64, n)
	var mean float64
	for i := range x {
		x[i] = f(float64(i) * dt)
		mean += x[i] / float64(n)
	}
	var low, high float64
	for k := 1; k < n/2; k++ {
		var re, im float64
		for i, v := range x {
			w := (v - mean) * (0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/float64(n)))
			s, c := math.Sincos(2 * math.Pi * float64(k*i%n) / float64(n))
			re, im = re+w*c, im+w*s
		}
		if float64(k)/(float64(n)*dt) > above {
			high += re*re + im*im
		} else {
			low += re*re + im*im
		}
	}
	return high / (low + high)
}

func TestTonesAreBandLimited(t *testing.T) {
	f := Tones(4, 8, 0.1)
	// The Hann window's sidelobes fall 18 dB an octave from -31 dB; five bins of
	// the 1024 s past the edge they are below -60 dB.
	if l := leak(f, 1024, 1, 0.1+5./1024); l > 1e-6 {
		t.Errorf("share of power above 0.1 Hz: %g", l)
	}
	if l := leak(f, 1024, 1, 0.08); l < 1e-3 {
		t.Errorf("share of power above 0.08 Hz: %g, expected some: one tone lies in the last eighth", l)
	}
	var s float64
	const n = 200000
	for i := range n {
		v := f(float64(i) * 0.73)
		s += v * v / n
	}
	near(t, "mean square", s, 1, 2e-3) // 146 000 s; beats of the eight tones leave less
}
