package sidecar

import (
	"slices"

	"evenkeel/fault"
)

// Geometry is what the header says and sidecar values are held against.
type Geometry struct {
	File     string  // the image, for messages
	Size     [4]int  // nx, ny, nz, nt; an entry below 1 is unknown and nothing is held against it
	TRSec    float64 // pixdim[4] in seconds, 0 if the header has none
	SliceDim int     // from dim_info: 0 none, 1..3
}

// Acquisition is what the scanner said, checked. Times are seconds.
type Acquisition struct {
	RepetitionTime float64   // start to start; with VolumeTiming: the common interval (0 if unequal); 0 unknown
	VolumeOnsets   []float64 // from VolumeTiming, else nil
	// UnequalOnsets says that the intervals of VolumeOnsets differ by more than
	// equalOnsets, so that no repetition time exists.
	UnequalOnsets bool
	SliceTimes    []float64 // by increasing slice index along SliceAxis; nil if there are none
	// SliceAxis is 0, 1, 2 = i, j, k: of SliceEncodingDirection, without it of
	// dim_info, without both k as BIDS has it.
	SliceAxis int
	DelayTime float64 // the pause in each repetition time, 0 if none is given
	// FrameDuration is FrameAcquisitionDuration, how long one volume takes to
	// acquire; given with VolumeOnsets only, 0 if it is not.
	FrameDuration    float64
	PhaseAxis        int     // 0,1,2; -1 unknown
	PhaseSign        int     // +1, -1; 0 unknown
	TotalReadoutTime float64 // 0 unknown or not plausible
	// EffectiveEchoSpacing refers to the reconstructed matrix; 0 unknown or not plausible.
	EffectiveEchoSpacing float64
	// EchoTime is 0 when unknown, not above zero, or above 1 s, where the standard
	// warns of milliseconds: an order of echoes must not rest on mixed units.
	EchoTime         float64
	Multiband        int  // MultibandAccelerationFactor, 0 unknown
	ThreeDimensional bool // MRAcquisitionType 3D
	TaskName         string
	Series           string // in words: "gradient-echo EPI", "spin-echo EPI", "single-shot fast spin echo", ... as far as the sidecar tells
	// Used is every sidecar value that was read and believed, sorted by key, with its origin.
	Used []Field
	// Carried is the allow-listed fields that stay true of the output series,
	// sorted by key (see carried.go). Timing is the caller's to write.
	Carried []Field
}

// Acquisition checks the merged document against the header. Faults that hold
// whatever the settings carry the level of the table; the caller drops those
// marked TimingOnly when no temporal interpolation is asked for, and acceptable
// ones the user accepted. Where accepting or dropping is possible the result
// still holds the best reading: with tr-mismatch the sidecar's repetition time,
// with slice-axis-conflict the sidecar's axis, with volume-spacing the onsets.
// With any other error the values concerned are absent (zero, nil, -1).
//
// The Acquisition is never nil. If a source could not be read, its values are
// unknown and may have overridden others: nothing further is checked, and the
// Acquisition holds only what the header says.
func (d *Document) Acquisition(g Geometry) (*Acquisition, []fault.Fault) {
	r := &reading{
		doc: d, geo: g,
		acq:  &Acquisition{SliceAxis: 2, PhaseAxis: -1},
		used: map[string]bool{},
	}
	if g.SliceDim >= 1 && g.SliceDim <= 3 {
		r.acq.SliceAxis = g.SliceDim - 1
	}
	if d.broken {
		r.acq.Series = seriesUnknown
		return r.acq, nil
	}
	r.dimensions()
	r.repetition()
	r.sliceAxis()
	r.sliceTimes()
	r.phase()
	r.readout()
	r.echo()
	r.task()
	r.acq.Series = r.series()
	r.acq.Carried = r.carried()
	for key := range r.used {
		r.acq.Used = append(r.acq.Used, r.field(key))
	}
	sortFields(r.acq.Used)
	return r.acq, r.faults
}

func sortFields(fields []Field) {
	slices.SortFunc(fields, func(a, b Field) int {
		if a.Key < b.Key {
			return -1
		}
		if a.Key > b.Key {
			return 1
		}
		return 0
	})
}

func (r *reading) dimensions() {
	const key = "MRAcquisitionType" // DICOM (0018,0023): 2D or 3D
	word, ok := r.text(key)
	if !ok {
		return // absent counts as 2D
	}
	switch word {
	case "2D":
	case "3D":
		r.acq.ThreeDimensional = true
		found := "3D"
		if r.has("SliceTiming") {
			found += ", and SliceTiming, which a volume excited as a whole cannot have"
		}
		r.warn(key, "three-dimensional", found, "2D for slice timing to be corrected",
			"nothing, if the series is 3D: its volumes are realigned and no slice timing is corrected")
	default:
		r.wrongType(key, `"2D" or "3D"`, "write the one that the scanner used")
		return
	}
	r.use(key)
}

func (r *reading) echo() {
	const key = "EchoTime"
	// BIDS allows a list for files that hold several echoes.
	times, ok := r.numbersOrOne(key)
	if !ok || len(times) == 0 {
		return
	}
	for _, t := range times {
		if !(t > 0 && t <= longestEcho) {
			return
		}
	}
	r.use(key)
	r.acq.EchoTime = slices.Min(times)
}

// longestEcho is where the standard's validator warns that EchoTime is probably
// in milliseconds (BIDS schema 1.11.1, rules/checks).
const longestEcho = 1.0

func (r *reading) task() {
	const key = "TaskName"
	name, ok := r.text(key)
	if !ok || !tidyText(name) {
		return
	}
	r.use(key)
	r.acq.TaskName = name
}
