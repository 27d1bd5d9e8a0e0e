package sidecar

import (
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"sort"
	"strings"
	"testing"

	"compress/gzip"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"evenkeel/fault"
)

// BIDS 1.11.1, Common principles, "The Inheritance Principle", Example 1.
func TestInheritanceExample1(t *testing.T) {
	root := Source{"task-rest_bold.json", []byte(`{"EchoTime": 0.040, "RepetitionTime": 1.0}`)}
	leaf := Source{"sub-01/func/sub-01_task-rest_acq-longtr_bold.json", []byte(`{"RepetitionTime": 3.0}`)}
	for _, c := range []struct {
		acq     string
		sources []Source
		tr      float64
		from    string
	}{
		{"default", []Source{root}, 1, root.Name},
		{"longtr", []Source{root, leaf}, 3, leaf.Name},
	} {
		doc, faults := Merge(c.sources)
		if len(faults) > 0 {
			t.Fatalf("\n%s", list(faults))
		}
		acq, _ := doc.Acquisition(Geometry{File: "sub-01/func/sub-01_task-rest_acq-" + c.acq + "_bold.nii.gz"})
		if acq.EchoTime != 0.04 || acq.RepetitionTime != c.tr {
			t.Errorf("acq-%s: EchoTime %v, RepetitionTime %v", c.acq, acq.EchoTime, acq.RepetitionTime)
		}
		want := []Field{
			{"EchoTime", "0.040", Origin{root.Name, "EchoTime"}},
			{"RepetitionTime", fmt.Sprintf("%.1f", c.tr), Origin{c.from, "RepetitionTime"}},
		}
		if d := cmp.Diff(want, acq.Used); d != "" {
			t.Errorf("acq-%s: %s", c.acq, d)
		}
	}
}

// A fault names the file that its value came from.
func TestFaultsNameTheOrigin(t *testing.T) {
	_, faults := read(harbour, `{"RepetitionTime": 2000, "EchoTime": "x"}`, with([2]string{"RepetitionTime", ""}, [2]string{"EchoTime", ""}))
	if len(faults) != 2 || faults[0].File != "level0_bold.json" || faults[1].File != "level0_bold.json" {
		t.Errorf("\n%s", list(faults))
	}
	_, faults = read(harbour, `{"RepetitionTime": 2}`, with([2]string{"RepetitionTime", ""}, [2]string{"VolumeTiming", "[0, 2, 4, 6, 8, 10]"}))
	if len(faults) != 1 || !strings.Contains(faults[0].Found, "VolumeTiming ("+leafName+") together with RepetitionTime (level0_bold.json)") {
		t.Errorf("\n%s", list(faults))
	}
}

// A broken file above silences what would hang on its values, but not itself.
func TestBrokenRoot(t *testing.T) {
	acq, faults := read(harbour, `{`, `{"RepetitionTime": 7}`)
	if len(faults) != 1 || faults[0].File != "level0_bold.json" || acq.PhaseAxis != -1 || acq.SliceAxis != 2 {
		t.Errorf("\n%s", list(faults))
	}
}

// BIDS 1.11.1, MRI page, SliceEncodingDirection: 4 slices, k-,
// [0, 0.5, 1.0, 1.5] puts slices k=0..3 at 1.5, 1.0, 0.5, 0 s.
func TestReversalExample(t *testing.T) {
	for word, want := range map[string][]float64{"k-": {1.5, 1, 0.5, 0}, "k": {0, 0.5, 1, 1.5}} {
		acq, faults := read(harbour, with([2]string{"SliceTiming", "[0, 0.5, 1.0, 1.5]"}, [2]string{"SliceEncodingDirection", `"` + word + `"`}))
		if d := cmp.Diff(want, acq.SliceTimes); d != "" || acq.SliceAxis != 2 || len(faults) > 0 {
			t.Errorf("%s: axis %d %s\n%s", word, acq.SliceAxis, d, list(faults))
		}
	}
}

