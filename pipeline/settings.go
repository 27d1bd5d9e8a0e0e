package pipeline

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"evenkeel/fault"
	"evenkeel/provenance"
	"evenkeel/slicetime"
)

// Settings holds every choice that can change a byte of the output, and nothing
// else. Two runs of the program with equal settings, equal inputs and the same
// version write the same data files, whatever the machine.
//
// The zero value is not usable; start from [DefaultSettings].
type Settings struct {
	Time       string   // temporal interpolation: fourier, sinc, none
	TimeOrigin Origin   // the instant inside each volume that every slice is moved to
	SincReach  int      // samples on each side of the sinc kernel
	Motion     string   // path, volume, none
	Reference  Standard // what every volume is aligned to
	Space      string   // quintic, cubic
	Order      string   // joint, time-first, space-first
	Skip       int      // leading volumes left out
	Store      string   // float32, int16
	Accept     []string // fault identifiers, sorted, without repeats
	Events     bool     // also write the events table on the output's time axis
}

// DefaultSettings returns what holds when nothing is given.
func DefaultSettings() Settings {
	return Settings{
		Time:       "fourier",
		TimeOrigin: Origin{Word: "middle"},
		SincReach:  8,
		Motion:     "path",
		Reference:  Standard{Word: "mean"},
		Space:      "quintic",
		Order:      orderFor("path", "fourier"),
		Store:      "float32",
	}
}

// Origin is an instant inside a volume: a word (middle, start) or, with Word
// empty, seconds from the volume's start.
type Origin struct {
	Word    string
	Seconds float64
}

// Standard is the reference: a word (mean, first, middle, sbref) or, with Word
// empty, the index of a volume among those kept (0 is the first after skip).
type Standard struct {
	Word  string
	Index int
}

// A Choice declares one setting: everything that options, help, the settings
// object and the record say about it comes from here.
type Choice struct {
	// Key names the setting in the JSON object. The command-line option is
	// the key with hyphens for underscores.
	Key string
	// Values says what may be given, for help: "fourier|sinc|none".
	Values string
	// Help says in one sentence what it does.
	Help string
	// Repeat is true when the option may be given several times.
	Repeat bool
	// Switch is true for a setting that is on or off.
	Switch bool

	words []string                        // for a setting that is one of a few words
	parse func(*Settings, []string) error // from option values
	value func(Settings) any              // as it stands in the JSON object
	kind  string                          // what a JSON value may be: "string", "integer", "string or number" ...
}

// Option is the name of the command-line option, without its hyphens.
func (c Choice) Option() string { return strings.ReplaceAll(c.Key, "_", "-") }

// Default is the default as an option value; "" when the default is "none given".
func (c Choice) Default() string {
	switch v := c.value(DefaultSettings()).(type) {
	case string:
		return v
	case int:
		return strconv.Itoa(v)
	case bool:
		return strconv.FormatBool(v)
	}
	return ""
}

