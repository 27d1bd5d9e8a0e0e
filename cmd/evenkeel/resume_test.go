package main

import (
	"bytes"
	"context"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"evenkeel/dataset"
	"evenkeel/internal/detmath"
	"evenkeel/pipeline"
)

// What makes a run be computed again, one reason at a time; with none it is up to date.
func TestUpToDate(t *testing.T) {
	edit := func(name string, change func([]byte) []byte) {
		if err := os.WriteFile(name, change(mustRead(t, name)), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	for name, c := range map[string]struct {
		change func(dir, out string)
		args   []string
		done   bool
	}{
		"nothing":           {func(string, string) {}, nil, false},
		"jobs and memory":   {func(string, string) {}, []string{"--jobs", "1", "--memory", "1GiB"}, false},
		"a limit":           {func(string, string) {}, []string{"--limit-lost", "5"}, false},
		"redo":              {func(string, string) {}, []string{"--redo"}, true},
		"a setting":         {func(string, string) {}, []string{"--space", "cubic"}, true},
		"an accepted fault": {func(string, string) {}, []string{"--accept", "tr-mismatch"}, true},
		"the image": {func(dir, _ string) {
			edit(filepath.Join(dir, theRun+"_bold.nii"), func(b []byte) []byte { b[len(b)-4] ^= 1; return b })
		}, nil, true},
		"the sidecar": {func(dir, _ string) {
			edit(filepath.Join(dir, theRun+"_bold.json"), func(b []byte) []byte { return bytes.Replace(b, []byte("0.03"), []byte("0.04"), 1) })
		}, nil, true},
		"another sidecar": {func(dir, _ string) {
			os.WriteFile(filepath.Join(dir, "task-watch_bold.json"), []byte(`{"FlipAngle": 70}`), 0o644)
		}, nil, true},
		"the version": {func(_, out string) {
			edit(filepath.Join(out, theRun+"_desc-steady_prov.json"), func(b []byte) []byte {
				return bytes.ReplaceAll(b, []byte(`"`+pipeline.Version+`"`), []byte(`"0.0.0"`))
			})
		}, nil, true},
		"the record":     {func(_, out string) { os.Remove(filepath.Join(out, theRun+"_desc-steady_prov.json")) }, nil, true},
		"an output gone": {func(_, out string) { os.Remove(filepath.Join(out, theRun+"_desc-steady_tsnr.nii.gz")) }, nil, true},
		"an output cut short": {func(_, out string) {
			edit(filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"), func(b []byte) []byte { return b[:len(b)-1] })
		}, nil, true},
	} {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			dir := crewDataset(t, func(*sailor) {})
			out := process(t, dir)
			c.change(dir, out)
			code, stdout, stderr := run(append([]string{"steady", dir, out}, c.args...)...)
			if code != 0 || c.done != strings.Contains(stdout, " done ") || c.done == strings.Contains(stdout, " up-to-date ") {
				t.Errorf("done again: want %v\n%s", c.done, dump(code, stdout, stderr))
			}
			if code, stdout, _ := run("audit", out, "--dataset", dir); code != 0 {
				t.Errorf("audit: %s", stdout)
			}
		})
	}
}

// Whenever the context ends, the run leaves nothing behind and says that it was interrupted.
func TestInterruptedAtEveryStage(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	ds, err := dataset.Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, stage := range pipeline.Stages {
		settings := pipeline.DefaultSettings()
		if stage == "time" || stage == "space" { // those of another order
			settings.Order = "time-first"
		}
		if stage == "steady" {
			settings.Time, settings.Motion, settings.Order = "sinc", "volume", "time-first"
		}
		plans, err := pipeline.Survey(context.Background(), ds, pipeline.Request{Settings: settings})
		if err != nil {
			t.Fatal(err)
		}
		out := filepath.Join(t.TempDir(), "out")
		ctx, cancel := context.WithCancel(context.Background())
		outcomes, err := pipeline.Steady(ctx, ds, plans, pipeline.Job{Out: out, Observe: func(e pipeline.Event) {
			if e.Stage == stage {
				cancel()
			}
		}})
		cancel()
		if got := pipeline.ExitCode(err, outcomes, false); got != pipeline.ExitInterrupt {
			t.Errorf("%s: exit %d, %v %+v", stage, got, err, outcomes)
		}
		if got := outputs(filepath.Join(out, "sub-01")); len(got) > 0 {
			t.Errorf("%s: left %v", stage, got)
		}
	}
}

// Hidden files of a process that died are cleared by the next one.
func TestStaleFilesGo(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	out := filepath.Join(t.TempDir(), "out")
	claim(t, out)
	func() {
		stale := filepath.Join(out, "sub-01/func/."+theStem+"_desc-steady_bold.nii.gz0123456789")
		if err := os.MkdirAll(filepath.Dir(stale), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(stale, []byte("half"), 0o644); err != nil {
			t.Fatal(err)
		}
	}()
	if code, stdout, stderr := run("steady", dir, out); code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	for _, f := range outputs(out) {
		if strings.Contains(f, "0123456789") {
			t.Errorf("%s is still there", f)
		}
	}
}

// Every voxel follows one sinusoid of 0.1 cycles a volume, sampled at its slice's time. After
// correction, in the interior, every slice shows it at the output's own instants.
func TestTimeIsCorrected(t *testing.T) {
	const nt = 40
	const freq = 0.1 / crewTR // Hz
	at := func(t float64) float64 { return 1000 + 10*detmath.Sin(2*math.Pi*freq*t+0.3) }
	dir := crewDataset(t, func(s *sailor) {
		times := s.sidecar["SliceTiming"].([]float64)
		n := crewSize
		s.header.Dim[4] = nt
		s.data = nil
		for v := range nt {
			for z := range n[2] {
				for range n[0] * n[1] {
					s.data = append(s.data, float32(at(float64(v)*crewTR+times[z])))
				}
			}
		}
	})
	for _, c := range []struct {
		args   []string
		start  float64
		within float64 // of the 10 of amplitude; in the interior 1e-3 of it and a margin (fourier), 6e-4 of the mean 1000 (sinc of reach 8): the errors that package slicetime states and tests
	}{
		{[]string{"--skip", "1"}, 2.9375, 0.05},
		{[]string{"--time", "sinc", "--time-origin", "start"}, 0, 0.6},
		{[]string{"--time-origin", "1.25"}, 1.25, 0.05},
		{[]string{"--order", "space-first"}, 0.9375, 0.05},
	} {
		out := process(t, dir, append(c.args, "--motion", "none")...)
		h, d := series(t, filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"))
		_, _, nz, vols := h.Size()
		nv := len(d) / vols
		worst := 0.0
		for v := 12; v < vols-12; v++ {
			for z := range nz {
				worst = max(worst, math.Abs(float64(d[v*nv+z*nv/nz])-at(c.start+float64(v)*crewTR)))
			}
		}
		if worst > c.within {
			t.Errorf("%v: off by %g of an amplitude of 10", c.args, worst)
		}
	}
}
