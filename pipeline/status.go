package pipeline

// The program's exit status is decided here and nowhere else, from types: the
// error that kept a command from starting, or the outcomes of its runs.

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"syscall"

	"evenkeel/dataset"
	"evenkeel/fault"
	"evenkeel/internal/parallel"
	"evenkeel/slicetime"
)

// Exit codes, from the sysexits table where it has one.
const (
	ExitDone      = 0
	ExitSome      = 3
	ExitOutside   = 4
	ExitUsage     = 64
	ExitData      = 65
	ExitNoInput   = 66
	ExitBug       = 70
	ExitNoCreate  = 73
	ExitIO        = 74
	ExitInterrupt = 75
)

// ExitCodes lists every code with its meaning, for help and documentation.
var ExitCodes = []struct {
	Code    int
	Meaning string
}{
	{ExitDone, "every selected run is done or already up to date, and inside the limits given"},
	{ExitSome, "some runs were refused or failed; all others are complete"},
	{ExitOutside, "everything is done, but a run is outside a limit given, or audit found a difference"},
	{ExitUsage, "the command line or settings file is wrong; nothing was started"},
	{ExitData, "no selected run could be processed: every one was refused, for its data or because it needs more than --memory"},
	{ExitNoInput, "the dataset is missing or unreadable, or nothing in it matches the selection"},
	{ExitBug, "a bug: please report"},
	{ExitNoCreate, "the output cannot be created"},
	{ExitIO, "reading or writing failed part-way (a full disk, a lost mount)"},
	{ExitInterrupt, "interrupted or pre-empted: run the same command again to go on"},
}

// A UsageError means that what was asked makes no sense; nothing was started.
type UsageError struct {
	Where   string // the option, or the file and key; may be ""
	Message string
}

func (e *UsageError) Error() string {
	if e.Where == "" {
		return e.Message
	}
	return e.Where + ": " + e.Message
}

// NothingSelected means that the dataset has no run that the selection keeps.
type NothingSelected struct {
	Root    string
	Runs    int    // runs of the dataset before the selection
	LeftOut int    // images of the selection that are no magnitudes, and so no runs
	Asked   string // the selection in words, "" when there was none
}

func (e *NothingSelected) Error() string {
	left := ""
	if e.LeftOut > 0 {
		left = fmt.Sprintf("; left out because they are no magnitude images (part-left-out): %d", e.LeftOut)
	}
	if e.Runs == 0 {
		return fmt.Sprintf("%s: holds no BOLD run (sub-*/[ses-*/]func/*_bold.nii[.gz])%s", e.Root, left)
	}
	if e.Runs == 1 {
		return fmt.Sprintf("%s: its only run does not match %s; leave options out, or see evenkeel survey %s for what there is", e.Root, e.Asked, e.Root)
	}
	return fmt.Sprintf("%s: none of its %d runs matches %s; leave options out, or see evenkeel survey %s for what there is%s", e.Root, e.Runs, e.Asked, e.Root, left)
}

// A CreateError means that the output cannot be created.
type CreateError struct {
	Path string
	Err  error
}

func (e *CreateError) Error() string {
	return fmt.Sprintf("%s: cannot be created: %v", e.Path, cause(e.Err))
}
func (e *CreateError) Unwrap() error { return e.Err }

// An IOError means that reading or writing broke off part-way.
type IOError struct {
	Step string // what was being done, "" when the path says enough
	Path string
	Err  error
}

func (e *IOError) Error() string {
	s := e.Path + ": "
	if e.Step != "" {
		s += e.Step + ": "
	}
	return s + cause(e.Err).Error()
}
func (e *IOError) Unwrap() error { return e.Err }

// cause takes the path out of an error of the os package, which we name ourselves.
func cause(err error) error {
	var pe *fs.PathError
	if errors.As(err, &pe) {
		return pe.Err
	}
	var le *os.LinkError
	if errors.As(err, &le) {
		return le.Err
	}
	return err
}

// creating classifies an error met while making a new file or folder: what says
// that it cannot be there at all is a CreateError, what says that the device
// gave up is an IOError.
func creating(path string, err error) error {
	if err == nil {
		return nil
	}
	for _, e := range []error{syscall.ENOSPC, syscall.EDQUOT, syscall.EIO, syscall.ESTALE, syscall.EFBIG} {
		if errors.Is(err, e) {
			return &IOError{Path: path, Err: err}
		}
	}
	return &CreateError{Path: path, Err: err}
}

