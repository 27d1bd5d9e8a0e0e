package pipeline

import (
	"encoding/json"
	"errors"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"evenkeel/slicetime"
)

// The defaults, as README's table of options and the help give them.
func TestDefaults(t *testing.T) {
	want := `{"time":"fourier","time_origin":"middle","sinc_reach":8,"motion":"path","reference":"mean","space":"quintic","order":"joint","skip":0,"store":"float32","accept":[],"events":false}`
	got, err := json.Marshal(DefaultSettings())
	if err != nil || string(got) != want {
		t.Errorf("got %s (%v)\nwant %s", got, err, want)
	}
}

// Every declared setting can be given as an option, stands in the JSON object, and reads
// back from it; a setting that is declared but lost on the way would fail here.
func TestEveryChoiceRoundTrips(t *testing.T) {
	other := map[string]string{"time": "sinc", "time_origin": "0.25", "sinc_reach": "5", "motion": "none", "reference": "3",
		"space": "cubic", "order": "space-first", "skip": "2", "store": "int16", "accept": "tr-mismatch", "events": "true"}
	for _, c := range Choices {
		v, ok := other[c.Key]
		if !ok {
			t.Errorf("%s: no test value", c.Key)
			continue
		}
		s := DefaultSettings()
		if err := s.Set(c.Key, v); err != nil {
			t.Errorf("%s: %v", c.Key, err)
		}
		data, _ := json.Marshal(s)
		def, _ := json.Marshal(DefaultSettings())
		if string(data) == string(def) {
			t.Errorf("%s=%s changed nothing", c.Key, v)
		}
		back := DefaultSettings()
		if err := back.ReadSettings("s.json", data); err != nil {
			t.Errorf("%s: %v", c.Key, err)
		}
		if d := cmp.Diff(s, back); d != "" {
			t.Errorf("%s: %s", c.Key, d)
		}
		if c.Help == "" || (c.Values == "" && !c.Switch) {
			t.Errorf("%s: help or values missing", c.Key)
		}
	}
}

func TestSettingsReadBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s := Settings{
			Time:      rapid.SampledFrom([]string{"fourier", "sinc", "none"}).Draw(t, "time"),
			SincReach: rapid.IntRange(1, slicetime.MaxReach).Draw(t, "reach"),
			Motion:    rapid.SampledFrom([]string{"path", "volume", "none"}).Draw(t, "motion"),
			Space:     rapid.SampledFrom([]string{"quintic", "cubic"}).Draw(t, "space"),
			Order:     rapid.SampledFrom([]string{"joint", "time-first", "space-first"}).Draw(t, "order"),
			Skip:      rapid.IntRange(0, 1000).Draw(t, "skip"),
			Store:     rapid.SampledFrom([]string{"float32", "int16"}).Draw(t, "store"),
			Events:    rapid.Bool().Draw(t, "events"),
		}
		if rapid.Bool().Draw(t, "word") {
			s.TimeOrigin.Word = rapid.SampledFrom([]string{"middle", "start"}).Draw(t, "origin")
			s.Reference.Word = rapid.SampledFrom([]string{"mean", "first", "middle", "sbref"}).Draw(t, "reference")
		} else {
			s.TimeOrigin.Seconds = rapid.Float64Range(0, 1e6).Draw(t, "seconds")
			s.Reference.Index = rapid.IntRange(0, 1<<20).Draw(t, "index")
		}
		if rapid.Bool().Draw(t, "accept") {
			s.Accept = []string{"slice-axis-conflict", "tr-mismatch"}
		}
		data, err := json.Marshal(s)
		if err != nil {
			t.Fatal(err)
		}
		back := DefaultSettings()
		if err := back.ReadSettings("s.json", data); err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(s, back); d != "" {
			t.Fatal(d)
		}
	})
}

