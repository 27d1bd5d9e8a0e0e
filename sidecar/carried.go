package sidecar

// Which fields go into the sidecar of a corrected series. A field is carried
// when it stays true of the output, is of its type, and cannot hold text about
// a person. Everything else stays behind. In particular: RepetitionTime,
// VolumeTiming, SliceTiming, SliceEncodingDirection, DelayTime and
// FrameAcquisitionDuration, which the caller writes or drops according to what
// was done to time; TaskDescription, Instructions, ProtocolName and other free
// text; NumberOfVolumesDiscardedByUser, which leaving out more volumes changes.

import (
	"regexp"
	"unicode"
	"unicode/utf8"

	"github.com/tidwall/gjson"
)

// carriedFields maps each allowed key to the test its value must pass.
var carriedFields = map[string]func(r *reading, key string) bool{
	"TaskName":               believed, // required of a BOLD sidecar; what the subject did
	"CogAtlasID":             vocabularyLink,
	"CogPOID":                vocabularyLink,
	"Manufacturer":           label, // kinds of device, of which there are many
	"ManufacturersModelName": label,
	// What was measured, which neither interpolation nor realignment changes.
	"MagneticFieldStrength":             positive,
	"MRAcquisitionType":                 believed,
	"ScanningSequence":                  believed,
	"SequenceVariant":                   believed,
	"PulseSequenceType":                 believed,
	"NumberShots":                       positive,
	"EchoTime":                          believed,
	"EchoTrainLength":                   positive,
	"InversionTime":                     positive,
	"FlipAngle":                         positive,
	"DwellTime":                         positive,
	"MultibandAccelerationFactor":       believed,
	"ParallelReductionFactorInPlane":    positive,
	"ParallelReductionFactorOutOfPlane": positive,
	"PartialFourier":                    positive,
	"NonlinearGradientCorrection":       boolean,
	"NumberOfVolumesDiscardedByScanner": notNegative,
	// The output keeps the input's array, so directions along its axes hold, and
	// distortion along them is still in the voxels.
	"PhaseEncodingDirection": believed,
	"TotalReadoutTime":       believed,
	"EffectiveEchoSpacing":   believed,
	"ReconMatrixPE":          positive,
}

// carried lists the allowed fields that are there, sorted by key.
func (r *reading) carried() []Field {
	var out []Field
	for key, fits := range carriedFields {
		if _, _, ok := r.get(key); ok && fits(r, key) {
			out = append(out, r.field(key))
		}
	}
	sortFields(out)
	return out
}

// believed fields were read and checked before.
func believed(r *reading, key string) bool { return r.used[key] }

func positive(r *reading, key string) bool {
	x, ok := r.quietNumber(key)
	return ok && x > 0
}

func notNegative(r *reading, key string) bool {
	x, ok := r.quietNumber(key)
	return ok && x >= 0
}

func boolean(r *reading, key string) bool {
	_, j, _ := r.get(key)
	return j.IsBool()
}

func label(r *reading, key string) bool {
	_, j, _ := r.get(key)
	return j.Type == gjson.String && tidyText(j.Str)
}

var linkText = regexp.MustCompile(`^(https?://(www\.)?cognitiveatlas\.org/[A-Za-z0-9/_.-]+|https?://(www\.)?wiki\.cogpo\.org/[A-Za-z0-9/_.:?=-]+|trm_[0-9a-z]+|doi:10\.[0-9]+/[A-Za-z0-9/_.-]+)$`)

func vocabularyLink(r *reading, key string) bool {
	_, j, _ := r.get(key)
	return j.Type == gjson.String && len(j.Str) <= mostText && linkText.MatchString(j.Str)
}

// mostText is generous for a name of a task or a device and short for prose.
const mostText = 64

// tidyText is one short printable line.
func tidyText(s string) bool {
	if s == "" || utf8.RuneCountInString(s) > mostText {
		return false
	}
	for _, c := range s {
		if !unicode.IsPrint(c) {
			return false
		}
	}
	return true
}
