package main

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"unicode/utf8"

	"github.com/google/go-cmp/cmp"

	"evenkeel/dataset"
	"evenkeel/pipeline"
)

// ended gives what the log says of a run's end.
func ended(o pipeline.Outcome) string {
	var b bytes.Buffer
	s := &session{log: &logger{w: &b}}
	if o.Plan == nil {
		o.Plan = &pipeline.Plan{Timing: pipeline.Timing{Temporal: true}}
	}
	s.ended("sub-01", &o)
	return b.String()
}

func TestRaisedDVARSIsSaid(t *testing.T) {
	got := ended(pipeline.Outcome{State: pipeline.Done, Figures: &pipeline.Figures{Raised: []int{12, 14}}})
	if !strings.Contains(got, "in volumes 12, 14: probably a jerk nearby was spread by the interpolation in time") {
		t.Error(got)
	}
	// Where nothing was moved in time, time is not to blame.
	got = ended(pipeline.Outcome{Plan: &pipeline.Plan{}, State: pipeline.Done, Figures: &pipeline.Figures{Raised: []int{12, 14}}})
	if !strings.Contains(got, "in volumes 12, 14: probably a pose is wrong there") || strings.Contains(got, "time;") || strings.Contains(got, "in time") {
		t.Error(got)
	}
	if got := ended(pipeline.Outcome{State: pipeline.Done, Figures: &pipeline.Figures{}}); strings.Contains(got, "DVARS") {
		t.Error(got)
	}
	if got := list([]int{1, 2, 3, 4}, 2); got != "1, 2, and 2 more" {
		t.Error(got)
	}
}

// A path that has not settled is said in the log and in the closing line.
func TestUnsettledPathIsSaid(t *testing.T) {
	f := &pipeline.Figures{PosePath: "not settled", LastStep: 0.213}
	if got := ended(pipeline.Outcome{State: pipeline.Done, Figures: f}); !strings.Contains(got, "sub-01: the pose path has not settled: some poses still moved by 0.213 mm") {
		t.Error(got)
	}
	if got := figures(f); !strings.Contains(got, "; path: not settled (last step 0.213 mm), residuals") {
		t.Error(got)
	}
	f.PosePath = "used"
	if got := ended(pipeline.Outcome{State: pipeline.Done, Figures: f}) + figures(f); strings.Contains(got, "settled") {
		t.Error(got)
	}
}

// The closing line, as README shows it: one unit, nothing left out that tells runs apart.
func TestClosingLine(t *testing.T) {
	nan := math.NaN()
	for want, f := range map[string]pipeline.Figures{
		"200 volumes, FD mean 0.123 max 1.500 mm, 0 doubtful, 0 lost; path: residuals 1.000 times the noise (one pose a volume: 1.029), 99.88 % of variance explained, expected error 0.010 mm": {
			Volumes: 200, MeanFD: 0.1231, MaxFD: 1.5, MeanFDAligned: 0.1229, PosePath: "used", ResidualPath: 1.0001, ResidualVolume: 1.029, Explained: 0.99881, ExpectedError: 0.0101},
		"200 volumes, FD mean 0.123 max 1.500 mm (mean over aligned volumes 0.080), 1 doubtful, 0 lost; path not used, one pose a volume: no slice times": {
			Volumes: 200, MeanFD: 0.1231, MaxFD: 1.5, MeanFDAligned: 0.08, Doubtful: 1, PosePath: "not used", NoPath: "no slice times", ExpectedError: nan},
		"1 volume, FD mean n/a max n/a mm, 0 doubtful, 0 lost": {Volumes: 1, MeanFD: nan, MaxFD: nan, MeanFDAligned: nan, ExpectedError: nan},
	} {
		if got := figures(&f); got != want {
			t.Errorf("got  %s\nwant %s", got, want)
		}
	}
}

