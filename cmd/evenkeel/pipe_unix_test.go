//go:build unix

package main

import (
	"bufio"
	"bytes"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// piped starts the program with standard output, and with both the log too, on a real
// pipe, reads its first line (none with lines 0) and closes the pipe.
func piped(t *testing.T, lines int, log bool, args ...string) (code int, stderr string) {
	t.Helper()
	exe, err := exec.LookPath("evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	r, w, err := os.Pipe()
	if err != nil {
		t.Fatal(err)
	}
	var said bytes.Buffer
	cmd := exec.Command(exe, args...)
	cmd.Stdout, cmd.Stderr = w, &said
	if log {
		cmd.Stdout, cmd.Stderr = io.Discard, w
	}
	if lines == 0 {
		r.Close()
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	w.Close()
	if lines > 0 {
		in := bufio.NewReader(r)
		if line, err := in.ReadString('\n'); err != nil || line == "" {
			t.Errorf("first line: %q, %v", line, err)
		}
		r.Close()
	}
	cmd.Wait()
	if !cmd.ProcessState.Exited() {
		t.Fatalf("%v: ended by %v", args, cmd.ProcessState)
	}
	return cmd.ProcessState.ExitCode(), said.String()
}

// When the reader of the log goes away the work goes on, and its exit code is that of the
// work; when the reader of standard output does, all runs are done and the code says that what
// was to be printed was not (74), without a word.
func TestReadersGoAway(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "raw")
	for _, sub := range []string{"01", "02", "03"} {
		writeDataset(dir, newSailor().files("sub-"+sub+"/func/sub-"+sub+"_task-watch"))
	}
	whole := func(out string) {
		t.Helper()
		if table := string(mustRead(t, filepath.Join(out, "runs.tsv"))); strings.Count(table, "\tdone\t") != 3 {
			t.Errorf("runs.tsv: %s", table)
		}
	}
	out := filepath.Join(t.TempDir(), "out")
	if code, _ := piped(t, 1, true, "steady", dir, out, "--motion", "none", "--jobs", "1"); code != 0 {
		t.Errorf("log closed: exit %d", code)
	}
	whole(out)
	out = filepath.Join(t.TempDir(), "out")
	code, stderr := piped(t, 0, false, "steady", dir, out, "--motion", "none")
	if code != 74 || strings.Contains(stderr, "pipe") || !strings.Contains(stderr, "3 done") {
		t.Errorf("standard output closed: exit %d, %s", code, stderr)
	}
	whole(out)
	for _, args := range [][]string{{"survey", dir}, {"survey", dir, "--json"}, {"steady", dir, out, "--plan"}, {"audit", out, "--dataset", dir}, {"steady", "--help"}, {"version"}} {
		if code, stderr := piped(t, 0, false, args...); code != 74 || stderr != "" {
			t.Errorf("%v: exit %d, %q", args, code, stderr)
		}
	}
	// A table of three runs fits into any pipe: taken whole before the reader leaves, it is no
	// failure.
	if code, stderr := piped(t, 1, false, "survey", dir); code != 0 || stderr != "" {
		t.Errorf("survey: exit %d, %q", code, stderr)
	}
}
