// Package fault declares, once, every reason evenkeel knows for refusing a run
// or for warning about it. Help, documentation and tests are derived from, or
// checked against, [Table].
//
// A fault is a value, not a string: it names what is wrong, where, what was
// found, what was expected and what to do. The package knows nothing of files,
// voxels or commands, so that every other package may use it.
package fault

import (
	"fmt"
	"strings"
)

// Level says what a fault does to its run.
type Level string

const (
	Refuse Level = "error"   // the run is not processed
	Warn   Level = "warning" // the run is processed and the fault is reported
)

// Kind describes one identifier.
type Kind struct {
	ID    string
	Level Level
	// Acceptable faults let the run pass when the user names them with --accept.
	Acceptable bool
	// TimingOnly faults do not hold when no temporal interpolation is asked for.
	TimingOnly bool
	// When says in one line when the fault is raised.
	When string
}

// Fault is one finding about one run.
type Fault struct {
	ID       string `json:"id"`
	Level    Level  `json:"level"`
	File     string `json:"file"`     // path relative to the dataset, with slashes
	Field    string `json:"field"`    // sidecar key, header field, or "" for the file as a whole
	Found    string `json:"found"`    // what is there; never a value that can identify a person
	Expected string `json:"expected"` // what should be there
	Remedy   string `json:"remedy"`   // what the user can do
}

// New returns a fault of a declared identifier, with the level that the table
// gives it. An undeclared identifier is a mistake of ours and panics.
func New(id, file, field, found, expected, remedy string) Fault {
	k, ok := Lookup(id)
	if !ok {
		panic("fault: undeclared identifier " + id)
	}
	return Fault{ID: id, Level: k.Level, File: file, Field: field, Found: found, Expected: expected, Remedy: remedy}
}

// Lookup returns the description of an identifier.
func Lookup(id string) (Kind, bool) {
	for _, k := range Table {
		if k.ID == id {
			return k, true
		}
	}
	return Kind{}, false
}

// Error gives the fault as one line that begins with its identifier.
func (f Fault) Error() string {
	var b strings.Builder
	b.WriteString(f.ID)
	if f.File != "" {
		fmt.Fprintf(&b, ": %s", f.File)
	}
	if f.Field != "" {
		fmt.Fprintf(&b, ": %s", f.Field)
	}
	if f.Found != "" {
		fmt.Fprintf(&b, ": found %s", f.Found)
	}
	if f.Expected != "" {
		fmt.Fprintf(&b, ", expected %s", f.Expected)
	}
	if f.Remedy != "" {
		fmt.Fprintf(&b, "; %s", f.Remedy)
	}
	return b.String()
}
