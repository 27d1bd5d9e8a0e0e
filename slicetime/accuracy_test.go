package slicetime

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// The bars here are those set for the kernels from simulation before this code
// was written ("bar"), on the signals they were set for; where the better one
// ("aim") is reached with room it is the one asserted. Random numbers are
// seeded, so that the figures repeat. Run with -v to see them.

// toneError is the relative RMS error in the interior (12 samples trimmed at
// each end) of off-bin sinusoids on mean 1000 and ramp 20, n = 120, worst of the
// shifts .13 .25 .37 .5 -.5; band is the share of the Nyquist frequency. Every
// frequency is the mean over 5 places between two bins and 4 phases: exactly on
// a bin (f n whole) even a plain circular shift looks perfect.
func toneError(opt Options, band float64) (worst float64) {
	const n, trim, amplitude = 120, 12, 10
	for _, shift := range []float64{.13, .25, .37, .5, -.5} {
		num, den := 0.0, 0.0
		for i := range 20 {
			f := (math.Floor(band/2*n) + .1 + .2*float64(i%5)) / n
			tone := func(t float64) float64 { return amplitude * math.Sin(2*math.Pi*f*t+.8*float64(i/5)) }
			value := func(t float64) float64 { return 1000 + 20*t/n + tone(t) }
			x := make([]float32, n)
			for t := range x {
				x[t] = float32(value(float64(t)))
			}
			y := NewShifter(n, shift, opt).Shift(nil, x)
			for t := trim; t < n-trim; t++ {
				u := float64(t) + shift
				d := float64(y[t]) - value(u)
				num += d * d
				den += tone(u) * tone(u)
			}
		}
		worst = max(worst, math.Sqrt(num/den))
	}
	return worst
}

func TestInteriorAccuracy(t *testing.T) {
	for _, c := range []struct {
		opt  Options
		band float64
		bar  float64
		why  string
	}{
		{Options{}, .08, 3e-4, "aim"},
		{Options{}, .30, 3e-4, "aim"},
		{Options{}, .50, 3e-4, "aim"},
		{Options{}, .60, 3e-4, "aim"},
		{Options{}, .70, 3e-4, "aim"},
		{Options{}, .80, 2e-3, "bar"},
		{Options{}, .90, 1.2e-2, "bar"},
		// The table has 6e-4 6e-4 4e-4 5e-4 9e-4 2.5e-2 for one frequency each; here
		// frequencies run to one bin above it, which matters on the kernel's slope.
		{Options{Kernel: Sinc}, .08, 1e-3, "table"},
		{Options{Kernel: Sinc}, .30, 1e-3, "table"},
		{Options{Kernel: Sinc}, .50, 1e-3, "table"},
		{Options{Kernel: Sinc}, .60, 1e-3, "table"},
		{Options{Kernel: Sinc}, .70, 1.5e-3, "table"},
		{Options{Kernel: Sinc}, .80, 4e-2, "table"},
		{Options{Kernel: Sinc, Reach: 12}, .80, 2e-3, "table, 9e-4"},
		{Options{Kernel: Sinc, Reach: 32}, .90, 2e-3, "response within 2e-3 to 0.944 Nyquist"},
	} {
		got := toneError(c.opt, c.band)
		t.Logf("%s reach %d at %.2f Nyquist: %.1e (bar %.1e, %s)", c.opt.Kernel, c.opt.Reach, c.band, got, c.bar, c.why)
		if !(got <= c.bar) {
			t.Errorf("%s reach %d at %.2f Nyquist: error %.2e, bar %.1e (%s)", c.opt.Kernel, c.opt.Reach, c.band, got, c.bar, c.why)
		}
	}
}

