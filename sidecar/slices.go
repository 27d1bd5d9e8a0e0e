package sidecar

// Slice timing. SliceTiming is times, not an order: one a slice, in seconds
// from the start of the volume (BIDS, MRI page, "Timing parameters").

import (
	"fmt"
	"math"
	"slices"
	"strconv"
)

const (
	// sameInstant is how far two slices of one excitation may lie apart in a file.
	// Converters print six significant digits, whose last is 1e-5 above 1 s; two
	// values for one instant may round apart by that. The shortest excitations are
	// milliseconds apart, so nothing else is joined.
	sameInstant = 2e-5
	// fastestSlice is how near two single-shot excitations can follow each other:
	// pulse, echo time and half a readout of 20 ms or more at 3 T (common practice,
	// from memory).
	fastestSlice = 0.020
	// A list in milliseconds exceeds the repetition time in seconds by a factor of
	// 1000 times the share of the volume that its last slice begins after. At ten
	// times that share is 1 %, less than any series' acquisition; a list in seconds
	// held against a wrong repetition time seldom goes that far.
	millisecondFactor = 10.0
	// fewestMillisecondsASlice: read as milliseconds, a list must leave at least
	// this for each slice. Even eight slices at once (common practice) every 20 ms
	// leave 2.5.
	fewestMillisecondsASlice = 1.0
)

// sliceAxis settles the slice axis: SliceEncodingDirection, else dim_info (an
// explicit statement of the header outweighs a default), else k.
func (r *reading) sliceAxis() {
	const key = "SliceEncodingDirection"
	word, ok := r.text(key)
	if !ok {
		return
	}
	axis, _, ok := direction(word)
	if !ok {
		v := r.doc.values[key]
		r.wrongTypeAt(key, v.place(), describeDirection(word, v.raw()), directionWords,
			"write the array axis along which slices are counted, with - if the first time belongs to the last slice")
		return
	}
	r.use(key)
	header := r.acq.SliceAxis
	r.acq.SliceAxis = axis
	if dim := r.geo.SliceDim; !r.acq.ThreeDimensional && dim >= 1 && dim <= 3 && header != axis {
		r.refuse(key, "slice-axis-conflict",
			fmt.Sprintf("%q, while dim_info of %s has slices along %s", word, r.geo.File, axisNames[header]),
			"one slice axis", "correct the one that is wrong; to go on with the sidecar's axis, give --accept slice-axis-conflict")
	}
}

// reversed says whether the first slice time belongs to the last slice.
func (r *reading) reversed() bool {
	_, j, ok := r.get("SliceEncodingDirection")
	if !ok {
		return false
	}
	_, sign, ok := direction(j.Str)
	return ok && sign < 0
}

func (r *reading) sliceTimes() {
	const key = "SliceTiming"
	if r.acq.ThreeDimensional {
		r.multibandValue()
		return
	}
	if !r.has(key) {
		r.multibandValue()
		if !r.timesWanted {
			r.refuse(key, "slice-times-missing", "a 2-D series without SliceTiming"+r.misspelt(key), "the time of every slice",
				"add SliceTiming from the scanner's own files, or give --time none; it is never guessed from an order")
		}
		return
	}
	times, raws, ok := r.numbers(key)
	if !ok {
		r.multibandValue()
		return
	}
	sound := r.sliceCount(len(times))
	// Count and unit are different mistakes and both are told; unit and range are
	// readings of the same numbers and only one is.
	if !r.sliceValues(times, raws) {
		sound = false
	}
	// An axis that could not be read leaves the order unknown.
	if r.bad["SliceEncodingDirection"] || r.doc.values["SliceEncodingDirection"].ambiguous {
		sound = false
	}
	if !sound {
		r.multibandValue()
		return
	}
	r.use(key)
	if r.reversed() {
		// BIDS, SliceEncodingDirection: "-" reverses the list, its first entry is the
		// slice of the highest index.
		slices.Reverse(times)
	}
	r.acq.SliceTimes = times
	r.schedule()
}

