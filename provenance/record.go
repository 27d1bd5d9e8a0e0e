package provenance

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"time"
)

// File is a file that was read or written: Path relative to its dataset, with
// slashes, never absolute.
type File struct {
	Role   string // e.g. "series", "sidecar", "reference", "pose-series", "steady-series"
	Path   string
	SHA256 string // 64 lower-case hexadecimal digits
	Bytes  int64
}

// Value is one sidecar value used, with where it came from.
type Value struct {
	Key  string
	JSON string // the value as JSON
	File string // relative to the raw dataset
}

// Stage is one step of the computation with what it was told and what it did.
type Stage struct {
	Name       string          // unique in the record
	Parameters json.RawMessage // an object, or nil
	Outcome    json.RawMessage // an object, or nil: iterations, statuses ...
}

// Module is a dependency that was linked in.
type Module struct{ Path, Version string }

// Software names what computed the run. Name and Version must be there.
type Software struct {
	Name, Version, Revision, GoVersion string
	// Modified says that the source was not the revision's own when it was built.
	Modified bool
	Modules  []Module
}

// Log is the part of a record that may differ between runs with the same bytes.
// Zero times and empty fields are left out.
type Log struct {
	Started, Ended time.Time // written in UTC
	Architecture   string
	CPUFeatures    []string
	StageSeconds   map[string]float64 // written in sorted order
}

// Record is everything needed to audit or replay one run. Lists keep their
// order; an empty list and nil are the same.
type Record struct {
	Run         string // stem: the raw file name without _bold.nii[.gz]
	DatasetName string
	Inputs      []File          // in the raw dataset; one path once
	Outputs     []File          // in OUT; one path once
	Settings    json.RawMessage // an object, or nil
	Accepted    []string
	Faults      []json.RawMessage // warnings and accepted faults, as fault objects
	Values      []Value           // one key of one file once
	Stages      []Stage
	Software    Software
	Log         Log
}

// ID names the record by what it is about: the first 32 hexadecimal digits of
// the SHA-256 of the lines
//
//	evenkeel record 1
//	run STEM
//	input SHA256 BYTES PATH     (for each input, in order)
//	output SHA256 BYTES PATH    (for each output, in order)
//
// each ended by a line feed. A record whose identifier does not fit was edited.
func (r *Record) ID() string {
	h := sha256.New()
	fmt.Fprintf(h, "evenkeel record %d\nrun %s\n", format, r.Run)
	for _, f := range r.Inputs {
		fmt.Fprintf(h, "input %s %d %s\n", f.SHA256, f.Bytes, f.Path)
	}
	for _, f := range r.Outputs {
		fmt.Fprintf(h, "output %s %d %s\n", f.SHA256, f.Bytes, f.Path)
	}
	return hex.EncodeToString(h.Sum(nil))[:32]
}

const (
	// format is the version of the document's layout; a reader refuses a higher one.
	format = 1

	// RecordSuffix follows the stem in the name of a record.
	RecordSuffix = "_desc-steady_prov.json"
	// SeriesSuffix follows the stem in the name of the corrected series, before
	// its extension (.nii or .nii.gz).
	SeriesSuffix = "_desc-steady_bold"

	// MaxBytes is the size of the largest record that is written or read.
	MaxBytes = 16 << 20
	// MaxDepth is how deep objects and arrays of a record, and of the JSON
	// inside it, may nest.
	MaxDepth = 64
)

const (
	nsEvenkeel = "https://evenkeel.example/ns#"
	nsRun      = "https://evenkeel.example/run/" // then the identifier and '#'
	nsRDF      = "http://www.w3.org/1999/02/22-rdf-syntax-ns#"
	nsTerms    = "http://purl.org/dc/terms/"
)
