package slicetime

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"testing"
)

// golden reads a file that testdata/generate.py wrote with numpy, scipy and nibabel.
func golden(t *testing.T, name string, to any) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, to); err != nil {
		t.Fatalf("%s: %v", name, err)
	}
}

func largestAbs(x []float64) (m float64) {
	for _, v := range x {
		m = max(m, math.Abs(v))
	}
	return m
}

// The circular shift alone, against numpy.fft and (inside generate.py) the
// periodic-sinc kernel, at every even length 2 * 2^a 3^b of the file. Odd
// lengths never occur: the transform is always given an even one.
func TestPhaseShiftGolden(t *testing.T) {
	var file struct {
		Cases []struct {
			Signal string
			X, Y   []float64
			Shift  float64
		}
	}
	golden(t, "fourier_shift.json", &file)
	if len(file.Cases) < 80 {
		t.Fatalf("only %d cases", len(file.Cases))
	}
	for _, c := range file.Cases {
		x := make([]lanes, len(c.X))
		for i, v := range c.X {
			for l := range x[i] {
				x[i][l] = v * float64(l+1)
			}
		}
		newPhaseShift(newFFT(len(x)/2), c.Shift).apply(x)
		for i, want := range c.Y {
			for l, got := range x[i] {
				// The file holds 12 digits (5e-12 of values to 10); transforms of
				// some 100 points of size one err by a few 1e-16.
				if d := math.Abs(got/float64(l+1) - want); !(d < 6e-12) {
					t.Fatalf("%s, shift %g, sample %d, lane %d: %.15g, numpy %.15g", c.Signal, c.Shift, i, l, got/float64(l+1), want)
				}
			}
		}
	}
}

// The worked example of a fractional delay by 0.25 of eight samples: values
// computed with numpy and printed to nine decimals (dsp texts give the formula
// only: Y[k] = X[k] exp(-2 pi i k d/N), Nyquist bin times cos(pi d)).
func TestPhaseShiftWorked(t *testing.T) {
	x := []lanes{{1}, {2}, {0}, {-1}, {3}, {.5}, {-2}, {1.5}}
	newPhaseShift(newFFT(4), -0.25).apply(x)
	for i, want := range []float64{1.243483158, 1.672851734, .93290311, -1.48483372, 2.218695312, 1.825854791, -2.248634971, .839680586} {
		if math.Abs(x[i][0]-want) > 6e-10 {
			t.Errorf("sample %d: %.9f, want %.9f", i, x[i][0], want)
		}
	}
	// The Nyquist rule: (+1, -1) shrinks to cos(pi/4).
	x = []lanes{{1}, {-1}, {1}, {-1}, {1}, {-1}, {1}, {-1}}
	newPhaseShift(newFFT(4), 0.25).apply(x)
	for i := range x {
		if d := math.Abs(math.Abs(x[i][0]) - math.Sqrt2/2); d > 1e-15 {
			t.Errorf("Nyquist sample %d: %.17g", i, x[i][0])
		}
	}
}

func TestSincGolden(t *testing.T) {
	var file struct {
		Windows []struct {
			Reach, Beta float64
			X, Kernel   []float64
		}
		Cases []struct {
			Reach int
			Frac  float64
			Taps  []float64
			Line  []float64 `json:"line_taps"`
		}
	}
	golden(t, "windowed_sinc.json", &file)
	if len(file.Windows) < 5 || len(file.Cases) < 30 {
		t.Fatal("too few cases")
	}
	for _, w := range file.Windows {
		for i, x := range w.X {
			k := kaiser(x, w.Reach, w.Beta)
			if x != 0 {
				k *= math.Sin(math.Pi*x) / (math.Pi * x)
			}
			if math.Abs(k-w.Kernel[i]) > 2e-12 { // 12 digits in the file
				t.Errorf("reach %g beta %g at %g: %.15g, scipy %.15g", w.Reach, w.Beta, x, k, w.Kernel[i])
			}
		}
	}
	for _, c := range file.Cases {
		got := sincTaps(c.Reach, c.Frac, kaiserBeta)
		if len(got) != len(c.Taps) {
			t.Fatalf("reach %d: %d taps, want %d", c.Reach, len(got), len(c.Taps))
		}
		sum := 0.0
		for i, w := range got {
			sum += w
			if math.Abs(w-c.Taps[i]) > 6e-12 {
				t.Errorf("reach %d frac %g tap %d: %.15g, scipy %.15g", c.Reach, c.Frac, i, w, c.Taps[i])
			}
		}
		line, moment := lineTaps(c.Reach, c.Frac, kaiserBeta), 0.0
		for i, w := range line {
			moment += w * float64(i-c.Reach)
			if math.Abs(w-c.Line[i]) > 6e-12 {
				t.Errorf("reach %d frac %g line tap %d: %.15g, numpy %.15g", c.Reach, c.Frac, i, w, c.Line[i])
			}
		}
		// Some 65 terms of the size of the reach are summed.
		if math.Abs(moment-c.Frac) > 1e-14 {
			t.Errorf("reach %d frac %g: first moment off by %.1e", c.Reach, c.Frac, moment-c.Frac)
		}
		if math.Abs(sum-1) > 1e-15 {
			t.Errorf("reach %d frac %g: taps sum to 1%+.1e", c.Reach, c.Frac, sum-1)
		}
	}
	if got := kaiser(0, 8, 6); got != 1 {
		t.Errorf("the window is %g at its centre", got)
	}
	if got := kaiser(8, 8, 6); got != 0 {
		t.Errorf("the window is %g at its reach", got)
	}
}