// A direction that cannot be read leaves the order of the list unknown: no
// slice times are better than times in a guessed order.
func TestUnreadableDirectionGivesNoSliceTimes(t *testing.T) {
	for _, text := range []string{
		with([2]string{"SliceEncodingDirection", `"up"`}),
		strings.Replace(with(), "{", `{"SliceEncodingDirection": "k", "SliceEncodingDirection": "k-",`, 1),
	} {
		acq, faults := read(harbour, text)
		if acq.SliceTimes != nil || ids(faults) != "sidecar-syntax" {
			t.Errorf("%v\n%s", acq.SliceTimes, list(faults))
		}
	}
}

// Raw holds numbers as they stand and no white space between them.
func TestUsedIsCompact(t *testing.T) {
	acq, _ := read(harbour, with([2]string{"SliceTiming", "[\n 0.00, 1e0,\t0.5 , 1.50 ]"}))
	for _, f := range acq.Used {
		if f.Key == "SliceTiming" && f.Raw != "[0.00,1e0,0.5,1.50]" {
			t.Errorf("%q", f.Raw)
		}
	}
}

// Without SliceEncodingDirection the header's statement counts, and without it k.
func TestSliceAxisSources(t *testing.T) {
	times := func(n int) string {
		var s []string
		for i := range n {
			s = append(s, fmt.Sprintf("%.2f", 0.1*float64(i)))
		}
		return "[" + strings.Join(s, ",") + "]"
	}
	for _, c := range []struct {
		word     string
		dim      int
		axis     int
		reversed bool
	}{
		{"", 0, 2, false}, {"", 1, 0, false}, {"", 2, 1, false}, {"", 3, 2, false}, {"", 7, 2, false},
		{"i", 1, 0, false}, {"i-", 0, 0, true}, {"j-", 2, 1, true}, {"k-", 0, 2, true},
	} {
		g := harbour
		g.SliceDim = c.dim
		phase := `"j"`
		if c.axis == 1 {
			phase = `"i"`
		}
		word := ""
		if c.word != "" {
			word = `"` + c.word + `"`
		}
		acq, faults := read(g, with([2]string{"SliceTiming", times(g.Size[c.axis])}, [2]string{"SliceEncodingDirection", word}, [2]string{"PhaseEncodingDirection", phase}))
		if len(faults) > 0 || acq.SliceAxis != c.axis || len(acq.SliceTimes) != g.Size[c.axis] || (acq.SliceTimes[0] != 0) != c.reversed {
			t.Errorf("%+v: axis %d times %v\n%s", c, acq.SliceAxis, acq.SliceTimes, list(faults))
		}
	}
}

// schedule draws slice times of an interleaved, perhaps multiband series: shots
// evenly spread over the repetition time, at least 25 ms each.
func schedule(t *rapid.T) (tr float64, times []float64) {
	n := rapid.IntRange(2, 60).Draw(t, "shots")
	mb := rapid.IntRange(1, 8).Draw(t, "multiband")
	each := float64(rapid.IntRange(25, 120).Draw(t, "ms a shot")) / 1000
	pause := float64(rapid.IntRange(0, 8000).Draw(t, "pause ms")) / 1000
	step := rapid.SampledFrom([]int{1, 2, 3}).Draw(t, "interleave")
	var order []int
	for first := range step {
		for s := first; s < n; s += step {
			order = append(order, s)
		}
	}
	times = make([]float64, n*mb)
	for i, s := range order {
		for band := range mb {
			times[band*n+s] = math.Round(float64(float64(i)*each)*1e6) / 1e6
		}
	}
	// Below 1 % of the repetition time milliseconds are not told from a wrong
	// repetition time (millisecondFactor): no series rests that long.
	pause = min(pause, 90*each)
	return math.Round((float64(float64(n)*each)+pause)*1e6) / 1e6, times
}

func numbersText(xs []float64, scale float64) string {
	var s []string
	for _, x := range xs {
		s = append(s, fmt.Sprintf("%.9g", x*scale))
	}
	return "[" + strings.Join(s, ", ") + "]"
}

