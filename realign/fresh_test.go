package realign_test

import (
	"testing"

	"evenkeel/realign"
)

// A volume that is lost from a known pose is sought as if nothing were known, though
// slices were left out of it meanwhile.
func TestLostIsSoughtAfresh(t *testing.T) {
	g := axial([3]int{40, 46, 26}, [3]float64{5, 5, 6})
	data := scan(t, g, randomPoses(3, 2, 2, 2), 7, nil)
	area := g.N[0] * g.N[1]
	for i := 8 * area; i < 14*area; i++ {
		data[area*g.N[2]+i] *= 0.1
	}
	scratch := realign.PassFrom(g, data, 2, realign.Identity, false)
	// From so far off that the match is lost, with slices that stand out. (A match that is
	// not lost ends elsewhere in the last digits.)
	known := realign.Exp(realign.Twist{W: [3]float64{0, -.6, 0}})
	known.T = [3]float64{-12, 30, 30}
	got := realign.PassFrom(g, data, 2, known, true)
	if got.Pose != scratch.Pose || got.Fit != scratch.Fit {
		t.Errorf("after %d iterations %v, fit %.10f; from scratch after %d %v, fit %.10f", got.Iterations, got.Pose, got.Fit, scratch.Iterations, scratch.Pose, scratch.Fit)
	}
}