func (r *reading) sliceCount(n int) bool {
	const key = "SliceTiming"
	size := r.geo.Size
	axis := r.acq.SliceAxis
	want := size[axis]
	if n == want && n > 0 || n > 0 && want < 1 {
		return true
	}
	why := "by default"
	if r.used["SliceEncodingDirection"] {
		why = "by SliceEncodingDirection"
	} else if r.geo.SliceDim >= 1 && r.geo.SliceDim <= 3 {
		why = "by dim_info"
	}
	remedy := "give the time of every slice in the file, and of no other"
	for other := range 3 {
		if other != axis && n == size[other] && n > 0 {
			remedy = fmt.Sprintf("if slices are stacked along %s, where the count fits, say so in SliceEncodingDirection (%q or %q); else %s",
				axisNames[other], axisNames[other], axisNames[other]+"-", remedy)
			break
		}
	}
	r.refuse(key, "slice-times-count", count(n, "time"),
		fmt.Sprintf("%d, one a slice of %s along %s (the slice axis %s)", max(want, 1), r.geo.File, axisNames[axis], why), remedy)
	return false
}

// sliceValues raises at most one fault: what is no time at all, else the unit,
// else what lies above the repetition time.
func (r *reading) sliceValues(times []float64, raws []string) bool {
	const key = "SliceTiming"
	n := len(times)
	if n == 0 {
		return false
	}
	wrong, first, last := 0, -1, 0
	for i, t := range times {
		if !finite(t) || t < 0 {
			if wrong++; first < 0 {
				first = i
			}
		}
		if t > times[last] {
			last = i
		}
	}
	if wrong > 0 {
		found := fmt.Sprintf("entry %d of %d is %s", first+1, n, showNumber(raws[first]))
		if wrong > 1 {
			found += fmt.Sprintf(" (%d such entries)", wrong)
		}
		r.refuse(key, "slice-times-range", found, "times at or above zero, from the start of the volume", "take the times from the scanner's own files")
		return false
	}
	longest := times[last]
	aSlice := longest / float64(max(n-1, 1))
	unit := false
	if r.span > 0 {
		unit = longest >= millisecondFactor*r.span && longest/1000 <= r.span+rounding && aSlice >= fewestMillisecondsASlice
	} else {
		unit = longest >= fewestMilliseconds
	}
	if unit {
		found := fmt.Sprintf("a list of %s up to %s: this looks like milliseconds", count(n, "time"), showNumber(raws[last]))
		expected := "seconds"
		if r.span > 0 {
			expected = fmt.Sprintf("seconds, at most %s s (%s)", show(r.span), r.spanName)
		}
		r.refuse(key, "slice-times-unit", found, expected, fmt.Sprintf("divide every entry by 1000 (the largest is then %s s)", show(longest/1000)))
		return false
	}
	// No tolerance but for rounding: the last slice of a volume begins a whole
	// readout before the repetition time is over, so a scanner's own rounding never
	// brings it there.
	if r.span > 0 && !r.spanSupposed && longest > r.span+rounding {
		above := 0
		for _, t := range times {
			if t > r.span+rounding {
				above++
			}
		}
		r.refuse(key, "slice-times-range",
			fmt.Sprintf("entry %d of %d is %s s, above %s (%s s); %d of %d entries are", last+1, n, showNumber(raws[last]), r.spanName, show(r.span), above, n),
			fmt.Sprintf("times from 0 to %s s", show(r.span)),
			"correct the one that is wrong; both are in seconds")
		return false
	}
	return true
}

// shot is one excitation: the slices of one instant.
type shot struct {
	time   float64
	slices []int // increasing
}

