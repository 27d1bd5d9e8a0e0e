package pipeline

import (
	"encoding/json"
	"errors"
	"math"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"evenkeel/dataset"
	"evenkeel/quality"
	"evenkeel/realign"
	"evenkeel/sidecar"
	"evenkeel/slicetime"
)

// fourVolumes: still, moved, lost, moved back; shifts only, so that fd is by hand.
func fourVolumes() (*Plan, *measures, *posed) {
	at := func(x float64) realign.Pose {
		return realign.FromParams([3]float64{x, 0, 0}, [3]float64{}, [3]float64{1, 2, 3})
	}
	est := &realign.Estimate{Centre: [3]float64{1, 2, 3}, Volumes: []realign.Volume{
		{Pose: realign.Identity, State: realign.Aligned, Fit: 1},
		{Pose: at(3), State: realign.Doubtful, Fit: 0.5, Outside: 0.25, Reason: "x"},
		{Pose: at(2), State: realign.Lost, Fit: 0.1, Outside: 0.9, Reason: "y"},
		{Pose: at(-1), State: realign.Aligned, Fit: 0.9},
	}}
	p := &Plan{Run: dataset.Run{Stem: "s", Dir: "d"}, Volumes: 4, Timing: Timing{Rows: []float64{0.5, 2.5, 4.5, 6.5}}}
	m := &measures{mask: []bool{true, false}}
	po := &posed{est: est, path: realign.FromVolumes(realign.Grid{N: [3]int{1, 1, 2}}, slicetime.Schedule{Axis: 2, TR: 2}, est, "")}
	m.measurePoses(po, p.rowPoses(po), 4)
	m.dvarsRaw = []float64{math.NaN(), 1, 2, 3}
	m.dvarsSteady = []float64{math.NaN(), 0.5, 0.25, 1.5}
	m.tsnrRaw, m.tsnrSteady = []float32{100, 1}, []float32{120, 1}
	m.spikes = [][]float64{{0, math.NaN()}, {1, 2}, {-3, 7.5}, {0, 0}}
	return p, m, po
}

// What a lost volume's row says, to the byte: its six parameters are n/a; and what follows for its neighbours.
func TestPoseTable(t *testing.T) {
	p, m, _ := fourVolumes()
	got := string(poseTable(p, m))
	want := strings.Join([]string{
		strings.ReplaceAll("time shift_x shift_y shift_z turn_x turn_y turn_z fd rms_ball dvars_raw dvars_steady outside fit state", " ", "\t"),
		"0.500000\t0.000000\t0.000000\t0.000000\t0.0000000\t0.0000000\t0.0000000\tn/a\tn/a\tn/a\tn/a\t0.000000\t1.000000\taligned",
		"2.500000\t3.000000\t0.000000\t0.000000\t0.0000000\t0.0000000\t0.0000000\t3.000000\t3.000000\t1.000000\t0.500000\t0.250000\t0.500000\tdoubtful",
		"4.500000\tn/a\tn/a\tn/a\tn/a\tn/a\tn/a\tn/a\tn/a\t2.000000\t0.250000\tn/a\tn/a\tlost",
		"6.500000\t-1.000000\t0.000000\t0.000000\t0.0000000\t0.0000000\t0.0000000\tn/a\tn/a\t3.000000\t1.500000\t0.000000\t0.900000\taligned",
		""}, "\n")
	if got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}