// Choices lists every setting in the order in which help and the record show them.
var Choices = []Choice{
	ordering(word("time", []string{"fourier", "sinc", "none"},
		"temporal interpolation of the slices", func(s *Settings) *string { return &s.Time })),
	{Key: "time_origin", Values: "middle|start|SECONDS", kind: "a word or a number of seconds",
		Help: "the instant inside each volume that every slice is moved to; middle is halfway between the earliest and the latest slice time",
		parse: func(s *Settings, v []string) error {
			o, err := parseOrigin(last(v))
			s.TimeOrigin = o
			return err
		},
		value: func(s Settings) any {
			if s.TimeOrigin.Word != "" {
				return s.TimeOrigin.Word
			}
			return s.TimeOrigin.Seconds
		}},
	{Key: "sinc_reach", Values: "N", kind: "a whole number",
		Help: fmt.Sprintf("samples on each side of the sinc kernel, 1 to %d", slicetime.MaxReach),
		parse: func(s *Settings, v []string) error {
			return parseInt(&s.SincReach, last(v), 1, slicetime.MaxReach)
		},
		value: func(s Settings) any { return s.SincReach }},
	ordering(word("motion", []string{"path", "volume", "none"},
		"a pose for every excitation, one pose a volume, or no motion correction", func(s *Settings) *string { return &s.Motion })),
	{Key: "reference", Values: "mean|first|middle|sbref|INDEX", kind: "a word or the index of a volume",
		Help: "what every volume is aligned to; mean is the average of the aligned volumes, standing at the pose of the first of them; INDEX counts from 0 after the volumes skipped",
		parse: func(s *Settings, v []string) error {
			r, err := parseStandard(last(v))
			s.Reference = r
			return err
		},
		value: func(s Settings) any {
			if s.Reference.Word != "" {
				return s.Reference.Word
			}
			return s.Reference.Index
		}},
	word("space", []string{"quintic", "cubic"},
		"degree of the B-spline of the one spatial resampling", func(s *Settings) *string { return &s.Space }),
	word("order", []string{"joint", "time-first", "space-first"},
		"joint takes the predicted anatomy out, interpolates what is left in time and space, and puts the reference's anatomy back; otherwise, which interpolation comes first. Unless it is given, it is joint with --motion path, and time-first without a path or with --time none. With --time none nothing is moved in time: joint still takes the anatomy from the reference, time-first resamples each volume at one pose, space-first each slice at its own", func(s *Settings) *string { return &s.Order }),
	{Key: "skip", Values: "N", kind: "a whole number",
		Help: "leading volumes left out of the output and the estimate: those before the magnetisation is in equilibrium, which show as spikes and high DVARS at the start",
		parse: func(s *Settings, v []string) error {
			return parseInt(&s.Skip, last(v), 0, math.MaxInt32)
		},
		value: func(s Settings) any { return s.Skip }},
	word("store", []string{"float32", "int16"},
		"voxel type written; int16 carries scl_slope and scl_inter", func(s *Settings) *string { return &s.Store }),
	{Key: "accept", Values: "FAULT", Repeat: true, kind: "a list of fault identifiers",
		Help: "process a run in spite of that fault; recorded. One of: " + strings.Join(acceptable(), ", "),
		parse: func(s *Settings, v []string) error {
			for _, id := range v {
				k, ok := fault.Lookup(id)
				if !ok {
					return fmt.Errorf("no fault is called %q%s", id, DidYouMean(id, acceptable()))
				}
				if !k.Acceptable {
					return fmt.Errorf("%s cannot be accepted, only %s can", id, strings.Join(acceptable(), " and "))
				}
			}
			s.Accept = slices.Compact(slices.Sorted(slices.Values(v)))
			return nil
		},
		value: func(s Settings) any { return append([]string{}, s.Accept...) }},
	{Key: "events", Switch: true, kind: "true or false",
		Help: "also write each run's events table with onsets moved to the output's time axis; whoever uses it must not add StartTime again",
		parse: func(s *Settings, v []string) error {
			b, err := strconv.ParseBool(last(v))
			if err != nil {
				return fmt.Errorf("found %q, expected true or false", last(v))
			}
			s.Events = b
			return nil
		},
		value: func(s Settings) any { return s.Events }},
}

// orderFor is the order unless one is given. Anatomy can be predicted slice by slice
// only along a path, and it is taken out for the sake of interpolation in time: where
// nothing is moved in time, the voxels are rather those of the volume itself.
func orderFor(motion, time string) string {
	if motion == "path" && time != "none" {
		return "joint"
	}
	return "time-first"
}

// ordering makes the default of order follow a setting: an order that is the default
// before the change becomes the default after it.
func ordering(c Choice) Choice {
	set := c.parse
	c.parse = func(s *Settings, v []string) error {
		was := orderFor(s.Motion, s.Time)
		if err := set(s, v); err != nil {
			return err
		}
		if s.Order == was {
			s.Order = orderFor(s.Motion, s.Time)
		}
		return nil
	}
	return c
}

// word declares a setting that is one of a few words.
func word(key string, words []string, help string, field func(*Settings) *string) Choice {
	return Choice{Key: key, Values: strings.Join(words, "|"), Help: help, words: words, kind: "one of " + strings.Join(words, ", "),
		parse: func(s *Settings, v []string) error {
			w := last(v)
			if !slices.Contains(words, w) {
				return fmt.Errorf("found %q, expected %s%s", w, strings.Join(words, ", "), DidYouMean(w, words))
			}
			*field(s) = w
			return nil
		},
		value: func(s Settings) any { return *field(&s) }}
}

