package realign_test

import (
	"context"
	"math"
	"reflect"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"evenkeel/phantom"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

// What is told begins near nothing, moves in small steps and ends at the whole; nothing that
// is found depends on whether anybody listens.
func TestProgress(t *testing.T) {
	const nt = 6
	var told []float64
	listen := func(share float64) { told = append(told, share) } // one call at a time: go test -race would tell
	check := func(what string, smallest, largest float64) {
		t.Helper()
		if len(told) < nt || told[0] > 0.17 || math.Abs(told[len(told)-1]-1) > 1e-9 {
			t.Errorf("%s: told %v", what, told)
		}
		for i := 1; i < len(told); i++ {
			if step := told[i] - told[i-1]; step < smallest-1e-9 || step > largest {
				t.Errorf("%s: from %g to %g", what, told[i-1], told[i])
			}
		}
		told = nil
	}
	times := phantom.Interleaved(24, 2)
	r := record(t, medium, 2, nt, 2, times, phantom.Walk(3, 0.5, 0.006, 0.05, [3]float64{}), 9)
	same := func(what string, silent, heard any) {
		t.Helper()
		if d := cmp.Diff(silent, heard, cmpopts.EquateNaNs(), cmp.Exporter(func(reflect.Type) bool { return true })); d != "" {
			t.Errorf("%s depends on who listens:\n%s", what, d)
		}
	}

	for _, ref := range []realign.Reference{realign.Mean, realign.First} {
		opt := realign.Options{Reference: ref, SliceAxis: 2, Workers: 2}
		silent := estimate(t, medium, r.data, opt)
		opt.Progress = listen
		heard := estimate(t, medium, r.data, opt)
		same("estimate", silent, heard)
		check("estimate", 0, 0.2)
		r.est = silent
	}

	find := func(progress func(float64)) *realign.PathEstimate {
		est := *r.est
		est.Progress = progress
		p, err := realign.EstimatePath(context.Background(), medium, realign.Floats(r.data, nt), r.schedule, &est, 2)
		if err != nil {
			t.Fatal(err)
		}
		if !p.Used {
			t.Fatal(p.Reason)
		}
		return p
	}
	path := find(nil)
	same("path", path, find(listen))
	check("path", 0, 0.25) // a pass that settles early leaps to its end

	rebuild := func(progress func(float64)) *realign.PathEstimate {
		est := *r.est
		est.Progress = progress
		p, err := path.Rebuilt(context.Background(), medium, realign.Floats(r.data, nt), r.schedule, &est, 2)
		if err != nil {
			t.Fatal(err)
		}
		return p
	}
	same("reference", rebuild(nil), rebuild(listen))
	check("rebuilding", 0, 0.1)

	joint := func(progress func(float64)) []float32 {
		p, out := *path, slices.Clone(r.data)
		p.Progress = progress
		if err := p.Joint(context.Background(), medium, out, nt, r.schedule, true, r.schedule.Middle(), slicetime.Options{}, make([]bool, nt), 5, 2); err != nil {
			t.Fatal(err)
		}
		return out
	}
	if !slices.Equal(joint(nil), joint(listen)) {
		t.Error("the resampled series depends on who listens")
	}
	check("joint", 0, 0.2)
}
