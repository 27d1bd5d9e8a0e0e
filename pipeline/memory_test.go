package pipeline

import (
	"context"
	"encoding/json"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"evenkeel/dataset"
)

// residentPeak is the largest resident size of this process, as Linux tells it.
func residentPeak() (int64, bool) {
	b, _ := os.ReadFile("/proc/self/status")
	for _, l := range strings.Split(string(b), "\n") {
		if v, ok := strings.CutPrefix(l, "VmHWM:"); ok {
			kb, err := strconv.ParseInt(strings.TrimSuffix(strings.TrimSpace(v), " kB"), 10, 64)
			return kb << 10, err == nil
		}
	}
	return 0, false
}

const memoryJob = "EVENKEEL_TEST_MEMORY"

// A memoryTask is what a process of its own does, so that nothing but the runs is measured.
type memoryTask struct {
	Root, Out string
	Keys      map[string]string
	Workers   int   // cores
	Jobs      int   // runs at once; 0: 1
	Memory    int64 // budget; 0: that of the machine
}

// A memoryReport is what it found.
type memoryReport struct {
	Planned int64 // for the run that needs most, with Workers
	Peak    int64 // resident, of the whole process
	AtOnce  int   // the most runs that were under way at once
	Refused []string
}

func memoryTest(line string) error {
	var task memoryTask
	if err := json.Unmarshal([]byte(line), &task); err != nil {
		return err
	}
	set := DefaultSettings()
	for _, k := range []string{"motion", "time", "reference", "order"} {
		if v, ok := task.Keys[k]; ok {
			if err := set.Set(k, v); err != nil {
				return err
			}
		}
	}
	ds, err := dataset.Open(task.Root)
	if err != nil {
		return err
	}
	plans, err := Survey(context.Background(), ds, Request{Settings: set, Workers: 1, Memory: task.Memory})
	if err != nil {
		return err
	}
	var r memoryReport
	under := 0
	outcomes, err := Steady(context.Background(), ds, plans, Job{Out: task.Out, Jobs: max(1, task.Jobs), Cores: task.Workers, Memory: task.Memory,
		Observe: func(e Event) {
			switch e.Kind {
			case RunStarted:
				under++
				r.AtOnce = max(r.AtOnce, under)
			case RunEnded:
				if e.Outcome.State != RefusedRun {
					under--
				}
			}
		}})
	if code := ExitCode(err, outcomes, false); code != ExitDone && code != ExitData {
		return fmt.Errorf("exit %d: %v %+v", code, err, outcomes)
	}
	for _, p := range plans {
		r.Planned = max(r.Planned, p.Memory(task.Workers))
		for _, f := range p.Refusals() {
			r.Refused = append(r.Refused, f.ID+": "+f.Found)
		}
	}
	peak, ok := residentPeak()
	if !ok {
		return fmt.Errorf("no VmHWM in /proc/self/status")
	}
	r.Peak = peak
	return json.NewEncoder(os.Stdout).Encode(r)
}

// residentWhile does a task in a process of its own.
func residentWhile(t *testing.T, task memoryTask) (r memoryReport) {
	t.Helper()
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	if task.Out == "" {
		task.Out = filepath.Join(t.TempDir(), "out")
	}
	line, err := json.Marshal(task)
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(self)
	cmd.Env = append(os.Environ(), memoryJob+"="+string(line))
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	if err := json.Unmarshal(out, &r); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	return r
}

// needResident skips where the resident size is not told.
func needResident(t *testing.T) {
	t.Helper()
	if _, ok := residentPeak(); !ok {
		t.Skip("/proc/self/status does not tell the resident size here")
	}
}

