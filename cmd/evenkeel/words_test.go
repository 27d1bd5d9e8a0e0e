package main

import (
	"bytes"
	"context"
	"fmt"
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
	o.Plan = &pipeline.Plan{}
	s.ended("sub-01", &o)
	return b.String()
}

func TestRaisedDVARSIsSaid(t *testing.T) {
	got := ended(pipeline.Outcome{State: pipeline.Done, Figures: &pipeline.Figures{Raised: []int{12, 14}}})
	if !strings.Contains(got, "in volumes 12, 14: interpolation in time mixes the neighbours of a jerk") {
		t.Error(got)
	}
	if got := ended(pipeline.Outcome{State: pipeline.Done, Figures: &pipeline.Figures{}}); strings.Contains(got, "DVARS") {
		t.Error(got)
	}
	if got := list([]int{1, 2, 3, 4}, 2); got != "1, 2, and 2 more" {
		t.Error(got)
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
