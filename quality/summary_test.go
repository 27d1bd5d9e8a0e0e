package quality

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

func TestSummarise(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		v    []float64
		want Summary
	}{
		{nil, Summary{nan, nan, nan, 0}},
		{[]float64{nan, nan}, Summary{nan, nan, nan, 0}},
		{[]float64{-3}, Summary{-3, -3, -3, 1}},
		{[]float64{nan, 4, 1}, Summary{2.5, 2.5, 4, 2}},
		{[]float64{9, 1, nan, 2}, Summary{4, 2, 9, 3}},
		{[]float64{8, -1, 2, 3}, Summary{3, 2.5, 8, 4}},
	} {
		before := slices.Clone(c.v)
		if d := cmp.Diff(c.want, Summarise(c.v), cmpopts.EquateNaNs()); d != "" {
			t.Errorf("%v (-want +got):\n%s", c.v, d)
		}
		if !slices.EqualFunc(before, c.v, same) {
			t.Errorf("%v was changed to %v", before, c.v)
		}
	}
	got := SummariseInside([]float32{5, 100, 7}, []bool{true, false, true})
	if want := (Summary{6, 6, 7, 2}); got != want {
		t.Errorf("inside: %v, expected %v", got, want)
	}
}

// The columns of the pose table, in the order that scripts may rely on.
func TestPoseColumns(t *testing.T) {
	want := strings.Fields("time shift_x shift_y shift_z turn_x turn_y turn_z fd rms_ball dvars_raw dvars_steady outside fit state")
	units := strings.Fields("s mm mm mm degree degree degree mm mm % % 1 1")
	var got, gotUnits []string
	for _, d := range PoseColumns() {
		got = append(got, d.Name)
		if d.Unit != "" {
			gotUnits = append(gotUnits, d.Unit)
		}
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	if d := cmp.Diff(units, gotUnits); d != "" {
		t.Error(d)
	}
}

func TestDefinitionsAreWhole(t *testing.T) {
	seen := map[string]bool{}
	for _, d := range Definitions() {
		if seen[d.Name] {
			t.Errorf("%s is declared twice", d.Name)
		}
		seen[d.Name] = true
		if d.Name == "" || d.Source == "" || !strings.HasSuffix(d.Description, ".") {
			t.Errorf("%+v is not whole", d)
		}
		if (d.Unit == "") != (len(d.Levels) > 0) {
			t.Errorf("%s: a figure has a unit, a word has levels", d.Name)
		}
		if got := Define(d.Name); got.Description != d.Description {
			t.Errorf("Define(%q) gives %+v", d.Name, got)
		}
	}
	mustPanic(t, "undeclared name", func() { Define("no such figure") })
}

func ExampleDefine() {
	d := Define("rms_ball")
	fmt.Printf("%s (%s): %s\n%s\n", d.Name, d.Unit, d.Description, d.Source)
	// Output:
	// rms_ball (mm): Root mean square displacement against the volume before, over a solid ball of 80 mm radius about RotationCentre. Undefined where fd is.
	// Jenkinson 1999, technical report TR99MJ1
}

func ExampleSummarise() {
	s := Summarise([]float64{math.NaN(), 0.1, 0.2, 0.6})
	fmt.Printf("mean %.1f, median %.1f, highest %.1f of %d volumes\n", s.Mean, s.Median, s.Max, s.N)
	// Output: mean 0.3, median 0.2, highest 0.6 of 3 volumes
}