// A lost volume enters no average; its matrix stands in the description, numeric.
func TestFigures(t *testing.T) {
	p, m, po := fourVolumes()
	f, err := parseFigures(m.qualityFile(p))
	if err != nil {
		t.Fatal(err)
	}
	want := Figures{Volumes: 4, Aligned: 2, Doubtful: 1, Lost: 1, MeanFD: 3, MaxFD: 3, MeanRMS: 3,
		MaxShift:     1, // of aligned volumes only: the doubtful one is at 3
		MeanDVARSRaw: 1, MeanDVARSSteady: 0.5, MedianTSNRRaw: 100, MedianTSNRSteady: 120}
	want.MeanFDAligned = math.NaN()                                                                                             // no aligned volume follows another
	want.ExpectedError, want.ResidualVolume, want.ResidualPath, want.Explained = math.NaN(), math.NaN(), math.NaN(), math.NaN() // no path
	want.LastStep = math.NaN()
	want.Raised = []int{}
	if d := cmp.Diff(want, *f, cmpopts.EquateNaNs()); d != "" {
		t.Error(d)
	}
	if use := m.counts(); use[2] || !use[1] {
		t.Errorf("volumes that count: %v", use)
	}
	var q struct {
		Spikes struct {
			Max                 float64
			MaxVolume, MaxSlice int
		}
	}
	if err := json.Unmarshal(m.qualityFile(p), &q); err != nil || q.Spikes.Max != 7.5 || q.Spikes.MaxVolume != 2 || q.Spikes.MaxSlice != 1 {
		t.Errorf("%+v %v", q, err)
	}
	var d struct{ Matrices [][4][4]float64 }
	if err := json.Unmarshal(poseDescription(p, po, po.est.Centre), &d); err != nil || d.Matrices[2][0][3] != 2 {
		t.Errorf("the matrix of the lost volume: %v %v", d.Matrices, err)
	}
}

// What became of the path is a figure of its own; a doubtful volume's expected error
// is listed, and in no summary.
func TestPathFigures(t *testing.T) {
	for _, c := range []struct {
		path realign.PathEstimate
		want Figures
	}{
		{realign.PathEstimate{Used: true, Settled: true, LastStep: 0.01, Expected: []float64{0.02, 9, math.NaN(), 0.04}},
			Figures{PosePath: "used", LastStep: 0.01, ExpectedError: 0.03}},
		{realign.PathEstimate{Used: true, LastStep: 0.3, Expected: []float64{0.02, 9, math.NaN(), 0.04}},
			Figures{PosePath: "not settled", LastStep: 0.3, ExpectedError: 0.03}},
		{realign.PathEstimate{Reason: "why"}, Figures{PosePath: "not used", NoPath: "why", LastStep: math.NaN(), ExpectedError: math.NaN()}},
	} {
		p, m, _ := fourVolumes()
		p.Settings.Motion = "path"
		m.path = &c.path
		data := m.qualityFile(p)
		f, err := parseFigures(data)
		if err != nil {
			t.Fatal(err)
		}
		got := Figures{PosePath: f.PosePath, NoPath: f.NoPath, LastStep: f.LastStep, ExpectedError: f.ExpectedError}
		if d := cmp.Diff(c.want, got, cmpopts.EquateNaNs(), cmpopts.EquateApprox(0, 1e-12)); d != "" {
			t.Error(d)
		}
		if c.path.Used && !strings.Contains(string(data), `"Volumes":[0.02,9,null,0.04]`) {
			t.Errorf("%s", data)
		}
		if ok := slices.ContainsFunc(quality.Define("pose_path").Levels, func(l quality.Level) bool { return l.Value == f.PosePath }); !ok {
			t.Errorf("%q is no level of pose_path", f.PosePath)
		}
	}
}

// The sidecar says what was done, not what was asked for.
func TestSidecarsSayWhatWasDone(t *testing.T) {
	for _, c := range []struct {
		motion    string
		path      realign.PathEstimate
		series    string
		reference string
	}{
		{"path", realign.PathEstimate{Used: true, Settled: true}, "a pose an excitation against mean", "slice by slice along the pose path"},
		{"path", realign.PathEstimate{Used: true}, "a pose an excitation (not settled) against mean", "slice by slice along the pose path"},
		{"path", realign.PathEstimate{Reason: "too few"}, "one pose a volume (a pose an excitation was asked for, but: too few) against mean", "by one pose a volume and standing"},
		{"volume", realign.PathEstimate{Reason: "asked for"}, "a pose a volume against mean", "raw intensities"},
	} {
		p, _, po := fourVolumes()
		p.Settings = DefaultSettings()
		p.Settings.Motion = c.motion
		p.Acq = &sidecar.Acquisition{}
		po.path = &c.path
		if got := string(p.steadySidecar(po)); !strings.Contains(got, c.series) {
			t.Errorf("%+v: %s", c, got)
		}
		if got := string(p.referenceSidecar(po)); !strings.Contains(got, c.reference) || strings.Contains(got, "raw intensities") == c.path.Used {
			t.Errorf("%+v: %s", c, got)
		}
	}
}

