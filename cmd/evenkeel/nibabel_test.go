package main

import (
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
)

// An independent reader (nibabel, from Debian) opens every output and finds the
// input's geometry, bit for bit.
func TestNibabelOpensOutputs(t *testing.T) {
	const python = "/usr/bin/python3"
	if err := exec.Command(python, "-c", "import nibabel").Run(); err != nil {
		t.Skip("no " + python + " with nibabel: outputs not opened by another reader")
	}
	open := func(raw, out, want string) {
		t.Helper()
		b, err := exec.Command(python, "testdata/open_outputs.py", raw, out).CombinedOutput()
		if got := strings.TrimSpace(string(b)); err != nil || got != want {
			t.Errorf("opened %s, want %s (%v)", got, want, err)
		}
	}
	raw := crewDataset(t, func(*sailor) {})
	open(raw, process(t, raw), "5")
	open(raw, process(t, raw, "--store", "int16", "--time", "sinc", "--order", "space-first"), "5")

	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Log("EVENKEEL_TEST_SERIES is not set: outputs of real series not opened")
		return
	}
	out := filepath.Join(t.TempDir(), "out")
	if code, stdout, stderr := run("steady", root, out, "--time", "none", "--subject", "02", "--subject", "phantomA", "--subject", "phantomC"); code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	open(root, out, "35") // seven runs of five images
}