// last returns the last of the values an option was given: later ones win.
func last(v []string) string { return v[len(v)-1] }

func acceptable() []string {
	var ids []string
	for _, k := range fault.Table {
		if k.Acceptable {
			ids = append(ids, k.ID)
		}
	}
	return ids
}

func parseOrigin(v string) (Origin, error) {
	if v == "middle" || v == "start" {
		return Origin{Word: v}, nil
	}
	sec, err := strconv.ParseFloat(v, 64)
	// A negative instant, or one that is not finite, lies in no volume;
	// whether it lies within the repetition time is known for each run only.
	if err != nil || !(sec >= 0) || math.IsInf(sec, 0) {
		return Origin{}, fmt.Errorf("found %q, expected middle, start, or seconds from the volume's start (0 or more)", v)
	}
	return Origin{Seconds: sec}, nil
}

func parseStandard(v string) (Standard, error) {
	words := []string{"mean", "first", "middle", "sbref"}
	if slices.Contains(words, v) {
		return Standard{Word: v}, nil
	}
	i, err := strconv.Atoi(v)
	if err != nil || i < 0 {
		return Standard{}, fmt.Errorf("found %q, expected %s, or the index of a volume (0 or more)%s", v, strings.Join(words, ", "), DidYouMean(v, words))
	}
	return Standard{Index: i}, nil
}

func parseInt(to *int, v string, lo, hi int) error {
	i, err := strconv.Atoi(v)
	if err != nil || i < lo || i > hi {
		if hi == math.MaxInt32 {
			return fmt.Errorf("found %q, expected a whole number of %d or more", v, lo)
		}
		return fmt.Errorf("found %q, expected a whole number from %d to %d", v, lo, hi)
	}
	*to = i
	return nil
}

// Set changes one setting, by key, from option values; the last value wins
// unless the option repeats. A wrong value gives a [*UsageError].
func (s *Settings) Set(key string, values ...string) error {
	for _, c := range Choices {
		if c.Key != key {
			continue
		}
		if len(values) == 0 {
			return nil
		}
		if err := c.parse(s, values); err != nil {
			return &UsageError{Where: "--" + c.Option(), Message: err.Error()}
		}
		return nil
	}
	panic("pipeline: undeclared setting " + key)
}

// Check holds the settings against each other; it returns a [*UsageError].
func (s Settings) Check() error {
	if s.Reference.Word == "sbref" && s.Motion == "none" {
		return &UsageError{Where: "--reference sbref", Message: "means nothing with --motion none, where no volume is aligned to anything; leave one of them out"}
	}
	return nil
}

// MarshalJSON writes every setting, defaults expanded, in the declared order.
func (s Settings) MarshalJSON() ([]byte, error) {
	var b bytes.Buffer
	b.WriteByte('{')
	for i, c := range Choices {
		if i > 0 {
			b.WriteByte(',')
		}
		v, err := json.Marshal(c.value(s))
		if err != nil {
			return nil, err
		}
		fmt.Fprintf(&b, "%q:%s", c.Key, v)
	}
	b.WriteByte('}')
	return b.Bytes(), nil
}

