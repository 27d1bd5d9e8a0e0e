package quality

import (
	"context"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

type dvarsGolden struct {
	Source string
	Cases  []struct {
		Name         string
		Y            [][]float64 `json:"voxels_by_volumes"`
		DvarsPlain   []number    `json:"dvars_plain"`
		DvarsPercent []number    `json:"dvars_percent"`
		TSNR         []float64
	}
	Rule struct {
		Text         string
		NV, NT       int
		DvarsPercent []number  `json:"dvars_percent"`
		TSNRMean     float64   `json:"tsnr_mean"`
		TSNRFirst    []float64 `json:"tsnr_first"`
	}
}

func (g *dvarsGolden) ruleData() []float32 {
	data := make([]float32, g.Rule.NV*g.Rule.NT)
	for t := range g.Rule.NT {
		for v := range g.Rule.NV {
			data[t*g.Rule.NV+v] = float32(300+v*37%601) + float32((v*7919+t*104729+v*t*31)%257)/16
		}
	}
	return data
}

func TestDVARSGolden(t *testing.T) {
	var g dvarsGolden
	golden(t, "dvars.json", &g)
	for _, c := range g.Cases {
		data, nv, nt := transpose(c.Y)
		before := slices.Clone(data)
		got, err := DVARS(ctx, data, nv, nt, nil, nil, 2)
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.Name, got, floats(c.DvarsPercent), oracle)
		if !slices.Equal(before, data) {
			t.Errorf("%s: the series was changed", c.Name)
		}
		// The plain root mean square is the percentage times the mean.
		var mean float64
		for _, x := range data {
			mean += float64(x) / float64(len(data))
		}
		for i := range got {
			got[i] *= mean / 100
		}
		near(t, c.Name+", plain", got, floats(c.DvarsPlain), oracle)
	}
	got, err := DVARS(ctx, g.ruleData(), g.Rule.NV, g.Rule.NT, nil, nil, 1)
	if err != nil {
		t.Fatal(err)
	}
	near(t, g.Rule.Text, got, floats(g.Rule.DvarsPercent), oracle)
}

// Voxels outside the mask do not count, whatever they hold.
func TestDVARSMask(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	const nv, nt = 500, 6
	data := noise(r, nv, nt, 700, 10)
	mask := make([]bool, nv)
	var packed []float32
	n := 0
	for v := range mask {
		if mask[v] = r.IntN(3) == 0; mask[v] {
			n++
		}
	}
	for i, x := range data {
		if mask[i%nv] {
			packed = append(packed, x)
		} else {
			data[i] = float32(math.NaN())
		}
	}
	want, _ := DVARS(ctx, packed, n, nt, nil, nil, 1)
	got, err := DVARS(ctx, data, nv, nt, mask, nil, 1)
	if err != nil {
		t.Fatal(err)
	}
	if !slices.EqualFunc(got, want, same) {
		t.Errorf("masked %v\npacked %v", got, want)
	}
	if math.IsNaN(got[1]) {
		t.Error("nothing measured")
	}
	for _, v := range slices.Concat(
		first(DVARS(ctx, data, nv, nt, make([]bool, nv), nil, 1)), // empty mask
		first(DVARS(ctx, make([]float32, 12), 3, 4, nil, nil, 1)), // mean of zero
	) {
		if !math.IsNaN(v) {
			t.Errorf("undefined, but %v", v)
		}
	}
}

func first[T any](v T, _ error) T { return v }

func TestTSNRGolden(t *testing.T) {
	var g dvarsGolden
	golden(t, "dvars.json", &g)
	for _, c := range g.Cases {
		data, nv, nt := transpose(c.Y)
		dst := make([]float32, nv)
		if err := TSNR(ctx, dst, data, nv, nt, nil, 1); err != nil {
			t.Fatal(err)
		}
		for v := range dst {
			if dst[v] != float32(c.TSNR[v]) {
				t.Errorf("%s, voxel %d: %v, expected %v", c.Name, v, dst[v], c.TSNR[v])
			}
		}
	}
	dst := make([]float32, g.Rule.NV)
	if err := TSNR(ctx, dst, g.ruleData(), g.Rule.NV, g.Rule.NT, nil, 2); err != nil {
		t.Fatal(err)
	}
	for v, want := range g.Rule.TSNRFirst {
		if dst[v] != float32(want) {
			t.Errorf("voxel %d: %v, expected %v", v, dst[v], want)
		}
	}
	// Float32 rounding of each of 5000 values averages far below 6e-8.
	if s := SummariseInside(dst, nil); math.Abs(s.Mean/g.Rule.TSNRMean-1) > 6e-8 {
		t.Errorf("mean %v, expected %v", s.Mean, g.Rule.TSNRMean)
	}
}

