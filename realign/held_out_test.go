package realign_test

import (
	"context"
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
)

// A head that drifts steadily under a sequential schedule keeps its path, which is 8 um off
// where one pose a volume is 159 um off, by slice. A template averaged at the volume poses is
// sheared by the drift within a volume and so fits those poses: the comparison once went by it.
func TestSteadyDriftKeepsItsPath(t *testing.T) {
	const v = 0.25
	drift := func(t float64) [16]float64 {
		return phantom.Rigid([3]float64{0.3 * v * t, 0.2 * v * t, v * t}, [3]float64{0.004 * v * t, 0, 0.004 * v * t}, [3]float64{})
	}
	r := record(t, medium, 2, 12, 2, phantom.Sequential(24, 2), drift, 9).find(t, realign.Options{}, 2)
	if !r.path.Used {
		t.Error(r.path.Reason)
	}
}

// So does a short run with a reference of one volume.
func TestShortRunAgainstOneVolumeKeepsItsPath(t *testing.T) {
	r := record(t, coarse, 2, 6, 2, phantom.Interleaved(14, 2), slowWalk, 9).find(t, realign.Options{Reference: realign.Middle}, 2)
	if !r.path.Used {
		t.Error(r.path.Reason)
	}
}

// Where no volume is aligned the mean that fills the reference outside the region is of the
// doubtful ones.
func TestRebuiltFromDoubtfulVolumesOutsideTheRegion(t *testing.T) {
	r := record(t, coarse, 2, 5, 2, phantom.Interleaved(14, 2), slowWalk, 9)
	r.est = estimate(t, coarse, r.data, realign.Options{})
	for n := range r.est.Volumes {
		r.est.Volumes[n].State = realign.Doubtful
	}
	q, err := realign.FromVolumes(coarse, r.schedule, r.est, "a test").Rebuilt(context.Background(), coarse, realign.Floats(r.data, 5), r.schedule, r.est, 2)
	if err != nil {
		t.Fatal(err)
	}
	if q.Reference[0] == 0 {
		t.Error("the reference is 0 in the corner, where all volumes hold noise")
	}
}
