package phantom_test

import (
	"context"
	"fmt"

	"evenkeel/phantom"
)

// A still head with one region that swings at 0.05 Hz: two slices of one volume
// see it at different instants.
func Example() {
	tone := phantom.Tone{Freq: 0.05}
	s := &phantom.Scan{
		Head:       phantom.NewHead(1),
		N:          [3]int{1, 1, 4},
		NT:         1,
		Affine:     [16]float64{4, 0, 0, 0, 0, 4, 0, 0, 0, 0, 4, -6, 0, 0, 0, 1},
		TR:         2,
		SliceAxis:  2,
		SliceTimes: phantom.Interleaved(4, 2),
		Blobs:      []phantom.Blob{{SD: 100, Amplitude: 0.1, Course: tone.At}},
	}
	active, err := s.Simulate(context.Background(), 1)
	if err != nil {
		fmt.Println(err)
		return
	}
	s.Blobs = nil
	rest, err := s.Simulate(context.Background(), 1)
	if err != nil {
		fmt.Println(err)
		return
	}
	for k := range 4 {
		fmt.Printf("slice %d at %.1f s: %.1f %%\n", k, s.SliceTimes[k], 100*(active[k]/rest[k]-1))
	}
	// Output:
	// slice 0 at 0.0 s: 0.0 %
	// slice 1 at 1.0 s: 3.1 %
	// slice 2 at 0.5 s: 1.6 %
	// slice 3 at 1.5 s: 4.5 %
}
