package slicetime

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"testing"

	"github.com/google/go-cmp/cmp"
)

func TestShots(t *testing.T) {
	s := Schedule{Times: []float64{.16, 0, .32, .16, 0, .32}, TR: .5, Axis: 2}
	want := []Shot{{0, []int{1, 4}}, {.16, []int{0, 3}}, {.32, []int{2, 5}}}
	if d := cmp.Diff(want, s.Shots()); d != "" {
		t.Error(d)
	}
	// Printed digits of one instant differ; 2.5 ms do not.
	s = Schedule{Times: []float64{.100004, .1, .1025, math.NaN(), .1}}
	want = []Shot{{.100004, []int{0, 1, 4}}, {.1025, []int{2}}}
	if d := cmp.Diff(want, s.Shots()); d != "" {
		t.Error(d)
	}
	if got := (Schedule{}).Shots(); len(got) != 0 {
		t.Error(got)
	}
	// A chain of near times does not grow without end: the first of a shot rules.
	s = Schedule{Times: []float64{0, .00009, .00018}}
	if got := s.Shots(); len(got) != 2 {
		t.Error(got)
	}
}

// A slice whose time is not a number is in no shot, wherever it stands in the
// list, and takes none of the others with it. What needs an instant for every
// slice refuses such a schedule: see "time" in TestCorrectRefuses.
func TestShotsLeaveOutUntimedSlices(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		times []float64
		want  []Shot
	}{
		{[]float64{nan, .5, 0}, []Shot{{0, []int{2}}, {.5, []int{1}}}},
		{[]float64{.5, nan, 0, nan, .5}, []Shot{{0, []int{2}}, {.5, []int{0, 4}}}},
		{[]float64{.5, 0, nan}, []Shot{{0, []int{1}}, {.5, []int{0}}}},
		{[]float64{nan, 1, nan, nan}, []Shot{{1, []int{1}}}},
		{[]float64{nan, nan}, nil},
	} {
		if d := cmp.Diff(c.want, (Schedule{Times: c.times}).Shots()); d != "" {
			t.Errorf("%v: %s", c.times, d)
		}
	}
}

func TestMiddle(t *testing.T) {
	for _, c := range []struct {
		times []float64
		want  float64
	}{{[]float64{0, 1.5, .5, 1}, .75}, {[]float64{.25, .25}, .25}, {[]float64{.5, 2.25, math.NaN()}, 1.375}, {nil, 0}} {
		if got := (Schedule{Times: c.times}).Middle(); got != c.want {
			t.Errorf("%v: %g, want %g", c.times, got, c.want)
		}
	}
}