func ids(faults []fault.Fault) string {
	var s []string
	for _, f := range faults {
		s = append(s, f.ID)
	}
	return strings.Join(s, " ")
}

// Any plausible schedule passes in seconds, and in milliseconds draws exactly
// slice-times-unit; reversing the list and the direction gives the same times.
func TestUnitsAndReversalProperty(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		tr, times := schedule(t)
		g := Geometry{File: "a_bold.nii", Size: [4]int{64, 64, len(times), 10}, TRSec: tr}
		file := func(list, word string) string {
			return fmt.Sprintf(`{"RepetitionTime": %v, "SliceTiming": %s, "SliceEncodingDirection": %q}`, tr, list, word)
		}
		acq, faults := read(g, file(numbersText(times, 1), "k"))
		if len(faults) > 0 || !cmp.Equal(acq.SliceTimes, times) {
			t.Fatalf("seconds: %v\n%s", acq.SliceTimes, list(faults))
		}
		if _, faults := read(g, file(numbersText(times, 1000), "k")); ids(faults) != "slice-times-unit" {
			t.Fatalf("milliseconds:\n%s", list(faults))
		}
		back := make([]float64, len(times))
		for i, x := range times {
			back[len(times)-1-i] = x
		}
		if rev, _ := read(g, file(numbersText(back, 1), "k-")); !cmp.Equal(rev.SliceTimes, times) {
			t.Fatalf("reversed: %v, want %v", rev.SliceTimes, times)
		}
	})
}

// Above the repetition time by less than tenfold is a range, never a unit.
func TestRangeProperty(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		tr, times := schedule(t)
		factor := rapid.Float64Range(1.01, 9).Draw(t, "factor") * tr / times[lastOf(times)]
		g := Geometry{File: "a_bold.nii", Size: [4]int{64, 64, len(times), 10}, TRSec: tr}
		_, faults := read(g, fmt.Sprintf(`{"RepetitionTime": %v, "SliceTiming": %s}`, tr, numbersText(times, factor)))
		if ids(faults) != "slice-times-range" {
			t.Fatalf("\n%s", list(faults))
		}
	})
}

func lastOf(xs []float64) int {
	at := 0
	for i, x := range xs {
		if x > xs[at] {
			at = i
		}
	}
	return at
}

// Merging is a key-by-key choice of the lowest file, whatever the values.
func TestMergeProperty(t *testing.T) {
	keys := []string{"EchoTime", "FlipAngle", "PartialFourier", "MagneticFieldStrength"}
	rapid.Check(t, func(t *rapid.T) {
		var sources []Source
		want := map[string]Field{}
		for level := range rapid.IntRange(1, 5).Draw(t, "levels") {
			name := fmt.Sprintf("level%d.json", level)
			var members []string
			for _, k := range keys {
				if rapid.Bool().Draw(t, k) {
					raw := fmt.Sprintf("0.%d", rapid.IntRange(1, 999999).Draw(t, "value"))
					members = append(members, fmt.Sprintf("%q : %s", k, raw))
					want[k] = Field{k, raw, Origin{name, k}}
				}
			}
			sources = append(sources, Source{name, []byte("{" + strings.Join(members, ",") + "}")})
		}
		doc, faults := Merge(sources)
		if len(faults) > 0 {
			t.Fatalf("\n%s", list(faults))
		}
		acq, _ := doc.Acquisition(harbour)
		var expected []Field
		for _, f := range want {
			expected = append(expected, f)
		}
		sort.Slice(expected, func(i, j int) bool { return expected[i].Key < expected[j].Key })
		if d := cmp.Diff(expected, acq.Carried); d != "" {
			t.Fatal(d)
		}
	})
}

