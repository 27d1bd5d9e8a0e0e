package pipeline

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"testing"
)

// A folder in which nothing came to stand goes, with those above it; what was there
// before, or holds something, stays.
func TestFoldersLeaveNothingEmpty(t *testing.T) {
	out := t.TempDir()
	theirs := filepath.Join(out, "sub-02")
	if err := os.Mkdir(theirs, 0o755); err != nil {
		t.Fatal(err)
	}
	f := newFolders(out)
	for _, c := range []struct {
		dir, file string
		want      string // what is left of dir
	}{
		{"sub-01/ses-1/func", "", ""},
		{"sub-02/func", "", "sub-02"},
		{"sub-03/ses-1/func", "sub-03/ses-2", "sub-03"},
		{"sub-04/func", "sub-04/func/x", "sub-04/func"},
	} {
		dir := filepath.Join(out, c.dir)
		lock, err := f.lock(context.Background(), dir, ".x.lock", nil)
		if err != nil {
			t.Fatal(err)
		}
		f.clear(dir) // held by a lock
		if _, err := os.Stat(dir); err != nil {
			t.Errorf("%s: removed under a lock", c.dir)
		}
		lock.release()
		if c.file != "" {
			if err := os.WriteFile(filepath.Join(out, c.file), nil, 0o644); err != nil {
				t.Fatal(err)
			}
		}
		f.clear(dir)
		left := ""
		for d := dir; d != out; d = filepath.Dir(d) {
			if _, err := os.Stat(d); err == nil {
				left, _ = filepath.Rel(out, d)
				break
			}
		}
		if left != filepath.FromSlash(c.want) {
			t.Errorf("%s: %q is left, want %q", c.dir, left, c.want)
		}
	}
}

// Runs of one folder that end at the same time do not take it from each other.
func TestFoldersOfManyRuns(t *testing.T) {
	out := t.TempDir()
	f := newFolders(out)
	dir := filepath.Join(out, "sub-01", "func")
	var group sync.WaitGroup
	for i := range 8 {
		group.Add(1)
		go func() {
			defer group.Done()
			for range 300 {
				lock, err := f.lock(context.Background(), dir, fmt.Sprintf(".%d.lock", i), nil)
				if err != nil {
					t.Error(err)
					return
				}
				if err := os.WriteFile(filepath.Join(dir, fmt.Sprint(i)), nil, 0o644); err != nil {
					t.Error(err)
				}
				os.Remove(filepath.Join(dir, fmt.Sprint(i)))
				lock.release()
				f.clear(dir)
			}
		}()
	}
	group.Wait()
	if _, err := os.Stat(filepath.Join(out, "sub-01")); err == nil {
		t.Error("an empty folder is left")
	}
}
