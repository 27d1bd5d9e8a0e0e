package pipeline

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path"
	"path/filepath"
	"runtime/debug"
	"slices"
	"strings"
	"sync"

	"golang.org/x/sync/errgroup"
	"golang.org/x/sync/semaphore"

	"evenkeel/dataset"
)

// A Job says how the work is spread; none of it changes a byte of the output.
type Job struct {
	Out    string
	Jobs   int   // units at once; 0: as many as there are cores and units
	Cores  int   // 0: all
	Memory int64 // bytes that runs may hold together; 0: [DefaultMemory]
	Redo   bool
	Limits Limits
	route  func(*Plan) route // for tests; nil: that of the plan
	// Observe, if not nil, is told what happens, one call at a time, from
	// any goroutine.
	Observe func(Event)
}

// EventKind says what an [Event] is about.
type EventKind string

const (
	RunStarted EventKind = "started"
	RunStage   EventKind = "stage"
	RunShare   EventKind = "share"   // part of a stage is done; often
	RunWaiting EventKind = "waiting" // another process holds the run
	RunEnded   EventKind = "ended"
)

// An Event is something that happened to a run.
type Event struct {
	Kind    EventKind
	Plan    *Plan
	Stage   string   // with RunStage and RunShare
	Share   float64  // with RunShare: roughly what share of the stage is done, 0 to 1; it may fall
	Why     string   // with RunStarted: why a run that OUT holds something of is computed again, "" for a new one
	Outcome *Outcome // with RunEnded
	Verdict Verdict  // with RunEnded, of a replay
}

// Steady processes the plans that are not refused and returns one outcome a plan,
// in the order of the plans. An error means that nothing could be started, or
// that the files common to all runs could not be written; outcomes are returned
// beside it as far as there are any.
//
// When ctx is cancelled, runs under way stop at the next volume, leave no file
// behind, and are reported as interrupted.
func Steady(ctx context.Context, ds *dataset.Dataset, plans []*Plan, job Job) ([]Outcome, error) {
	if err := CheckOut(ds.Root, job.Out); err != nil {
		return nil, err
	}
	// Once and for all: folders are walked, and a walk does not enter a link.
	out, err := dataset.RealPath(job.Out)
	if err != nil {
		return nil, creating(job.Out, err)
	}
	given := job.Out
	job.Out = out
	outcomes := make([]Outcome, len(plans))
	observe := serial(job.Observe)
	end := func(i int, o Outcome) {
		if o.State == RefusedRun || o.State == Failed {
			_, err := os.Stat(filepath.Join(job.Out, filepath.FromSlash(o.Plan.Output("record"))))
			o.Older = err == nil
		}
		asGiven(o.Err, out, given)
		outcomes[i] = o
		observe(Event{Kind: RunEnded, Plan: o.Plan, Outcome: &outcomes[i]})
	}
	var units []unit
	slot := map[*Plan]int{}
	at := map[string]int{}
	for i, p := range plans {
		slot[p] = i
		if !p.Runs() {
			o := Outcome{Plan: p, State: RefusedRun, Faults: p.Faults}
			if p.Err != nil && len(p.Refusals()) == 0 {
				o.State, o.Err = Failed, p.Err
			}
			end(i, o)
			continue
		}
		j, ok := at[p.unit()]
		if !ok {
			j = len(units)
			at[p.unit()] = j
			units = append(units, unit{})
		}
		units[j].plans = append(units[j].plans, p)
	}
	if ds.Derivative {
		return outcomes, nil // no derivative of a derivative: nothing is written at all
	}
	if err := os.MkdirAll(job.Out, 0o777); err != nil {
		return outcomes[:0], creating(given, err)
	}
	if err := writeDescriptions(ctx, ds, job.Out); err != nil {
		return outcomes[:0], err
	}

	cores := job.Cores
	if cores <= 0 {
		cores = Cores()
	}
	jobs := job.Jobs
	if jobs <= 0 {
		jobs = min(cores, len(units))
	}
	jobs = max(1, jobs)
	// A whole cohort keeps every core busy with runs of its own; few runs
	// share the cores among themselves.
	inner := max(1, cores/min(jobs, max(1, len(units))))
	budget := job.Memory
	if budget <= 0 {
		budget = DefaultMemory()
	}
	// Nearly all memory is a few large arrays without pointers: a series, or the volumes of a window
	// on one. Letting the heap double before it is collected, as is usual, would cost as much again
	// for nothing; and a collection costs little, for there is hardly anything to look through, and
	// comes seldom, for nothing is allocated for another volume (some 80 in a run of 200 volumes).
	defer debug.SetGCPercent(debug.SetGCPercent(heapGrowth))
	defer debug.SetMemoryLimit(debug.SetMemoryLimit(max(budget, memoryFloor)))

	admit, dirs := newAdmission(budget), newFolders(job.Out)
	var group errgroup.Group
	group.SetLimit(jobs)
	for _, u := range units {
		workers, need := u.fit(inner, budget)
		// Admission is in the order of the plans: a large run is not
		// overtaken for ever by small ones.
		if err := admit.acquire(ctx, need); err != nil {
			for _, p := range u.plans {
				end(slot[p], Outcome{Plan: p, State: Interrupted, Faults: p.Faults})
			}
			continue
		}
		group.Go(func() error {
			defer admit.release(need)
			w := &worker{out: job.Out, folders: dirs, workers: workers, route: job.route, stage: func(p *Plan, s string) {
				observe(Event{Kind: RunStage, Plan: p, Stage: s})
			}}
			if job.Observe != nil {
				w.share = func(p *Plan, s string, share float64) {
					observe(Event{Kind: RunShare, Plan: p, Stage: s, Share: share})
				}
			}
			for i, o := range w.guarded(ctx, u, job, observe) {
				if o.Figures != nil {
					o.Outside = job.Limits.Outside(o.Figures)
				}
				end(slot[u.plans[i]], o)
			}
			return nil // a run that failed stops no other
		})
	}
	group.Wait()

	// An interruption must not lose what has been done: the table is small.
	if err := writeRuns(context.WithoutCancel(ctx), job.Out, outcomes); err != nil {
		asGiven(err, out, given)
		return outcomes, err
	}
	return outcomes, nil
}

