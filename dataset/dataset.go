package dataset

import (
	"fmt"
	"path/filepath"

	"evenkeel/fault"
)

// Run is one BOLD image file of the dataset (each echo is a Run of its own).
type Run struct {
	Stem     string // raw file name without _bold.nii[.gz]
	File     string // path relative to the dataset, slashes
	Dir      string // its folder, relative
	Entities Entities
	Sidecars []string // applicable JSON files, root to leaf, relative paths
	SBRef    string   // single-band reference of this run, or ""
	Events   string   // events table that applies, or ""
	Group    string   // same for all echoes of one acquisition, unique otherwise (stem without echo)

	// Faults are those that hold whatever is asked of the run:
	// image-absent (of the image or of a sidecar), image-twice, sidecar-ambiguous.
	Faults []fault.Fault
	// SBRefFault and EventsFault say why a reference or table that is there in
	// name cannot be used (the path is "" then): not fetched, two that claim the
	// run. They matter only to who wants the file, so they are not in Faults.
	SBRefFault, EventsFault *fault.Fault
}

// Dataset is a raw BIDS dataset as found on disk.
type Dataset struct {
	Root        string // as given, cleaned
	Name        string // dataset_description Name, or ""
	BIDSVersion string // dataset_description BIDSVersion, or ""
	DOI         string // dataset_description DatasetDOI as a URI, or ""
	Derivative  bool   // DatasetType derivative: the caller raises not-raw
	// Described is false when dataset_description.json is missing or cannot be
	// read; a Notice says which.
	Described bool
	Runs      []Run         // sorted by File
	LeftOut   []fault.Fault // part-left-out warnings: parts that are not magnitudes; sorted by File
	Notices   []Notice      // whatever else was passed over, and why; sorted by Path
}

// NotFound means that the dataset is missing, unreadable, or not a folder (exit code 66).
type NotFound struct {
	Root string
	Err  error
}

func (e *NotFound) Error() string {
	return fmt.Sprintf("dataset %s: %v", plain(e.Root), e.Err)
}

func (e *NotFound) Unwrap() error { return e.Err }

// Companions returns every run of the dataset in the same Group as r (its echoes), r included.
func (d *Dataset) Companions(r Run) []Run {
	var out []Run
	for _, x := range d.Runs {
		if x.Group == r.Group {
			out = append(out, x)
		}
	}
	return out
}

// Path gives the file-system path of a relative slash path.
func (d *Dataset) Path(rel string) string {
	return filepath.Join(d.Root, filepath.FromSlash(rel))
}
