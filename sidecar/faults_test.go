package sidecar

import (
	"strings"
	"testing"

	"evenkeel/fault"
)

func geo(change func(*Geometry)) *Geometry {
	g := harbour
	change(&g)
	return &g
}

// Every case names the faults expected, all of them and in order; text pieces
// are looked for in the first one's line.
var faultCases = []struct {
	name    string
	sidecar string
	geo     *Geometry // nil: harbour
	ids     string    // space-separated
	field   string
	text    []string
}{
	// tr-*
	{"no repetition time", with([2]string{"RepetitionTime", ""}), nil, "tr-missing", "RepetitionTime",
		[]string{leafName, "neither RepetitionTime nor VolumeTiming", "the header holds 2 s"}},
	{"no repetition time anywhere", with([2]string{"RepetitionTime", ""}), geo(func(g *Geometry) { g.TRSec = 0 }), "tr-missing", "RepetitionTime",
		[]string{"add RepetitionTime in seconds"}},
	{"repetition time in wrong case", with([2]string{"RepetitionTime", ""}, [2]string{"repetitionTime", "2"}), nil, "tr-missing", "RepetitionTime",
		[]string{"there is repetitionTime, but keys are case-sensitive"}},
	{"mismatch", with([2]string{"RepetitionTime", "2.50"}), nil, "tr-mismatch", "RepetitionTime",
		[]string{leafName, "found 2.50 s, while pixdim[4] of " + harbour.File + " is 2 s", "within 0.001 s", "accept tr-mismatch"}},
	{"mismatch by 1.1 ms", with([2]string{"RepetitionTime", "2.0011"}), nil, "tr-mismatch", "RepetitionTime", nil},
	{"header in milliseconds", with(), geo(func(g *Geometry) { g.TRSec = 2000 }), "tr-mismatch", "RepetitionTime", []string{"xyzt_units"}},
	{"milliseconds", with([2]string{"RepetitionTime", "2000"}), nil, "tr-unit", "RepetitionTime",
		[]string{"found 2000", "looks like milliseconds", "divide by 1000: 2 s"}},
	{"milliseconds below 100", with([2]string{"RepetitionTime", "72"}, [2]string{"SliceTiming", "[0, 0, 0, 0]"}, [2]string{"MultibandAccelerationFactor", "4"}),
		geo(func(g *Geometry) { g.TRSec = 0.072 }), "tr-unit slice-times-equal", "RepetitionTime", []string{"found 72", "0.072 s", "divide by 1000"}},
	{"a hundred", with([2]string{"RepetitionTime", "100"}), geo(func(g *Geometry) { g.TRSec = 0 }), "tr-unit", "RepetitionTime", []string{"found 100:"}},
	{"everything in milliseconds", with([2]string{"RepetitionTime", "2000"}, [2]string{"SliceTiming", "[0, 1000, 500, 1500]"}), geo(func(g *Geometry) { g.TRSec = 0 }),
		"tr-unit slice-times-unit", "RepetitionTime", nil},
	{"zero", with([2]string{"RepetitionTime", "0.0"}), nil, "tr-range", "RepetitionTime", []string{"found 0.0", "above zero"}},
	{"negative", with([2]string{"RepetitionTime", "-2000"}), nil, "tr-range", "RepetitionTime", []string{"found -2000"}},
	{"a number without end", with([2]string{"RepetitionTime", "-" + strings.Repeat("7", 500)}), nil, "tr-range", "RepetitionTime", []string{"found -" + strings.Repeat("7", 39) + "..., expected"}},
	{"not finite", with([2]string{"RepetitionTime", "1e999"}), nil, "tr-range", "RepetitionTime", []string{"found 1e999"}},

	// VolumeTiming
	{"unequal intervals", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8.5, 10.5]"}), nil, "volume-spacing", "VolumeTiming",
		[]string{"intervals from 2 to 2.5 s (the longest before volume 5 of 6)", "--time none"}},
	{"a slow drift of intervals", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2.0000, 4.0009, 6.0027, 8.0054, 10.0090]"}), nil, "volume-spacing", "VolumeTiming", nil},
	{"both", with([2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}), nil, "timing-conflict", "VolumeTiming", []string{"VolumeTiming (" + leafName + ") together with RepetitionTime"}},
	{"not increasing", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2, 2.0, 6, 8, 10]"}), nil, "timing-conflict", "VolumeTiming", []string{"onset 3 is 2.0, after 2"}},
	{"wrong length", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2, 4]"}), nil, "timing-conflict", "VolumeTiming", []string{"found 3 onsets, expected 6"}},
	{"empty", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[]"}), nil, "timing-conflict", "VolumeTiming", []string{"found 0 onsets"}},
	{"negative onset", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[-1, 2, 4, 6, 8, 10]"}), nil, "timing-conflict", "VolumeTiming", []string{"onset 1 of 6 is -1"}},
	{"neither slice times nor duration", with([2]string{"RepetitionTime", ""}, [2]string{"SliceTiming", ""}, [2]string{"AcquisitionDuration", "12"}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}),
		nil, "timing-conflict", "VolumeTiming", []string{"neither SliceTiming nor FrameAcquisitionDuration", "AcquisitionDuration is the duration of the whole scan"}},
	{"delay with onsets", with([2]string{"RepetitionTime", ""}, [2]string{"DelayTime", "0.1"}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}), nil, "timing-conflict", "DelayTime", nil},
	{"duration with repetition time", with([2]string{"FrameAcquisitionDuration", "1.9"}), nil, "timing-conflict", "FrameAcquisitionDuration", nil},
	{"duration above interval", with([2]string{"RepetitionTime", ""}, [2]string{"FrameAcquisitionDuration", "2.5"}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}),
		nil, "timing-conflict", "FrameAcquisitionDuration", []string{"2.5 s, longer than the interval of VolumeTiming (2 s)"}},
	{"duration zero", with([2]string{"RepetitionTime", ""}, [2]string{"FrameAcquisitionDuration", "0"}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}), nil, "timing-conflict", "FrameAcquisitionDuration", nil},
	{"delay negative", with([2]string{"DelayTime", "-0.5"}), nil, "timing-conflict", "DelayTime", []string{"found -0.5"}},
	{"delay too long", with([2]string{"DelayTime", "2"}), nil, "timing-conflict", "DelayTime", []string{"not below the repetition time"}},
	{"delay in milliseconds", with([2]string{"DelayTime", "400"}), nil, "timing-conflict", "DelayTime", []string{"looks like milliseconds", "0.4 s"}},
	{"onsets in milliseconds", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2000, 4000, 6000, 8000, 10000]"}), nil, "tr-unit", "VolumeTiming", []string{"divide every onset by 1000"}},
	{"uneven onsets in milliseconds", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2000, 4000, 6000, 8000, 10500]"}), nil, "tr-unit", "VolumeTiming", nil},
	{"onsets against header", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 3, 6, 9, 12, 15]"}), nil, "tr-mismatch", "VolumeTiming", []string{"onsets 3 s apart"}},

	// SliceTiming
	{"no slice times", with([2]string{"SliceTiming", ""}), nil, "slice-times-missing", "SliceTiming", []string{leafName, "never guessed"}},
	{"no slice times, no type", with([2]string{"SliceTiming", ""}, [2]string{"MRAcquisitionType", ""}), nil, "slice-times-missing", "SliceTiming", nil},
	{"count", with([2]string{"SliceTiming", "[0, 0.5, 1]"}), nil, "slice-times-count", "SliceTiming", []string{"found 3 times, expected 4", "along k", "by dim_info"}},
	{"empty list", with([2]string{"SliceTiming", "[]"}), nil, "slice-times-count", "SliceTiming", []string{"found 0 times"}},
	{"count along another axis", with([2]string{"SliceTiming", "[0, 0.2, 0.4, 0.6, 0.8, 1, 1.2, 1.4]"}), geo(func(g *Geometry) { g.SliceDim = 0 }), "slice-times-count", "SliceTiming",
		[]string{`say so in SliceEncodingDirection ("i" or "i-")`, "by default"}},
	{"slice times in milliseconds", with([2]string{"SliceTiming", "[0, 1000, 500, 1500.0]"}), nil, "slice-times-unit", "SliceTiming",
		[]string{"4 times up to 1500.0: this looks like milliseconds", "divide every entry by 1000", "1.5 s"}},
	{"few slices in milliseconds of a long pause", with([2]string{"SliceTiming", "[0, 30, 60, 90]"}), nil, "slice-times-unit", "SliceTiming", nil},
	{"milliseconds and a wrong count", with([2]string{"SliceTiming", "[0, 1000, 500]"}), nil, "slice-times-count slice-times-unit", "SliceTiming", nil},
	{"milliseconds without a repetition time", with([2]string{"RepetitionTime", ""}, [2]string{"SliceTiming", "[0, 1000, 500, 1500]"}), geo(func(g *Geometry) { g.TRSec = 0 }), "tr-missing slice-times-unit", "RepetitionTime", nil},
	{"above the repetition time", with([2]string{"SliceTiming", "[0, 1, 0.5, 2.25]"}), nil, "slice-times-range", "SliceTiming", []string{"entry 4 of 4 is 2.25 s, above RepetitionTime (2 s); 1 of 4"}},
	{"barely above", with([2]string{"SliceTiming", "[0, 1, 0.5, 2.00001]"}), nil, "slice-times-range", "SliceTiming", nil},
	{"of a run three times as long", with([2]string{"SliceTiming", "[0, 3, 1.5, 4.5]"}), nil, "slice-times-range", "SliceTiming", nil},
	{"even milliseconds would not fit", with([2]string{"SliceTiming", "[0, 1000000, 500000, 1500000]"}), nil, "slice-times-range", "SliceTiming", nil},
	{"negative slice time", with([2]string{"SliceTiming", "[0, -1, 0.5, 1500]"}), nil, "slice-times-range", "SliceTiming", []string{"entry 2 of 4 is -1"}},
	{"slice time not finite", with([2]string{"SliceTiming", "[0, 1e400, 0.5, 1.5]"}), nil, "slice-times-range", "SliceTiming", []string{"entry 2 of 4 is 1e400"}},
	{"all equal", with([2]string{"SliceTiming", "[0.5, 0.5, 0.5, 0.5]"}), nil, "slice-times-equal", "SliceTiming", []string{"4 times, all 0.5 s"}},
	{"too near", with([2]string{"SliceTiming", "[0, 1, 0.5, 1.010]"}), nil, "slice-spacing", "SliceTiming", []string{"0.01 s between slice k=1 (1 s) and slice k=3 (1.01 s)", "1 of 4"}},
	{"too near to the next volume", with([2]string{"SliceTiming", "[0, 1, 0.5, 1.99]"}), nil, "slice-spacing", "SliceTiming", []string{"slice k=3 (1.99 s) and slice k=0 of the next volume"}},
	{"divided by 1000 twice", with([2]string{"SliceTiming", "[0, 0.001, 0.0005, 0.0015]"}), nil, "slice-spacing", "SliceTiming", nil},

	// multiband
	{"factor of 2, slices one by one", with([2]string{"MultibandAccelerationFactor", "2"}), nil, "multiband-mismatch", "MultibandAccelerationFactor", []string{"found 2, while SliceTiming", "has 1 slices an excitation"}},
	{"uneven groups", with([2]string{"MultibandAccelerationFactor", "2"}, [2]string{"SliceTiming", "[0, 0, 0, 1]"}), nil, "multiband-mismatch", "MultibandAccelerationFactor", []string{"1 to 3 slices"}},
	{"uneven groups, the largest as the factor", with([2]string{"MultibandAccelerationFactor", "3"}, [2]string{"SliceTiming", "[0, 0, 0, 1]"}), nil, "multiband-mismatch", "MultibandAccelerationFactor", nil},
	{"factor of zero", with([2]string{"MultibandAccelerationFactor", "0"}), nil, "multiband-mismatch", "MultibandAccelerationFactor", nil},
	{"half a factor", with([2]string{"MultibandAccelerationFactor", "1.5"}), nil, "multiband-mismatch", "MultibandAccelerationFactor", nil},

	// axes
	{"slice axes disagree", with([2]string{"SliceEncodingDirection", `"k-"`}), geo(func(g *Geometry) { g.SliceDim = 1 }), "slice-axis-conflict", "SliceEncodingDirection",
		[]string{`"k-", while dim_info of ` + harbour.File + " has slices along i", "accept slice-axis-conflict"}},
	{"slice direction no axis", with([2]string{"SliceEncodingDirection", `"z"`}), nil, "sidecar-syntax", "SliceEncodingDirection", []string{`line 12, column 29: "z"`}},
	{"phase along slices", with([2]string{"PhaseEncodingDirection", `"k"`}), nil, "phase-axis", "PhaseEncodingDirection", []string{`"k", which is along the slice axis`, "by dim_info of"}},
	{"phase along slices said here", with([2]string{"PhaseEncodingDirection", `"k"`}, [2]string{"SliceEncodingDirection", `"k-"`}), nil, "phase-axis", "PhaseEncodingDirection", []string{"by SliceEncodingDirection"}},
	{"phase in world axes", with([2]string{"PhaseEncodingDirection", `"y-"`}), nil, "phase-axis", "PhaseEncodingDirection", []string{`found "y-"`, `"j-"`}},
	{"phase as text", with([2]string{"PhaseEncodingDirection", `"ask Captain Ahab"`}), nil, "phase-axis", "PhaseEncodingDirection", []string{"a string of 16 characters"}},
	{"phase sign of plus", with([2]string{"PhaseEncodingDirection", `"j+"`}), nil, "phase-axis", "PhaseEncodingDirection", []string{`found "j+"`}},

	// readout
	{"readout of the physical train", with([2]string{"TotalReadoutTime", "0.032"}), nil, "readout-mismatch", "TotalReadoutTime", []string{"found 0.032 s", "0.0005 s", "64 - 1) is 0.0315 s", "1 %"}},
	{"spacing above readout", with([2]string{"TotalReadoutTime", "0.0004"}, [2]string{"ReconMatrixPE", ""}), nil, "readout-mismatch", "TotalReadoutTime", []string{"not above EffectiveEchoSpacing"}},
	{"readout in milliseconds", with([2]string{"TotalReadoutTime", "31.5"}), nil, "readout-mismatch", "TotalReadoutTime", []string{"milliseconds", "0.0315 s"}},
	{"spacing of zero", with([2]string{"EffectiveEchoSpacing", "0"}), nil, "readout-mismatch", "EffectiveEchoSpacing", nil},

	// 3-D
	{"3-D", with([2]string{"MRAcquisitionType", `"3D"`}, [2]string{"SliceTiming", ""}), nil, "three-dimensional", "MRAcquisitionType", []string{"found 3D"}},
	{"3-D, second phase encoding along the slab", with([2]string{"MRAcquisitionType", `"3D"`}, [2]string{"PhaseEncodingDirection", `"k"`}), nil, "three-dimensional", "MRAcquisitionType", nil},
	{"3-D with slice times", with([2]string{"MRAcquisitionType", `"3D"`}, [2]string{"SliceTiming", "[9999]"}), nil, "three-dimensional", "MRAcquisitionType", []string{"and SliceTiming"}},
	{"4-D", with([2]string{"MRAcquisitionType", `"4D"`}), nil, "sidecar-syntax", "MRAcquisitionType", []string{`"2D" or "3D"`}},

	// private-field
	{"a name", with([2]string{"PatientName", `"Ahab^Captain"`}), nil, "private-field", "PatientName", []string{leafName, "line 12, column 3", "the key PatientName (its value is not shown)"}},
	{"a name inside", with([2]string{"global", `{"const": {"InstitutionName": "Pequod"}}`}), nil, "private-field", "InstitutionName", []string{"inside another field"}},

	// sidecar-syntax: types
	{"list as text", with([2]string{"SliceTiming", `"[0, 1, 0.5, 1.5]"`}), nil, "sidecar-syntax", "SliceTiming", []string{"line 3, column 18: a string of 16 characters", "a list of numbers"}},
	{"list with null", with([2]string{"SliceTiming", "[0, 1,\n null, 1.5]"}), nil, "sidecar-syntax", "SliceTiming", []string{"line 4, column 2: entry 3 of 4 is null"}},
	{"list of lists", with([2]string{"SliceTiming", "[[0, 1, 0.5, 1.5]]"}), nil, "sidecar-syntax", "SliceTiming", []string{"entry 1 of 1 is a list of 4 values"}},
	{"number as text", with([2]string{"RepetitionTime", `"2.0"`}), nil, "sidecar-syntax", "RepetitionTime", []string{"line 2, column 21: a string of 3 characters that holds a number", "without quotes"}},
	{"null", with([2]string{"RepetitionTime", "null"}), nil, "sidecar-syntax", "RepetitionTime", []string{"null", "cannot unset"}},
	{"text as number", with([2]string{"TaskName", "7"}), nil, "sidecar-syntax", "TaskName", []string{"a string"}},
	{"truth", with([2]string{"EchoTime", "true"}), nil, "sidecar-syntax", "EchoTime", []string{"true"}},
	{"object", with([2]string{"PhaseEncodingDirection", `{"axis": "j"}`}), nil, "sidecar-syntax", "PhaseEncodingDirection", []string{"an object"}},
	{"onset as text", with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", `[0, "2", 4, 6, 8, 10]`}), nil, "sidecar-syntax", "VolumeTiming", []string{"entry 2 of 6"}},
	{"key twice", with([2]string{"EchoTime\": 0.04, \"EchoTime", "0.05"}), nil, "sidecar-syntax sidecar-syntax", "EchoTime", []string{"a second time (first at line 9, column 3)"}},
}

