package pipeline

import (
	"context"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"sync"
)

// folders makes the folders of runs in OUT and takes away those of its own making in
// which nothing came to stand, because a run was refused, failed or was interrupted.
type folders struct {
	out  string
	mu   sync.Mutex
	made map[string]bool
}

func newFolders(out string) *folders { return &folders{out: out, made: map[string]bool{}} }

// make makes a folder below OUT, with those above it.
func (f *folders) make(dir string) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	var missing []string
	for d := dir; d != f.out; d = filepath.Dir(d) {
		if _, err := os.Lstat(d); !errors.Is(err, fs.ErrNotExist) {
			break
		}
		missing = append(missing, d)
	}
	if err := os.MkdirAll(dir, 0o777); err != nil {
		return err
	}
	for _, d := range missing {
		f.made[d] = true
	}
	return nil
}

// clear removes the folder, and those above it, as far as they are empty and were
// made here.
func (f *folders) clear(dir string) {
	f.mu.Lock()
	defer f.mu.Unlock()
	for d := dir; d != f.out && f.made[d] && os.Remove(d) == nil; d = filepath.Dir(d) {
		delete(f.made, d)
	}
}

// lockTries is how often a folder is made again that another run's clear took away
// before the lock stood in it.
const lockTries = 100

// lock makes the folder and a lock in it; with a lock in it nobody removes it.
func (f *folders) lock(ctx context.Context, dir, name string, waiting func()) (*fileLock, error) {
	for try := 1; ; try++ {
		if err := f.make(dir); err != nil {
			return nil, creating(dir, err)
		}
		lock, err := lockFile(ctx, filepath.Join(dir, name), waiting)
		if !errors.Is(err, fs.ErrNotExist) || try == lockTries {
			return lock, err
		}
	}
}
