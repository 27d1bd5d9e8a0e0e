package main

import (
	"context"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"testing"

	"evenkeel/dataset"
	"evenkeel/pipeline"
)

// echoes writes two echoes of one run, the first the shortest; change is told which.
func echoes(t *testing.T, change func(echo int, s *sailor)) (dir string) {
	t.Helper()
	dir = filepath.Join(t.TempDir(), "raw")
	for e := 1; e <= 2; e++ {
		s := newSailor()
		s.sidecar["EchoTime"] = 0.012 * float64(e)
		change(e, s)
		writeDataset(dir, s.files(theRun+"_echo-"+strconv.Itoa(e)))
	}
	return dir
}

func plansOf(t *testing.T, dir string, filter dataset.Filter, set pipeline.Settings) (*dataset.Dataset, []*pipeline.Plan) {
	t.Helper()
	ds, err := dataset.Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	plans, err := pipeline.Survey(context.Background(), ds, pipeline.Request{Settings: set, Filter: filter})
	if err != nil {
		t.Fatal(err)
	}
	return ds, plans
}

// An echo that stands elsewhere in the world cannot take the pose of another; what single
// precision does to an affine is not elsewhere.
func TestEchoesOnOtherGrids(t *testing.T) {
	for _, c := range []struct {
		shift float64 // mm
		code  int
	}{{3, 3}, {0.001, 0}} {
		dir := echoes(t, func(e int, s *sailor) {
			if e == 2 {
				s.header.Srow[1][3] += c.shift
			}
		})
		code, stdout, stderr := run("survey", dir)
		if says := strings.Contains(stdout, "image-affine: "+theRun+"_echo-2_bold.nii"); code != c.code || says != (c.code != 0) {
			t.Errorf("%g mm: %s", c.shift, dump(code, stdout, stderr))
		}
		// On their own grids they are two runs like any other.
		if code, stdout, stderr := run("survey", dir, "--motion", "none"); code != 0 {
			t.Errorf("%g mm, no motion: %s", c.shift, dump(code, stdout, stderr))
		}
	}
}

// When only another echo is written, the series that the pose comes from is given back
// before that echo is read: the plan allows for one series.
func TestOneSeriesAtATime(t *testing.T) {
	const volumes = 200
	dir := echoes(t, func(e int, s *sailor) {
		s.header.Dim[4] = volumes
		s.data = slices.Repeat(s.data, volumes/crewVolumes)
	})
	series := 4 * volumes * crewSize[0] * crewSize[1] * crewSize[2]
	set := pipeline.DefaultSettings()
	set.Motion, set.Order = "volume", "time-first" // matched once, one pose a volume: quicker
	set.Reference = pipeline.Standard{Word: "first"}
	ds, plans := plansOf(t, dir, dataset.Filter{"echo": {"2"}}, set)
	held := func() int {
		var m runtime.MemStats
		runtime.ReadMemStats(&m)
		return int(m.HeapAlloc)
	}
	runtime.GC()
	before, reads := held(), 0
	outcomes, err := pipeline.Steady(context.Background(), ds, plans, pipeline.Job{Out: filepath.Join(t.TempDir(), "out"), Observe: func(e pipeline.Event) {
		if e.Stage == "read" {
			// Nothing is collected here: what was given back was given back before.
			if reads++; held()-before > series/2 {
				t.Errorf("%d bytes are held when the second series is about to be read; one series is %d", held()-before, series)
			}
		}
	}})
	if code := pipeline.ExitCode(err, outcomes, false); code != 0 || reads != 1 {
		t.Errorf("exit %d, %d reads: %v %+v", code, reads, err, outcomes)
	}
}

// A mistake of ours in one echo fails that echo: the one published before stands.
func TestPanicInOneEcho(t *testing.T) {
	dir := echoes(t, func(int, *sailor) {})
	ds, plans := plansOf(t, dir, nil, pipeline.DefaultSettings())
	out := filepath.Join(t.TempDir(), "out")
	outcomes, err := pipeline.Steady(context.Background(), ds, plans, pipeline.Job{Out: out, Observe: func(e pipeline.Event) {
		if e.Stage == "measure-steady" && e.Plan == plans[1] {
			panic("a hole below the waterline")
		}
	}})
	if outcomes[0].State != pipeline.Done || outcomes[0].Figures == nil || outcomes[1].State != pipeline.Failed || pipeline.ExitCode(err, outcomes, false) != pipeline.ExitBug {
		t.Errorf("%v %+v", err, outcomes)
	}
	if code, stdout, stderr := run("audit", out, "--dataset", dir); code != 0 || !strings.Contains(stdout, "1 record,") {
		t.Error(dump(code, stdout, stderr))
	}
}

// Two programs with the same work on one output: both end well, each run is computed by
// one of them or by both one after the other, and every file is the one of a lone run.
func TestSteadyConcurrently(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "raw")
	for _, sub := range []string{"01", "02", "03"} {
		writeDataset(dir, newSailor().files("sub-"+sub+"/func/sub-"+sub+"_task-watch"))
	}
	alone, out := process(t, dir, "--jobs", "1", "--motion", "volume", "--order", "time-first"), filepath.Join(t.TempDir(), "out")
	type end struct {
		outcomes []pipeline.Outcome
		err      error
	}
	ends := make(chan end)
	set := pipeline.DefaultSettings()
	set.Motion, set.Order = "volume", "time-first" // quicker
	for range 2 {
		ds, plans := plansOf(t, dir, nil, set)
		go func() {
			o, err := pipeline.Steady(context.Background(), ds, plans, pipeline.Job{Out: out, Jobs: 3, Cores: 2})
			ends <- end{o, err}
		}()
	}
	done := 0
	for range 2 {
		e := <-ends
		if code := pipeline.ExitCode(e.err, e.outcomes, false); code != 0 {
			t.Errorf("exit %d: %v %+v", code, e.err, e.outcomes)
		}
		for _, o := range e.outcomes {
			if o.State == pipeline.Done {
				done++
			} else if o.State != pipeline.UpToDate {
				t.Errorf("%s: %s", o.Plan.Run.Stem, o.State)
			}
		}
	}
	if done != 3 {
		t.Errorf("%d runs computed, want each once", done)
	}
	if got, want := outputs(out), outputs(alone); !slices.Equal(got, want) {
		t.Errorf("files %v\nwant %v", got, want)
	}
	for _, f := range outputs(out) {
		if strings.HasSuffix(f, "_prov.json") {
			continue
		}
		if string(mustRead(t, filepath.Join(out, f))) != string(mustRead(t, filepath.Join(alone, f))) {
			t.Errorf("%s differs from a lone run's", f)
		}
	}
}
