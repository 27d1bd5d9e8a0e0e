package realign_test

import (
	"slices"
	"testing"

	"evenkeel/phantom"
	"evenkeel/realign"
)

// Slices that hold nothing in any volume, at the ends and within the head, are no
// data: poses come out nearly as without, and nothing is compared there.
func TestPaddedSlices(t *testing.T) {
	const nt = 6
	g := axial([3]int{38, 44, 32}, [3]float64{4.8, 4.8, 4})
	r := record(t, g, 2, nt, 2, phantom.Interleaved(32, 2), slowWalk, 9).find(t, realign.Options{}, 2)
	whole := slices.Clone(r.data)
	clean, _ := pathErrors(r.path.Path, poseAt(slowWalk), headPoints)
	start, _ := pathErrors(r.stepped(), poseAt(slowWalk), headPoints)
	for _, c := range []struct {
		name   string
		padded []int
	}{
		{"at the ends", []int{0, 1, 31}},
		{"within", []int{16}},
	} {
		r.data = slices.Clone(whole)
		for n := range nt {
			dim(r, 0, n, c.padded...)
		}
		if found := realign.PaddedSlices(g, 2, r.data); found == nil {
			t.Errorf("%s: not found", c.name)
		} else {
			for k, p := range found {
				if p != slices.Contains(c.padded, k) {
					t.Errorf("%s: slice %d: padded %v", c.name, k, p)
				}
			}
		}
		r.find(t, realign.Options{}, 2)
		allAligned(t, r.est)
		if !r.path.Used {
			t.Errorf("%s: %s", c.name, r.path.Reason)
			continue
		}
		vol, _ := pathErrors(r.stepped(), poseAt(slowWalk), headPoints)
		e, w := pathErrors(r.path.Path, poseAt(slowWalk), headPoints)
		t.Logf("%s: volumes %.1f um, path %.1f um, worst %.1f um; without padding %.1f and %.1f um", c.name, vol, e, w, start, clean)
		if vol > 1.3*start || e > 1.4*clean {
			t.Errorf("%s: volumes %.1f um, path %.1f um; without padding %.1f and %.1f um", c.name, vol, e, start, clean)
		}
	}
}

// Air above a head and below it is data, flat as it is without noise.
func TestAirIsNotPadding(t *testing.T) {
	g := axial([3]int{24, 26, 24}, [3]float64{8, 8, 9})
	poses := randomPoses(3, 4, 2, 2)
	data := scan(t, g, poses, 0, nil)
	for axis := range 3 {
		if p := realign.PaddedSlices(g, axis, data); p != nil {
			t.Errorf("axis %d: %v", axis, p)
		}
	}
	if p := realign.PaddedSlices(g, 2, make([]float32, len(data))); p != nil {
		t.Errorf("a run of zeros: %v", p)
	}
}
