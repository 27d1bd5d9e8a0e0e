package provenance

import (
	"encoding/json"
	"time"
)

// File is a file that was read or written: Path relative to its dataset (slashes), never absolute.
type File struct {
	Role   string // e.g. "series", "sidecar", "reference", "pose-series", "steady-series"
	Path   string
	SHA256 string // hex
	Bytes  int64
}

// Value is one sidecar value used, with where it came from.
type Value struct {
	Key  string
	JSON string // the value as JSON
	File string // dataset-relative
}

// Stage is one step of the computation with what it was told and what it did.
type Stage struct {
	Name       string
	Parameters json.RawMessage // object
	Outcome    json.RawMessage // object: iterations, statuses ...
}

type Module struct{ Path, Version string }

// Software names what computed the run.
type Software struct {
	Name, Version, Revision, GoVersion string
	Modules                            []Module
}

// Log is the part of a record that may differ between runs with the same bytes.
type Log struct {
	Started, Ended time.Time
	Architecture   string
	CPUFeatures    []string
	StageSeconds   map[string]float64 // written in sorted order
}

// Record is everything needed to audit or replay one run.
type Record struct {
	Run         string // stem
	DatasetName string
	Inputs      []File // raw dataset
	Outputs     []File // OUT
	Settings    json.RawMessage
	Accepted    []string
	Faults      []json.RawMessage // warnings and accepted faults, as fault objects
	Values      []Value
	Stages      []Stage
	Software    Software
	Log         Log
}

func (r *Record) Marshal() ([]byte, error) { panic("todo") }
func Parse(data []byte) (*Record, error)   { panic("todo") }

// Finding is one thing an audit noticed.
type Finding struct {
	Kind            string `json:"kind"`   // missing, changed, unreadable, unlisted, input-missing, input-changed, record-invalid, ...
	Record          string `json:"record"` // OUT-relative path of the record
	File            string `json:"file"`
	Found, Expected string
}

// Checked is what an audit looked at.
type Checked struct{ Records, Outputs, Inputs, InputsUnseen int }

// Audit checks every record in out against the files it names, and against the raw files below raw ("" = not available: counted in InputsUnseen).
func Audit(out, raw string) ([]Finding, Checked, error) { panic("todo") }
