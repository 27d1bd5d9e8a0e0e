package sidecar

// Volume timing. The legal combinations of BIDS (MRI page, "Timing parameters";
// RT RepetitionTime, VT VolumeTiming, ST SliceTiming, DT DelayTime, FAD
// FrameAcquisitionDuration, AD AcquisitionDuration):
//
//	A  RT            without FAD, VT
//	B  VT and ST     without RT, DT
//	C  VT and FAD    without RT, DT
//	D  RT and ST     without FAD, VT
//	E  RT and DT     without FAD, VT
//
// AD is the duration of the whole scan. Its old meaning, the duration of one
// volume, is deprecated; since one number cannot say which was meant it is never
// read as either, and in place of FAD it does not make VT complete.

import (
	"fmt"
	"math"
	"strconv"
)

const (
	// sameTR is how far RepetitionTime and pixdim[4] may lie apart (BIDS: 0.001 s).
	sameTR = 1e-3
	// rounding allows for what a decimal in the file loses on its way: pixdim[4] is
	// single precision (4e-7 s off at 10 s), and differences of decimals are inexact.
	rounding = 1e-6
	// fewestMilliseconds is the repetition time from which on the standard's
	// validator suspects milliseconds; no EPI volume takes that many seconds.
	fewestMilliseconds = 100.0
	// thousandfold is how near the ratio to the header must come to 1000. One per
	// cent covers a header rounded to a few digits, and no other cause gives such a ratio.
	thousandfold = 0.01
	// equalOnsets is how far an onset may lie from an even spacing. At 1 ms, the
	// standard's own tolerance for the repetition time, a sample of a 0.1 Hz signal
	// is off by at most 2 pi 0.1 0.001 = 0.06 % of its amplitude, below the noise of
	// any EPI series; scanners round onsets to 2.5 ms at worst and mostly far finer.
	equalOnsets = 1e-3
)

func (r *reading) repetition() {
	hasTR, hasVT := r.has("RepetitionTime"), r.has("VolumeTiming")
	if r.geo.TRSec > 0 && finite(r.geo.TRSec) {
		r.span, r.spanName = r.geo.TRSec, "the header's repetition time"
	}
	switch {
	case hasTR && hasVT:
		r.refuse("VolumeTiming", "timing-conflict",
			fmt.Sprintf("VolumeTiming (%s) together with RepetitionTime (%s)", r.fileOf("VolumeTiming"), r.fileOf("RepetitionTime")),
			"one of the two: each says when volumes begin",
			"remove RepetitionTime if volumes are unevenly spaced, else VolumeTiming; mind files higher up, whose keys apply too")
		r.repetitionTime()
	case hasTR:
		r.repetitionTime()
		if r.has("FrameAcquisitionDuration") {
			r.refuse("FrameAcquisitionDuration", "timing-conflict",
				fmt.Sprintf("FrameAcquisitionDuration together with RepetitionTime (%s)", r.fileOf("RepetitionTime")),
				"FrameAcquisitionDuration with VolumeTiming only",
				"remove FrameAcquisitionDuration; if volumes are separated by pauses, give DelayTime")
		}
	case hasVT:
		r.volumeTiming()
	default:
		found := "neither RepetitionTime nor VolumeTiming"
		if len(r.doc.files) == 0 {
			found = "no sidecar for this run"
		}
		found += r.misspelt("RepetitionTime")
		remedy := "add RepetitionTime in seconds"
		if r.span > 0 {
			remedy = fmt.Sprintf("add RepetitionTime in seconds (the header holds %s s: write that if it is true)", show(r.span))
		}
		r.refuse("RepetitionTime", "tr-missing", found, "RepetitionTime or VolumeTiming", remedy)
	}
	r.delay(hasVT)
}

// milliseconds says whether a time between volumes was written in milliseconds.
func (r *reading) milliseconds(x float64) bool {
	if x >= fewestMilliseconds {
		return true
	}
	h := r.geo.TRSec
	return h > 0 && finite(h) && math.Abs(x/h/1000-1) <= thousandfold
}

