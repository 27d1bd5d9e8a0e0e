package phantom

import (
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

// lastBit allows for k*tr/n against the decimal fraction of a table.
var lastBit = cmpopts.EquateApprox(0, 1e-15)

// The worked table of nifti1.h ("slice_code"): five slices 0.1 s apart, whose
// codes 1, 2 and 3 are Sequential, its reverse, and Interleaved.
func TestSchedulesAgainstNIfTITable(t *testing.T) {
	for _, c := range []struct {
		name      string
		got, want []float64
	}{
		{"code 1", Sequential(5, 0.5), []float64{0, .1, .2, .3, .4}},
		{"code 2", Reversed(Sequential(5, 0.5)), []float64{.4, .3, .2, .1, 0}},
		{"code 3", Interleaved(5, 0.5), []float64{0, .3, .1, .4, .2}},
		{"code 4", Reversed(Interleaved(5, 0.5)), []float64{.2, .4, .1, .3, 0}},
		// Even number of slices, written out from the rule: 0 2 4 then 1 3 5.
		{"code 3, six slices", Interleaved(6, 1.5), []float64{0, .75, .25, 1, .5, 1.25}},
		// By hand: four groups, in the order 0 2 1 3, twice.
		{"multiband 2", Multiband(8, 2, 0.8), []float64{0, .4, .2, .6, 0, .4, .2, .6}},
		{"one slice", Interleaved(1, 2), []float64{0}},
		{"no slice", Sequential(0, 2), []float64{}},
	} {
		if d := cmp.Diff(c.want, c.got, lastBit); d != "" {
			t.Errorf("%s: (-want +got)\n%s", c.name, d)
		}
	}
	if d := cmp.Diff(Interleaved(33, 2), Multiband(33, 1, 2)); d != "" {
		t.Error("multiband 1 is not interleaved:", d)
	}
	defer func() {
		if recover() == nil {
			t.Error("10 slices 3 at a time: expected a panic")
		}
	}()
	Multiband(10, 3, 1)
}

func TestSchedulesUseTheWholeRepetitionTime(t *testing.T) {
	for shots := 1; shots <= 40; shots++ {
		for factor := range 4 {
			n := shots * max(1, factor)
			count := map[float64]int{}
			for k, u := range Multiband(n, factor, 1.3) {
				count[u]++
				if u < 0 || u >= 1.3 {
					t.Fatalf("%d slices, factor %d: slice %d at %g s", n, factor, k, u)
				}
			}
			if len(count) != shots {
				t.Fatalf("%d slices, factor %d: %d excitations, want %d", n, factor, len(count), shots)
			}
			for u, c := range count {
				if c != max(1, factor) {
					t.Fatalf("%d slices, factor %d: %d slices at %g s", n, factor, c, u)
				}
			}
		}
	}
}