// Differences between aligned volumes only; and those that the correction raised.
func TestRaised(t *testing.T) {
	m := &measures{states: strings.Fields("aligned aligned aligned doubtful aligned aligned lost aligned aligned aligned"),
		fd:          []float64{math.NaN(), 1, 3, 50, 50, 5, math.NaN(), math.NaN(), 7, 9},
		dvarsRaw:    []float64{math.NaN(), 2, 2, 2, 2, 2, 2, 2, 2, 2},
		dvarsSteady: []float64{math.NaN(), 3, 3.01, 9, 9, 1, 9, 9, math.NaN(), 4}}
	if got := m.raised(); !slices.Equal(got, []int{2, 9}) {
		t.Errorf("raised %v", got)
	}
	if got := quality.Summarise(m.betweenAligned(m.fd)).Mean; got != 5 {
		t.Errorf("mean FD between aligned volumes %g, want 5", got)
	}
}

func TestLimits(t *testing.T) {
	f := &Figures{MeanFD: 0.2, MaxFD: 1, MaxShift: math.NaN(), Lost: 2}
	x := func(v float64) *float64 { return &v }
	n := func(v int) *int { return &v }
	for i, c := range []struct {
		l    Limits
		want int
	}{
		{Limits{}, 0},
		{Limits{MeanFD: x(0.2), MaxFD: x(1), Lost: n(2)}, 0}, // on the limit is inside
		{Limits{MeanFD: x(0.19)}, 1},
		{Limits{MaxFD: x(0.99), MeanFD: x(0)}, 2},
		{Limits{MaxShift: x(0)}, 0}, // undefined
		{Limits{Lost: n(1)}, 1},
	} {
		if got := c.l.Outside(f); len(got) != c.want {
			t.Errorf("case %d: %v", i, got)
		}
	}
}

// A limit that no run can be held against is refused.
func TestLimitsNeedPoses(t *testing.T) {
	v, n := 1.0, 1
	for _, l := range []Limits{{MeanFD: &v}, {MaxFD: &v}, {MaxShift: &v}, {Lost: &n}} {
		var usage *UsageError
		if err := l.Check(Settings{Motion: "none"}); !errors.As(err, &usage) {
			t.Errorf("%+v: %v", l, err)
		}
		if err := l.Check(Settings{Motion: "volume"}); err != nil {
			t.Error(err)
		}
	}
	if err := (Limits{}).Check(Settings{Motion: "none"}); err != nil {
		t.Error(err)
	}
}

// NaN is null in JSON and comes back; objects keep their order.
func TestJSONParts(t *testing.T) {
	o := object{{"b", num(math.NaN())}, {"a", num(math.Copysign(0, -1))}, {"c", []num{1.5, num(math.Inf(1))}}}
	if got := string(o.file()); got != "{\n  \"b\": null,\n  \"a\": 0,\n  \"c\": [1.5,null]\n}\n" {
		t.Errorf("got %q", got)
	}
	back := num(7)
	if err := json.Unmarshal([]byte("null"), &back); err != nil || !math.IsNaN(float64(back)) {
		t.Errorf("null came back as %v (%v)", back, err)
	}
	if v := rounded(1.23456789, 3); v != 1.235 {
		t.Error(v)
	}
}
