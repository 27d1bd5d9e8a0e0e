package pipeline

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"syscall"
	"testing"

	"evenkeel/dataset"
	"evenkeel/fault"
	"evenkeel/internal/parallel"
)

func outcome(s State, err error) Outcome { return Outcome{State: s, Err: err} }

// The precedence that README promises: 70, 74, 73, 75, 65, 3, 4; usage and missing input
// mean that nothing was started.
func TestExitCode(t *testing.T) {
	var (
		done    = outcome(Done, nil)
		same    = outcome(UpToDate, nil)
		refused = outcome(RefusedRun, nil)
		io      = outcome(Failed, &IOError{Path: "x", Err: syscall.ENOSPC})
		create  = outcome(Failed, &CreateError{Path: "x", Err: syscall.EACCES})
		bug     = outcome(Failed, &BugError{Run: "x", Value: "y"})
		stopped = outcome(Interrupted, nil)
		outside = Outcome{State: Done, Outside: []Breach{{Column: "mean_fd", Words: "mean FD"}}}
	)
	for i, c := range []struct {
		err  error
		runs []Outcome
		code int
	}{
		{nil, []Outcome{done, same}, 0},
		{nil, nil, 0},
		{nil, []Outcome{done, refused}, 3},
		{nil, []Outcome{same, refused}, 3},
		{nil, []Outcome{refused, refused}, 65},
		{nil, []Outcome{outside}, 4},
		{nil, []Outcome{outside, refused}, 3},
		{nil, []Outcome{stopped, refused}, 75},
		{nil, []Outcome{stopped, create}, 73},
		{nil, []Outcome{io, create, stopped}, 74},
		{nil, []Outcome{bug, io, create, stopped, refused, outside}, 70},
		{nil, []Outcome{done, io}, 74},
		{&UsageError{Message: "x"}, nil, 64},
		{fmt.Errorf("wrapped: %w", &UsageError{Message: "x"}), nil, 64},
		{&dataset.NotFound{Root: "x", Err: fs.ErrNotExist}, nil, 66},
		{&NothingSelected{Root: "x"}, nil, 66},
		{&CreateError{Path: "x", Err: fs.ErrPermission}, nil, 73},
		{&IOError{Path: "x", Err: syscall.EIO}, nil, 74},
		{&IOError{Path: "runs.tsv", Err: syscall.EIO}, []Outcome{refused}, 74},
		{errors.New("anything else"), nil, 74},
		{context.Canceled, nil, 75},
		{&BugError{Value: 1}, nil, 70},
		{&parallel.Panic{Value: 1}, nil, 70},
		{&Refused{[]fault.Fault{notRaw("x")}}, nil, 65},
	} {
		if got := ExitCode(c.err, c.runs, false); got != c.code {
			t.Errorf("case %d: %d, want %d", i, got, c.code)
		}
	}
	if got := ExitCode(nil, []Outcome{done}, true); got != 3 {
		t.Errorf("a part that could not be looked into: %d, want 3", got)
	}
	if got := ExitCode(nil, []Outcome{refused}, true); got != 65 {
		t.Errorf("all refused, and a part not looked into: %d, want 65", got)
	}
}

// Codes are listed once, and the program never uses 1 or 2.
func TestExitCodesDeclared(t *testing.T) {
	seen := map[int]bool{}
	for _, e := range ExitCodes {
		if seen[e.Code] || e.Code == 1 || e.Code == 2 || e.Meaning == "" {
			t.Errorf("code %d is declared twice, has no meaning, or must not be used", e.Code)
		}
		seen[e.Code] = true
	}
	for _, c := range precedence {
		if !seen[c] {
			t.Errorf("code %d has a rank and no meaning", c)
		}
	}
}

func TestCreatingTellsDeviceFromPermission(t *testing.T) {
	for _, c := range []struct {
		err  error
		code int
	}{{syscall.EACCES, 73}, {syscall.EROFS, 73}, {syscall.ENOTDIR, 73}, {syscall.ENOSPC, 74}, {syscall.EIO, 74}, {syscall.EDQUOT, 74}} {
		err := creating("x", &fs.PathError{Op: "open", Path: "/a/b", Err: c.err})
		if got := codeOf(err); got != c.code {
			t.Errorf("%v: %d, want %d", c.err, got, c.code)
		}
	}
}
