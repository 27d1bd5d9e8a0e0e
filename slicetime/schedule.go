package slicetime

import (
	"fmt"
	"math"
	"slices"
)

// Schedule says when each slice of a volume is excited, in seconds from the
// volume's start.
type Schedule struct {
	Times []float64 // by slice index along Axis, increasing index
	Axis  int       // 0, 1, 2 = i, j, k
	TR    float64   // repetition time, s
}

// Shot is one excitation: slices excited at the same instant.
type Shot struct {
	Time   float64 // s from the volume's start: the time of its lowest slice
	Slices []int   // by increasing index
}

// sameInstant is how far apart (s) listed times of one excitation may stand.
// Lists print six digits or so; two excitations of slices cannot be nearer than
// the readout of one, about 20 ms (common practice), 200 times this.
const sameInstant = 1e-4

// Shots groups the slices by their instant, in order of time, slices of one shot
// by increasing index. Times within 0.1 ms of the first of a shot belong to it.
// Slices whose time is not a number (padding outside the acquired range) are in
// no shot.
func (s Schedule) Shots() []Shot {
	order := make([]int, 0, len(s.Times))
	for i, t := range s.Times {
		if !math.IsNaN(t) {
			order = append(order, i)
		}
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch ta, tb := s.Times[a], s.Times[b]; {
		case ta < tb:
			return -1
		case ta > tb:
			return 1
		}
		return 0
	})
	var shots []Shot
	start := 0.0
	for _, i := range order {
		t := s.Times[i]
		if len(shots) == 0 || t-start > sameInstant {
			shots = append(shots, Shot{})
			start = t
		}
		last := &shots[len(shots)-1]
		last.Slices = append(last.Slices, i)
	}
	for i := range shots {
		slices.Sort(shots[i].Slices)
		shots[i].Time = s.Times[shots[i].Slices[0]]
	}
	return shots
}

// Middle is halfway between the earliest and the latest slice time, in seconds
// from the volume's start; 0 for a schedule without slices.
func (s Schedule) Middle() float64 {
	first, last := math.Inf(1), math.Inf(-1)
	for _, t := range s.Times {
		if t < first {
			first = t
		}
		if t > last {
			last = t
		}
	}
	if first > last {
		return 0
	}
	return first + float64((last-first)/2)
}

// FromSliceCode returns the slice times (s) that a NIfTI header's slice_code
// would mean for n slices of which start to end (both included) were taken,
// duration seconds apart; slices outside have no time (NaN). Codes after
// nifti1.h, NIFTI_SLICE_*: 1 sequential increasing, 2 sequential decreasing,
// 3 and 4 alternating increasing and decreasing from the range's own end, 5 and
// 6 the same from the slice next to it.
//
// It serves to say in words what a header holds. It is never used in place of
// slice times that a sidecar does not give: no code can express slices taken
// together, and many files carry a code nobody checked.
//
// A code, range or duration outside the standard gives an [*ArgumentError].
func FromSliceCode(code, n, start, end int, duration float64) ([]float64, error) {
	if code < 1 || code > 6 {
		return nil, &ArgumentError{"slice_code", fmt.Sprint(code), "1 to 6"}
	}
	if start < 0 || end < start || end >= n {
		return nil, &ArgumentError{"slice_start to slice_end", fmt.Sprintf("%d to %d", start, end), fmt.Sprintf("a range within 0 to %d", n-1)}
	}
	if !(duration > 0) || math.IsInf(duration, 0) {
		return nil, &ArgumentError{"slice_duration", fmt.Sprintf("%g s", duration), "above zero (otherwise slice_code means nothing)"}
	}
	times := make([]float64, n)
	for i := range times {
		times[i] = math.NaN()
	}
	m := end - start + 1
	at := func(from, step int) (order []int) {
		for i := from; i < m; i += step {
			order = append(order, i)
		}
		return order
	}
	var order []int // positions from the end the pattern starts at
	switch code {
	case 1, 2:
		order = at(0, 1)
	case 3, 4:
		order = append(at(0, 2), at(1, 2)...)
	case 5, 6:
		order = append(at(1, 2), at(0, 2)...)
	}
	for shot, i := range order {
		if code%2 == 0 {
			i = m - 1 - i
		}
		times[start+i] = float64(shot) * duration
	}
	return times, nil
}