func TestSeriesInWords(t *testing.T) {
	for _, c := range []struct{ fields, file, want string }{
		{`"ScanningSequence": "EP\\GR", "SequenceVariant": "SS"`, "", "gradient-echo EPI"},
		{`"ScanningSequence": ["EP", "SE"]`, "", "spin-echo EPI"},
		{`"ScanningSequence": "EP_GR_SE"`, "", "gradient- and spin-echo EPI"},
		{`"ScanningSequence": "EP", "SequenceVariant": "SK"`, "", "EPI (gradient or spin echo not stated)"},
		{`"ScanningSequence": "EP", "PulseSequenceType": "Gradient Echo EPI"`, "", "gradient-echo EPI"},
		{`"PulseSequenceType": "Spin-Echo EPI"`, "", "spin-echo EPI"},
		{`"ScanningSequence": "SE", "SequenceVariant": "SK\\SP", "EchoTrainLength": 72, "AcquisitionMatrixPE": 128`, "", "single-shot fast spin echo"},
		{`"ScanningSequence": "SE", "SequenceVariant": "SK", "EchoTrainLength": 16, "AcquisitionMatrixPE": 256`, "", "fast spin echo"},
		{`"PulseSequenceType": "single-shot turbo spin echo"`, "", "single-shot fast spin echo"},
		{`"ScanningSequence": "SE", "EchoTrainLength": 1`, "", "spin echo"},
		{`"ScanningSequence": "EP\\IR\\SE"`, "", "inversion-recovery spin-echo EPI"},
		{`"ScanningSequence": "EP\\GR", "NumberShots": 4`, "", "multi-shot gradient-echo EPI"},
		{`"ScanningSequence": "EP\\GR", "MRAcquisitionType": "3D"`, "", "3D gradient-echo EPI"},
		{`"ScanningSequence": "EP\\GR"`, "a/b_task-x_echo-2_bold.nii.gz", "gradient-echo EPI, multi-echo"},
		{`"ScanningSequence": "EP\\GR", "EchoTime": [0.012, 0.03]`, "", "gradient-echo EPI, multi-echo"},
		{`"ScanningSequence": "GR"`, "", "gradient echo"},
		{`"ScanningSequence": "QQ"`, "", "kind of series not stated"},
		{`"PulseSequenceType": "Captain Ahab's own EPI"`, "", "kind of series not stated"},
		{``, "", "kind of series not stated"},
	} {
		g := harbour
		if c.file != "" {
			g.File = c.file
		}
		acq, _ := read(g, "{"+c.fields+"}")
		if acq.Series != c.want {
			t.Errorf("%s: %q, want %q", c.fields, acq.Series, c.want)
		}
		for _, f := range append(acq.Used, acq.Carried...) {
			if strings.Contains(f.Raw, "Ahab") {
				t.Errorf("free text in %+v", f)
			}
		}
	}
}

func TestDoubtfulEchoTimes(t *testing.T) {
	for raw, want := range map[string]float64{"0.03": 0.03, "30": 0, "0": 0, "-0.03": 0, "1e999": 0, "[0.05, 0.012]": 0.012, "[0.012, 30]": 0, "[]": 0} {
		acq, faults := read(harbour, with([2]string{"EchoTime", raw}))
		if acq.EchoTime != want || len(faults) > 0 {
			t.Errorf("%s: %v, want %v\n%s", raw, acq.EchoTime, want, list(faults))
		}
		carried := false
		for _, f := range acq.Carried {
			carried = carried || f.Key == "EchoTime"
		}
		if carried != (want > 0) {
			t.Errorf("%s: carried %v", raw, carried)
		}
	}
}

