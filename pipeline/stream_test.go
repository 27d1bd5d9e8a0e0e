package pipeline

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"pgregory.net/rapid"

	"evenkeel/dataset"
	"evenkeel/internal/parallel"
	"evenkeel/nifti"
	"evenkeel/phantom"
	"evenkeel/realign"
)

// The watch is a small invented run of int16, long enough for several batches and for
// windows that do not reach its ends.
var (
	watchSize   = [3]int{20, 24, 16}
	watchTR     = 2.0
	watchStem   = "sub-01/func/sub-01_task-watch"
	watchVoxels = watchSize[0] * watchSize[1] * watchSize[2]
)

var watchData = sync.OnceValues(func() ([]float32, error) {
	n := watchSize
	s := phantom.Scan{Head: phantom.NewHead(7), N: n, NT: 45, Affine: watchAffine(), TR: watchTR, SliceAxis: 2,
		SliceTimes: phantom.Interleaved(n[2], watchTR), Motion: phantom.Walk(7, 0.5, 0.01, 0.05, [3]float64{}), NoiseSD: 9, Seed: 7}
	return s.Simulate(context.Background(), 2)
})

func watchAffine() [16]float64 {
	n := watchSize
	return [16]float64{-9, 0, 0, 4.5 * float64(n[0]-1), 0, 9, 0, -4.5 * float64(n[1]-1), 0, 0, 9, -4.5 * float64(n[2]-1), 0, 0, 0, 1}
}