// endError is the RMS error of the true signal at the first and last volume, and
// at the first and last three, for BOLD-like series: 20 tones below 0.1 Hz at TR
// 2 s (0.2 cycles a volume), unit standard deviation, moved by half a volume.
func endError(opt Options, n int, noise float64) (one, three float64) {
	const draws, shift = 1000, .5
	rng := rand.New(rand.NewPCG(1, 2))
	for range draws {
		var f, a, p [20]float64
		for i := range f {
			f[i], a[i], p[i] = .2*rng.Float64(), rng.NormFloat64(), 2*math.Pi*rng.Float64()
		}
		signal := func(t float64) (s float64) {
			for i := range f {
				s += a[i] * math.Cos(2*math.Pi*f[i]*t+p[i])
			}
			return s / math.Sqrt(10) // 20 cosines of variance 1/2
		}
		x := make([]float32, n)
		for t := range x {
			x[t] = float32(signal(float64(t)) + noise*rng.NormFloat64())
		}
		y := NewShifter(n, shift, opt).Shift(nil, x)
		square := func(t int) float64 { d := float64(y[t]) - signal(float64(t)+shift); return d * d }
		one += (square(0) + square(n-1)) / 2
		for i := range 3 {
			three += (square(i) + square(n-1-i)) / 6
		}
	}
	return math.Sqrt(one / draws), math.Sqrt(three / draws)
}

func TestEndAccuracy(t *testing.T) {
	for _, c := range []struct {
		kernel     Kernel
		n          int
		noise      float64
		one, three float64
		why        string
	}{
		{Fourier, 40, 0, .09, .06, "bar (odd reflection gives .153, .089)"},
		{Sinc, 40, 0, .09, .06, "bar"},
		{Fourier, 40, 1, 1.0, 1.0, "bar: end volumes must not gain noise (odd reflection gives 1.4)"},
		{Sinc, 40, 1, 1.0, 1.0, "bar"},
		// Around arFull the rule bends without a step, and below it what is asked
		// of 40 volumes holds for as long as a dozen samples can tell. By simulation
		// beforehand (another generator, worst of six shifts): .088 at 19 volumes,
		// .10 at 16, .15 at 10, .23 at 6; odd reflection .14 at each.
		{Fourier, 21, 0, .09, .06, "bar"},
		{Fourier, 20, 0, .09, .06, "bar"},
		{Fourier, 19, 0, .09, .06, "bar"},
		{Fourier, 16, 0, .105, .065, "simulated, and a twentieth for the draws"},
		{Fourier, 10, 0, .16, .095, "simulated, and a twentieth for the draws"},
		{Fourier, 6, 0, .24, .14, "simulated, and a twentieth for the draws"},
		// The simulated figures are 1.03, 1.05, 1.01, 1.0, .99 and 1.07; 1000 draws
		// of two ends know them to 1 / sqrt(4000) = 1.6 %. Odd reflection: 1.5.
		{Fourier, 21, 1, 1.06, 1.03, "simulated"},
		{Fourier, 20, 1, 1.08, 1.03, "simulated"},
		{Fourier, 19, 1, 1.04, 1.03, "simulated"},
		{Fourier, 16, 1, 1.04, 1.03, "simulated"},
		{Sinc, 16, 1, 1.04, 1.03, "simulated"},
		{Fourier, 10, 1, 1.03, 1.03, "simulated"},
		{Fourier, 6, 1, 1.1, 1.03, "simulated"},
	} {
		one, three := endError(Options{Kernel: c.kernel}, c.n, c.noise)
		t.Logf("%s, n %d, noise %g: first/last %.3f (bar %g), first/last three %.3f (bar %g)", c.kernel, c.n, c.noise, one, c.one, three, c.three)
		if !(one <= c.one) || !(three <= c.three) {
			t.Errorf("%s, n %d, noise %g: first/last %.3f and three %.3f, bars %g and %g (%s)", c.kernel, c.n, c.noise, one, three, c.one, c.three, c.why)
		}
	}
}

