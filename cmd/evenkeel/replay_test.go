package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"evenkeel/nifti"
	"evenkeel/pipeline"
	"evenkeel/provenance"
)

// twoWatches is a dataset of two runs, processed with other settings each.
func twoWatches(t *testing.T) (dir, out string) {
	t.Helper()
	dir = t.TempDir()
	a, b := newSailor(), newSailor()
	b.gzip = true
	writeDataset(dir, a.files(theRun), b.files("sub-02/func/sub-02_task-watch"))
	out = filepath.Join(t.TempDir(), "out")
	for _, args := range [][]string{{"--subject", "01"}, {"--subject", "02", "--motion", "volume", "--time", "sinc", "--skip", "1", "--reference", "first"}} {
		if code, stdout, stderr := run(append([]string{"steady", dir, out}, args...)...); code != 0 {
			t.Fatal(dump(code, stdout, stderr))
		}
	}
	return dir, out
}

const secondRun = "sub-02/func/sub-02_task-watch"

func TestReplayIsTheSame(t *testing.T) {
	dir, out := twoWatches(t)
	before := outputs(out)
	scratch := t.TempDir()
	for _, jobs := range []string{"1", "2"} {
		code, stdout, stderr := run("audit", out, "--replay", "--dataset", dir, "--scratch", scratch, "--jobs", jobs)
		if code != 0 || !strings.Contains(stdout, "2 runs computed again: 2 the same byte for byte, 0 not the same, 0 could not be computed") {
			t.Error(dump(code, stdout, stderr))
		}
	}
	if after := outputs(out); !slices.Equal(before, after) {
		t.Errorf("a replay left %v, was %v", after, before)
	}
	if left := outputs(scratch); len(left) > 0 {
		t.Errorf("left in the scratch folder: %v", left)
	}
	code, stdout, stderr := run("audit", out, "--replay", "--dataset", dir, "--json")
	var doc struct {
		Replay   map[string]int
		Findings []provenance.Finding
	}
	if err := json.Unmarshal([]byte(stdout), &doc); err != nil || code != 0 || doc.Replay["runs"] != 2 || doc.Replay["same"] != 2 || len(doc.Findings) != 0 {
		t.Errorf("%v: %s", err, dump(code, stdout, stderr))
	}
}