func TestWords(t *testing.T) {
	nan := math.NaN()
	rising := func(n int, gap float64) (x []float64) {
		for i := range n {
			x = append(x, float64(i)*gap)
		}
		return x
	}
	// by returns the times of slices taken in the order given, gap apart.
	by := func(gap float64, order ...int) []float64 {
		x := make([]float64, len(order))
		for shot, slice := range order {
			x[slice] = float64(shot) * gap
		}
		return x
	}
	code := func(c, n int, gap float64) []float64 {
		x, err := FromSliceCode(c, n, 0, n-1, gap)
		if err != nil {
			t.Fatal(err)
		}
		return x
	}
	for _, c := range []struct {
		name  string
		times []float64
		tr    float64
		want  string
	}{
		{"none", nil, 2, "no slices"},
		{"one", []float64{0}, 2, "a single slice"},
		{"one, late", []float64{.5}, 2, "a single slice, 0.5 s after the volume's start"},
		{"equal", []float64{0, 0, 0, 0}, 2, "all 4 slices at one instant"},
		{"equal, late", []float64{.75, .75, .75}, 2, "all 3 slices at one instant, 0.75 s after the volume's start"},
		{"not finite", []float64{0, math.Inf(1)}, 2, "slice times that are not finite"},
		{"no times", []float64{nan, nan}, 2, "no slice has a time"},
		{"two", []float64{0, 1}, 2, "sequential ascending, 2 excitations, 1 s apart, no pause between volumes"},
		{"two down", []float64{1, 0}, 2, "sequential descending, 2 excitations, 1 s apart, no pause between volumes"},
		{"code 1", code(1, 8, .25), 2, "sequential ascending, 8 excitations, 0.25 s apart, no pause between volumes"},
		{"code 2", code(2, 8, .25), 2, "sequential descending, 8 excitations, 0.25 s apart, no pause between volumes"},
		{"code 3", code(3, 8, .25), 2, "interleaved ascending, odd slices first (1st, 3rd, 5th, ...), 8 excitations, 0.25 s apart, no pause between volumes"},
		{"code 4", code(4, 8, .25), 2, "interleaved descending, even slices first (8th, 6th, 4th, ...), 8 excitations, 0.25 s apart, no pause between volumes"},
		{"code 5", code(5, 8, .25), 2, "interleaved ascending, even slices first (2nd, 4th, 6th, ...), 8 excitations, 0.25 s apart, no pause between volumes"},
		{"code 6", code(6, 8, .25), 2, "interleaved descending, odd slices first (7th, 5th, 3rd, ...), 8 excitations, 0.25 s apart, no pause between volumes"},
		{"odd count from the top", code(4, 7, .25), 2, "interleaved descending, odd slices first (7th, 5th, 3rd, ...), 7 excitations, 0.25 s apart, then a pause of 0.25 s"},
		{"sparse", rising(10, .1), 8, "sequential ascending, 10 excitations, 0.1 s apart, then a pause of 7 s"},
		{"steps of 3", by(.2, 0, 3, 6, 1, 4, 7, 2, 5, 8), 2, "interleaved ascending in steps of 3, 1st, 4th, 7th first, 9 excitations, 0.2 s apart, then a pause of 0.2 s"},
		{"steps of 3, other passes first", by(.2, 2, 5, 8, 0, 3, 6, 9, 1, 4, 7), 2, "interleaved ascending in steps of 3, 3rd, 6th, 9th first, 10 excitations, 0.2 s apart, no pause between volumes"},
		{"steps of 4, down", by(.1, 11, 7, 3, 10, 6, 2, 9, 5, 1, 8, 4, 0), 1.2, "interleaved descending in steps of 4, 12th, 8th, 4th first, 12 excitations, 0.1 s apart, no pause between volumes"},
		{"round", by(.1, 0, 5, 2, 7, 4, 1, 6, 3), 0, "in steps of 5, going round past the last slice, 1st first, 8 excitations, 0.1 s apart"},
		{"irregular", by(.1, 0, 5, 3, 1, 4, 2), .6, "irregular order (slices 1, 6, 4, 2, 5, 3), 6 excitations, 0.1 s apart, no pause between volumes"},
		{"irregular, long", by(.1, 0, 5, 3, 1, 4, 2, 6, 7), .8, "irregular order (slices 1, 6, 4, 2, 5, 3, ...), 8 excitations, 0.1 s apart, no pause between volumes"},
		{"packages", []float64{0, .1, .2, 1, 1.1, 1.2}, 2, "sequential ascending, 6 excitations, unevenly 0.1 to 0.8 s apart, 0.8 s from the last shot to the next volume's first"},
		{"broken off", by(.1, 0, 2, 1, 3, 4, 5), .6, "irregular order (slices 1, 3, 2, 4, 5, 6), 6 excitations, 0.1 s apart, no pause between volumes"},
		{"uneven by more than rounding", []float64{0, .01, .024, .034}, .05, "sequential ascending, 4 excitations, unevenly 0.01 to 0.014 s apart, 0.016 s from the last shot to the next volume's first"},
		{"late start", []float64{.05, .55, 1.05, 1.55}, 2, "sequential ascending, 4 excitations, 0.5 s apart, no pause between volumes"},
		{"overlapping", []float64{0, .5, 1, 1.5}, 1.6, "sequential ascending, 4 excitations, 0.5 s apart, the volumes overlapping by 0.4 s"},
		{"multiband 3 interleaved", []float64{0, .4, .2, .6, 0, .4, .2, .6, 0, .4, .2, .6}, .8, "multiband 3 (slices 4 apart), interleaved ascending within each block of 4 slices, odd slices first (1st, 3rd), 4 excitations, 0.2 s apart, no pause between volumes"},
		{"multiband 2 down", []float64{.4, .2, 0, .4, .2, 0}, .7, "multiband 2 (slices 3 apart), sequential descending within each block of 3 slices, 3 excitations, 0.2 s apart, then a pause of 0.1 s"},
		{"neighbours together", []float64{0, 0, .5, .5, 1, 1}, 1.5, "multiband 2, irregular (the first shot takes slices 1, 2), 3 excitations, 0.5 s apart, no pause between volumes"},
		{"shots differ", []float64{0, 0, .5, 1, 1}, 1.5, "irregular: 1 to 2 slices in a shot, 3 excitations, 0.5 s apart, no pause between volumes"},
		{"padded", []float64{nan, 0, .2, .1, nan}, .3, "interleaved ascending, even slices first (2nd, 4th), 3 excitations, 0.1 s apart, no pause between volumes, 2 of 5 slices without a time"},
		{"twenty-first", by(.01, 20, 22, 1, 3, 5, 7, 9, 11, 13, 15, 17, 19, 21, 0, 2, 4, 6, 8, 10, 12, 14, 16, 18), .23, "in steps of 2, going round past the last slice, 21st first, 23 excitations, 0.01 s apart, no pause between volumes"},
	} {
		if got := (Schedule{Times: c.times, TR: c.tr}).Words(); got != c.want {
			t.Errorf("%s:\n got %s\nwant %s", c.name, got, c.want)
		}
	}
}