// A run refused for its voxels leaves no folder in OUT; an events table that is not there is
// said, and keeps no run from being done.
func TestNothingEmptyIsLeft(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	const other = "sub-02/ses-1/func/sub-02_ses-1_task-watch"
	bad := newSailor().files(other)
	image := bad[other+"_bold.nii"]
	binary.LittleEndian.PutUint32(image[len(image)-4:], math.Float32bits(float32(math.NaN())))
	writeDataset(dir, bad)
	out := filepath.Join(t.TempDir(), "out")
	code, stdout, stderr := run("steady", dir, out, "--motion", "none", "--events")
	if code != 3 || !strings.Contains(stdout, "image-values") || !strings.Contains(stderr, "evenkeel: "+theStem+": --events: the run has no events table") {
		t.Error(dump(code, stdout, stderr))
	}
	if _, err := os.Stat(filepath.Join(out, "sub-02")); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("sub-02 in OUT: %v", err)
	}
	if !strings.Contains(stdout, " done ") {
		t.Error(stdout)
	}
	if _, _, stderr := run("survey", dir); strings.Contains(stderr, "--events") {
		t.Error(stderr)
	}
}

// A run that was selected and not done has a row that says so; done again, it loses it.
func TestInterruptedRunsHaveRows(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	ds, err := dataset.Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	plans, err := pipeline.Survey(context.Background(), ds, pipeline.Request{Settings: pipeline.DefaultSettings()})
	if err != nil {
		t.Fatal(err)
	}
	out := filepath.Join(t.TempDir(), "out")
	ctx, cancel := context.WithCancel(context.Background())
	outcomes, err := pipeline.Steady(ctx, ds, plans, pipeline.Job{Out: out, Observe: func(e pipeline.Event) {
		if e.Stage == "measure-raw" {
			cancel()
		}
	}})
	cancel()
	if got := pipeline.ExitCode(err, outcomes, false); got != pipeline.ExitInterrupt {
		t.Fatalf("exit %d", got)
	}
	table := func() string { return string(mustRead(t, filepath.Join(out, "runs.tsv"))) }
	if got := table(); !strings.Contains(got, "\n"+theStem+"\t"+theRun+"_bold.nii\tinterrupted\tn/a\tn/a\t") {
		t.Error(got)
	}
	if code, stdout, stderr := run("steady", dir, out, "--quiet"); code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	if got := table(); strings.Contains(got, "interrupted") || !strings.Contains(got, "\tdone\t") {
		t.Error(got)
	}
}

// README explains every exit code that the program declares, and no other.
func TestReadmeHasEveryExitCode(t *testing.T) {
	var want, got []string
	for _, e := range pipeline.ExitCodes {
		want = append(want, fmt.Sprint(e.Code))
	}
	_, table, _ := strings.Cut(string(mustRead(t, "../../README.md")), "## Exit codes")
	table, _, _ = strings.Cut(table, "##")
	for _, line := range strings.Split(table, "\n") {
		if m := regexp.MustCompile(`^\| (\d+) \| \S`).FindStringSubmatch(line); m != nil {
			got = append(got, m[1])
		}
	}
	if !slices.Equal(got, want) {
		t.Errorf("README %v, program %v", got, want)
	}
}

// On a terminal no row is longer than it; elsewhere nothing is shortened.
func TestRowsFitTheTerminal(t *testing.T) {
	table := func() [][]string {
		return [][]string{
			{"run", "size", "TR", "slices", "phase", "steady", "in OUT"},
			{"sub-07_ses-outbound_task-watch_run-2", "64x64x36x200", "2 s", "multiband 3, interleaved ascending", "j- A>P", "fourier+path", "again: time fourier -> sinc"},
			{"sub-07_ses-outbound_task-watch_run-3", "64x64x36x200", "2 s", "-", "j- A>P", "fourier+path", "new"},
		}
	}
	for _, columns := range []int{80, 120, 60} {
		rows := table()
		total := -2
		for i, w := range fit(rows, columns) {
			total += w + 2
			for _, r := range rows {
				if n := utf8.RuneCountInString(r[i]); n > w {
					t.Errorf("%d columns: %q is wider than %d", columns, r[i], w)
				}
			}
		}
		if total > columns {
			t.Errorf("%d columns: rows of %d", columns, total)
		}
		if !strings.HasSuffix(rows[1][0], "run-2") || rows[1][0] == rows[2][0] {
			t.Errorf("%d columns: runs look alike: %q", columns, rows[1][0])
		}
	}
	rows := table()
	if fit(rows, 0); !cmp.Equal(rows, table()) {
		t.Error("shortened without a terminal")
	}
}