// The mean may be as large beside the standard deviation as float32 can hold.
func TestTSNRLargeMean(t *testing.T) {
	const nt, mean = 50, 1 << 23 // neighbours in float32 are 1 apart
	data := make([]float32, nt)
	for i := range data {
		data[i] = mean + float32(i%2)
	}
	dst := make([]float32, 1)
	if err := TSNR(ctx, dst, data, 1, nt, nil, 1); err != nil {
		t.Fatal(err)
	}
	// By hand: deviations of ±1/2, variance nt/4/(nt-1).
	if want := float32((mean + 0.5) / math.Sqrt(nt/4./(nt-1))); dst[0] != want {
		t.Errorf("%v, expected %v", dst[0], want)
	}
}

func TestTSNRUseAndUndefined(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	const nv, nt = 30, 9
	data := noise(r, nv, nt, 500, 5)
	use := make([]bool, nt)
	var kept []float32
	for u := range use {
		if use[u] = u%3 != 1; use[u] {
			kept = append(kept, data[u*nv:(u+1)*nv]...)
		} else {
			data[u*nv] = float32(math.Inf(1)) // must not be looked at
		}
	}
	want, got := make([]float32, nv), make([]float32, nv)
	if err := errors.Join(TSNR(ctx, want, kept, nv, 6, nil, 1), TSNR(ctx, got, data, nv, nt, use, 1)); err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(got, want) || want[0] == 0 {
		t.Errorf("with marks %v\npicked out %v", got, want)
	}

	for name, series := range map[string][]float32{
		"constant":    {0.1, 0.1, 0.1, 0.1, 0.1, 0.1, 0.1},
		"zero":        make([]float32, 7),
		"not finite":  {1, 2, float32(math.NaN()), 3},
		"infinite":    {1, 2, float32(math.Inf(-1)), 3},
		"one volume":  {5},
		"no volume":   {},
		"large const": {3e38, 3e38, 3e38},
	} {
		dst := []float32{7}
		if err := TSNR(ctx, dst, series, 1, len(series), nil, 1); err != nil || dst[0] != 0 {
			t.Errorf("%s: %v, %v", name, dst[0], err)
		}
	}
}

// Guarantee 1: the same bits for any number of workers; sizes stand on both
// sides of the blocks.
func TestWorkersDoNotMatter(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	for _, n := range [][3]int{{1, 1, 1}, {23, 1, 89}, {2048, 1, 1}, {2049, 1, 1}, {4096, 1, 1}, {4097, 1, 1}, {20, 20, 11}} {
		nv, nt := n[0]*n[1]*n[2], 7
		data := noise(r, nv, nt, 100, 3)
		mask := make([]bool, nv)
		for v := range mask {
			mask[v] = r.IntN(8) > 0
		}
		type result struct {
			dv     []float64
			ts     []float32
			spikes []float64
		}
		run := func(workers int) (res result) {
			res.ts = make([]float32, nv)
			res.dv = first(DVARS(ctx, data, nv, nt, mask, nil, workers))
			if err := TSNR(ctx, res.ts, data, nv, nt, nil, workers); err != nil {
				t.Fatal(err)
			}
			res.spikes = slices.Concat(first(SliceSpikes(ctx, data, n[0], n[1], n[2], nt, 2, mask, workers))...)
			return res
		}
		one := run(1)
		for _, workers := range []int{0, 2, 3, 16} {
			res := run(workers)
			if !slices.EqualFunc(one.dv, res.dv, same) || !slices.Equal(one.ts, res.ts) || !slices.EqualFunc(one.spikes, res.spikes, same) {
				t.Errorf("%v: %d workers give other bits than one", n, workers)
			}
		}
	}
}

func TestCancelled(t *testing.T) {
	stop, cancel := context.WithCancel(ctx)
	cancel()
	data := make([]float32, 8*6)
	_, e1 := DVARS(stop, data, 8, 6, nil, nil, 1)
	_, e2 := SliceSpikes(stop, data, 2, 2, 2, 6, 2, nil, 1)
	_, e3 := SliceSpikes(stop, data[:16], 2, 2, 2, 2, 2, nil, 1)
	for i, err := range []error{e1, e2, e3, TSNR(stop, make([]float32, 8), data, 8, 6, nil, 1)} {
		if !errors.Is(err, context.Canceled) {
			t.Errorf("call %d: %v", i, err)
		}
	}
}

