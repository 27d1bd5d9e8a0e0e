package dataset

import "evenkeel/fault"

type Entity struct{ Key, Label string } // e.g. {"sub","01"}

// Entities are kept in the standard's order.
type Entities []Entity

func (e Entities) Get(key string) (label string, ok bool) { panic("todo") }

// Run is one BOLD image file of the dataset (each echo is a Run of its own).
type Run struct {
	Stem     string // raw file name without _bold.nii[.gz]
	File     string // path relative to the dataset, slashes
	Dir      string // its folder, relative
	Entities Entities
	Sidecars []string      // applicable JSON files, root to leaf, relative paths
	SBRef    string        // single-band reference of this run, or ""
	Events   string        // events table that applies, or ""
	Group    string        // same for all echoes of one acquisition, unique otherwise (stem without echo)
	Faults   []fault.Fault // sidecar-ambiguous, image-absent, image-twice
}

// Dataset is a raw BIDS dataset as found on disk.
type Dataset struct {
	Root        string // as given, cleaned
	Name        string // dataset_description Name, or ""
	BIDSVersion string
	Derivative  bool          // DatasetType derivative: the caller raises not-raw
	Runs        []Run         // sorted by File
	LeftOut     []fault.Fault // part-left-out warnings: parts that are not magnitudes
}

// NotFound means that the dataset is missing, unreadable, or not a folder (exit code 66).
type NotFound struct {
	Root string
	Err  error
}

func (e *NotFound) Error() string { panic("todo") }
func (e *NotFound) Unwrap() error { return e.Err }

// Open walks sub-*/[ses-*/]func of the dataset.
func Open(root string) (*Dataset, error) { panic("todo") }

// Filter keeps runs by entity labels; key is the BIDS key (sub, ses, task, run, dir, acq, echo ...), several labels of a key are alternatives.
// Labels may come with their prefix ("sub-01") or without; run and echo indices compare as numbers (1 = 01).
type Filter map[string][]string

// Select returns the runs the filter keeps, in order, including all echoes chosen.
func (d *Dataset) Select(f Filter) []Run { panic("todo") }

// Companions returns every run of the dataset in the same Group as r (its echoes), r included.
func (d *Dataset) Companions(r Run) []Run { panic("todo") }

// Path gives the file-system path of a relative slash path.
func (d *Dataset) Path(rel string) string { panic("todo") }

// OutputPath gives the relative slash path of a derivative of run r: dir/STEM_desc-<desc>_<suffix><ext>; desc "" leaves desc out.
func OutputPath(r Run, desc, suffix, ext string) string { panic("todo") }

// URI writes a BIDS URI: bids:<name>:<path>, name "" = this dataset.
func URI(name, path string) string { panic("todo") }

// Derivative describes the output dataset for its dataset_description.json.
type Derivative struct {
	Name                      string
	SourceName, SourceVersion string
	Version                   string // of evenkeel
	// Links maps a dataset name used in BIDS URIs to where it is, relative to OUT where that is possible without absolute paths, else "".
	RawLink string
}

// DescriptionJSON, ReadmeText and IgnoreText give the content of OUT/dataset_description.json, OUT/README and OUT/.bidsignore.
func (d Derivative) DescriptionJSON() []byte { panic("todo") }
func (d Derivative) ReadmeText() []byte      { panic("todo") }
func IgnoreText() []byte                     { panic("todo") }
