package sidecar

import "evenkeel/fault"

// Source is one JSON file that applies to a run, in the order root to leaf.
type Source struct {
	Name string // relative path, for messages and origins
	Data []byte
}

// Origin says where a value came from.
type Origin struct{ File, Key string }

// Geometry is what the header says and sidecar values are held against.
type Geometry struct {
	File     string  // the image, for messages
	Size     [4]int  // nx, ny, nz, nt
	TRSec    float64 // pixdim[4] in seconds, 0 if the header has none
	SliceDim int     // from dim_info: 0 none, 1..3
}

// Document is the merged sidecar of one run.
type Document struct{}

// Merge parses and merges the sources, lower wins key by key.
func Merge(sources []Source) (*Document, []fault.Fault) { panic("todo") }

// Field is one sidecar value with its origin; Raw is its JSON.
type Field struct {
	Key, Raw string
	Origin   Origin
}

// Acquisition is what the scanner said, checked. Times are seconds.
type Acquisition struct {
	RepetitionTime                         float64   // start to start; with VolumeTiming: the common interval (0 if unequal)
	VolumeOnsets                           []float64 // from VolumeTiming, else nil
	UnequalOnsets                          bool
	SliceTimes                             []float64 // by increasing slice index along SliceAxis; nil if there are none
	SliceAxis                              int       // 0,1,2 = i,j,k
	DelayTime                              float64
	PhaseAxis                              int     // 0,1,2; -1 unknown
	PhaseSign                              int     // +1, -1; 0 unknown
	TotalReadoutTime, EffectiveEchoSpacing float64 // 0 unknown
	EchoTime                               float64 // 0 unknown
	Multiband                              int     // MultibandAccelerationFactor, 0 unknown
	ThreeDimensional                       bool    // MRAcquisitionType 3D
	TaskName                               string
	Series                                 string  // in words: "gradient-echo EPI", "spin-echo EPI", "single-shot fast spin echo", ... as far as the sidecar tells
	Used                                   []Field // every sidecar value that was used, sorted by key, with its origin
	Carried                                []Field // allow-listed fields that stay true of the output series, sorted by key (values as raw JSON): for the output sidecar
}

// Acquisition checks the merged document against the header. Faults that hold whatever the settings carry the level of the table;
// the caller drops those marked TimingOnly when no temporal interpolation is asked for, and acceptable ones the user accepted. Where accepting or dropping is possible the
// Acquisition still holds the best reading (e.g. tr-mismatch: the sidecar's value). Never nil.
func (d *Document) Acquisition(g Geometry) (*Acquisition, []fault.Fault) { panic("todo") }