func TestWrongLengthsPanic(t *testing.T) {
	d, m := make([]float32, 12), make([]bool, 3)
	mustPanic(t, "DVARS data", func() { DVARS(ctx, d, 5, 2, nil, nil, 1) })
	mustPanic(t, "DVARS mask", func() { DVARS(ctx, d, 4, 3, m, nil, 1) })
	mustPanic(t, "TSNR dst", func() { TSNR(ctx, make([]float32, 3), d, 4, 3, nil, 1) })
	mustPanic(t, "TSNR use", func() { TSNR(ctx, make([]float32, 4), d, 4, 3, make([]bool, 4), 1) })
	mustPanic(t, "SliceSpikes axis", func() { SliceSpikes(ctx, d, 2, 2, 1, 3, 3, nil, 1) })
	mustPanic(t, "SliceSpikes data", func() { SliceSpikes(ctx, d, 2, 2, 2, 3, 2, nil, 1) })
	mustPanic(t, "SummariseInside", func() { SummariseInside(d, m) })
}

// Properties of both measures: a series in other units has the same DVARS in
// percent and the same tSNR. Factors are powers of two, so the bits agree too.
func TestUnitsDoNotMatter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		nv, nt := rapid.IntRange(1, 40).Draw(t, "nv"), rapid.IntRange(2, 12).Draw(t, "nt")
		data := rapid.SliceOfN(rapid.Float32Range(1, 1000), nv*nt, nv*nt).Draw(t, "data")
		k := float32(math.Ldexp(1, rapid.IntRange(-20, 20).Draw(t, "power")))
		scaled := make([]float32, len(data))
		for i, x := range data {
			scaled[i] = k * x
		}
		if a, b := first(DVARS(ctx, data, nv, nt, nil, nil, 1)), first(DVARS(ctx, scaled, nv, nt, nil, nil, 1)); !slices.EqualFunc(a, b, func(a, b float64) bool { return a == b || math.IsNaN(a) && math.IsNaN(b) }) {
			t.Fatalf("DVARS %v, scaled %v", a, b)
		}
		a, b := make([]float32, nv), make([]float32, nv)
		if err := errors.Join(TSNR(ctx, a, data, nv, nt, nil, 1), TSNR(ctx, b, scaled, nv, nt, nil, 1)); err != nil {
			t.Fatal(err)
		}
		if !slices.Equal(a, b) {
			t.Fatalf("tSNR %v, scaled %v", a, b)
		}
	})
}

// The real series, with numpy and nibabel as the oracle (testdata/realseries.py).
func TestRealSeries(t *testing.T) {
	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: the real series are not looked at")
	}
	python := ""
	for _, p := range []string{"python3", "/usr/bin/python3"} {
		if exec.Command(p, "-c", "import numpy, nibabel").Run() == nil {
			python = p
			break
		}
	}
	if python == "" {
		t.Skip("python3 with numpy and nibabel is not here: no oracle for the real series")
	}
	var images []string
	for _, pattern := range []string{"sub-*/func/*_bold.nii", "sub-*/func/*_bold.nii.gz"} {
		found, _ := filepath.Glob(filepath.Join(root, pattern))
		images = append(images, found...)
	}
	slices.Sort(images)
	if len(images) == 0 {
		t.Fatalf("EVENKEEL_TEST_SERIES holds no bold image: %s", root)
	}
	for _, image := range images[:min(2, len(images))] {
		dir := t.TempDir()
		if out, err := exec.Command(python, "testdata/realseries.py", image, dir).CombinedOutput(); err != nil {
			t.Fatalf("%v\n%s", err, out)
		}
		var want struct {
			NV, NT     int
			DVARS      []float64
			TSNRMedian float64 `json:"tsnr_inside_median"`
			TSNRSum    float64 `json:"tsnr_sum"`
		}
		raw, err := os.ReadFile(dir + "/expect.json")
		if err == nil {
			err = json.Unmarshal(raw, &want)
		}
		if err != nil {
			t.Fatal(err)
		}
		bits := first(os.ReadFile(dir + "/data.f32"))
		data := make([]float32, len(bits)/4)
		for i := range data {
			data[i] = math.Float32frombits(binary.LittleEndian.Uint32(bits[4*i:]))
		}
		mask := make([]bool, want.NV)
		for v, b := range first(os.ReadFile(dir + "/mask.u8")) {
			mask[v] = b != 0
		}
		name := filepath.Base(image)
		got, err := DVARS(ctx, data, want.NV, want.NT, mask, nil, 2)
		if err != nil {
			t.Fatal(err)
		}
		// Sums of up to 1e6 terms, added in another order.
		near(t, name, got[1:], want.DVARS, 1e-11)
		dst := make([]float32, want.NV)
		if err := TSNR(ctx, dst, data, want.NV, want.NT, nil, 2); err != nil {
			t.Fatal(err)
		}
		s := SummariseInside(dst, mask)
		all := SummariseInside(dst, nil)
		// The map is in float32: half a unit in the last place is 6e-8.
		if math.Abs(s.Median/want.TSNRMedian-1) > 1e-7 || math.Abs(all.Mean*float64(all.N)/want.TSNRSum-1) > 1e-7 {
			t.Errorf("%s: tSNR median %v, sum %v; expected %v, %v", name, s.Median, all.Mean*float64(all.N), want.TSNRMedian, want.TSNRSum)
		}
		t.Logf("%s: mean DVARS %.3f %%, median tSNR %.1f", name, Summarise(got).Mean, s.Median)
	}
}

