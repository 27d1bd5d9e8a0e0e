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

// memoryTest is what a process of its own does for TestMemoryIsAsPlanned: so that nothing
// but the run is measured.
func memoryTest(line string) error {
	var job struct {
		Root, Out string
		Keys      map[string]string
		Workers   int
	}
	if err := json.Unmarshal([]byte(line), &job); err != nil {
		return err
	}
	set := DefaultSettings()
	for _, k := range []string{"motion", "time", "reference", "order"} {
		if v, ok := job.Keys[k]; ok {
			if err := set.Set(k, v); err != nil {
				return err
			}
		}
	}
	ds, err := dataset.Open(job.Root)
	if err != nil {
		return err
	}
	plans, err := Survey(context.Background(), ds, Request{Settings: set, Workers: 1})
	if err != nil {
		return err
	}
	outcomes, err := Steady(context.Background(), ds, plans, Job{Out: job.Out, Jobs: 1, Cores: job.Workers})
	if code := ExitCode(err, outcomes, false); code != 0 {
		return fmt.Errorf("exit %d: %v %+v", code, err, outcomes)
	}
	peak, ok := residentPeak()
	if !ok {
		return fmt.Errorf("no VmHWM in /proc/self/status")
	}
	fmt.Printf("\n%d %d\n", plans[0].Memory(job.Workers), peak)
	return nil
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
	if _, ok := residentPeak(); !ok {
		t.Skip("/proc/self/status does not tell the resident size here")
	}
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
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
		line, _ := json.Marshal(map[string]any{"Root": c.root, "Out": filepath.Join(t.TempDir(), "out"), "Keys": c.keys, "Workers": c.workers})
		cmd := exec.Command(self)
		cmd.Env = append(os.Environ(), memoryJob+"="+string(line))
		out, err := cmd.Output()
		if err != nil {
			t.Fatalf("%v\n%s", err, out)
		}
		var planned, peak int64
		if _, err := fmt.Sscan(string(out), &planned, &peak); err != nil {
			t.Fatalf("%v\n%s", err, out)
		}
		t.Logf("%v, %d workers: planned %s, held %s", c.keys, c.workers, Bytes(planned), Bytes(peak))
		// Twice: the margins of what is small beside the series, and the program's own, which a small
		// run does not fill.
		if peak > planned || planned > 2*peak {
			t.Errorf("%v, %d workers: planned %s, held %s", c.keys, c.workers, Bytes(planned), Bytes(peak))
		}
	}
}