// I0(1) and I0(5) as tables of Bessel functions give them (Abramowitz, Stegun
// 1964, section 9.8, to more digits than there; numpy.i0 agrees).
func TestBesselI0(t *testing.T) {
	for _, c := range []struct{ x, want float64 }{{0, 1}, {1, 1.266065877752008}, {5, 27.239871823604442}} {
		if got := besselI0(c.x); math.Abs(got/c.want-1) > 4e-16 {
			t.Errorf("I0(%g) = %.17g, want %.17g", c.x, got, c.want)
		}
	}
}

// Whole series against the plain numpy twin, which shares no step with the code:
// least squares on stacked equations, a transform of the whole length, a line by polyfit.
func TestWholeMethodGolden(t *testing.T) {
	var file struct {
		Cases []struct {
			Signal string
			N      int
			X      []float32
			Moves  []struct {
				Kernel string
				Reach  int
				Shift  float64
				Y      []float64
			}
		}
	}
	golden(t, "whole_method.json", &file)
	ran := 0
	for _, c := range file.Cases {
		for _, m := range c.Moves {
			opt := Options{Reach: m.Reach}
			if m.Kernel == "sinc" {
				opt.Kernel = Sinc
			}
			got := NewShifter(c.N, m.Shift, opt).Shift(nil, c.X)
			top := largestAbs(m.Y)
			for i, want := range m.Y {
				// float32 rounds to 6e-8 of a value, half of it each way.
				if d := math.Abs(float64(got[i]) - want); !(d <= 6.5e-8*top) {
					t.Errorf("%s, n %d, %s reach %d, shift %g, sample %d: %.9g, numpy %.9g (%.1e of the largest)", c.Signal, c.N, m.Kernel, m.Reach, m.Shift, i, got[i], want, d/top)
					break
				}
			}
			ran++
		}
	}
	if ran < 400 {
		t.Fatalf("only %d cases ran", ran)
	}
}

func TestSliceCodeGolden(t *testing.T) {
	var file struct {
		Cases []struct {
			Code, N, Start, End int
			Duration            float64
			Times               []*float64
		}
	}
	golden(t, "slice_code.json", &file)
	if len(file.Cases) < 25 {
		t.Fatal("too few cases")
	}
	for _, c := range file.Cases {
		got, err := FromSliceCode(c.Code, c.N, c.Start, c.End, c.Duration)
		if err != nil {
			t.Fatal(err)
		}
		for i, want := range c.Times {
			switch {
			case want == nil && math.IsNaN(got[i]):
			// The header holds the duration as float32.
			case want == nil || math.Abs(got[i]-*want) > 1e-6:
				t.Errorf("code %d, n %d, %d to %d: %v", c.Code, c.N, c.Start, c.End, got)
			}
		}
	}
}

// The worked table of nifti1.h itself: 7 slices, start 1, end 5, duration 0.1 s.
func TestSliceCodeStandard(t *testing.T) {
	for code, want := range map[int]string{
		1: "[NaN 0.0 0.1 0.2 0.3 0.4 NaN]", 2: "[NaN 0.4 0.3 0.2 0.1 0.0 NaN]",
		3: "[NaN 0.0 0.3 0.1 0.4 0.2 NaN]", 4: "[NaN 0.2 0.4 0.1 0.3 0.0 NaN]",
		5: "[NaN 0.2 0.0 0.3 0.1 0.4 NaN]", 6: "[NaN 0.4 0.1 0.3 0.0 0.2 NaN]",
	} {
		got, err := FromSliceCode(code, 7, 1, 5, 0.1)
		if err != nil {
			t.Fatal(err)
		}
		if text := fmt.Sprintf("%.1f", got); text != want {
			t.Errorf("code %d: %s, the standard says %s", code, text, want)
		}
	}
	for _, bad := range [][4]int{{0, 7, 1, 5}, {7, 7, 1, 5}, {1, 7, -1, 5}, {1, 7, 3, 2}, {1, 7, 0, 7}} {
		if got, err := FromSliceCode(bad[0], bad[1], bad[2], bad[3], 0.1); err == nil || got != nil {
			t.Errorf("%v accepted", bad)
		}
	}
	for _, d := range []float64{0, -1, math.NaN(), math.Inf(1)} {
		if _, err := FromSliceCode(1, 7, 1, 5, d); err == nil {
			t.Errorf("duration %g accepted", d)
		}
	}
}