func TestFaults(t *testing.T) {
	shown := map[string]bool{}
	for _, c := range faultCases {
		t.Run(c.name, func(t *testing.T) {
			g := harbour
			if c.geo != nil {
				g = *c.geo
			}
			text := strings.ReplaceAll(c.sidecar, `\"`, `"`)
			_, faults := read(g, text)
			var ids []string
			for _, f := range faults {
				ids = append(ids, f.ID)
				shown[f.ID] = true
				if f.File != leafName || f.Found == "" || f.Expected == "" || f.Remedy == "" {
					t.Errorf("incomplete: %+v", f)
				}
			}
			if got := strings.Join(ids, " "); got != c.ids {
				t.Fatalf("faults %q, want %q\n%s\n%s", got, c.ids, list(faults), text)
			}
			if faults[0].Field != c.field {
				t.Errorf("field %q, want %q", faults[0].Field, c.field)
			}
			for _, want := range c.text {
				if line := faults[0].Error(); !strings.Contains(line, want) {
					t.Errorf("no %q in\n%s", want, line)
				}
			}
		})
	}
	for _, id := range own {
		if _, ok := fault.Lookup(id); !ok {
			t.Errorf("%s is not declared", id)
		}
		if !shown[id] {
			t.Errorf("no case shows %s", id)
		}
	}
}