// noiseGain moves white noise of unit variance, many series of n volumes, by the
// shift. It returns the SD of each volume afterwards, and by what factor the
// mean temporal variance about a series' mean changed (as a ratio of SDs).
func noiseGain(t *testing.T, opt Options, n int, shift float64, draws int) (volumes []float64, temporal float64) {
	t.Helper()
	rng := rand.New(rand.NewPCG(3, uint64(n)))
	data := make([]float32, draws*n)
	for i := range data {
		data[i] = float32(rng.NormFloat64())
	}
	variance := func() (sum float64) {
		for v := range draws {
			mean := 0.0
			for t := range n {
				mean += float64(data[v+draws*t]) / float64(n)
			}
			for t := range n {
				d := float64(data[v+draws*t]) - mean
				sum += d * d
			}
		}
		return sum
	}
	before := variance()
	s := Schedule{Times: []float64{0}, Axis: 2, TR: 1}
	if err := Correct(t.Context(), data, draws, 1, 1, n, s, shift, opt, 2); err != nil {
		t.Fatal(err)
	}
	for v := range n {
		sum := 0.0
		for _, x := range data[draws*v:][:draws] {
			sum += float64(x) * float64(x)
		}
		volumes = append(volumes, math.Sqrt(sum/float64(draws)))
	}
	return volumes, math.Sqrt(variance() / before)
}

// A still head must come out no worse than untouched, in runs of any length: no
// volume gains noise to speak of, and the series as a whole none.
func TestNoiseAccuracy(t *testing.T) {
	const draws = 10000 // one SD is then known to 1 / sqrt(2 draws) = 0.7 %
	shifts := []float64{.13, .25, .37, .5, -.25, -.5}
	for n := MinVolumes; n <= 25; n++ {
		for _, kernel := range []Kernel{Fourier, Sinc} {
			end, worst, whole := 0.0, 0.0, 0.0
			for _, shift := range shifts {
				volumes, temporal := noiseGain(t, Options{Kernel: kernel}, n, shift, draws)
				end = max(end, volumes[0], volumes[n-1])
				for _, g := range volumes {
					worst = max(worst, g)
				}
				whole = max(whole, temporal)
			}
			// 1.1: what was set for short runs beforehand. From 9 volumes on nothing
			// is gained but 0.02 where the order is even; on top of that come three
			// times the 0.7 %, since the largest of 6 n figures is looked at.
			bar := 1.1
			if n >= 9 {
				bar = 1.02 + .021
			}
			t.Logf("%s, n %d: noise of the end volumes times %.3f, of any volume %.3f (bar %.3f), of series %.3f", kernel, n, end, worst, bar, whole)
			if !(worst <= bar) {
				t.Errorf("%s, n %d: a volume's noise grows to %.3f, bar %.3f (odd reflection: 1.9)", kernel, n, worst, bar)
			}
			// The mean removed, a white series keeps 1 - 1/n of its variance: the
			// sum over draws of some 10000 (n-1) squares is known to 0.4 % at n = 4.
			if !(whole <= 1.01) {
				t.Errorf("%s, n %d: the temporal SD grows by %.3f", kernel, n, whole)
			}
		}
	}
}

// sinusoid fits level, slope, cosine and sine of f (cycles a volume) at
// t + offset by least squares to x[trim:n-trim], and returns amplitude and phase.
func sinusoid(x func(t int) float64, n, trim int, f, offset float64) (amplitude, phase float64) {
	var m [4][5]float64
	for t := trim; t < n-trim; t++ {
		u := float64(t) + offset
		row := [5]float64{1, u/float64(n) - .5, math.Cos(2 * math.Pi * f * u), math.Sin(2 * math.Pi * f * u), x(t)}
		for i := range 4 {
			for j := range 5 {
				m[i][j] += row[i] * row[j]
			}
		}
	}
	for i := range 4 { // Gauss-Jordan; the matrix is well conditioned
		for r := range 4 {
			if r == i {
				continue
			}
			k := m[r][i] / m[i][i]
			for j := range 5 {
				m[r][j] -= k * m[i][j]
			}
		}
	}
	c, s := m[2][4]/m[2][2], m[3][4]/m[3][3]
	return math.Hypot(c, s), math.Atan2(-s, c)
}

