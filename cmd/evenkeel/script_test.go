package main

import (
	"bytes"
	"errors"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"
)

func TestScripts(t *testing.T) {
	testscript.Run(t, testscript.Params{
		Dir:                "testdata/script",
		RequireUniqueNames: true,
		Cmds: map[string]func(*testscript.TestScript, bool, []string){
			"exits": exits,
			"crew":  writeCrew,
			"poke":  poke,
			"same":  same,
		},
		Setup: func(e *testscript.Env) error {
			e.Setenv("TMPDIR", e.WorkDir)
			examples, err := filepath.Abs("../../examples")
			e.Setenv("EXAMPLES", examples)
			if err != nil {
				return err
			}
			return nil
		},
	})
}

// exits CODE program args... runs a program and wants exactly that exit status.
func exits(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 2 {
		ts.Fatalf("usage: exits CODE program args...")
	}
	want, err := strconv.Atoi(args[0])
	ts.Check(err)
	cmd := exec.Command(args[1], args[2:]...)
	cmd.Dir = ts.MkAbs(".")
	cmd.Env = append(os.Environ(), "PATH="+ts.Getenv("PATH"), "TMPDIR="+ts.Getenv("TMPDIR"), "HOME="+ts.Getenv("HOME"))
	cmd.Stdout, cmd.Stderr = ts.Stdout(), ts.Stderr()
	err = cmd.Run()
	var exit *exec.ExitError
	if err != nil && !errors.As(err, &exit) {
		ts.Fatalf("%v", err)
	}
	if got := cmd.ProcessState.ExitCode(); got != want {
		ts.Fatalf("exit status %d, want %d", got, want)
	}
}

// crew DIR SUBJECT... writes a raw dataset with one sound run for each subject. A
// subject "NAME:N" has N volumes only.
func writeCrew(ts *testscript.TestScript, neg bool, args []string) {
	if neg || len(args) < 2 {
		ts.Fatalf("usage: crew DIR SUBJECT[:VOLUMES]...")
	}
	for _, a := range args[1:] {
		name, volumes, short := strings.Cut(a, ":")
		s := newSailor()
		if short {
			n, err := strconv.Atoi(volumes)
			ts.Check(err)
			s.volumes(n)
		}
		base := "sub-" + name + "/func/sub-" + name + "_task-watch"
		writeDataset(ts.MkAbs(args[0]), s.files(base),
			map[string][]byte{base + "_events.tsv": []byte("onset\tduration\ttrial_type\n0\t1\tflash\n7.5\t1\tflash\n")})
	}
}

// poke FILE changes one byte in the middle of a file, keeping its size.
func poke(ts *testscript.TestScript, neg bool, args []string) {
	name := ts.MkAbs(args[0])
	data, err := os.ReadFile(name)
	ts.Check(err)
	data[len(data)/2] ^= 1
	ts.Check(os.WriteFile(name, data, 0o644))
}

// same DIR DIR compares all data files of two outputs byte for byte (records hold times).
func same(ts *testscript.TestScript, neg bool, args []string) {
	a, b := ts.MkAbs(args[0]), ts.MkAbs(args[1])
	n, differ := 0, 0
	for _, rel := range outputs(a) {
		if strings.HasSuffix(rel, "_prov.json") || rel == "runs.tsv" || !strings.HasPrefix(rel, "sub-") {
			continue
		}
		n++
		x, err := os.ReadFile(filepath.Join(a, rel))
		ts.Check(err)
		if y, err := os.ReadFile(filepath.Join(b, rel)); err != nil || !bytes.Equal(x, y) {
			differ++
			ts.Logf("%s differs", rel)
		}
	}
	if n == 0 {
		ts.Fatalf("nothing to compare")
	}
	if (differ == 0) == neg {
		ts.Fatalf("%d of %d files differ", differ, n)
	}
}
