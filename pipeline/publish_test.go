package pipeline

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"syscall"
	"testing"

	"evenkeel/dataset"
	"evenkeel/provenance"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

func listing(t *testing.T, dir string) (out []string) {
	t.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		out = append(out, e.Name())
	}
	return out
}

// Nothing stands under its final name before publish, everything after; digests are those
// of the content; an older record's other files make way.
func TestPublish(t *testing.T) {
	dir := t.TempDir()
	for name, text := range map[string]string{"x_prov.json": "old record", "x_events.tsv": "old", "x_bold.json": "old"} {
		os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644)
	}
	p := &publisher{out: dir}
	for _, name := range []string{"x_bold.json", "x_prov.json"} {
		if err := p.writeBytes("role", name, []byte("new "+name)); err != nil {
			t.Fatal(err)
		}
	}
	if b, _ := os.ReadFile(filepath.Join(dir, "x_bold.json")); string(b) != "old" {
		t.Error("a final name changed before publish")
	}
	sum := sha256.Sum256([]byte("new x_bold.json"))
	if f := p.files()[0]; f.SHA256 != hex.EncodeToString(sum[:]) || f.Bytes != 15 || f.Path != "x_bold.json" || f.Role != "role" {
		t.Errorf("%+v", f)
	}
	if err := p.publish([]string{"x_events.tsv", "x_bold.json", "x_not-there.json"}); err != nil {
		t.Fatal(err)
	}
	if got := strings.Join(listing(t, dir), " "); got != "x_bold.json x_prov.json" {
		t.Errorf("left: %s", got)
	}
	if b, _ := os.ReadFile(filepath.Join(dir, "x_prov.json")); string(b) != "new x_prov.json" {
		t.Errorf("record %q", b)
	}
	if info, _ := os.Stat(filepath.Join(dir, "x_prov.json")); info.Mode().Perm()&0o444 != 0o444&^umask() {
		t.Errorf("mode %v", info.Mode())
	}
}

func umask() fs.FileMode {
	old := syscall.Umask(0)
	syscall.Umask(old)
	return fs.FileMode(old)
}

// When a rename fails half-way, the record of before is gone: a run that is not
// whole is never taken for complete.
func TestPublishBreaksOff(t *testing.T) {
	dir := t.TempDir()
	os.WriteFile(filepath.Join(dir, "x_prov.json"), []byte("old"), 0o644)
	p := &publisher{out: dir}
	for _, name := range []string{"a", "b", "x_prov.json"} {
		if err := p.writeBytes("", name, []byte(name)); err != nil {
			t.Fatal(err)
		}
	}
	os.Remove(p.pending[1].hidden) // so that its rename fails
	err := p.publish(nil)
	if codeOf(err) != ExitIO {
		t.Errorf("got %v", err)
	}
	p.discard()
	if got := strings.Join(listing(t, dir), " "); got != "a" {
		t.Errorf("left: %s", got)
	}
}

// A full disk while writing: 74, the message names file and cause, nothing is left.
func TestWritingBreaksOff(t *testing.T) {
	dir := t.TempDir()
	p := &publisher{out: dir}
	err := p.write("series", "sub/../x.nii.gz", func(w io.Writer) error {
		w.Write(make([]byte, 1<<20))
		return &fs.PathError{Op: "write", Path: "/somewhere/.x", Err: syscall.ENOSPC}
	})
	if codeOf(err) != ExitIO || !strings.Contains(err.Error(), "x.nii.gz") || !strings.Contains(err.Error(), "no space left") || strings.Contains(err.Error(), "/somewhere") {
		t.Errorf("got %v", err)
	}
	p.discard()
	if got := listing(t, dir); len(got) > 0 {
		t.Errorf("left: %v", got)
	}
	if err := p.writeBytes("", "missing/x", nil); codeOf(err) != ExitNoCreate {
		t.Errorf("a folder that is not there: %v", err)
	}
}

// Hidden files of dead processes go, those of other runs and everything else stay.
func TestSweep(t *testing.T) {
	dir := t.TempDir()
	for _, name := range []string{".x_bold.json0123456789", filepath.Base(hiddenName("x_bold.json")), ".xy_bold.json0123456789", "x_bold.json", ".x.lock", ".x_bold.json", ".x_bold.json123", ".x_bold.json01234567890"} {
		os.WriteFile(filepath.Join(dir, name), nil, 0o644)
	}
	sweep(dir, []string{"x_bold.json"})
	if got := strings.Join(listing(t, dir), " "); got != ".x.lock .x_bold.json .x_bold.json01234567890 .x_bold.json123 .xy_bold.json0123456789 x_bold.json" {
		t.Errorf("left: %s", got)
	}
}