// repetitionTime raises at most one fault about the value of RepetitionTime.
func (r *reading) repetitionTime() {
	const key = "RepetitionTime"
	tr, raw, ok := r.number(key)
	if !ok {
		return
	}
	if !finite(tr) || tr <= 0 {
		r.refuse(key, "tr-range", showNumber(raw), "a number of seconds above zero", "write the time from the start of one volume to the start of the next")
		return
	}
	if r.milliseconds(tr) {
		r.trUnit(key, showNumber(raw), tr)
		return
	}
	r.use(key)
	r.acq.RepetitionTime = tr
	r.span, r.spanName = tr, "RepetitionTime"
	r.holdAgainstHeader(key, showNumber(raw)+" s", tr)
}

func (r *reading) trUnit(key, found string, tr float64) {
	expected := fmt.Sprintf("seconds, below %s", show(fewestMilliseconds))
	remedy := fmt.Sprintf("divide by 1000: %s s", show(tr/1000))
	if key == "VolumeTiming" {
		remedy = "divide every onset by 1000"
	}
	if h := r.geo.TRSec; h > 0 && finite(h) {
		found += fmt.Sprintf(", while pixdim[4] of %s is %s s", r.geo.File, show(h))
		r.span, r.spanName = h, "the header's repetition time"
		if tr < fewestMilliseconds {
			expected = "the header's value, in seconds"
			remedy += "; if instead the sidecar is right, the header's time unit (xyzt_units) is wrong: correct it"
		}
	} else {
		r.span, r.spanName, r.spanSupposed = tr/1000, "the repetition time read as milliseconds", true
	}
	r.refuse(key, "tr-unit", found+": this looks like milliseconds", expected, remedy)
}

func (r *reading) holdAgainstHeader(key, found string, tr float64) {
	h := r.geo.TRSec
	if !(h > 0) || !finite(h) || math.Abs(tr-h) <= sameTR+rounding {
		return
	}
	remedy := "correct the one that is wrong; to go on with the sidecar's value, give --accept tr-mismatch"
	if math.Abs(h/tr/1000-1) <= thousandfold {
		remedy = "the header looks like milliseconds marked as seconds: correct its xyzt_units, or give --accept tr-mismatch to go on with the sidecar's value"
	}
	r.refuse(key, "tr-mismatch", fmt.Sprintf("%s, while pixdim[4] of %s is %s s", found, r.geo.File, show(h)),
		fmt.Sprintf("the same within %s s", show(sameTR)), remedy)
}

