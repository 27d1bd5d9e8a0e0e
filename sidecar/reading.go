package sidecar

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"strconv"
	"strings"

	"github.com/tidwall/gjson"

	"evenkeel/fault"
)

// reading is the state of one Document.Acquisition.
type reading struct {
	doc    *Document
	geo    Geometry
	acq    *Acquisition
	faults []fault.Fault
	used   map[string]bool
	bad    map[string]bool // wrong type already reported

	// span is the longest a slice time can be: the repetition time or the
	// shortest interval of VolumeTiming, in seconds; 0 unknown. spanName says
	// where it comes from.
	span     float64
	spanName string
	// spanSupposed marks a span that rests on the supposition of a wrong unit: fit
	// to recognise slice times of the same unit, not to refuse any by it.
	spanSupposed bool
	// timesWanted is set when a fault that asks for SliceTiming was raised, so
	// that its absence is not reported twice.
	timesWanted bool
}

func (r *reading) has(key string) bool {
	_, ok := r.doc.values[key]
	return ok
}

// get returns a value that may be read: there, and there once.
func (r *reading) get(key string) (value, gjson.Result, bool) {
	v, ok := r.doc.values[key]
	if !ok || v.ambiguous || r.bad[key] {
		return v, gjson.Result{}, false
	}
	return v, gjson.Parse(v.raw()), true
}

// misspelt tells of a key that differs from the wanted one in case only: keys
// are case-sensitive, and such a slip is hard to see.
func (r *reading) misspelt(key string) string {
	best := ""
	for k := range r.doc.values {
		if k != key && strings.EqualFold(k, key) && (best == "" || k < best) {
			best = k
		}
	}
	if best == "" {
		return ""
	}
	return fmt.Sprintf(" (there is %s, but keys are case-sensitive)", showKey(best))
}

// use marks a value as one that the result rests on.
func (r *reading) use(key string) { r.used[key] = true }

func (r *reading) field(key string) Field {
	v := r.doc.values[key]
	var b bytes.Buffer
	raw := v.raw()
	// Cannot fail: the file was scanned.
	if json.Compact(&b, []byte(raw)) == nil {
		raw = b.String()
	}
	return Field{Key: key, Raw: raw, Origin: Origin{File: v.file, Key: key}}
}

// fileOf is the file a value came from, or where it is best added.
func (r *reading) fileOf(key string) string {
	if v, ok := r.doc.values[key]; ok {
		return v.file
	}
	return r.doc.leaf(r.geo)
}

func (r *reading) refuse(key, id, found, expected, remedy string) {
	r.faults = append(r.faults, fault.New(id, r.fileOf(key), key, found, expected, remedy))
}

// warn is refuse under the name that fits a warning; the table holds the level.
func (r *reading) warn(key, id, found, expected, remedy string) {
	r.refuse(key, id, found, expected, remedy)
}

// wrongType reports a value that is not what the field holds, once.
func (r *reading) wrongType(key, expected, remedy string) {
	v := r.doc.values[key]
	r.wrongTypeAt(key, v.place(), describe(v.raw()), expected, remedy)
}

func (r *reading) wrongTypeAt(key string, at position, found, expected, remedy string) {
	if r.bad[key] {
		return
	}
	if r.bad == nil {
		r.bad = map[string]bool{}
	}
	r.bad[key] = true
	r.refuse(key, "sidecar-syntax", fmt.Sprintf("%s: %s", at, found), expected, remedy)
}

func remedyForNumber(raw string) string {
	v := gjson.Parse(raw)
	switch {
	case v.Type == gjson.String && looksNumeric(v.Str):
		return "write the number without quotes"
	case v.Type == gjson.Null:
		return "write the true value, or remove the key (a lower file cannot unset a key of a higher one)"
	default:
		return "write the value as a plain number"
	}
}

// number reads a number; it may be infinite where the file holds more than a
// double can (1e999).
func (r *reading) number(key string) (x float64, raw string, ok bool) {
	v, j, ok := r.get(key)
	if !ok {
		return 0, "", false
	}
	if j.Type != gjson.Number {
		r.wrongType(key, "a number", remedyForNumber(v.raw()))
		return 0, "", false
	}
	return parseNumber(j.Raw), j.Raw, true
}

// parseNumber gives the nearest double, infinite beyond its range. The text is
// a JSON number.
func parseNumber(raw string) float64 {
	x, _ := strconv.ParseFloat(raw, 64)
	return x
}

// numbers reads a list of numbers; raws are their texts.
func (r *reading) numbers(key string) (xs []float64, raws []string, ok bool) {
	v, j, ok := r.get(key)
	if !ok {
		return nil, nil, false
	}
	if !j.IsArray() {
		r.wrongType(key, "a list of numbers", "write the values as a list: [0, 0.5, ...]")
		return nil, nil, false
	}
	spots := elements(v.data, v.start)
	xs, raws = make([]float64, 0, len(spots)), make([]string, 0, len(spots))
	for i, spot := range spots {
		raw := string(v.data[spot[0]:spot[1]])
		if gjson.Parse(raw).Type != gjson.Number {
			r.wrongTypeAt(key, placeOf(v.data, spot[0]), fmt.Sprintf("entry %d of %d is %s", i+1, len(spots), describe(raw)),
				"a list of numbers", remedyForNumber(raw))
			return nil, nil, false
		}
		xs, raws = append(xs, parseNumber(raw)), append(raws, raw)
	}
	return xs, raws, true
}

// numbersOrOne reads a number or a list of numbers.
func (r *reading) numbersOrOne(key string) ([]float64, bool) {
	if _, j, ok := r.get(key); ok && j.IsArray() {
		xs, _, ok := r.numbers(key)
		return xs, ok
	}
	x, _, ok := r.number(key)
	return []float64{x}, ok
}

func (r *reading) text(key string) (string, bool) {
	_, j, ok := r.get(key)
	if !ok {
		return "", false
	}
	if j.Type != gjson.String {
		r.wrongType(key, "a string", "write the value in double quotes")
		return "", false
	}
	return j.Str, true
}

func finite(x float64) bool { return !math.IsInf(x, 0) && !math.IsNaN(x) }

// show prints a number that we computed, or that comes from a header whose
// floats are single precision, with the digits that mean something.
func show(x float64) string { return strconv.FormatFloat(x, 'g', 7, 64) }

var axisNames = [3]string{"i", "j", "k"}

// direction reads one of the standard's six direction words.
func direction(word string) (axis, sign int, ok bool) {
	sign = 1
	if len(word) == 2 && word[1] == '-' {
		sign = -1
		word = word[:1]
	}
	if len(word) != 1 || word[0] < 'i' || word[0] > 'k' {
		return -1, 0, false
	}
	return int(word[0] - 'i'), sign, true
}

// describeDirection shows words that are meant as axes, which say nothing about
// anybody, and describes all others.
func describeDirection(word, raw string) string {
	if word == "" || len(word) > 2 {
		return describe(raw)
	}
	for i := 0; i < len(word); i++ {
		switch word[i] {
		case 'i', 'j', 'k', 'x', 'y', 'z', 'I', 'J', 'K', 'X', 'Y', 'Z', '+', '-':
		default:
			return describe(raw)
		}
	}
	return strconv.Quote(word)
}

const directionWords = `one of "i", "i-", "j", "j-", "k", "k-"`