func TestReplaceFileLeavesTheSameAlone(t *testing.T) {
	name := filepath.Join(t.TempDir(), "README")
	if err := replaceFile(name, "README", []byte("a")); err != nil {
		t.Fatal(err)
	}
	before, _ := os.Stat(name)
	if err := replaceFile(name, "README", []byte("a")); err != nil {
		t.Fatal(err)
	}
	if after, _ := os.Stat(name); !os.SameFile(before, after) {
		t.Error("a file with the same content was replaced")
	}
	if err := replaceFile(name, "README", []byte("b")); err != nil {
		t.Fatal(err)
	}
	if b, _ := os.ReadFile(name); string(b) != "b" {
		t.Errorf("%q", b)
	}
}

func TestCheckOut(t *testing.T) {
	top := t.TempDir()
	root := filepath.Join(top, "raw")
	os.MkdirAll(filepath.Join(root, "derivatives"), 0o755)
	os.Symlink(root, filepath.Join(top, "alias"))
	for out, ok := range map[string]bool{
		"raw": false, "raw/": false, "raw/x": false, "raw/derivatives": false, "raw/derivatives/x": true, "raw/derivatives/x/y": true,
		"alias": false, "alias/x": false, "alias/derivatives/x": true, "raw2": true, "x": true, "raw/../x": true, "x/../raw/y": false,
		"raw/derivatives/../x": false, "..raw": true, "raw/..x": false,
	} {
		err := CheckOut(root, filepath.Join(top, out))
		if out == "raw/" || strings.Contains(out, "..") {
			err = CheckOut(root, top+"/"+out)
		}
		var usage *UsageError
		if ok != (err == nil) || (!ok && !errors.As(err, &usage)) {
			t.Errorf("%s: %v", out, err)
		}
	}
}

// A panic in one unit becomes the outcome of its runs and ends nothing else.
func TestPanicBecomesAnOutcome(t *testing.T) {
	p := &Plan{Run: dataset.Run{Stem: "sub-01_task-x", Dir: "sub-01/func", Group: "sub-01_task-x"}} // no dataset, no header: anything would break
	p.Inputs = []Input{{Role: "series", Path: "x"}}
	w := &worker{out: t.TempDir(), workers: 1}
	w.folders = newFolders(w.out)
	out := w.guarded(context.Background(), unit{[]*Plan{p}}, Job{Out: w.out}, func(Event) {})
	if len(out) != 1 || out[0].State != Failed || ExitCode(nil, out, false) != ExitBug {
		t.Fatalf("%+v", out)
	}
	if msg := out[0].Err.Error(); !strings.Contains(msg, "sub-01_task-x") || !strings.Contains(msg, "please report") || strings.Contains(msg, "goroutine") {
		t.Errorf("message: %s", msg)
	}
	if got := listing(t, w.out); len(got) > 0 {
		t.Errorf("left: %v", got)
	}
}

// What is read is digested, and reading ends with the context: the reader passes the tap's error on.
func TestReadingEndsWithTheContext(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	w := tap{ctx, &provenance.Digester{}}
	if n, err := w.Write([]byte("abc")); n != 3 || err != nil || w.d.Bytes() != 3 {
		t.Error(n, err)
	}
	cancel()
	if n, err := w.Write([]byte("abc")); n != 0 || !errors.Is(err, context.Canceled) || w.d.Bytes() != 3 {
		t.Error(n, err)
	}
	err := fmt.Errorf("nifti: reading x: %w", context.Canceled)
	if o := ended(&Plan{}, nil, &IOError{Path: "x", Err: err}); o.State != Interrupted {
		t.Errorf("%+v", o)
	}
}

// Arguments that do not fit are ours to prevent.
func TestArgumentErrorIsABug(t *testing.T) {
	err := (slicetime.Options{Kernel: slicetime.Sinc, Reach: slicetime.MaxReach + 1}).Check()
	if err == nil || codeOf(err) != ExitBug {
		t.Errorf("%v: %d", err, codeOf(err))
	}
	set := DefaultSettings()
	if set.Set("sinc_reach", strconv.Itoa(slicetime.MaxReach)) != nil || set.Set("sinc_reach", strconv.Itoa(slicetime.MaxReach+1)) == nil {
		t.Error("the option's limit is not the kernel's")
	}
}

func TestMeanVolume(t *testing.T) {
	got, err := meanVolume(t.Context(), realign.Floats([]float32{1, 2, 3, 4, 5, 9}, 3))
	if err != nil || got[0] != 3 || got[1] != 5 {
		t.Error(got, err)
	}
}