// A settings file is read strictly: each of these is refused, naming file and key,
// and leaves the settings as they were.
func TestSettingsRefused(t *testing.T) {
	for _, c := range []struct{ data, says string }{
		{`{"tme":"sinc"}`, `tme: no setting has this name; did you mean "time"?`},
		{`{"time":"sync"}`, `did you mean "sinc"?`},
		{`{"time":3}`, "time: found 3"},
		{`{"time":"none","time":"none"}`, "given twice"},
		{`{"sinc_reach":"8"}`, "sinc_reach: found"},
		{`{"sinc_reach":8.5}`, "sinc_reach: found"},
		{`{"sinc_reach":0}`, "sinc_reach: found"},
		{`{"skip":-1}`, "skip: found"},
		{`{"skip":1e300}`, "skip: found"},
		{`{"skip":null}`, "skip: found null"},
		{`{"events":"true"}`, "events: found"},
		{`{"accept":"tr-mismatch"}`, "accept: found"},
		{`{"accept":[1]}`, "accept: found"},
		{`{"accept":["tr-missing"]}`, "cannot be accepted"},
		{`{"accept":["tr-mismatsh"]}`, `did you mean "tr-mismatch"?`},
		{`{"time_origin":"3"}`, "time_origin: found"},
		{`{"time_origin":-0.5}`, "time_origin: found"},
		{`{"time_origin":[1]}`, "time_origin: found"},
		{`{"reference":1.5}`, "reference: found"},
		{`{"reference":"median"}`, "reference: found"},
		{`{"motion":"paths"}`, "did you mean"},
		{`{"order":true}`, "order: found"},
		{`[]`, "not a JSON object"},
		{``, "not a JSON object"},
		{`{"time":"sinc"`, "not valid JSON"},
		{`{"time":"sinc"} {}`, "more than one"},
		{`{"time":{"a":1}}`, "time: found"},
	} {
		s := DefaultSettings()
		err := s.ReadSettings("set.json", []byte(c.data))
		var usage *UsageError
		if !errors.As(err, &usage) || !strings.Contains(err.Error(), c.says) || !strings.HasPrefix(err.Error(), "set.json") {
			t.Errorf("%s: got %v, want a usage error saying %q", c.data, err, c.says)
		}
		if d := cmp.Diff(DefaultSettings(), s); d != "" {
			t.Errorf("%s changed the settings: %s", c.data, d)
		}
	}
}

func TestOptionsRefused(t *testing.T) {
	for _, c := range [][2]string{{"time", "fourrier"}, {"time_origin", "NaN"}, {"time_origin", "inf"}, {"time_origin", "-1"},
		{"motion", "patth"}, {"order", "first"}, {"reference", "-1"}, {"sinc_reach", "33"}, {"skip", "x"}, {"accept", "nothing"}, {"store", ""}} {
		s := DefaultSettings()
		var usage *UsageError
		if err := s.Set(c[0], c[1]); !errors.As(err, &usage) || !strings.HasPrefix(err.Error(), "--"+strings.ReplaceAll(c[0], "_", "-")) {
			t.Errorf("%s=%s: got %v", c[0], c[1], err)
		}
	}
	s := DefaultSettings()
	s.Motion, s.Reference = "none", Standard{Word: "sbref"}
	if s.Check() == nil {
		t.Error("an sbref reference without motion passed")
	}
}

func TestLastValueWinsAndAcceptIsSorted(t *testing.T) {
	s := DefaultSettings()
	if err := s.Set("time", "sinc", "none"); err != nil || s.Time != "none" {
		t.Error(s.Time, err)
	}
	if err := s.Set("accept", "tr-mismatch", "slice-axis-conflict", "tr-mismatch"); err != nil || !slices.Equal(s.Accept, []string{"slice-axis-conflict", "tr-mismatch"}) {
		t.Error(s.Accept, err)
	}
}

// Levenshtein's distances, by hand.
func TestEditDistance(t *testing.T) {
	for _, c := range []struct {
		a, b string
		d    int
	}{{"", "", 0}, {"", "abc", 3}, {"abc", "", 3}, {"abc", "abc", 0}, {"abc", "axc", 1}, {"abc", "ac", 1}, {"kitten", "sitting", 3}} {
		if d := editDistance(c.a, c.b); d != c.d {
			t.Errorf("%q %q: %d, want %d", c.a, c.b, d, c.d)
		}
	}
}

// The default of order follows motion and time, whichever is read first; what is given stays.
func TestOrderFollows(t *testing.T) {
	for _, c := range []struct{ file, want string }{
		{`{"motion":"volume"}`, "time-first"},
		{`{"motion":"none"}`, "time-first"},
		{`{"motion":"path"}`, "joint"},
		{`{"motion":"volume","order":"joint"}`, "joint"},
		{`{"order":"joint","motion":"volume"}`, "joint"},
		{`{"order":"space-first","motion":"volume"}`, "space-first"},
		{`{"order":"time-first"}`, "time-first"},
		{`{"time":"none"}`, "time-first"},
		{`{"time":"none","order":"joint"}`, "joint"},
		{`{"order":"joint","time":"none"}`, "joint"},
		{`{"time":"none","motion":"path"}`, "time-first"},
		{`{"motion":"path","time":"sinc"}`, "joint"},
	} {
		s := DefaultSettings()
		if err := s.ReadSettings("s.json", []byte(c.file)); err != nil || s.Order != c.want {
			t.Errorf("%s: order %s (%v), want %s", c.file, s.Order, err, c.want)
		}
	}
	s := DefaultSettings()
	for _, kv := range [][2]string{{"order", "space-first"}, {"motion", "volume"}} {
		if err := s.Set(kv[0], kv[1]); err != nil {
			t.Fatal(err)
		}
	}
	if s.Order != "space-first" {
		t.Errorf("order given and lost: %s", s.Order)
	}
}