// heapGrowth is by how many percent the heap may grow before it is collected.
const heapGrowth = 3

// memoryFloor keeps a tiny --memory from making the collector run all the time:
// the program itself needs about this much.
const memoryFloor = 256 << 20

// fit returns how many goroutines the unit may use inside a run so that it stays
// within the budget, and what it then needs.
func (u unit) fit(workers int, budget int64) (int, int64) {
	need := func(workers int) int64 {
		most := int64(0)
		for _, p := range u.plans {
			most = max(most, p.Memory(workers))
		}
		return most
	}
	for workers > 1 && need(workers) > budget {
		workers--
	}
	return workers, min(need(workers), budget)
}

// An admission hands out memory, first come first served.
type admission struct{ sem *semaphore.Weighted }

func newAdmission(budget int64) *admission { return &admission{semaphore.NewWeighted(budget)} }

func (a *admission) acquire(ctx context.Context, n int64) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	return a.sem.Acquire(ctx, n)
}

func (a *admission) release(n int64) { a.sem.Release(n) }

// serial makes an observer that is called by one goroutine at a time.
func serial(observe func(Event)) func(Event) {
	if observe == nil {
		return func(Event) {}
	}
	var mu sync.Mutex
	return func(e Event) {
		mu.Lock()
		defer mu.Unlock()
		observe(e)
	}
}

// asGiven makes an error name OUT the way it was given: the folders above it may be called
// after a person, and a log is passed on.
func asGiven(err error, out, given string) {
	if c := (*CreateError)(nil); errors.As(err, &c) {
		if rest, ok := strings.CutPrefix(c.Path, out); ok {
			c.Path = given + rest
		} else if rest, ok := strings.CutPrefix(c.Path, "a file in "+out); ok {
			c.Path = "a file in " + given + rest
		}
	}
}

// guarded does a unit under its lock. A panic outside a single run (those see to
// their own) becomes the outcome of every run of the unit: it must not reach the
// goroutine's end, where it would take all other runs with it.
func (w *worker) guarded(ctx context.Context, u unit, job Job, observe func(Event)) (out []Outcome) {
	defer func() {
		if v := recover(); v != nil {
			out = u.all(func(p *Plan) Outcome {
				return Outcome{Plan: p, State: Failed, Faults: p.Faults, Err: asBug(p.Run.Stem, v, debug.Stack())}
			})
		}
	}()
	failed := func(err error) []Outcome {
		return u.all(func(p *Plan) Outcome { return ended(p, nil, err) })
	}
	first := u.plans[0]
	dir := filepath.Join(job.Out, filepath.FromSlash(first.Run.Dir))
	defer w.folders.clear(dir) // after the lock is gone
	lock, err := w.folders.lock(ctx, dir, fmt.Sprintf(".%s.lock", path.Base(first.Run.Group)), func() {
		observe(Event{Kind: RunWaiting, Plan: first})
	})
	if create := (*CreateError)(nil); errors.As(err, &create) {
		if create.Path == dir {
			return failed(err) // the folder itself
		}
		// A folder that cannot be written holds no work under way: where
		// nothing needs to be written, that is no matter.
		if out, ok := u.standing(ctx, job); ok {
			return out
		}
		return failed(&CreateError{Path: "a file in " + dir, Err: cause(create.Err)})
	}
	if err != nil {
		return failed(err)
	}
	defer lock.release()

	out = make([]Outcome, len(u.plans))
	var todo unit
	for i, p := range u.plans {
		sweep(job.Out, possible(p.Run))
		st, err := standing(ctx, job.Out, p, job.Redo)
		switch {
		case err != nil:
			out[i] = ended(p, nil, err)
			continue
		case st.Figures != nil:
			out[i] = Outcome{Plan: p, State: UpToDate, Faults: p.Faults, Figures: st.Figures}
			continue
		}
		observe(Event{Kind: RunStarted, Plan: p, Why: st.Why})
		todo.plans = append(todo.plans, p)
	}
	for _, o := range w.run(ctx, todo) {
		out[slices.Index(u.plans, o.Plan)] = o
	}
	return out
}

// standing gives the outcomes of a unit every run of which is up to date; ok is false if
// one is not.
func (u unit) standing(ctx context.Context, job Job) (out []Outcome, ok bool) {
	for _, p := range u.plans {
		s, err := standing(ctx, job.Out, p, job.Redo)
		if err != nil || s.Figures == nil {
			return nil, false
		}
		out = append(out, Outcome{Plan: p, State: UpToDate, Faults: p.Faults, Figures: s.Figures})
	}
	return out, true
}

func (u unit) all(outcome func(*Plan) Outcome) []Outcome {
	out := make([]Outcome, len(u.plans))
	for i, p := range u.plans {
		out[i] = outcome(p)
	}
	return out
}