// 4 voxels in 3 volumes: differences of 2, -2, 1 and -1 have a root mean square
// of sqrt(10/4), here in percent of the mean of 107.5.
// The scale leaves out the volumes that do not count; the differences do not.
func TestDVARSScale(t *testing.T) {
	data := []float32{100, 100, 102, 102, 9000, 9000, 98, 98} // volume 2 is lost
	got, err := DVARS(context.Background(), data, 2, 4, nil, []bool{true, true, false, true}, 1)
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range []float64{math.NaN(), 2, 8898, 8902} { // mean of 100, 102 and 98 is 100
		if math.Abs(got[i]-want) > 1e-9 || math.IsNaN(got[i]) != math.IsNaN(want) {
			t.Errorf("volume %d: %g, want %g", i, got[i], want)
		}
	}
	mustPanic(t, "DVARS use", func() { DVARS(context.Background(), data, 2, 4, nil, []bool{true}, 1) })
}

func ExampleDVARS() {
	series := []float32{
		100, 200, 50, 80,
		102, 198, 51, 79,
		102, 198, 51, 79,
	}
	dvars, err := DVARS(context.Background(), series, 4, 3, nil, nil, 1)
	fmt.Printf("%.4f %v\n", dvars, err)
	// Output: [NaN 1.4708 0.0000] <nil>
}

func ExampleTSNR() {
	series := []float32{ // two voxels, four volumes
		99, 50,
		101, 50,
		99, 50,
		101, 50,
	}
	tsnr := make([]float32, 2)
	err := TSNR(context.Background(), tsnr, series, 2, 4, nil, 1)
	fmt.Printf("%.3f %v\n", tsnr, err) // 100 / sqrt(4/3); a constant voxel has none
	// Output: [86.603 0.000] <nil>
}

func BenchmarkTSNR(b *testing.B) {
	benchmark(b, func(d []float32, nv, nt int, m []bool, dst []float32) { TSNR(ctx, dst, d, nv, nt, nil, 1) })
}
func BenchmarkDVARS(b *testing.B) {
	benchmark(b, func(d []float32, nv, nt int, m []bool, _ []float32) { DVARS(ctx, d, nv, nt, m, nil, 1) })
}
func BenchmarkSliceSpikes(b *testing.B) {
	benchmark(b, func(d []float32, nv, nt int, m []bool, _ []float32) { SliceSpikes(ctx, d, 64, 64, 36, nt, 2, m, 1) })
}

func benchmark(b *testing.B, f func(d []float32, nv, nt int, m []bool, dst []float32)) {
	const nv, nt = 64 * 64 * 36, 200
	r := rand.New(rand.NewPCG(1, 1))
	data := make([]float32, nv*nt)
	for i := range data {
		data[i] = 500 + float32(r.IntN(64))
	}
	mask := make([]bool, nv)
	for v := range mask {
		mask[v] = v%64 > 12 && v%64 < 52 && v/64%64 > 10 && v/64%64 < 54
	}
	dst := make([]float32, nv)
	b.SetBytes(4 * nv * nt)
	for b.Loop() {
		f(data, nv, nt, mask, dst)
	}
}