func shots(times []float64) []shot {
	order := make([]int, len(times))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case times[a] < times[b]:
			return -1
		case times[a] > times[b]:
			return 1
		}
		return 0
	})
	var out []shot
	for _, i := range order {
		if n := len(out); n > 0 && times[i]-out[n-1].time <= sameInstant {
			out[n-1].slices = append(out[n-1].slices, i)
			continue
		}
		out = append(out, shot{times[i], []int{i}})
	}
	for _, s := range out {
		slices.Sort(s.slices)
	}
	return out
}

// schedule looks for what a sound list of times makes implausible.
func (r *reading) schedule() {
	const key = "SliceTiming"
	times := r.acq.SliceTimes
	ex := shots(times)
	factor, known := r.multibandValue()
	if len(ex) == 1 {
		if len(times) > 1 {
			r.warn(key, "slice-times-equal", fmt.Sprintf("%d times, all %s s", len(times), show(times[0])), "times that differ, unless all slices are excited at once",
				"check the list: as it stands there is no slice timing to correct")
		}
		return
	}
	r.spacing(ex)
	if known {
		r.multiband(ex, factor)
	}
}

// spacing warns of excitations nearer to each other than a slice can be read,
// the first of the next volume after the last of this one included.
func (r *reading) spacing(ex []shot) {
	nearest, at, near := math.Inf(1), -1, 0
	axis := axisNames[r.acq.SliceAxis]
	for i := 1; i < len(ex); i++ {
		gap := ex[i].time - ex[i-1].time
		if gap < fastestSlice-rounding {
			near++
		}
		if gap < nearest {
			nearest, at = gap, i
		}
	}
	if tr := r.acq.RepetitionTime; tr > 0 {
		gap := tr - ex[len(ex)-1].time + ex[0].time
		if gap < fastestSlice-rounding {
			near++
		}
		if gap < nearest {
			nearest, at = gap, len(ex)
		}
	}
	if near == 0 {
		return
	}
	before, then := ex[at-1], ex[at%len(ex)]
	next := ""
	if at == len(ex) {
		next = " of the next volume"
	}
	r.warn("SliceTiming", "slice-spacing",
		fmt.Sprintf("%s s between slice %s=%d (%s s) and slice %s=%d%s (%s s); %d of %d excitations follow so closely", show(nearest),
			axis, before.slices[0], show(before.time), axis, then.slices[0], next, show(then.time), near, len(ex)),
		fmt.Sprintf("about %s s or more, which a single-shot slice takes", show(fastestSlice)),
		"check unit and values of SliceTiming and of the repetition time; a multi-shot or very fast sequence may be right")
}

// multibandValue reads the factor. It is known when it is a whole number above
// zero; any other number is left to be found against the slice times.
func (r *reading) multibandValue() (factor float64, known bool) {
	const key = "MultibandAccelerationFactor"
	m, _, ok := r.number(key)
	if !ok {
		return 0, false
	}
	// 1024 is far above any coil; the bound keeps the conversion to int exact.
	if m >= 1 && m <= 1024 && m == math.Trunc(m) {
		r.use(key)
		r.acq.Multiband = int(m)
	}
	return m, true
}

func (r *reading) multiband(ex []shot, factor float64) {
	const key = "MultibandAccelerationFactor"
	fewest, most := math.MaxInt, 0
	for _, s := range ex {
		fewest, most = min(fewest, len(s.slices)), max(most, len(s.slices))
	}
	if fewest == most && float64(most) == factor {
		return
	}
	simultaneous := strconv.Itoa(most)
	if fewest != most {
		simultaneous = fmt.Sprintf("%d to %d", fewest, most)
	}
	v := r.doc.values[key]
	r.warn(key, "multiband-mismatch",
		fmt.Sprintf("%s, while SliceTiming (%s) has %s slices an excitation", showNumber(v.raw()), r.fileOf("SliceTiming"), simultaneous),
		"the number of slices that share each time", "correct the one that is wrong; slice timing is corrected by SliceTiming, whatever the factor")
}
