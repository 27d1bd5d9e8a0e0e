package realign_test

import (
	"math"
	"testing"

	"evenkeel/realign"
)

// Images may be in any unit: poses are those of the same run at its usual size, also
// where squares of values leave the range of float32.
func TestAnyUnit(t *testing.T) {
	g := axial([3]int{40, 46, 26}, [3]float64{5, 5, 6})
	poses := randomPoses(3, 5, 2, 2)
	data := scan(t, g, poses, 7, nil)
	usual := estimate(t, g, data, realign.Options{})
	for _, e := range []int{-100, -70, 57, 90} {
		scaled := make([]float32, len(data))
		for i, v := range data {
			scaled[i] = float32(math.Ldexp(float64(v), e))
		}
		est := estimate(t, g, scaled, realign.Options{})
		want := make([]realign.Pose, len(poses))
		for n, v := range usual.Volumes {
			want[n] = v.Pose
		}
		// The noise moves poses by 10 um. At the outer two the variance of voxels leaves the
		// range as well, so that restless ones are not told apart (4 um).
		if d := worst(poseErrors(est.Volumes, want)); !(d < 8) {
			t.Errorf("in units of 2^%d poses are off by %.3g um", e, d)
		}
	}
}
