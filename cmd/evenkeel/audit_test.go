package main

import (
	"bytes"
	"errors"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"evenkeel/pipeline"
	"evenkeel/provenance"
)

// A large file takes an audit some seconds: a signal ends it, with 75 and no trace.
func TestAuditIsInterrupted(t *testing.T) {
	exe, err := exec.LookPath("evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	const size = 64 << 30 // holes only: half a minute and more to digest, no room on the disk
	out := t.TempDir()
	claim(t, out)
	name := filepath.Join(out, "sub-01_task-watch_desc-steady_bold.nii.gz")
	if err := errors.Join(os.WriteFile(name, nil, 0o644), os.Truncate(name, size)); err != nil {
		t.Skip("no files with holes here: ", err)
	}
	r := provenance.Record{Run: "sub-01_task-watch", Software: provenance.Software{Name: "evenkeel", Version: pipeline.Version},
		Outputs: []provenance.File{{Role: "steady-series", Path: filepath.Base(name), SHA256: strings.Repeat("0", 64), Bytes: size}}}
	data, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(out, r.Run+provenance.RecordSuffix), data, 0o644); err != nil {
		t.Fatal(err)
	}
	for _, sig := range []syscall.Signal{syscall.SIGINT, syscall.SIGTERM} {
		var stdout, stderr bytes.Buffer
		cmd := exec.Command(exe, "audit", out)
		cmd.Stdout, cmd.Stderr = &stdout, &stderr
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		time.Sleep(500 * time.Millisecond) // the program listens to signals long before
		cmd.Process.Signal(sig)
		start := time.Now()
		cmd.Wait()
		noTrace(t, stderr.String())
		if code := cmd.ProcessState.ExitCode(); code != pipeline.ExitInterrupt {
			t.Errorf("%v: %s", sig, dump(code, stdout.String(), stderr.String()))
		}
		// Between two reads of a quarter of a megabyte the end is seen.
		if d := time.Since(start); d > 5*time.Second {
			t.Errorf("%v: ended %v after the signal", sig, d)
		}
	}
}

// A record of another version is worth a word and is no difference.
func TestAuditOfAnotherVersion(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	out := process(t, dir, "--motion", "none")
	name := filepath.Join(out, theRun+"_desc-steady_prov.json")
	data := bytes.ReplaceAll(mustRead(t, name), []byte(`"`+pipeline.Version+`"`), []byte(`"0.0.1"`))
	if err := os.WriteFile(name, data, 0o644); err != nil {
		t.Fatal(err)
	}
	code, stdout, stderr := run("audit", out, "--dataset", dir)
	if code != 0 || !strings.Contains(stdout, "other-version: "+theRun+"_desc-steady_prov.json: found 0.0.1, expected "+pipeline.Version) || !strings.Contains(stdout, "0 differences") {
		t.Error(dump(code, stdout, stderr))
	}
}

// The help of a command says what its codes mean for it.
func TestExitCodesFitTheCommand(t *testing.T) {
	for command, says := range map[string][]string{
		"audit":   {" 0  every file looked for is", " 4  a difference was found", "66  OUT or the raw", "75  interrupted"},
		"version": {" 0  printed", "74  standard output"},
		"survey":  {" 3  steady would refuse some"},
		"steady":  {"75  interrupted or pre-empted"},
	} {
		_, stdout, _ := run(command, "--help")
		for _, s := range says {
			if !strings.Contains(stdout, s) {
				t.Errorf("%s --help lacks %q:\n%s", command, s, stdout)
			}
		}
		if command != "steady" && strings.Contains(stdout, "inside the limits given") {
			t.Errorf("%s --help speaks of limits", command)
		}
	}
}

type full struct{}

func (full) Write([]byte) (int, error) { return 0, syscall.ENOSPC }

// A full disk below standard output: 74 from every command that prints, help included.
func TestStandardOutputIsFull(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	out := process(t, dir, "--motion", "none")
	for _, args := range [][]string{
		{"version"}, {"version", "--json"}, {"help"}, {"steady", "--help"}, {"survey", dir}, {"survey", dir, "--json"},
		{"steady", dir, out, "--motion", "none"}, {"steady", dir, out, "--plan"}, {"audit", out, "--dataset", dir},
	} {
		var stderr bytes.Buffer
		if code := Run(append([]string{"evenkeel"}, args...), strings.NewReader(""), full{}, &stderr); code != 74 || strings.Count(stderr.String(), "no space left") != 1 {
			t.Errorf("%v: %s", args, dump(code, "", stderr.String()))
		}
	}
}
