package pipeline

import (
	"context"
	"errors"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"
	"time"
)

// At no time do admitted runs hold more than the budget together, and all are
// admitted in the end.
func TestAdmissionKeepsTheBudget(t *testing.T) {
	const budget = 100
	a := newAdmission(budget)
	var held, worst atomic.Int64
	var wg sync.WaitGroup
	for i := range 50 {
		need := int64(10 + 13*i%90)
		if err := a.acquire(context.Background(), need); err != nil {
			t.Fatal(err)
		}
		now := held.Add(need)
		for w := worst.Load(); now > w && !worst.CompareAndSwap(w, now); w = worst.Load() {
		}
		wg.Add(1)
		go func() {
			defer wg.Done()
			time.Sleep(time.Millisecond)
			held.Add(-need)
			a.release(need)
		}()
	}
	wg.Wait()
	if worst.Load() > budget {
		t.Errorf("%d held at once, of %d", worst.Load(), budget)
	}
	if worst.Load() <= 60 {
		t.Errorf("at most %d held at once: runs did not run together", worst.Load())
	}
}

func TestAdmissionStopsWithTheContext(t *testing.T) {
	a := newAdmission(10)
	if err := a.acquire(context.Background(), 10); err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	time.AfterFunc(10*time.Millisecond, cancel)
	if err := a.acquire(ctx, 1); !errors.Is(err, context.Canceled) {
		t.Errorf("got %v", err)
	}
}

// A unit takes fewer goroutines rather than more memory than there is.
func TestUnitFitsTheBudget(t *testing.T) {
	p := sized("a", "a", 100)
	p.Volumes = 100
	u := unit{[]*Plan{p}}
	if w, need := u.fit(8, 1<<40); w != 8 || need != p.Memory(8) {
		t.Errorf("%d workers, %d bytes", w, need)
	}
	if w, need := u.fit(8, p.Memory(3)); w != 3 || need != p.Memory(3) {
		t.Errorf("%d workers, %d bytes, want 3", w, need)
	}
	if p.Memory(2) <= p.Memory(1) || p.Memory(1) < 4*64*100 {
		t.Errorf("memory %d, %d", p.Memory(1), p.Memory(2))
	}
}

func TestParseBytes(t *testing.T) {
	for v, want := range map[string]int64{"8GiB": 8 << 30, "1MB": 1 << 20, "512m": 512 << 20, "100": 100} {
		if n, err := ParseBytes("--memory", v); err != nil || n != want {
			t.Errorf("%s: %d %v", v, n, err)
		}
	}
	for _, v := range []string{"", "0", "-1GiB", "much"} {
		var usage *UsageError
		if _, err := ParseBytes("--memory", v); !errors.As(err, &usage) {
			t.Errorf("%q: %v", v, err)
		}
	}
}

func TestMemAvailable(t *testing.T) {
	name := filepath.Join(t.TempDir(), "meminfo")
	os.WriteFile(name, []byte("MemTotal:       24000000 kB\nMemFree:        100 kB\nMemAvailable:   2048 kB\n"), 0o644)
	if n, ok := memAvailable(name); !ok || n != 2<<20 {
		t.Error(n, ok)
	}
	if _, ok := memAvailable(filepath.Join(t.TempDir(), "none")); ok {
		t.Error("a missing file told a size")
	}
}

// What a control group leaves: the own group or a parent of it, whichever leaves least,
// less what is in use but for idle file pages; the layouts are those of the kernel's documents.
func TestGroupFree(t *testing.T) {
	for name, c := range map[string]struct {
		proc  string
		files map[string]string
		want  int64
		ok    bool
	}{
		"version 2, a job below a limited parent": {"0::/slurm/job_7/step_0\n", map[string]string{
			"slurm/job_7/step_0/memory.max": "max\n",
			"slurm/job_7/memory.max":        "1000000\n",
			"slurm/job_7/memory.current":    "300000\n",
			"slurm/job_7/memory.stat":       "anon 100\ninactive_file 200000\nactive_file 5\n",
			"slurm/memory.max":              "9000000\n",
		}, 900000, true},
		"version 2, the parent leaves less": {"0::/a/b\n", map[string]string{
			"a/b/memory.max": "1000\n", "a/memory.max": "5000\n", "a/memory.current": "4500\n"}, 500, true},
		"version 1": {"11:cpu,cpuacct:/x\n4:memory:/slurm/uid_1/job_2\n0::/x\n", map[string]string{
			"memory/slurm/uid_1/job_2/memory.limit_in_bytes": "2000\n",
			"memory/slurm/uid_1/job_2/memory.usage_in_bytes": "1500\n",
			"memory/slurm/uid_1/job_2/memory.stat":           "inactive_file 1\ntotal_inactive_file 250\n",
			"memory/memory.limit_in_bytes":                   "9223372036854771712\n"}, 750, true},
		"the path of the host, seen from inside": {"0::/../../kubepods/pod9\n", map[string]string{"memory.max": "4096\n"}, 4096, true},
		"used up":                                {"0::/a\n", map[string]string{"a/memory.max": "10\n", "a/memory.current": "20\n"}, 0, true},
		"no limit":                               {"0::/a\n", map[string]string{"a/memory.max": "max\n"}, 0, false},
		"nothing":                                {"", nil, 0, false},
	} {
		dir := t.TempDir()
		proc, mount := filepath.Join(dir, "cgroup"), filepath.Join(dir, "mount")
		os.WriteFile(proc, []byte(c.proc), 0o644)
		for file, text := range c.files {
			full := filepath.Join(mount, file)
			os.MkdirAll(filepath.Dir(full), 0o755)
			os.WriteFile(full, []byte(text), 0o644)
		}
		if n, ok := groupFree(proc, mount); n != c.want || ok != c.ok {
			t.Errorf("%s: %d %v, want %d %v", name, n, ok, c.want, c.ok)
		}
	}
}

// A lock is held by one at a time, waited for, and leaves no file.
func TestLock(t *testing.T) {
	name := filepath.Join(t.TempDir(), ".run.lock")
	first, err := lockFile(context.Background(), name, nil)
	if err != nil {
		t.Fatal(err)
	}
	waited := make(chan struct{})
	got := make(chan *fileLock)
	go func() {
		second, err := lockFile(context.Background(), name, func() { close(waited) })
		if err != nil {
			t.Error(err)
		}
		got <- second
	}()
	<-waited
	select {
	case <-got:
		t.Fatal("two hold one lock")
	case <-time.After(2 * lockPoll):
	}
	first.release()
	second := <-got
	ctx, cancel := context.WithCancel(context.Background())
	time.AfterFunc(10*time.Millisecond, cancel)
	if _, err := lockFile(ctx, name, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("waiting did not end with the context: %v", err)
	}
	second.release()
	if _, err := os.Stat(name); !os.IsNotExist(err) {
		t.Error("the lock's file was left behind")
	}
}