func TestCarried(t *testing.T) {
	acq, faults := read(harbour, with(
		[2]string{"SliceEncodingDirection", `"k-"`}, [2]string{"DelayTime", "0.1"}, [2]string{"FlipAngle", "7.50e1"}, [2]string{"Manufacturer", `"Nantucket"`},
		[2]string{"NonlinearGradientCorrection", "true"}, [2]string{"CogAtlasID", `"https://www.cognitiveatlas.org/task/id/trm_4c8991bfe1a10"`},
		[2]string{"PartialFourier", `"6/8"`}, [2]string{"TaskDescription", `"told by Ishmael"`}, [2]string{"Instructions", `"tie"`},
		[2]string{"NumberOfVolumesDiscardedByScanner", "0"}, [2]string{"NumberOfVolumesDiscardedByUser", "0"}, [2]string{"FrameReference", "1"}))
	if len(faults) > 0 {
		t.Fatalf("\n%s", list(faults))
	}
	var got []string
	for _, f := range acq.Carried {
		got = append(got, f.Key+"="+f.Raw)
		if f.Origin != (Origin{leafName, f.Key}) {
			t.Errorf("origin of %+v", f)
		}
	}
	want := []string{`CogAtlasID="https://www.cognitiveatlas.org/task/id/trm_4c8991bfe1a10"`, "EchoTime=0.03", "EffectiveEchoSpacing=0.0005", "FlipAngle=7.50e1",
		`MRAcquisitionType="2D"`, `Manufacturer="Nantucket"`, "MultibandAccelerationFactor=1", "NonlinearGradientCorrection=true", "NumberOfVolumesDiscardedByScanner=0",
		`PhaseEncodingDirection="j-"`, "ReconMatrixPE=64", `TaskName="knots"`, "TotalReadoutTime=0.0315"}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	var used []string
	for _, f := range acq.Used {
		used = append(used, f.Key)
	}
	wantUsed := []string{"DelayTime", "EchoTime", "EffectiveEchoSpacing", "MRAcquisitionType", "MultibandAccelerationFactor", "PhaseEncodingDirection",
		"ReconMatrixPE", "RepetitionTime", "SliceEncodingDirection", "SliceTiming", "TaskName", "TotalReadoutTime"}
	if d := cmp.Diff(wantUsed, used); d != "" {
		t.Error(d)
	}
}

// openSeries gives the folder of real series, or skips.
func openSeries(t *testing.T) string {
	dir := os.Getenv("EVENKEEL_TEST_SERIES")
	if dir == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: real sidecars are not read")
	}
	return dir
}

// header reads the few header fields this package is held against, at the
// offsets of nifti1.h (little-endian files).
func header(t *testing.T, file string) (g Geometry) {
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	z, err := gzip.NewReader(f)
	if err != nil {
		t.Fatal(err)
	}
	h := make([]byte, 348)
	if _, err := io.ReadFull(z, h); err != nil {
		t.Fatal(err)
	}
	if binary.LittleEndian.Uint32(h) != 348 || h[123]&0x38 != 8 {
		t.Fatalf("%s: not a little-endian NIfTI-1 header in seconds", file)
	}
	for i := range g.Size {
		g.Size[i] = int(binary.LittleEndian.Uint16(h[42+2*i:]))
	}
	g.TRSec = float64(math.Float32frombits(binary.LittleEndian.Uint32(h[76+16:])))
	g.SliceDim = int(h[39] >> 4 & 3)
	return g
}

func TestRealSidecars(t *testing.T) {
	dir := openSeries(t)
	files, err := filepath.Glob(filepath.Join(dir, "sub-*", "func", "*_bold.json"))
	if err != nil || len(files) == 0 {
		t.Fatalf("no sidecar in %s (%v)", dir, err)
	}
	for _, file := range files {
		data, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		g := header(t, strings.TrimSuffix(file, ".json")+".nii.gz")
		g.File = filepath.Base(strings.TrimSuffix(file, ".json") + ".nii.gz")
		doc, faults := Merge([]Source{{filepath.Base(file), data}})
		acq, more := doc.Acquisition(g)
		faults = append(faults, more...)
		// These files are sound throughout, so not even a warning is due.
		if len(faults) > 0 {
			t.Errorf("%s:\n%s", g.File, list(faults))
		}
		if len(acq.SliceTimes) != g.Size[2] || acq.SliceAxis != 2 || math.Abs(acq.RepetitionTime-g.TRSec) > sameTR || acq.PhaseAxis < 0 ||
			acq.TaskName == "" || !strings.Contains(acq.Series, "EPI") || len(acq.Carried) < 8 {
			t.Errorf("%s: %+v", g.File, acq)
		}
	}
}
