package sidecar

import (
	"fmt"
	"strings"
	"testing"

	"evenkeel/fault"
)

// harbour is an invented run: 4 slices along k, 6 volumes, 2 s.
var harbour = Geometry{File: "sub-gull/func/sub-gull_task-knots_bold.nii.gz", Size: [4]int{8, 10, 4, 6}, TRSec: 2, SliceDim: 3}

const leafName = "sub-gull/func/sub-gull_task-knots_bold.json"

// sound is a sidecar for harbour without any fault. with replaces or adds
// members, without removes them.
var sound = [][2]string{
	{"RepetitionTime", "2"},
	{"SliceTiming", "[0, 1, 0.5, 1.5]"},
	{"MRAcquisitionType", `"2D"`},
	{"PhaseEncodingDirection", `"j-"`},
	{"EffectiveEchoSpacing", "0.0005"},
	{"TotalReadoutTime", "0.0315"},
	{"ReconMatrixPE", "64"},
	{"EchoTime", "0.03"},
	{"MultibandAccelerationFactor", "1"},
	{"TaskName", `"knots"`},
}

// with builds a sidecar from sound and changes {key, raw}; raw "" removes. Each
// member stands on its own line, the first on line 2.
func with(changes ...[2]string) string {
	members := append([][2]string(nil), sound...)
	for _, c := range changes {
		at := -1
		for i, m := range members {
			if m[0] == c[0] {
				at = i
			}
		}
		switch {
		case at >= 0 && c[1] == "":
			members = append(members[:at], members[at+1:]...)
		case at >= 0:
			members[at][1] = c[1]
		case c[1] != "":
			members = append(members, c)
		}
	}
	var lines []string
	for _, m := range members {
		lines = append(lines, fmt.Sprintf("  %q: %s", m[0], m[1]))
	}
	return "{\n" + strings.Join(lines, ",\n") + "\n}\n"
}

func read(g Geometry, texts ...string) (*Acquisition, []fault.Fault) {
	var sources []Source
	for i, t := range texts {
		name := leafName
		if i < len(texts)-1 {
			name = fmt.Sprintf("level%d_bold.json", i)
		}
		sources = append(sources, Source{name, []byte(t)})
	}
	doc, faults := Merge(sources)
	acq, more := doc.Acquisition(g)
	return acq, append(faults, more...)
}

func list(faults []fault.Fault) string {
	if len(faults) == 0 {
		return "  none"
	}
	var b strings.Builder
	for _, f := range faults {
		fmt.Fprintf(&b, "  %s\n", f.Error())
	}
	return b.String()
}

// own is every identifier that this package raises; a fault test must show each.
var own = []string{
	"tr-missing", "tr-mismatch", "tr-unit", "tr-range", "volume-spacing", "timing-conflict",
	"slice-times-missing", "slice-times-count", "slice-times-unit", "slice-times-range", "slice-times-equal", "slice-spacing",
	"multiband-mismatch", "slice-axis-conflict", "phase-axis", "readout-mismatch", "three-dimensional", "private-field", "sidecar-syntax",
}

func TestSoundSidecarHasNoFault(t *testing.T) {
	acq, faults := read(harbour, with())
	if len(faults) > 0 {
		t.Fatalf("faults:\n%s", list(faults))
	}
	if got := fmt.Sprintln(acq.RepetitionTime, acq.SliceTimes, acq.SliceAxis, acq.PhaseAxis, acq.PhaseSign, acq.TotalReadoutTime,
		acq.EffectiveEchoSpacing, acq.EchoTime, acq.Multiband, acq.ThreeDimensional, acq.TaskName); got !=
		"2 [0 1 0.5 1.5] 2 1 -1 0.0315 0.0005 0.03 1 false knots\n" {
		t.Error(got)
	}
}
