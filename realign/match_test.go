package realign_test

import (
	"testing"

	"evenkeel/realign"
)

// A slab of few planes: a voxel that comes in at one pose and goes out at the next may
// send a match to and fro between the two. It ends all the same, and well before the
// last iteration that it is allowed.
func TestMatchesOfSlabsSettle(t *testing.T) {
	for _, nz := range []int{5, 6, 8} {
		g := axial([3]int{32, 32, nz}, [3]float64{6, 6, 5})
		for seed := range uint64(8) {
			iterations, converged := realign.RoughMatches(g, scan(t, g, randomPoses(seed, 10, 0.3, 0.3), 9, nil), 2)
			for n, ok := range converged {
				if !ok || iterations[n] > 22 {
					t.Errorf("%d slices, seed %d, volume %d: converged %v, %d iterations", nz, seed, n, ok, iterations[n])
				}
			}
		}
	}
}
