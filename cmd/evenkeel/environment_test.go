package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"evenkeel/phantom"
	"evenkeel/provenance"
)

// writeFleet writes a small cohort of every kind: a run that is long enough for windows which do not
// reach both ends, compressed and of int16; a short one; and two echoes of which one gives the poses.
func writeFleet(t *testing.T, dir string) {
	t.Helper()
	const nt = 18
	n := crewSize
	long := newSailor()
	a := long.header.Affine()
	s := phantom.Scan{Head: phantom.NewHead(11), N: n, NT: nt, Affine: a, TR: crewTR, SliceAxis: 2,
		SliceTimes: phantom.Interleaved(n[2], crewTR), Motion: phantom.Walk(11, 0.6, 0.012, 0.05, [3]float64{}), NoiseSD: 9, Seed: 11}
	data, err := s.Simulate(context.Background(), 2)
	if err != nil {
		t.Fatal(err)
	}
	long.data, long.header.Dim[4], long.header.Datatype, long.gzip = data, nt, 4, true
	short := newSailor()
	first, second := newSailor(), newSailor()
	first.gzip, second.gzip = true, true
	second.sidecar["EchoTime"] = 0.05
	second.data = slices.Clone(second.data)
	for i := range second.data {
		second.data[i] *= 0.6
	}
	writeDataset(dir, long.files("sub-01/func/sub-01_task-watch"), short.files("sub-02/func/sub-02_task-watch"),
		first.files("sub-03/func/sub-03_task-watch_echo-1"), second.files("sub-03/func/sub-03_task-watch_echo-2"),
		map[string][]byte{"sub-01/func/sub-01_task-watch_events.tsv": []byte("onset\tduration\ttrial_type\n0\t1\tflash\n7.5\t1\tflash\n")})
}

