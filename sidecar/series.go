package sidecar

// The kind of series in words, as far as closed vocabularies tell: DICOM's
// ScanningSequence (0018,0020) SE IR GR EP RM and SequenceVariant (0018,0021)
// (PS3.3 C.8.3.1 [from memory]), BIDS's PulseSequenceType where every word of it
// is known, NumberShots, EchoTrainLength, and the number of EchoTime values.
// What is not said is said to be not said.

import (
	"strings"

	"github.com/tidwall/gjson"
)

const seriesUnknown = "kind of series not stated"

var scanningCodes = setOf("SE", "IR", "GR", "EP", "RM")

var variantCodes = setOf("SK", "MTC", "SS", "TRSS", "SP", "MP", "OSP", "NONE")

// sequenceWords are the words of PulseSequenceType that are understood, each to
// the features it stands for.
var sequenceWords = map[string]string{
	"gradient": "gradient", "gradientecho": "gradient", "gre": "gradient", "ge": "gradient",
	"spin": "spin", "spinecho": "spin", "se": "spin",
	"epi": "epi", "planar": "epi", "echoplanar": "epi", "ep": "epi",
	"fast": "fast", "turbo": "fast", "rapid": "fast", "tse": "fast spin", "fse": "fast spin",
	"single": "single", "singleshot": "single", "ss": "single",
	"multi": "multi", "multishot": "multi",
	"echo": "", "shot": "", "imaging": "", "bold": "", "2d": "", "3d": "", "multiband": "", "multiecho": "",
}

// words splits a value of codes: a string parted by backslashes (DICOM),
// underscores, commas or spaces, or a list of strings.
func (r *reading) words(key string) []string {
	_, j, ok := r.get(key)
	if !ok {
		return nil
	}
	var parts []string
	split := func(s string) {
		parts = append(parts, strings.FieldsFunc(s, func(c rune) bool { return strings.ContainsRune(`\_,/- `, c) })...)
	}
	switch {
	case j.Type == gjson.String:
		split(j.Str)
	case j.IsArray():
		for _, e := range j.Array() {
			if e.Type != gjson.String {
				return nil
			}
			split(e.Str)
		}
	}
	return parts
}

// codes returns the words of a field if all of them belong to the vocabulary;
// otherwise the field is text of unknown kind and left alone.
func (r *reading) codes(key string, known map[string]bool) map[string]bool {
	parts := r.words(key)
	if len(parts) == 0 {
		return nil
	}
	for _, p := range parts {
		if !known[p] {
			return nil
		}
	}
	return setOf(parts...)
}

// quietNumber reads a number for description only: a value of another type is
// passed over, because nothing is computed from it.
func (r *reading) quietNumber(key string) (float64, bool) {
	_, j, ok := r.get(key)
	if !ok || j.Type != gjson.Number {
		return 0, false
	}
	x := parseNumber(j.Raw)
	return x, finite(x)
}

func (r *reading) series() string {
	has := map[string]bool{}
	if codes := r.codes("ScanningSequence", scanningCodes); codes != nil {
		r.use("ScanningSequence")
		has["gradient"], has["spin"], has["epi"], has["inversion"] = codes["GR"], codes["SE"], codes["EP"], codes["IR"]
	}
	if codes := r.codes("SequenceVariant", variantCodes); codes != nil {
		r.use("SequenceVariant")
		has["segmented"] = codes["SK"]
	}
	r.sequenceType(has)
	train, haveTrain := r.quietNumber("EchoTrainLength")
	if shots, ok := r.quietNumber("NumberShots"); ok && shots >= 1 {
		r.use("NumberShots")
		has["single"], has["multi"] = shots == 1, shots > 1
	}

	var kind string
	switch {
	case has["epi"] && has["gradient"] && has["spin"]:
		kind = "gradient- and spin-echo EPI"
	case has["epi"] && has["gradient"]:
		kind = "gradient-echo EPI"
	case has["epi"] && has["spin"]:
		kind = "spin-echo EPI"
	case has["epi"]:
		kind = "EPI (gradient or spin echo not stated)"
	case has["spin"] && !has["gradient"]:
		kind = "spin echo"
		long := haveTrain && train > 1
		if long {
			r.use("EchoTrainLength")
		}
		if has["fast"] || long {
			kind = "fast spin echo"
			if has["single"] || !has["multi"] && r.wholeTrain(train, has["segmented"]) {
				kind = "single-shot fast spin echo"
			}
		}
	case has["gradient"] && has["spin"]:
		kind = "gradient and spin echo"
	case has["gradient"]:
		kind = "gradient echo"
	default:
		kind = seriesUnknown
	}
	if kind != seriesUnknown {
		if has["multi"] {
			kind = "multi-shot " + kind
		}
		if has["inversion"] {
			kind = "inversion-recovery " + kind
		}
		if r.acq.ThreeDimensional {
			kind = "3D " + kind
		}
	}
	if r.severalEchoes() {
		kind += ", multi-echo"
	}
	return kind
}

// wholeTrain says whether one train of echoes holds a whole slice: more than
// half its lines, which is the least that conjugate symmetry can complete.
func (r *reading) wholeTrain(train float64, segmented bool) bool {
	for _, key := range []string{"AcquisitionMatrixPE", "ReconMatrixPE"} {
		if lines, ok := r.quietNumber(key); ok && lines > 0 {
			r.use(key)
			in := lines
			if accel, ok := r.quietNumber("ParallelReductionFactorInPlane"); ok && accel > 1 {
				r.use("ParallelReductionFactorInPlane")
				in = lines / accel
			}
			return segmented && train > 1 && train > in/2
		}
	}
	return false
}

func (r *reading) sequenceType(has map[string]bool) {
	parts := r.words("PulseSequenceType")
	if len(parts) == 0 {
		return
	}
	var features []string
	for _, p := range parts {
		feature, ok := sequenceWords[strings.ToLower(p)]
		if !ok {
			return
		}
		features = append(features, strings.Fields(feature)...)
	}
	r.use("PulseSequenceType")
	for _, f := range features {
		has[f] = true
	}
}

// severalEchoes says whether the series is one of several echoes: its file is
// named so, or the sidecar lists several echo times.
func (r *reading) severalEchoes() bool {
	_, j, ok := r.get("EchoTime")
	if ok && j.IsArray() && len(j.Array()) > 1 && r.used["EchoTime"] {
		return true
	}
	base := r.geo.File[strings.LastIndexByte(r.geo.File, '/')+1:]
	return strings.Contains(base, "_echo-")
}
