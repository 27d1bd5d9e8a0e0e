package sidecar

import (
	"fmt"
	"math"
)

const (
	// sameReadout is the relative difference up to which rounding may explain
	// TotalReadoutTime against the echo spacing: files print either to three digits or more.
	sameReadout = 0.01
	// longestReadout is where the standard's validator warns that TotalReadoutTime
	// is probably in milliseconds (BIDS schema 1.11.1, rules/checks).
	longestReadout = 10.0
)

// phase reads the phase-encode direction, along an array axis; without a sign
// it runs from index 0 upward (BIDS, PhaseEncodingDirection).
func (r *reading) phase() {
	const key = "PhaseEncodingDirection"
	word, ok := r.text(key)
	if !ok {
		return
	}
	axis, sign, ok := direction(word)
	if !ok {
		r.refuse(key, "phase-axis", describeDirection(word, r.doc.values[key].raw()), directionWords,
			"write the array axis of the phase encoding, with - if it runs from the highest index down")
		return
	}
	// In 3-D a second phase encoding runs along the slice axis, and that is no
	// contradiction.
	if axis == r.acq.SliceAxis && !r.acq.ThreeDimensional {
		from := "by default, neither SliceEncodingDirection nor dim_info saying otherwise"
		if r.used["SliceEncodingDirection"] {
			from = "by SliceEncodingDirection, " + r.fileOf("SliceEncodingDirection")
		} else if r.geo.SliceDim >= 1 && r.geo.SliceDim <= 3 {
			from = "by dim_info of " + r.geo.File
		}
		r.refuse(key, "phase-axis", fmt.Sprintf("%q, which is along the slice axis (%s: %s)", word, axisNames[axis], from),
			"an axis within the slices", "correct the phase-encode direction, or the slice axis with SliceEncodingDirection")
		return
	}
	r.use(key)
	r.acq.PhaseAxis, r.acq.PhaseSign = axis, sign
}

// readout checks TotalReadoutTime = EffectiveEchoSpacing (ReconMatrixPE - 1)
// (BIDS, MRI page, "In-plane spatial encoding").
func (r *reading) readout() {
	spacing, haveSpacing := r.readoutTime("EffectiveEchoSpacing")
	total, haveTotal := r.readoutTime("TotalReadoutTime")
	if haveSpacing {
		r.use("EffectiveEchoSpacing")
		r.acq.EffectiveEchoSpacing = spacing
	}
	if haveTotal {
		r.use("TotalReadoutTime")
		r.acq.TotalReadoutTime = total
	}
	if !haveSpacing || !haveTotal {
		return
	}
	const key = "TotalReadoutTime"
	totalRaw, spacingRaw := showNumber(r.doc.values[key].raw()), showNumber(r.doc.values["EffectiveEchoSpacing"].raw())
	remedy := "correct the one that is wrong; TotalReadoutTime is not the physical length of the echo train"
	lines, linesRaw, ok := r.number("ReconMatrixPE")
	if ok && finite(lines) && lines >= 2 && lines == math.Trunc(lines) {
		r.use("ReconMatrixPE")
		want := float64(spacing * (lines - 1))
		if math.Abs(total-want) > float64(sameReadout*want)+float64(rounding*want) {
			r.warn(key, "readout-mismatch",
				fmt.Sprintf("%s s, while EffectiveEchoSpacing %s s (%s) x (ReconMatrixPE %s - 1) is %s s", totalRaw, spacingRaw, r.fileOf("EffectiveEchoSpacing"), showNumber(linesRaw), show(want)),
				"the same within 1 %", remedy)
		}
		return
	}
	if spacing >= total {
		r.warn(key, "readout-mismatch", fmt.Sprintf("%s s, not above EffectiveEchoSpacing %s s (%s)", totalRaw, spacingRaw, r.fileOf("EffectiveEchoSpacing")),
			"a readout longer than one echo spacing", remedy)
	}
}

// readoutTime reads a time that must be above zero and not in milliseconds; a
// value that is neither is warned of and left out.
func (r *reading) readoutTime(key string) (float64, bool) {
	x, raw, ok := r.number(key)
	switch {
	case !ok:
		return 0, false
	case !finite(x) || x <= 0:
		r.warn(key, "readout-mismatch", showNumber(raw), "a number of seconds above zero", "write the true value, or remove the field; it is not used as it stands")
		return 0, false
	case x > longestReadout:
		r.warn(key, "readout-mismatch", showNumber(raw)+": this looks like milliseconds", fmt.Sprintf("seconds, below %s", show(longestReadout)),
			fmt.Sprintf("divide by 1000: %s s; it is not used as it stands", show(x/1000)))
		return 0, false
	}
	return x, true
}