// writeWatch writes a run of nt volumes; those after the 45 simulated repeat them.
func writeWatch(t testing.TB, root, stem string, nt int, echoTime float64) {
	t.Helper()
	base, err := watchData()
	if err != nil {
		t.Fatal(err)
	}
	a := watchAffine()
	h := &nifti.Header{Version: 1, Datatype: nifti.Int16,
		Dim:    [8]int64{4, int64(watchSize[0]), int64(watchSize[1]), int64(watchSize[2]), int64(nt), 1, 1, 1},
		Pixdim: [8]float64{1, 9, 9, 9, watchTR}, SclSlope: 1, XYZTUnits: 2 | 8, SformCode: 1,
		Srow: [3][4]float64{{a[0], a[1], a[2], a[3]}, {a[4], a[5], a[6], a[7]}, {a[8], a[9], a[10], a[11]}}}
	var b bytes.Buffer
	w, err := nifti.NewWriter(&b, h, true)
	if err != nil {
		t.Fatal(err)
	}
	vol := make([]float32, watchVoxels)
	for n := range nt {
		copy(vol, base[n%45*watchVoxels:])
		for i := range vol {
			vol[i] *= float32(0.03 / echoTime)
		}
		if err := w.WriteVolume(vol); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	side, _ := json.Marshal(map[string]any{"TaskName": "watch", "RepetitionTime": watchTR, "SliceTiming": phantom.Interleaved(watchSize[2], watchTR),
		"PhaseEncodingDirection": "j-", "EchoTime": echoTime, "MRAcquisitionType": "2D"})
	for name, data := range map[string][]byte{stem + "_bold.nii.gz": b.Bytes(), stem + "_bold.json": side,
		"dataset_description.json": []byte(`{"Name":"Watches of an invented ship","BIDSVersion":"1.8.0"}`)} {
		full := filepath.Join(root, filepath.FromSlash(name))
		if err := errors.Join(os.MkdirAll(filepath.Dir(full), 0o755), os.WriteFile(full, data, 0o644)); err != nil {
			t.Fatal(err)
		}
	}
}

// watchPlans surveys a dataset with settings given by their keys.
func watchPlans(t testing.TB, root string, keys map[string]string) (*dataset.Dataset, []*Plan) {
	t.Helper()
	set := DefaultSettings()
	for _, k := range []string{"motion", "time", "reference", "space", "order", "skip", "store"} {
		if v, ok := keys[k]; ok {
			if err := set.Set(k, v); err != nil {
				t.Fatal(err)
			}
		}
	}
	ds, err := dataset.Open(root)
	if err != nil {
		t.Fatal(err)
	}
	plans, err := Survey(context.Background(), ds, Request{Settings: set, Workers: 1})
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range plans {
		if !p.Runs() {
			t.Fatal(p.Faults, p.Err)
		}
	}
	return ds, plans
}

// tree gives the files below a folder but records, whose logs tell times.
func tree(t testing.TB, dir string) map[string]string {
	t.Helper()
	out := map[string]string{}
	err := filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		b, err := os.ReadFile(name)
		rel, _ := filepath.Rel(dir, name)
		out[rel] = string(b)
		if strings.HasSuffix(rel, "_prov.json") {
			out[rel] = "" // compared by digests of the others
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// Streamed or in memory, kept or read again, with one worker or five: the same files.
func TestRoutesGiveTheSameBytes(t *testing.T) {
	for name, c := range map[string]struct {
		keys   map[string]string
		echoes bool
	}{
		"volume":     {keys: map[string]string{"motion": "volume", "time": "sinc", "skip": "1"}},
		"echoes":     {keys: map[string]string{"motion": "volume", "time": "sinc", "reference": "first", "space": "cubic"}, echoes: true},
		"no motion":  {keys: map[string]string{"motion": "none", "time": "sinc"}},
		"no time":    {keys: map[string]string{"motion": "volume", "time": "none", "reference": "middle", "order": "space-first"}},
		"nothing":    {keys: map[string]string{"motion": "none", "time": "none", "reference": "3"}},
		"along path": {keys: map[string]string{"motion": "path", "time": "sinc", "order": "time-first"}},
	} {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			root := t.TempDir()
			stem := watchStem
			if c.echoes {
				writeWatch(t, root, watchStem+"_echo-2", 30, 0.05)
				stem += "_echo-1"
			}
			writeWatch(t, root, stem, 30, 0.03)
			var want map[string]string
			for i, r := range []struct {
				route
				cores int
			}{{route{keep: true}, 1}, {route{streamed: true}, 1}, {route{streamed: true}, 5}, {route{keep: true, streamed: true}, 2}, {route{}, 2}} {
				ds, plans := watchPlans(t, root, c.keys)
				if !plans[0].route().streamed {
					t.Error("this run is not streamed")
				}
				out := filepath.Join(t.TempDir(), "out")
				streamed := false
				outcomes, err := Steady(context.Background(), ds, plans, Job{Out: out, Jobs: 1, Cores: r.cores, route: func(*Plan) route { return r.route }, Observe: func(e Event) {
					streamed = streamed || e.Stage == "steady"
				}})
				if code := ExitCode(err, outcomes, false); code != 0 || streamed != r.streamed {
					t.Fatalf("%+v: exit %d, %v, %+v", r, code, err, outcomes)
				}
				for _, o := range outcomes {
					if o.StageSeconds["estimate"] <= 0 || (o.StageSeconds["steady"] > 0) != r.streamed {
						t.Errorf("%+v: seconds %v", r, o.StageSeconds)
					}
				}
				// The digests are those of the files.
				if found, _, _, err := Audit(context.Background(), out, root, nil); err != nil || len(found) > 0 {
					t.Errorf("%+v: audit %v %+v", r, err, found)
				}
				got := tree(t, out)
				if i == 0 {
					want = got
				}
				if len(got) != len(want) {
					t.Errorf("%+v: %d files, %d", r, len(got), len(want))
				}
				for f := range want {
					if got[f] != want[f] {
						t.Errorf("%+v: %s differs", r, f)
					}
				}
			}
		})
	}
}

// What cannot be streamed is not: each reason alone.
func TestRoutes(t *testing.T) {
	root := t.TempDir()
	writeWatch(t, root, watchStem, 12, 0.03)
	for _, c := range []struct {
		keys     map[string]string
		streamed bool
	}{
		{map[string]string{"motion": "volume", "time": "sinc"}, true},
		{map[string]string{"motion": "volume", "time": "fourier"}, false},
		{map[string]string{"motion": "volume", "time": "sinc", "order": "joint"}, false},
		{map[string]string{"motion": "volume", "time": "sinc", "order": "space-first"}, false},
		{map[string]string{"motion": "volume", "time": "none", "order": "space-first"}, true},
		{map[string]string{"motion": "path", "time": "none", "order": "space-first"}, false},
		{map[string]string{"motion": "path", "time": "none"}, true},
		{map[string]string{"motion": "none", "time": "sinc", "order": "joint"}, true},
		{map[string]string{"motion": "none", "time": "none", "store": "int16"}, false},
		{nil, false},
	} {
		_, plans := watchPlans(t, root, c.keys)
		p := plans[0]
		r := p.route()
		if r.streamed != c.streamed || !r.keep {
			t.Errorf("%v: %+v", c.keys, r)
		}
		// The same run, larger than what is kept in any case.
		p.Volumes = keptBytes/int(p.Header.StoredBytes()) + 1
		if keep := p.Settings.Motion == "path" || p.Settings.Motion == "volume" && !c.streamed; p.route().keep != keep {
			t.Errorf("%v, large: %+v", c.keys, p.route())
		}
	}
}

// Every volume is read, measured and made once and in order, none before what it
// needs is there, and nothing that is needed is overwritten in the ring.
func TestBatches(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		nt := rapid.IntRange(1, 90).Draw(t, "nt")
		span := func(name string) func(u int) (int, int) {
			back, on, ends := rapid.IntRange(0, 20).Draw(t, name+" back"), rapid.IntRange(0, 20).Draw(t, name+" on"), rapid.IntRange(1, 40).Draw(t, name+" ends")
			return func(u int) (int, int) {
				first, last := max(0, u-back), min(nt-1, u+on)
				if u-back < 0 {
					last = min(nt-1, max(last, ends-1))
				}
				if u+on > nt-1 {
					first = max(0, min(first, nt-ends))
				}
				return first, last
			}
		}
		needs, look := span("needs"), span("look")
		// Both must grow with the volume.
		grows := func(f func(int) (int, int)) bool {
			for u := 1; u < nt; u++ {
				a, b := f(u - 1)
				c, d := f(u)
				if c < a || d < b {
					return false
				}
			}
			return true
		}
		if !grows(needs) || !grows(look) {
			t.Skip("not like a window")
		}
		checkBatches(t, nt, needs, look)
	})
	// Each from itself alone: what is needed besides is the volume before.
	alone := func(u int) (int, int) { return u, u }
	for _, nt := range []int{1, 2, batchVolumes, batchVolumes + 1, 5*batchVolumes - 3} {
		checkBatches(t, nt, alone, alone)
	}
}