// A forger who edits a file and brings its record in line deceives digests, and no replay.
func TestReplayFindsAForgery(t *testing.T) {
	dir, out := twoWatches(t)
	series := filepath.Join(out, theRun+"_desc-steady_bold.nii.gz")
	h, s, err := nifti.ReadSeries(series, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	nv := len(s.Data) / s.NT
	s.Data[3*nv+nv/2] += 1.5
	s.Data[5*nv+nv/2] -= 0.5
	var b bytes.Buffer
	w, err := nifti.NewWriter(&b, h, true)
	if err != nil {
		t.Fatal(err)
	}
	for n := range s.NT {
		if err := w.WriteVolume(s.Data[n*nv:][:nv]); err != nil {
			t.Fatal(err)
		}
	}
	if err := errors.Join(w.Close(), os.WriteFile(series, b.Bytes(), 0o644)); err != nil {
		t.Fatal(err)
	}
	table := filepath.Join(out, theRun+"_desc-steady_pose.tsv")
	lines := strings.SplitAfter(string(mustRead(t, table)), "\n")
	lines[4] = strings.Replace(lines[4], "0", "9", 1)
	if err := os.WriteFile(table, []byte(strings.Join(lines, "")), 0o644); err != nil {
		t.Fatal(err)
	}
	forge(t, out, theRun, func(r *provenance.Record) {
		for i, f := range r.Outputs {
			if f.Role == "steady-series" || f.Role == "pose-table" {
				sum, n, err := provenance.DigestFile(t.Context(), filepath.Join(out, filepath.FromSlash(f.Path)))
				if err != nil {
					t.Fatal(err)
				}
				r.Outputs[i].SHA256, r.Outputs[i].Bytes = sum, n
			}
		}
	})
	if code, stdout, stderr := run("audit", out, "--dataset", dir); code != 0 {
		t.Errorf("the forgery is not one: %s", dump(code, stdout, stderr))
	}
	code, stdout, stderr := run("audit", out, "--dataset", dir, "--replay")
	for _, want := range []string{
		"replay-differs: " + theRun + "_desc-steady_bold.nii.gz: found 2 voxels that differ, by 1.5 at most, the first in volume 3",
		"replay-differs: " + theRun + "_desc-steady_pose.tsv: found line 5 to be the first that differs",
		"2 runs computed again: 1 the same byte for byte, 1 not the same, 0 could not be computed",
	} {
		if !strings.Contains(stdout, want) {
			t.Errorf("lacks %q:\n%s", want, dump(code, stdout, stderr))
		}
	}
	if code != pipeline.ExitOutside {
		t.Errorf("exit %d", code)
	}
}

// forge rewrites a record with a change.
func forge(t *testing.T, out, base string, change func(*provenance.Record)) {
	t.Helper()
	name := filepath.Join(out, filepath.FromSlash(base)+provenance.RecordSuffix)
	r, err := provenance.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	change(r)
	data, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(name, data, 0o644); err != nil {
		t.Fatal(err)
	}
}

// Other settings or another account in a record, raw files that are gone or refused, and no
// dataset at all: each is said for what it is.
func TestReplaySaysWhatCannotBe(t *testing.T) {
	dir, out := twoWatches(t)
	check := func(what string, wantCode int, want ...string) {
		t.Helper()
		code, stdout, stderr := run("audit", out, "--dataset", dir, "--replay")
		for _, w := range want {
			if !strings.Contains(stdout+stderr, w) {
				t.Errorf("%s lacks %q:\n%s", what, w, dump(code, stdout, stderr))
			}
		}
		if code != wantCode {
			t.Errorf("%s: %s", what, dump(code, stdout, stderr))
		}
	}
	forge(t, out, theRun, func(r *provenance.Record) {
		r.Settings = bytes.Replace(r.Settings, []byte(`"quintic"`), []byte(`"cubic"`), 1)
	})
	check("other settings", 4, "replay-differs: "+theRun+"_desc-steady_bold.nii.gz: found ", "another account of stage space", "1 not the same")
	forge(t, out, theRun, func(r *provenance.Record) {
		r.Settings = bytes.Replace(r.Settings, []byte(`"cubic"`), []byte(`"sextic"`), 1)
	})
	check("unknown settings", 4, "not-replayed: "+theRun+"_desc-steady_prov.json: found", "1 could not be computed")
	forge(t, out, theRun, func(r *provenance.Record) {
		r.Settings = bytes.Replace(r.Settings, []byte(`"sextic"`), []byte(`"quintic"`), 1)
		r.Software.Version = "0.0.1"
	})
	check("another version that gives the same", 0, "other-version: ", "2 the same byte for byte")
	side := filepath.Join(dir, secondRun+"_bold.json")
	if err := os.WriteFile(side, bytes.Replace(mustRead(t, side), []byte(`"RepetitionTime": 2`), []byte(`"RepetitionTime": 2000`), 1), 0o644); err != nil {
		t.Fatal(err)
	}
	check("a raw run that is refused now", 4, "input-changed: ", "not-replayed: "+secondRun+"_bold.nii.gz: found refused: ")
	if err := os.RemoveAll(filepath.Join(dir, "sub-02")); err != nil {
		t.Fatal(err)
	}
	check("a raw run that is gone", 4, "input-missing: ", "not-replayed: "+secondRun+"_bold.nii.gz: found not in the dataset")
	code, stdout, stderr := run("audit", filepath.Join(out), "--replay", "--dataset", filepath.Join(dir, "nowhere"))
	if code != pipeline.ExitNoInput {
		t.Error(dump(code, stdout, stderr))
	}
	if code, stdout, stderr := run("audit", out, "--replay", "--dataset", dir, "--scratch", out); code != pipeline.ExitUsage || !strings.Contains(stderr, "lies on or inside OUT") {
		t.Error(dump(code, stdout, stderr))
	}
	if code, stdout, stderr := run("audit", out, "--scratch", t.TempDir()); code != pipeline.ExitUsage || !strings.Contains(stderr, "goes with --replay") {
		t.Error(dump(code, stdout, stderr))
	}
	if code, stdout, stderr := run("audit", out, "--replay", "--dataset", dir, "--scratch", filepath.Join(t.TempDir(), "not", "there")); code != pipeline.ExitNoCreate {
		t.Error(dump(code, stdout, stderr))
	}
}

// A signal ends a replay with 75 and leaves nothing behind.
func TestReplayIsInterrupted(t *testing.T) {
	exe, err := exec.LookPath("evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	dir, out := twoWatches(t)
	scratch := t.TempDir()
	cmd := exec.Command(exe, "audit", out, "--replay", "--dataset", dir, "--scratch", scratch)
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	for range 1000 { // until it has begun to compute
		if entries, _ := os.ReadDir(scratch); len(entries) > 0 {
			break
		}
		time.Sleep(time.Millisecond)
	}
	cmd.Process.Signal(os.Interrupt)
	cmd.Wait()
	noTrace(t, stderr.String())
	if code := cmd.ProcessState.ExitCode(); code != pipeline.ExitInterrupt && code != 0 {
		t.Errorf("exit %d: %s", code, stderr.String())
	}
	if entries, _ := os.ReadDir(scratch); len(entries) > 0 {
		t.Errorf("left behind: %v", outputs(scratch))
	}
}