func TestMain(m *testing.M) {
	if line := os.Getenv(memoryJob); line != "" {
		if err := memoryTest(line); err != nil {
			fmt.Println(err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	os.Exit(m.Run())
}

// A run holds no more than its plan says, by every route, and the plan does not ask for
// several times as much.
func TestMemoryIsAsPlanned(t *testing.T) {
	needResident(t)
	// 7680 voxels: 2300 volumes are more than is kept in any case.
	large, small := t.TempDir(), t.TempDir()
	const many, few = keptBytes/(2*20*24*16) + 100, 60
	writeWatch(t, large, watchStem, many, 0.03)
	writeWatch(t, small, watchStem, few, 0.03)
	for _, c := range []struct {
		root    string
		keys    map[string]string
		workers int
	}{
		{large, map[string]string{"motion": "none", "time": "sinc"}, 2},
		{large, map[string]string{"motion": "volume", "time": "fourier", "reference": "first"}, 2},
		{small, map[string]string{"motion": "volume", "time": "sinc"}, 4},
		{small, nil, 2},
	} {
		r := residentWhile(t, memoryTask{Root: c.root, Keys: c.keys, Workers: c.workers})
		planned, peak := r.Planned, r.Peak
		t.Logf("%v, %d workers: planned %s, held %s", c.keys, c.workers, Bytes(planned), Bytes(peak))
		// Twice: the margins of what is small beside the series, and the program's own, which a small
		// run does not fill.
		if peak > planned || planned > 2*peak {
			t.Errorf("%v, %d workers: planned %s, held %s", c.keys, c.workers, Bytes(planned), Bytes(peak))
		}
	}
}

// A cohort never holds more than --memory, whether that admits one run at a time, two or all; and
// as many as it admits are done at once.
func TestCohortKeepsItsMemory(t *testing.T) {
	needResident(t)
	const runs = 4
	// 7680 voxels: in memory, 1000 volumes are 29 MiB as float32 beside 15 MiB as stored.
	large, small := t.TempDir(), t.TempDir()
	writeFlotilla(t, large, runs, 1000)
	writeFlotilla(t, small, runs, 36)
	for _, c := range []struct {
		name string
		root string
		keys map[string]string
	}{
		{"time alone, in memory", large, map[string]string{"motion": "none", "time": "fourier"}},
		{"volume poses, streamed", small, map[string]string{"motion": "volume", "time": "sinc"}},
		{"a pose for every excitation", small, nil},
	} {
		_, plans := watchPlans(t, c.root, c.keys)
		need := plans[0].Memory(1)
		for _, admits := range []int{1, 2, runs} {
			budget := need * int64(admits)
			r := residentWhile(t, memoryTask{Root: c.root, Keys: c.keys, Workers: runs, Jobs: runs, Memory: budget})
			t.Logf("%s: %s needed by a run, --memory %s: %d at once, held %s (%.0f %%)", c.name, Bytes(need), Bytes(budget), r.AtOnce, Bytes(r.Peak), 100*float64(r.Peak)/float64(budget))
			if r.Peak > budget || r.AtOnce != admits || len(r.Refused) > 0 {
				t.Errorf("%s: --memory %s: %d at once, want %d; held %s; refused %v", c.name, Bytes(budget), r.AtOnce, admits, Bytes(r.Peak), r.Refused)
			}
		}
	}
}

// writeFlotilla writes runs of equal size for as many subjects.
func writeFlotilla(t *testing.T, root string, runs, volumes int) {
	t.Helper()
	writeWatch(t, root, watchStem, volumes, 0.03)
	for n := 2; n <= runs; n++ {
		sub := fmt.Sprintf("sub-%02d", n)
		stem := strings.ReplaceAll(watchStem, "sub-01", sub)
		if err := os.MkdirAll(filepath.Join(root, filepath.Dir(stem)), 0o755); err != nil {
			t.Fatal(err)
		}
		for _, ext := range []string{"_bold.nii.gz", "_bold.json"} {
			b, err := os.ReadFile(filepath.Join(root, watchStem+ext))
			if err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(filepath.Join(root, stem+ext), b, 0o644); err != nil {
				t.Fatal(err)
			}
		}
	}
}

// A run that cannot fit is refused beforehand with what it needs; given exactly what that
// message says, it is done, and holds no more.
func TestMemoryShortTellsWhatIsEnough(t *testing.T) {
	needResident(t)
	root := t.TempDir()
	writeWatch(t, root, watchStem, 60, 0.03)
	for _, keys := range []map[string]string{nil, {"motion": "volume", "time": "sinc"}, {"motion": "none", "time": "fourier"}} {
		_, plans := watchPlans(t, root, keys)
		need := plans[0].Memory(1)
		r := residentWhile(t, memoryTask{Root: root, Keys: keys, Workers: 2, Memory: need - 1, Out: filepath.Join(t.TempDir(), "out")})
		if len(r.Refused) != 1 || r.AtOnce != 0 {
			t.Fatalf("%v: one byte short: %+v", keys, r)
		}
		text, ok := strings.CutPrefix(r.Refused[0], "memory-short: ")
		text, _ = strings.CutSuffix(text, " needed")
		told, err := ParseBytes("--memory", text)
		if !ok || err != nil || told < need || told > need+need/500 {
			t.Fatalf("%v: %q, %d, %v; needed %d", keys, r.Refused[0], told, err, need)
		}
		r = residentWhile(t, memoryTask{Root: root, Keys: keys, Workers: 2, Memory: told})
		t.Logf("%v: told %s, held %s", keys, text, Bytes(r.Peak))
		if len(r.Refused) > 0 || r.AtOnce != 1 || r.Peak > told {
			t.Errorf("%v: with the %s that were asked for: %+v", keys, text, r)
		}
	}
}

// A size told as needed, read back, is enough and hardly more.
func TestBytesUp(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.Int64Range(1, 1<<46).Draw(t, "n") >> rapid.IntRange(0, 46).Draw(t, "shift")
		n = max(n, 1)
		s := bytesUp(n)
		if v, err := ParseBytes("--memory", s); err != nil || v < n || v-n > n/500+1 {
			t.Fatalf("%d: %s: %d %v", n, s, v, err)
		}
	})
}
