package pipeline

import (
	"context"
	"os"
	"path/filepath"
	"time"
)

// lockPoll is how often a lock held by another process is tried again.
const lockPoll = 200 * time.Millisecond

// A fileLock is held by one live process at a time; the system releases it when
// the process ends, however it ends.
type fileLock struct {
	f    *os.File
	name string
}

// lockFile waits for the lock; waiting is called once if somebody else holds it.
// name is a hidden file, made for the purpose and removed on release.
func lockFile(ctx context.Context, name string, waiting func()) (*fileLock, error) {
	for told := false; ; {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		f, err := os.OpenFile(name, os.O_CREATE|os.O_RDWR, 0o666)
		if err != nil {
			return nil, creating(filepath.Base(name), err)
		}
		got, err := tryLock(f)
		if err != nil {
			f.Close()
			return nil, &IOError{Path: filepath.Base(name), Step: "locking", Err: err}
		}
		if got {
			// The one before us may have removed the name meanwhile: then
			// what we hold locks nobody out.
			a, err1 := f.Stat()
			b, err2 := os.Stat(name)
			if err1 == nil && err2 == nil && os.SameFile(a, b) {
				return &fileLock{f, name}, nil
			}
			f.Close()
			continue
		}
		f.Close()
		if !told && waiting != nil {
			waiting()
			told = true
		}
		select {
		case <-ctx.Done():
		case <-time.After(lockPoll):
		}
	}
}

// release removes the name while the lock is still held, then lets go.
func (l *fileLock) release() {
	os.Remove(l.name)
	l.f.Close()
}