// The schedules of the real series, whose makers printed them with 2.5 ms
// rounding, 1e-6 relative or none.
func TestWordsOfRealSeries(t *testing.T) {
	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: the real series are not here")
	}
	files, err := filepath.Glob(filepath.Join(root, "*", "func", "*_bold.json"))
	if err != nil || len(files) == 0 {
		t.Fatalf("no sidecar under %s (%v)", root, err)
	}
	want := map[string]string{
		"sub-01_task-interleaveddown_bold.json":     "interleaved descending, odd slices first (15th, 13th, 11th, ...), 15 excitations, 0.3333 s apart, no pause between volumes",
		"sub-01_task-interleavedup_bold.json":       "interleaved ascending, odd slices first (1st, 3rd, 5th, ...), 15 excitations, 0.3333 s apart, no pause between volumes",
		"sub-01_task-sequentialdown_bold.json":      "sequential descending, 15 excitations, 0.3333 s apart, no pause between volumes",
		"sub-01_task-sequentialup_bold.json":        "sequential ascending, 15 excitations, 0.3333 s apart, no pause between volumes",
		"sub-02_task-axial_bold.json":               "interleaved ascending, odd slices first (1st, 3rd, 5th, ...), 35 excitations, about 0.07169 s apart, then a pause of 0.4908 s",
		"sub-02_task-coronal_bold.json":             "interleaved ascending, even slices first (2nd, 4th, 6th, ...), 36 excitations, about 0.06971 s apart, then a pause of 0.4903 s",
		"sub-phantomA_task-static_bold.json":        "interleaved ascending, odd slices first (1st, 3rd, 5th, ...), 8 excitations, 0.1875 s apart, no pause between volumes",
		"sub-phantomB_task-static_bold.json":        "multiband 2 (slices 3 apart), interleaved ascending within each block of 3 slices, even slices first (2nd), 3 excitations, 0.16 s apart, then a pause of 0.02 s",
		"sub-phantomC_task-static_dir-AP_bold.json": "interleaved ascending, odd slices first (1st, 3rd, 5th), 5 excitations, about 0.4831 s apart, no pause between volumes",
	}
	found := 0
	for _, file := range files {
		words, ok := want[filepath.Base(file)]
		if !ok {
			continue
		}
		found++
		b, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		var sidecar struct {
			SliceTiming    []float64
			RepetitionTime float64
		}
		if err := json.Unmarshal(b, &sidecar); err != nil {
			t.Fatal(err)
		}
		if got := (Schedule{Times: sidecar.SliceTiming, TR: sidecar.RepetitionTime}).Words(); got != words {
			t.Errorf("%s:\n got %s\nwant %s", filepath.Base(file), got, words)
		}
	}
	if found != len(want) {
		t.Errorf("%d of %d series found under %s", found, len(want), root)
	}
}