// A BugError is a panic of ours, caught: never the fault of the data.
type BugError struct {
	Run   string
	Value any
	Stack []byte
}

func (e *BugError) Error() string {
	s := "internal error"
	if e.Run != "" {
		s += " in run " + e.Run
	}
	return fmt.Sprintf("%s: %v; this is a mistake in evenkeel, please report it with the command and version", s, e.Value)
}

// asBug turns a recovered value into a BugError.
func asBug(run string, v any, stack []byte) *BugError {
	if p, ok := v.(*parallel.Panic); ok {
		return &BugError{Run: run, Value: p.Value, Stack: p.Stack}
	}
	return &BugError{Run: run, Value: v, Stack: stack}
}

// Refused is the error form of one or more faults that refuse a run.
type Refused struct{ Faults []fault.Fault }

func (e *Refused) Error() string {
	if len(e.Faults) == 0 {
		return "refused"
	}
	return e.Faults[0].Error()
}

// State says how a run ended.
type State string

const (
	Done        State = "done"
	UpToDate    State = "up-to-date"
	RefusedRun  State = "refused"     // for its data: faults say why
	Failed      State = "failed"      // I/O, or a bug
	Interrupted State = "interrupted" // or never started because of an interruption
)

// Outcome is how one run ended.
type Outcome struct {
	Plan    *Plan
	State   State
	Faults  []fault.Fault // all of the run's faults, those found while running included
	Err     error         // what failed, nil unless Failed
	Figures *Figures      // nil unless Done or UpToDate
	Outside []Breach      // limits that the run is outside of
	Older   bool          // refused or failed, while OUT still holds the outputs of an earlier time
	// StageSeconds is how long each of the run's [Stages] lasted, nil unless Done.
	StageSeconds map[string]float64
}

// codeOf gives the exit code that an error of any kind stands for.
func codeOf(err error) int {
	var (
		usage    *UsageError
		missing  *dataset.NotFound
		nothing  *NothingSelected
		create   *CreateError
		bug      *BugError
		panicked *parallel.Panic
		refused  *Refused
		argument *slicetime.ArgumentError
	)
	switch {
	case err == nil:
		return ExitDone
	case errors.As(err, &bug), errors.As(err, &panicked), errors.As(err, &argument):
		// Arguments are settled before a run starts: one that does not fit is
		// a mistake of ours.
		return ExitBug
	case errors.As(err, &usage):
		return ExitUsage
	case errors.As(err, &missing), errors.As(err, &nothing):
		return ExitNoInput
	case errors.Is(err, context.Canceled), errors.Is(err, context.DeadlineExceeded):
		return ExitInterrupt
	case errors.As(err, &create):
		return ExitNoCreate
	case errors.As(err, &refused):
		return ExitData
	default:
		// What no type of ours claims came from the system while we read or
		// wrote: IOError and bare errors alike.
		return ExitIO
	}
}

// precedence lists the codes that outcomes can lead to; where several hold, the
// first of them is returned.
var precedence = []int{ExitBug, ExitIO, ExitNoCreate, ExitInterrupt, ExitData, ExitSome, ExitOutside}

// ExitCode gives the exit status of a command that ended with err (nil if it ran
// its course) and these outcomes. hidden says that part of the dataset could not be
// looked into, so that runs may have gone unseen: then the whole selection is
// not done, whatever became of the runs that were seen.
func ExitCode(err error, outcomes []Outcome, hidden bool) int {
	holds := map[int]bool{}
	switch c := codeOf(err); c {
	case ExitDone:
	case ExitUsage, ExitNoInput:
		return c // nothing was started
	default:
		holds[c] = true
	}
	refused, bad := 0, 0
	if hidden {
		holds[ExitSome] = true
	}
	for _, o := range outcomes {
		switch o.State {
		case RefusedRun:
			refused++
			bad++
		case Failed:
			bad++
			holds[codeOf(o.Err)] = true
		case Interrupted:
			holds[ExitInterrupt] = true
		}
		if len(o.Outside) > 0 {
			holds[ExitOutside] = true
		}
	}
	if refused > 0 && refused == len(outcomes) {
		holds[ExitData] = true
	}
	if bad > 0 {
		holds[ExitSome] = true
	}
	for _, c := range precedence {
		if holds[c] {
			return c
		}
	}
	return ExitDone
}