// volumeTiming reads onsets that stand in place of RepetitionTime.
func (r *reading) volumeTiming() {
	const key = "VolumeTiming"
	r.span, r.spanName = 0, ""
	if !r.has("SliceTiming") && !r.has("FrameAcquisitionDuration") {
		remedy := "add SliceTiming, or FrameAcquisitionDuration (the time one volume takes)"
		if r.has("AcquisitionDuration") {
			remedy += "; AcquisitionDuration is the duration of the whole scan and cannot stand for it"
		}
		r.refuse(key, "timing-conflict", "VolumeTiming with neither SliceTiming nor FrameAcquisitionDuration",
			"VolumeTiming with SliceTiming or FrameAcquisitionDuration", remedy)
		r.timesWanted = true
	}
	onsets, raws, ok := r.numbers(key)
	if !ok {
		return
	}
	nt := r.geo.Size[3]
	if len(onsets) == 0 || nt > 0 && len(onsets) != nt {
		expected := "one onset a volume"
		if nt > 0 {
			expected = fmt.Sprintf("%d, one a volume of %s", nt, r.geo.File)
		}
		r.refuse(key, "timing-conflict", count(len(onsets), "onset"), expected, "give the onset of every volume in the file, and of no other")
		return
	}
	shortest, longest, longestAt := math.Inf(1), 0.0, 0
	for i, t := range onsets {
		switch {
		case !finite(t) || t < 0:
			r.refuse(key, "timing-conflict", fmt.Sprintf("onset %d of %d is %s", i+1, len(onsets), showNumber(raws[i])),
				"onsets at or above zero", "write each onset in seconds from the start of the scan")
			return
		case i > 0 && t <= onsets[i-1]:
			r.refuse(key, "timing-conflict", fmt.Sprintf("onset %d is %s, after %s", i+1, showNumber(raws[i]), showNumber(raws[i-1])),
				"onsets that increase", "sort and correct the onsets; volumes must stand in the order of their time")
			return
		case i > 0:
			step := t - onsets[i-1]
			shortest = min(shortest, step)
			if step > longest {
				longest, longestAt = step, i
			}
		}
	}
	if len(onsets) > 1 {
		// Even spacing is judged by the onsets, not by the intervals: many small
		// differences of one sign would add up unseen.
		common := (onsets[len(onsets)-1] - onsets[0]) / float64(len(onsets)-1)
		equal := true
		for i, t := range onsets {
			at := onsets[0] + float64(common*float64(i))
			equal = equal && math.Abs(t-at) <= equalOnsets+rounding
		}
		// The file holds decimals: a nanosecond is far below their last digit and
		// far above what the subtraction and division lost.
		common = math.Round(common*1e9) / 1e9
		if equal && r.milliseconds(common) {
			r.trUnit(key, fmt.Sprintf("onsets %s s apart", show(common)), common)
			return
		}
		if shortest >= fewestMilliseconds {
			r.trUnit(key, fmt.Sprintf("onsets at least %s s apart", show(shortest)), shortest)
			return
		}
		r.span, r.spanName = shortest, "the shortest interval of VolumeTiming"
		if equal {
			r.acq.RepetitionTime = common
			r.span, r.spanName = common, "the interval of VolumeTiming"
			r.holdAgainstHeader(key, "onsets "+show(common)+" s apart", common)
		} else {
			r.acq.UnequalOnsets = true
			r.refuse(key, "volume-spacing",
				fmt.Sprintf("intervals from %s to %s s (the longest before volume %d of %d)", show(shortest), show(longest), longestAt+1, len(onsets)),
				fmt.Sprintf("onsets evenly spaced within %s s", show(equalOnsets)),
				"give --time none: no kernel for unequal spacing is offered")
		}
	}
	r.use(key)
	r.acq.VolumeOnsets = onsets
	r.frameDuration()
}

// frameDuration checks the duration of one volume against the shortest interval.
func (r *reading) frameDuration() {
	const key = "FrameAcquisitionDuration"
	d, raw, ok := r.number(key)
	if !ok {
		return
	}
	switch {
	case !finite(d) || d <= 0:
		r.refuse(key, "timing-conflict", showNumber(raw), "a number of seconds above zero", "write how long one volume takes")
	case r.span > 0 && d > r.span+equalOnsets:
		r.refuse(key, "timing-conflict", fmt.Sprintf("%s s, longer than %s (%s s)", showNumber(raw), r.spanName, show(r.span)),
			"a volume that ends before the next begins", "correct the one that is wrong; both are in seconds (divide milliseconds by 1000)")
	default:
		r.use(key)
		r.acq.FrameDuration = d
	}
}

func (r *reading) delay(hasVT bool) {
	const key = "DelayTime"
	if !r.has(key) {
		return
	}
	d, raw, ok := r.number(key)
	tr := r.acq.RepetitionTime
	switch {
	case !ok:
	case hasVT && !r.has("RepetitionTime"):
		r.refuse(key, "timing-conflict", fmt.Sprintf("DelayTime together with VolumeTiming (%s)", r.fileOf("VolumeTiming")),
			"DelayTime with RepetitionTime only", "remove DelayTime: VolumeTiming says when each volume begins")
	case !finite(d) || d < 0:
		r.refuse(key, "timing-conflict", showNumber(raw), "a pause of zero or more seconds", "write the pause at the end of each volume, or remove the field")
	case tr > 0 && d >= tr:
		remedy := "correct the one that is wrong: the pause is a part of the repetition time"
		if d/1000 < tr && d >= 10*tr {
			remedy = "DelayTime looks like milliseconds: divide by 1000 (" + strconv.FormatFloat(d/1000, 'g', 7, 64) + " s)"
		}
		r.refuse(key, "timing-conflict", fmt.Sprintf("%s s, not below the repetition time of %s s", showNumber(raw), show(tr)),
			"a pause shorter than the repetition time", remedy)
	default:
		r.use(key)
		r.acq.DelayTime = d
	}
}