// Values on the good side of each limit draw nothing.
func TestNoFaults(t *testing.T) {
	onsets := [2]string{"RepetitionTime", ""}
	for _, c := range []struct {
		name, sidecar string
		geo           *Geometry
	}{
		{"1 ms from the header", with([2]string{"RepetitionTime", "2.001"}), nil},
		{"header in single precision", with([2]string{"RepetitionTime", "2.43537"}), geo(func(g *Geometry) { g.TRSec = float64(float32(2.43637)) })},
		{"header without a repetition time", with(), geo(func(g *Geometry) { g.TRSec = 0 })},
		{"a long repetition time", with([2]string{"RepetitionTime", "99.9"}), geo(func(g *Geometry) { g.TRSec = 99.9 })},
		{"20 ms apart, as decimals", with([2]string{"SliceTiming", "[0.06, 0.10, 0.08, 0.12]"}), nil},
		{"20 ms before the next volume", with([2]string{"SliceTiming", "[0, 1, 0.5, 1.98]"}), nil},
		{"pairs that round apart in the last digit", with([2]string{"SliceTiming", "[0, 1.33333, 0, 1.33334]"}, [2]string{"MultibandAccelerationFactor", "2"}), nil},
		{"factor without slice times", with([2]string{"MRAcquisitionType", ""}, [2]string{"MultibandAccelerationFactor", "1"}), nil},
		{"even onsets", with(onsets, [2]string{"VolumeTiming", "[0.1, 2.1, 4.1, 6.1, 8.1, 10.1]"}), nil},
		{"onsets within 1 ms of even", with(onsets, [2]string{"VolumeTiming", "[0, 2.0009, 4, 5.9991, 8, 10]"}), nil},
		{"onsets with slice times and duration", with(onsets, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}, [2]string{"FrameAcquisitionDuration", "2"}), nil},
		{"duration of the scan beside repetition time", with([2]string{"AcquisitionDuration", "12"}), nil},
		{"a pause", with([2]string{"DelayTime", "0.4"}), nil},
		{"readout within 1 %", with([2]string{"TotalReadoutTime", "0.0318"}), nil},
		{"readout without matrix", with([2]string{"ReconMatrixPE", ""}, [2]string{"TotalReadoutTime", "0.1"}), nil},
		{"slice axis confirmed", with([2]string{"SliceEncodingDirection", `"k-"`}), nil},
		{"slice axis where the header has none", with([2]string{"SliceEncodingDirection", `"j"`}, [2]string{"PhaseEncodingDirection", `"i"`},
			[2]string{"SliceTiming", "[0,0.1,0.2,0.3,0.4,0.5,0.6,0.7,0.8,0.9]"}), geo(func(g *Geometry) { g.SliceDim = 0 })},
		{"one slice", with([2]string{"SliceTiming", "[0]"}), geo(func(g *Geometry) { g.Size[2] = 1 })},
		{"how the patient lay", with([2]string{"PatientPosition", `"HFS"`}), nil},
		{"fields of other purposes in any type", with([2]string{"Instructions", "7"}, [2]string{"MagneticFieldStrength", `"3"`}, [2]string{"ScanningSequence", "null"}), nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			g := harbour
			if c.geo != nil {
				g = *c.geo
			}
			if _, faults := read(g, c.sidecar); len(faults) > 0 {
				t.Errorf("faults:\n%s\n%s", list(faults), c.sidecar)
			}
		})
	}
}