// contents are the files below an output, records without the part that may differ, and the
// permission bits of everything.
func contents(t *testing.T, out string) (files map[string]string, modes map[string]fs.FileMode) {
	t.Helper()
	files, modes = map[string]string{}, map[string]fs.FileMode{}
	err := filepath.WalkDir(out, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		rel, _ := filepath.Rel(out, name)
		modes[rel] = info.Mode()
		if d.IsDir() {
			return nil
		}
		b, err := os.ReadFile(name)
		if err == nil && strings.HasSuffix(rel, provenance.RecordSuffix) {
			r, rerr := provenance.Parse(b)
			if rerr != nil {
				return rerr
			}
			if r.Log.Started.IsZero() || r.Software.GoVersion == "" {
				t.Errorf("%s: an empty log: %+v", rel, r.Log)
			}
			r.Log = provenance.Log{}
			b, err = r.Marshal()
		}
		files[rel] = string(b)
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return files, modes
}

// An environment is what surrounds the program while it makes one output.
type environment struct {
	name  string
	env   []string   // beside a bare environment
	umask string     // "" for 022
	bare  bool       // nothing in the environment at all
	dir   string     // where it is started: "raw" for in the dataset, "" for beside it
	out   string     // below the folder of the test; "" for one of its own at its top
	calls [][]string // options of each call, in turn; nil for one without
	plain bool       // the kernels without assembly: without it on this machine, the same as the base
}

var environments = []environment{
	{name: "jobs 2", calls: [][]string{{"--jobs", "2"}}},
	{name: "jobs 5", calls: [][]string{{"--jobs", "5"}}},
	{name: "GOMAXPROCS 1", env: []string{"GOMAXPROCS=1"}},
	{name: "GOMAXPROCS 3", env: []string{"GOMAXPROCS=3"}},
	{name: "without assembly", env: []string{"EVENKEEL_PLAIN=1"}, plain: true},
	{name: "the other decoder", env: []string{"EVENKEEL_INFLATE=klauspost"}},
	{name: "umask 077, comma as decimal point", umask: "077", env: []string{"LC_ALL=de_DE.UTF-8", "LC_NUMERIC=de_DE.UTF-8", "TZ=Asia/Kathmandu"}},
	{name: "umask 002, the Turkish i", umask: "002", env: []string{"LC_ALL=tr_TR.UTF-8", "LANG=tr_TR.UTF-8", "LANGUAGE=tr", "TZ=America/St_Johns"}},
	{name: "shards", calls: [][]string{{"--shard", "1/2"}, {"--shard", "2/2"}}},
	{name: "the runs one by one, the last first", calls: [][]string{{"--subject", "03"}, {"--subject", "02"}, {"--subject", "01"}}},
	{name: "again, then anew", calls: [][]string{{}, {}, {"--redo", "--jobs", "1"}}},
	{name: "nothing in the environment", bare: true},
	{name: "from within the dataset", dir: "raw", env: []string{"TZ=Pacific/Kiritimati"}},
	{name: "an output deep down", out: "deep/er/and deeper/still"},
	{name: "little memory, a busy collector", env: []string{"GOGC=1", "GODEBUG=gcstoptheworld=1"}, calls: [][]string{{"--memory", "100MiB", "--jobs", "3"}}},
}

// The same bytes in every environment, by the route on which a series is in memory and by that on
// which it is streamed. Machines of other kinds are asked in .ci/run.
func TestSameBytesInEveryEnvironment(t *testing.T) {
	program, err := exec.LookPath("evenkeel") // this test's own executable, as testscript sets it up
	if err != nil {
		t.Fatal(err)
	}
	top := t.TempDir()
	raw := filepath.Join(top, "raw")
	writeFleet(t, raw)
	start := time.Now()
	for _, route := range []struct {
		name    string
		options []string
	}{
		{"in memory", []string{"--events"}}, // a pose for every excitation, joint, Fourier
		{"streamed", []string{"--motion", "volume", "--time", "sinc", "--events"}},
	} {
		t.Run(route.name, func(t *testing.T) {
			steady := func(t *testing.T, e environment, out string) {
				t.Helper()
				calls := e.calls
				if calls == nil {
					calls = [][]string{{"--jobs", "1"}}
					if len(e.env) > 0 {
						calls = [][]string{{}}
					}
				}
				dir, in, to := top, "raw", out
				if e.dir != "" {
					dir, in = filepath.Join(top, e.dir), "."
				}
				to, err := filepath.Rel(dir, out)
				if err != nil {
					t.Fatal(err)
				}
				umask := e.umask
				if umask == "" {
					umask = "022"
				}
				for _, call := range calls {
					args := slices.Concat([]string{"-c", `umask ` + umask + `; exec "$@"`, "sh", program, "steady", "--quiet", in, to}, route.options, call)
					c := exec.Command("sh", args...)
					c.Dir = dir
					if !e.bare {
						c.Env = append([]string{"PATH=" + os.Getenv("PATH"), "HOME=" + top, "TMPDIR=" + os.TempDir(), "TZ=UTC", "LC_ALL=C"}, e.env...)
					} else {
						c.Env = []string{}
					}
					if text, err := c.CombinedOutput(); err != nil {
						t.Fatalf("%v: %v\n%s", call, err, text)
					}
				}
			}
			at := func(name string) string { return filepath.Join(top, strings.ReplaceAll(route.name, " ", "-")+"-"+name) }
			base := at("base")
			steady(t, environment{}, base)
			want, _ := contents(t, base)
			series := 0
			for name := range want {
				if strings.HasSuffix(name, "_desc-steady_bold.nii.gz") {
					series++
				}
			}
			if series != 4 {
				t.Fatalf("%d series, want 4", series)
			}
			for i, e := range environments {
				t.Run(e.name, func(t *testing.T) {
					if e.plain && runtime.GOARCH != "amd64" {
						t.Log("no assembly here: the plain kernels are the only ones")
					}
					out := at(fmt.Sprint(i))
					if e.out != "" {
						out = filepath.Join(out, filepath.FromSlash(e.out))
					}
					steady(t, e, out)
					got, modes := contents(t, out)
					compareContents(t, got, want, e.out != "")
					compareModes(t, modes, e.umask)
				})
			}
		})
	}
	t.Logf("%d environments by two routes: %.1f s", len(environments)+1, time.Since(start).Seconds())
}

// compareContents wants equal files. Where an output stands elsewhere as seen from the
// dataset, the links between them may say so, or be left out.
func compareContents(t *testing.T, got, want map[string]string, moved bool) {
	t.Helper()
	for name := range got {
		if _, ok := want[name]; !ok {
			t.Errorf("%s is there, and not in the base", name)
		}
	}
	for name, w := range want {
		g, ok := got[name]
		if !ok {
			t.Errorf("%s is missing", name)
			continue
		}
		if name == "dataset_description.json" && moved {
			g, w = unlinked(t, g), unlinked(t, w)
		}
		if g != w {
			at := 0
			for at < min(len(g), len(w)) && g[at] == w[at] {
				at++
			}
			t.Errorf("%s differs from byte %d (sizes %d, %d):\n%.200q\n%.200q", name, at, len(g), len(w), g[at:], w[at:])
		}
	}
}

func unlinked(t *testing.T, text string) string {
	t.Helper()
	var doc map[string]any
	if err := json.Unmarshal([]byte(text), &doc); err != nil {
		t.Fatal(err)
	}
	delete(doc, "DatasetLinks")
	delete(doc, "SourceDatasets")
	var b bytes.Buffer
	if err := json.NewEncoder(&b).Encode(doc); err != nil {
		t.Fatal(err)
	}
	return b.String()
}

// compareModes wants the bits that any program's files get (POSIX, open and mkdir): 0666
// for a file and 0777 for a folder, less the umask.
func compareModes(t *testing.T, modes map[string]fs.FileMode, umask string) {
	t.Helper()
	less := fs.FileMode(0o022)
	if umask != "" {
		if _, err := fmt.Sscanf(umask, "%o", &less); err != nil {
			t.Fatal(err)
		}
	}
	for name, m := range modes {
		want := 0o666 &^ less
		if m.IsDir() {
			want = 0o777 &^ less
		}
		if m.Perm() != want {
			t.Errorf("%s: %v, want %v", name, m.Perm(), want)
		}
	}
}
