// Package parallel spreads independent pieces of work over workers.
//
// The rule that keeps results the same on every machine: piece i writes only
// its own output, and nothing is ever summed across pieces in the order in
// which they happen to end.
package parallel

import (
	"context"
	"fmt"
	"runtime/debug"
	"sync"
	"sync/atomic"
)

// Panic is what a panic inside a piece becomes: a value that the caller's
// goroutine can recover, with the stack of the goroutine that failed.
type Panic struct {
	Value any
	Stack []byte
}

func (p *Panic) Error() string { return fmt.Sprintf("internal error: %v", p.Value) }

// For calls fn(worker, i) once for every i in [0, n), from at most workers
// goroutines (at least one); worker, in [0, workers), tells a piece which
// scratch it may use. Pieces are handed out in increasing order.
//
// When ctx is cancelled no further piece starts and ctx.Err() is returned after
// those under way have ended. The first error in the order of i ends the loop
// likewise. A panic inside fn is raised again in the caller, as *[Panic].
func For(ctx context.Context, workers, n int, fn func(worker, i int) error) error {
	workers = max(1, min(workers, n))
	var (
		next  atomic.Int64
		stop  atomic.Bool
		wg    sync.WaitGroup
		mu    sync.Mutex
		at    = n
		first error
		bug   *Panic
	)
	fail := func(i int, err error) {
		stop.Store(true)
		mu.Lock()
		defer mu.Unlock()
		if p, ok := err.(*Panic); ok && bug == nil {
			bug = p
		}
		if i < at {
			at, first = i, err
		}
	}
	one := func(worker, i int) {
		defer func() {
			if v := recover(); v != nil {
				p, ok := v.(*Panic)
				if !ok {
					p = &Panic{Value: v, Stack: debug.Stack()}
				}
				fail(i, p)
			}
		}()
		if err := fn(worker, i); err != nil {
			fail(i, err)
		}
	}
	loop := func(worker int) {
		for !stop.Load() && ctx.Err() == nil {
			i := int(next.Add(1)) - 1
			if i >= n {
				return
			}
			one(worker, i)
		}
	}
	for w := 1; w < workers; w++ {
		wg.Add(1)
		go func() { defer wg.Done(); loop(w) }()
	}
	loop(0)
	wg.Wait()
	if bug != nil {
		panic(bug)
	}
	if first != nil {
		return first
	}
	return ctx.Err()
}