// ReadSettings changes s as a settings object says: that of an earlier record (the
// record itself will do), or a hand-written part of one. Reading is strict: an unknown or repeated key, a
// value of the wrong type or anything after the object gives a [*UsageError]
// that names file and key.
func (s *Settings) ReadSettings(file string, data []byte) error {
	bad := func(key, format string, args ...any) error {
		where := file
		if key != "" {
			where += ": " + key
		}
		return &UsageError{Where: where, Message: fmt.Sprintf(format, args...)}
	}
	// A whole record stands for the settings in it.
	if r, err := provenance.Parse(data); err == nil {
		data = r.Settings
	}
	dec := json.NewDecoder(bytes.NewReader(data))
	dec.UseNumber()
	tok, err := dec.Token()
	if err != nil || tok != json.Delim('{') {
		return bad("", "is not a JSON object of settings")
	}
	given := make([][]string, len(Choices)) // by choice; nil: not in the file
	for dec.More() {
		tok, err := dec.Token()
		if err != nil {
			return bad("", "is not valid JSON: %v", err)
		}
		key, _ := tok.(string)
		i := slices.IndexFunc(Choices, func(c Choice) bool { return c.Key == key })
		if i < 0 {
			keys := make([]string, len(Choices))
			for j, c := range Choices {
				keys[j] = c.Key
			}
			return bad(key, "no setting has this name%s", DidYouMean(key, keys))
		}
		if given[i] != nil {
			return bad(key, "is given twice")
		}
		var v any
		if err := dec.Decode(&v); err != nil {
			return bad(key, "is not valid JSON: %v", err)
		}
		words, ok := Choices[i].fromJSON(v)
		if !ok {
			return bad(key, "found %s, expected %s", jsonWord(v), Choices[i].kind)
		}
		given[i] = append([]string{}, words...)
	}
	if _, err := dec.Token(); err != nil {
		return bad("", "is not valid JSON: %v", err)
	}
	if dec.More() {
		return bad("", "holds more than one JSON value")
	}
	next := *s
	for i, words := range given { // in the declared order, whatever that of the file
		switch {
		case words == nil:
		case len(words) == 0: // an empty list: as if nothing had been given
			next.Accept = nil
		default:
			if err := Choices[i].parse(&next, words); err != nil {
				return bad(Choices[i].Key, "%v", err)
			}
		}
	}
	*s = next
	return nil
}

// fromJSON turns a decoded JSON value into option values; ok is false when the
// type is wrong. A number is not accepted where a word is declared, nor "8" for 8.
func (c Choice) fromJSON(v any) (words []string, ok bool) {
	switch def := c.value(DefaultSettings()).(type) {
	case []string:
		list, isList := v.([]any)
		for _, e := range list {
			w, isWord := e.(string)
			if !isWord {
				return nil, false
			}
			words = append(words, w)
		}
		return words, isList
	case bool:
		b, isBool := v.(bool)
		return []string{strconv.FormatBool(b)}, isBool
	case int:
		n, isNum := v.(json.Number)
		return []string{n.String()}, isNum
	case string:
		if w, isWord := v.(string); isWord {
			// "3" is not 3: the two settings that take words or numbers
			// keep them apart, so that a record reads back as it was.
			if _, err := strconv.ParseFloat(w, 64); err == nil {
				return nil, false
			}
			return []string{w}, true
		}
		if n, isNum := v.(json.Number); isNum && c.words == nil {
			return []string{n.String()}, true
		}
		return nil, false
	default:
		panic(fmt.Sprintf("pipeline: setting %s has a value of type %T", c.Key, def))
	}
}

func jsonWord(v any) string {
	b, err := json.Marshal(v)
	if err != nil || len(b) > 60 {
		return "a value of another kind"
	}
	return string(b)
}

// DidYouMean returns `; did you mean "x"?` when one of the names is near to what
// was given (at most a third of its letters changed), or "".
func DidYouMean(given string, names []string) string {
	best, at := "", len(given)/3+2
	for _, n := range names {
		if d := editDistance(given, n); d < at {
			best, at = n, d
		}
	}
	if best == "" {
		return ""
	}
	return fmt.Sprintf("; did you mean %q?", best)
}

// editDistance counts the insertions, deletions and replacements that turn a
// into b (Levenshtein 1966, Soviet Physics Doklady 10(8):707-710).
func editDistance(a, b string) int {
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := 1; i <= len(a); i++ {
		diag := row[0]
		row[0] = i
		for j := 1; j <= len(b); j++ {
			cost := diag
			if a[i-1] != b[j-1] {
				cost++
			}
			diag = row[j]
			row[j] = min(cost, row[j]+1, row[j-1]+1)
		}
	}
	return row[len(b)]
}

// hasAccepted reports whether the user named the fault with --accept.
func (s Settings) hasAccepted(id string) bool { return slices.Contains(s.Accept, id) }