// The legal combinations of timing fields (BIDS 1.11.1, MRI page). Each
// letter is a table row there; a combination is legal if it is in no conflict.
func TestLegalCombinations(t *testing.T) {
	fields := [][2]string{
		{"RepetitionTime", "2"}, {"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}, {"SliceTiming", "[0, 1, 0.5, 1.5]"},
		{"DelayTime", "0.2"}, {"FrameAcquisitionDuration", "1.8"},
	}
	for mask := range 1 << len(fields) {
		var changes [][2]string
		var has [5]bool
		for i, f := range fields {
			has[i] = mask>>i&1 == 1
			if !has[i] {
				f[1] = ""
			}
			changes = append(changes, f)
		}
		rt, vt, st, dt, fad := has[0], has[1], has[2], has[3], has[4]
		a := rt && !fad && !vt
		b := vt && st && !rt && !dt
		c := vt && fad && !rt && !dt
		legal := a || b || c // D and E are A with one field more
		_, faults := read(harbour, with(changes...))
		conflict := false
		for _, f := range faults {
			conflict = conflict || f.ID == "timing-conflict" || f.ID == "tr-missing"
		}
		if conflict == legal {
			t.Errorf("RT %v VT %v ST %v DT %v FAD %v: legal %v, but faults are\n%s", rt, vt, st, dt, fad, legal, list(faults))
		}
	}
}

func TestAcceptableFaultsKeepTheBestReading(t *testing.T) {
	acq, _ := read(harbour, with([2]string{"RepetitionTime", "2.5"}))
	if acq.RepetitionTime != 2.5 {
		t.Errorf("tr-mismatch: %v, want the sidecar's 2.5", acq.RepetitionTime)
	}
	g := harbour
	g.SliceDim = 1
	acq, _ = read(g, with([2]string{"SliceEncodingDirection", `"k"`}))
	if acq.SliceAxis != 2 || len(acq.SliceTimes) != 4 {
		t.Errorf("slice-axis-conflict: axis %d, times %v; want the sidecar's", acq.SliceAxis, acq.SliceTimes)
	}
	acq, _ = read(harbour, with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8.5, 10.5]"}))
	if !acq.UnequalOnsets || acq.RepetitionTime != 0 || len(acq.VolumeOnsets) != 6 || len(acq.SliceTimes) != 4 {
		t.Errorf("volume-spacing: %+v", acq)
	}
	acq, _ = read(harbour, with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0.1, 2.1, 4.1, 6.1, 8.1, 10.1]"}))
	if acq.UnequalOnsets || acq.RepetitionTime != 2 || acq.VolumeOnsets[0] != 0.1 {
		t.Errorf("even onsets: %+v", acq)
	}
}

// The duration of one volume is believed where onsets stand in place of a repetition time, and nowhere else.
func TestFrameDuration(t *testing.T) {
	duration := [2]string{"FrameAcquisitionDuration", "1.8"}
	onsets := [2]string{"VolumeTiming", "[0, 2, 4, 6, 8.5, 10.5]"}
	if acq, _ := read(harbour, with([2]string{"RepetitionTime", ""}, onsets, duration)); acq.FrameDuration != 1.8 {
		t.Errorf("with onsets: %v", acq.FrameDuration)
	}
	if acq, _ := read(harbour, with(duration)); acq.FrameDuration != 0 {
		t.Errorf("with a repetition time: %v", acq.FrameDuration)
	}
}

func TestNoSources(t *testing.T) {
	_, faults := read(harbour)
	if len(faults) != 2 || faults[0].ID != "tr-missing" || faults[1].ID != "slice-times-missing" || faults[0].File != harbour.File ||
		!strings.Contains(faults[0].Found, "no sidecar") {
		t.Errorf("\n%s", list(faults))
	}
}
