package parallel

import (
	"errors"
	"sync"
)

// Turns lets pieces of work that run side by side, and are begun in order, end
// one after the other in that order: sums across pieces then come out the same for any
// number of workers. The zero value is ready.
type Turns struct {
	mu     sync.Mutex
	moved  *sync.Cond
	next   int
	failed bool
	at     int // with failed: the first piece that did
}

// errBehind is what pieces return that wait for one that failed.
var errBehind = errors.New("parallel: an earlier piece failed")

// Do does the work of piece i, counted from 0 without gaps, then waits until all
// pieces before it have ended, and does then. Where either fails or panics, the
// pieces behind it return an error of no account: the one of piece i comes first.
func (t *Turns) Do(i int, work func() error, then func()) (err error) {
	whole := false
	defer func() {
		t.mu.Lock()
		defer t.mu.Unlock()
		if !whole && (!t.failed || i < t.at) {
			t.failed, t.at = true, i
		}
		if whole {
			t.next = i + 1
		}
		t.ready().Broadcast()
	}()
	if err := work(); err != nil {
		return err
	}
	t.mu.Lock()
	for t.next < i && !(t.failed && t.at < i) {
		t.ready().Wait()
	}
	behind := t.next < i
	t.mu.Unlock()
	if behind {
		return errBehind
	}
	then()
	whole = true
	return nil
}

func (t *Turns) ready() *sync.Cond {
	if t.moved == nil {
		t.moved = sync.NewCond(&t.mu)
	}
	return t.moved
}
