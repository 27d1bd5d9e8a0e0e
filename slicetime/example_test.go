package slicetime_test

import (
	"context"
	"fmt"
	"math"

	"evenkeel/slicetime"
)

// Two shots of a four-slice volume, one second apart; every voxel follows the
// same swell of 20 s. Sampled at its own times each slice shows it at another
// phase; corrected, all read what a clock at the middle instant would.
func ExampleCorrect() {
	schedule := slicetime.Schedule{Times: []float64{0, 1, 0, 1}, Axis: 2, TR: 2}
	fmt.Println(schedule.Words())

	const nz, nt = 4, 60
	swell := func(sec float64) float64 { return 1000 + 10*math.Sin(2*math.Pi*sec/20) }
	data := make([]float32, nz*nt) // one voxel a slice
	for t := range nt {
		for z, tau := range schedule.Times {
			data[z+nz*t] = float32(swell(2*float64(t) + tau))
		}
	}
	ref := schedule.Middle()
	at := 30
	fmt.Printf("wanted    %.2f, at %.1f s of each volume\n", swell(2*float64(at)+ref), ref)
	fmt.Printf("sampled   %.2f\n", data[nz*at:nz*at+nz])
	if err := slicetime.Correct(context.Background(), data, 1, 1, nz, nt, schedule, ref, slicetime.Options{}, 1); err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("corrected %.2f\n", data[nz*at:nz*at+nz])
	// Output:
	// multiband 2 (slices 2 apart), sequential ascending within each block of 2 slices, 2 excitations, 1 s apart, no pause between volumes
	// wanted    1001.56, at 0.5 s of each volume
	// sampled   [1000.00 1003.09 1000.00 1003.09]
	// corrected [1001.56 1001.56 1001.56 1001.56]
}

// A NIfTI header's slice_code in words: what a header says is shown to people,
// and never used in place of times that a sidecar does not give. The worked
// example of nifti1.h: 7 slices of which 1 to 5 were taken, 0.1 s apart.
func ExampleFromSliceCode() {
	for code := 1; code <= 6; code++ {
		times, err := slicetime.FromSliceCode(code, 7, 1, 5, 0.1)
		if err != nil {
			fmt.Println(err)
			return
		}
		fmt.Printf("%d %.1f %s\n", code, times, slicetime.Schedule{Times: times, Axis: 2}.Words())
	}
	// Output:
	// 1 [NaN 0.0 0.1 0.2 0.3 0.4 NaN] sequential ascending, 5 excitations, 0.1 s apart, 2 of 7 slices without a time
	// 2 [NaN 0.4 0.3 0.2 0.1 0.0 NaN] sequential descending, 5 excitations, 0.1 s apart, 2 of 7 slices without a time
	// 3 [NaN 0.0 0.3 0.1 0.4 0.2 NaN] interleaved ascending, even slices first (2nd, 4th, 6th), 5 excitations, 0.1 s apart, 2 of 7 slices without a time
	// 4 [NaN 0.2 0.4 0.1 0.3 0.0 NaN] interleaved descending, even slices first (6th, 4th, 2nd), 5 excitations, 0.1 s apart, 2 of 7 slices without a time
	// 5 [NaN 0.2 0.0 0.3 0.1 0.4 NaN] interleaved ascending, odd slices first (3rd, 5th), 5 excitations, 0.1 s apart, 2 of 7 slices without a time
	// 6 [NaN 0.4 0.1 0.3 0.0 0.2 NaN] interleaved descending, odd slices first (5th, 3rd), 5 excitations, 0.1 s apart, 2 of 7 slices without a time
}

func ExampleShifter_Shift() {
	late := []float32{10, 12, 11, 13, 12, 14}
	// Samples taken 0.5 s into volumes of 2 s, wanted at their start.
	s := slicetime.NewShifter(len(late), (0-0.5)/2, slicetime.Options{})
	fmt.Printf("%.2f\n", s.Shift(nil, late))
	// Output:
	// [9.80 11.79 11.04 12.64 12.18 13.46]
}