func checkBatches(t interface{ Fatalf(string, ...any) }, nt int, needs, look func(int) (int, int)) {
	steps, ring := batches(nt, needs, look)
	at := make([]int, ring)
	for i := range at {
		at[i] = -1
	}
	have := func(u int) {
		if u >= 0 && at[u%ring] != u {
			t.Fatalf("volume %d is not in the ring", u)
		}
	}
	var was batch
	for _, b := range steps {
		if b.made-was.made > batchVolumes || b.made <= was.made || b.read < was.read || b.measured < was.measured {
			t.Fatalf("%+v after %+v", b, was)
		}
		for u := was.read; u < b.read; u++ {
			at[u%ring] = u
		}
		for u := was.read; u < b.read; u++ {
			have(u)
			have(u - 1)
		}
		for u := was.made; u < b.made; u++ {
			first, last := needs(u)
			for k := first; k <= last; k++ {
				have(k)
			}
		}
		for u := was.measured; u < b.measured; u++ {
			first, last := look(u)
			for k := first; k <= last; k++ {
				have(k)
			}
		}
		was = b
	}
	if was != (batch{nt, nt, nt}) || ring > nt {
		t.Fatalf("ended at %+v of %d, ring %d", was, nt, ring)
	}
}

// watchReel is the raw series of a run of nt volumes.
func watchReel(t *testing.T, nt int, keep bool) (*reel, []float32) {
	root := t.TempDir()
	writeWatch(t, root, watchStem, nt, 0.03)
	_, plans := watchPlans(t, root, map[string]string{"motion": "volume", "time": "none"})
	_, s, err := nifti.ReadSeries(filepath.Join(root, watchStem+"_bold.nii.gz"), nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	return newReel(plans[0], plans[0].Run.File, keep), s.Data
}

// A reel gives what a series in memory gives, as often as asked.
func TestReelGivesTheVolumes(t *testing.T) {
	for _, keep := range []bool{false, true} {
		r, data := watchReel(t, 12, keep)
		for _, want := range []func(int) bool{func(t int) bool { return t == 0 }, nil, func(t int) bool { return t%3 == 1 }, nil, func(int) bool { return false }} {
			for _, workers := range []int{1, 4} {
				var turns parallel.Turns
				var got, expected []int
				for u := range 12 {
					if want == nil || want(u) {
						expected = append(expected, u)
					}
				}
				used := make([]bool, workers)
				err := r.Each(t.Context(), workers, want, func(worker, u int, vol []float32) error {
					at, _ := slices.BinarySearch(expected, u)
					return turns.Do(at, func() error {
						if !slices.Equal(vol, data[u*watchVoxels:][:watchVoxels]) {
							t.Errorf("volume %d differs", u)
						}
						time.Sleep(time.Millisecond)
						return nil
					}, func() { got = append(got, u); used[worker] = true })
				})
				if err != nil || !slices.Equal(got, expected) {
					t.Errorf("keep %v, %d workers: %v, volumes %v, want %v", keep, workers, err, got, expected)
				}
			}
		}
		if (r.kept != nil) != keep || r.digest == nil {
			t.Errorf("keep %v: %d volumes kept, digest %v", keep, len(r.kept), r.digest)
		}
		sum := r.digest.Sum()
		raw, err := os.ReadFile(r.p.Dataset.Path(r.rel))
		if err != nil || r.digest.Bytes() != int64(len(raw)) {
			t.Errorf("%d bytes digested of %d", r.digest.Bytes(), len(raw))
		}
		if floats, err := r.floats(t.Context(), 3); err != nil || !slices.Equal(floats, data) || r.digest.Sum() != sum {
			t.Errorf("keep %v: floats differ, %v", keep, err)
		}
	}
}

// Errors come in the order of volumes, panics come through, the end of ctx ends a pass.
func TestReelBreaksOff(t *testing.T) {
	for _, keep := range []bool{false, true} {
		r, _ := watchReel(t, 12, keep)
		goroutines := runtime.NumGoroutine()
		for _, workers := range []int{1, 4} {
			var turns parallel.Turns
			six := make(chan struct{})
			err := r.Each(t.Context(), workers, nil, func(_, u int, _ []float32) error {
				return turns.Do(u, func() error {
					switch {
					case u == 5 && workers > 1:
						<-six // which fails later
					case u == 6:
						close(six)
						time.Sleep(20 * time.Millisecond)
					}
					if u >= 5 {
						return fmt.Errorf("leak in hold %d", u)
					}
					return nil
				}, func() {})
			})
			if err == nil || err.Error() != "leak in hold 5" {
				t.Errorf("%d workers: %v", workers, err)
			}
			func() {
				defer func() {
					if p, ok := recover().(*parallel.Panic); !ok || p.Value != "aground" {
						t.Errorf("%d workers: no panic came through", workers)
					}
				}()
				r.Each(t.Context(), workers, nil, func(_, u int, _ []float32) error {
					if u == 3 {
						panic("aground")
					}
					return nil
				})
			}()
			ctx, cancel := context.WithCancel(t.Context())
			seen := 0
			err = r.Each(ctx, 1, nil, func(_, u int, _ []float32) error {
				if seen++; u == 4 {
					cancel()
				}
				return nil
			})
			if !errors.Is(err, context.Canceled) || seen != 5 {
				t.Errorf("%v after %d volumes", err, seen)
			}
		}
		if r.kept != nil || r.digest != nil {
			t.Error("something was kept of a pass that broke off")
		}
		for range 200 {
			if runtime.NumGoroutine() <= goroutines {
				break
			}
			time.Sleep(time.Millisecond)
		}
		if n := runtime.NumGoroutine(); n > goroutines {
			t.Errorf("%d goroutines, %d before", n, goroutines)
		}
	}
}

// A part of a damaged file can be read; whoever reads the whole is told. A file that has
// changed since the plan is refused by every pass that reads it.
func TestReelSeesFaults(t *testing.T) {
	r, _ := watchReel(t, 12, false)
	name := r.p.Dataset.Path(r.rel)
	whole, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	refusal := func(want func(int) bool) string {
		err := r.Each(t.Context(), 2, want, func(_, _ int, _ []float32) error { return nil })
		var refused *Refused
		if errors.As(err, &refused) {
			return refused.Faults[0].ID
		}
		if err != nil {
			t.Error(err)
		}
		return ""
	}
	first := func(t int) bool { return t == 0 }
	restamp := func() {
		st, err := stampOf(name)
		if err != nil {
			t.Fatal(err)
		}
		r.p.Inputs[0].stamp = st
	}
	if err := os.WriteFile(name, whole[:len(whole)-4], 0o644); err != nil {
		t.Fatal(err)
	}
	if got := refusal(first); got != "input-changed" {
		t.Errorf("a file that changed, in part: %q", got)
	}
	restamp()
	if got := refusal(first); got != "" {
		t.Errorf("the sound part of a file: %q", got)
	}
	if got := refusal(nil); got != "image-compressed" || r.digest != nil {
		t.Errorf("a file that is cut off: %q", got)
	}
	if err := os.WriteFile(name, whole, 0o644); err != nil {
		t.Fatal(err)
	}
	restamp()
	if got := refusal(nil); got != "" || r.digest == nil {
		t.Errorf("a sound file: %q", got)
	}
	if err := os.Chtimes(name, time.Time{}, time.Unix(1, 0)); err != nil {
		t.Fatal(err)
	}
	if got := refusal(nil); got != "input-changed" {
		t.Errorf("a file that changed after the first pass: %q", got)
	}
}

// steadyWatch does one streamed run and returns its outcome.
func steadyWatch(t *testing.T, nt int, keys map[string]string, job Job) Outcome {
	root := t.TempDir()
	writeWatch(t, root, watchStem, nt, 0.03)
	ds, plans := watchPlans(t, root, keys)
	job.Out = filepath.Join(t.TempDir(), "out")
	if job.route == nil {
		job.route = func(*Plan) route { return route{streamed: true} }
	}
	outcomes, err := Steady(t.Context(), ds, plans, job)
	if err != nil {
		t.Fatal(err)
	}
	var left []string
	for f := range tree(t, job.Out) {
		if strings.HasPrefix(f, "sub-") {
			left = append(left, f)
		}
	}
	if outcomes[0].State != Done && len(left) > 0 {
		t.Errorf("%v left %v", outcomes[0].State, left)
	}
	return outcomes[0]
}

// A run that is interrupted, fails, or loses its file half way through the last pass ends
// so, and leaves nothing.
func TestStreamBreaksOff(t *testing.T) {
	keys := map[string]string{"motion": "volume", "time": "none", "reference": "first"}
	halfway := func(do func(p *Plan)) func(Event) {
		done := false
		return func(e Event) {
			if e.Stage == "steady" && e.Share > 0.3 && !done {
				done = true
				do(e.Plan)
			}
		}
	}
	if o := steadyWatch(t, 45, keys, Job{Cores: 2, Observe: halfway(func(p *Plan) {
		os.Chtimes(p.Dataset.Path(p.Run.File), time.Time{}, time.Unix(1, 0))
	})}); o.State != RefusedRun || o.Faults[len(o.Faults)-1].ID != "input-changed" {
		t.Errorf("changed: %+v", o)
	}
	if o := steadyWatch(t, 45, keys, Job{Cores: 2, Observe: halfway(func(*Plan) { panic("man overboard") })}); o.State != Failed || codeOf(o.Err) != ExitBug {
		t.Errorf("panic: %+v", o)
	}
	for _, cores := range []int{1, 4} {
		root := t.TempDir()
		writeWatch(t, root, watchStem, 45, 0.03)
		ds, plans := watchPlans(t, root, keys)
		ctx, cancel := context.WithCancel(t.Context())
		out := filepath.Join(t.TempDir(), "out")
		outcomes, err := Steady(ctx, ds, plans, Job{Out: out, Cores: cores, Observe: halfway(func(*Plan) { cancel() }),
			route: func(*Plan) route { return route{streamed: true} }})
		if err != nil || outcomes[0].State != Interrupted {
			t.Errorf("interrupted: %v %+v", err, outcomes)
		}
		for f := range tree(t, out) {
			if strings.HasPrefix(f, "sub-") {
				t.Errorf("interrupted: left %s", f)
			}
		}
	}
}

// What another volume allocates is small beside the volume: maps and closures.
func TestStreamAllocatesNothingForAVolume(t *testing.T) {
	if raceEnabled {
		t.Skip("the race detector allocates")
	}
sets:
	for _, keys := range []map[string]string{{"motion": "none", "time": "sinc"}, {"motion": "none", "time": "none"}} {
		allocated := func(nt int) uint64 {
			var before, after runtime.MemStats
			root := t.TempDir()
			writeWatch(t, root, watchStem, nt, 0.03)
			ds, plans := watchPlans(t, root, keys)
			runtime.ReadMemStats(&before)
			outcomes, err := Steady(t.Context(), ds, plans, Job{Out: filepath.Join(t.TempDir(), "out"), Cores: 2, route: func(*Plan) route { return route{streamed: true} }})
			runtime.ReadMemStats(&after)
			if ExitCode(err, outcomes, false) != 0 {
				t.Fatal(err, outcomes)
			}
			return after.TotalAlloc - before.TotalAlloc
		}
		// A quarter of one volume as float32: of so small a volume, figures for each slice,
		// which are written as text, are a sixth. What a collection takes out of a pool is made again,
		// so that the least of a few tries counts.
		least := float64(0)
		for i := range 4 {
			few, many := allocated(60), allocated(160)
			if each := float64(many-few) / 100; i == 0 || each < least {
				least = each
			}
			if least < float64(4*watchVoxels)/4 {
				continue sets
			}
		}
		t.Errorf("%v: %.0f bytes a volume; a volume is %d", keys, least, 4*watchVoxels)
	}
}

// One volume that turned far, and all go the same way; shifts alone do not matter.
func TestResampledInOneWay(t *testing.T) {
	g := realign.Grid{N: watchSize, Affine: watchAffine()}
	pose := func(shift, turn float64) realign.Pose {
		return realign.FromParams([3]float64{shift, 0, 0}, [3]float64{turn, 0, 0}, [3]float64{})
	}
	still := realign.Identity
	if !allNear(g, nil) || !allNear(g, []realign.Pose{still, pose(30, 0), pose(1, 0.01)}) {
		t.Error("poses near the reference are not taken so")
	}
	if allNear(g, []realign.Pose{still, pose(1, 0.01), pose(0, 0.2), still}) {
		t.Error("a turn of eleven degrees is taken for a small one")
	}
}