// Band-limited sinusoids to 0.4 cycles a volume come back with amplitude and
// phase, for every slice, of every schedule, along every axis, by both kernels.
func TestSinusoidsEverySlice(t *testing.T) {
	const nt, tr, slicesN = 97, 2.0, 12
	schedules := map[string][]float64{}
	for i := range slicesN {
		schedules["sequential"] = append(schedules["sequential"], tr*float64(i)/slicesN)
		shot := i / 2
		if i%2 == 1 {
			shot = (slicesN+1)/2 + i/2
		}
		schedules["interleaved"] = append(schedules["interleaved"], tr*float64(shot)/slicesN)
		schedules["multiband"] = append(schedules["multiband"], tr*float64([]int{0, 2, 1, 3}[i%4])/4)
	}
	frequencies := []float64{.0213, .08, .15, .21, .25, .3, .35, .4} // cycles a volume
	bar := func(k Kernel, f float64) float64 {
		switch {
		case k == Fourier && f <= .35:
			return 1e-3 // bar up to 0.7 Nyquist
		case k == Fourier:
			return 2e-3 // at 0.8
		case f <= .35:
			return 1.5e-3
		}
		// Kaiser 6, reach 8, half a sample, f = .4: the response is .977 (swept
		// beside kaiserBeta).
		return 2.5e-2
	}
	worst := map[string][2]float64{}
	for _, name := range []string{"sequential", "interleaved", "multiband"} {
		for axis := range 3 {
			for _, kernel := range []Kernel{Fourier, Sinc} {
				s := Schedule{Times: schedules[name], Axis: axis, TR: tr}
				ref := s.Middle()
				size := [3]int{3, 3, 3}
				size[axis] = slicesN
				nx, ny, nz := size[0], size[1], size[2]
				data := make([]float32, nx*ny*nz*nt)
				each := func(do func(at, slice, n int)) {
					n := 0
					for z := range nz {
						for y := range ny {
							for x := range nx {
								do(x+nx*(y+ny*z), []int{x, y, z}[axis], n)
								n++
							}
						}
					}
				}
				tone := func(n int) (f, phase float64) { return frequencies[n%len(frequencies)], 1.3 * float64(n) }
				each(func(at, slice, n int) {
					f, phase := tone(n)
					for t := range nt {
						u := float64(t) + s.Times[slice]/tr
						data[at+nx*ny*nz*t] = float32(1000 + 20*u/nt + 10*math.Cos(2*math.Pi*f*u+phase))
					}
				})
				if err := Correct(t.Context(), data, nx, ny, nz, nt, s, ref, Options{Kernel: kernel}, 2); err != nil {
					t.Fatal(err)
				}
				each(func(at, slice, n int) {
					f, phase := tone(n)
					a, p := sinusoid(func(t int) float64 { return float64(data[at+nx*ny*nz*t]) }, nt, 12, f, ref/tr)
					da, dp := math.Abs(a/10-1), math.Abs(math.Remainder(p-phase, 2*math.Pi))
					key := fmt.Sprintf("%s %s f %.4g", kernel, name, f)
					w := worst[key]
					worst[key] = [2]float64{max(w[0], da), max(w[1], dp)}
					if b := bar(kernel, f); !(da <= b) || !(dp <= b) {
						t.Errorf("%s, axis %d, slice %d, f %.4g: amplitude off by %.1e, phase by %.1e rad, bar %.1e", key, axis, slice, f, da, dp, b)
					}
				})
			}
		}
	}
	for _, f := range []float64{.08, .25, .35, .4} {
		for _, kernel := range []Kernel{Fourier, Sinc} {
			w := worst[fmt.Sprintf("%s interleaved f %.4g", kernel, f)]
			t.Logf("%s, interleaved, f %.2f: amplitude within %.1e, phase within %.1e rad", kernel, f, w[0], w[1])
		}
	}
	if len(worst) != 2*3*len(frequencies) {
		t.Fatalf("%d combinations ran", len(worst))
	}
}
