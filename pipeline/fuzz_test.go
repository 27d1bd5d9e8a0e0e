package pipeline

import (
	"encoding/json"
	"errors"
	"math"
	"strconv"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"evenkeel/dataset"
	"evenkeel/fault"
)

// Law: a settings file changes the settings to some that can be used, and that are written and read
// back as the same; or it is refused, with a usage error that names the file, and changes nothing.
func FuzzSettings(f *testing.F) {
	whole, err := json.Marshal(DefaultSettings())
	if err != nil {
		f.Fatal(err)
	}
	f.Add(whole)
	for _, s := range []string{`{}`, `{"time":"none","motion":"volume"}`, `{"time_origin":0.5,"reference":3,"skip":2}`, `{"accept":["tr-mismatch","tr-mismatch"]}`, `{"accept":[]}`,
		`{"events":true,"store":"int16","order":"joint","motion":"none"}`, `{"sinc_reach":1e1}`, `{"skip":-0}`, `{"time_origin":1e999}`, `{"skip":99999999999999999999}`, `{"time":"none"}{}`, `{"time":"a","time":"b"}`,
		`{"reference":"sbref","motion":"none"}`, `[`, `{"time":null}`, "{\"time\":\"\xff\"}", `{"a` + "\\u000a" + `":1}`} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		set := DefaultSettings()
		err := set.ReadSettings("some.json", data)
		if err != nil {
			var usage *UsageError
			if !errors.As(err, &usage) || !strings.HasPrefix(err.Error(), "some.json") {
				t.Fatalf("%v", err)
			}
			if d := cmp.Diff(DefaultSettings(), set); d != "" {
				t.Fatalf("refused, yet changed: %s", d)
			}
			return
		}
		for _, c := range Choices {
			if len(c.words) > 0 && !contains(c.words, c.value(set)) {
				t.Errorf("%s is %v", c.Key, c.value(set))
			}
		}
		if o := set.TimeOrigin; o.Word == "" && !(o.Seconds >= 0 && o.Seconds <= math.MaxFloat64) || set.Skip < 0 || set.SincReach < 1 || set.Reference.Index < 0 {
			t.Errorf("%+v", set)
		}
		for _, id := range set.Accept {
			if k, ok := fault.Lookup(id); !ok || !k.Acceptable {
				t.Errorf("accepts %q", id)
			}
		}
		out, err := json.Marshal(set)
		if err != nil {
			t.Fatal(err)
		}
		back := DefaultSettings()
		if err := back.ReadSettings("again.json", out); err != nil {
			t.Fatalf("%s: written, but not read: %v", out, err)
		}
		if d := cmp.Diff(set, back); d != "" {
			t.Fatal(d)
		}
	})
}

func contains(words []string, v any) bool {
	for _, w := range words {
		if w == v {
			return true
		}
	}
	return false
}

// Law: a table of events comes back with as many rows and the same cells but for the onsets, each of which has
// moved by the same time, to a microsecond; or it is refused with one fault.
func FuzzEvents(f *testing.F) {
	for _, s := range []string{"onset\tduration\n1\t2\nn/a\t3\n", "duration\tonset\ttrial_type\n0.5\t-1e3\tbell\n", "onset\n", "onset\n1e300\n", "onset\nNaN\n", "onset\n 1 \n", "\ufeffonset\r\n1\r\n", "onset\tonset\n1\t2\n",
		"onset\n0x1p-2\n", "onset\n1_000\n", "onset\n\"1\"\n", "a\tb\n1\n", "onset\n1\x00\n", "", "\n"} {
		f.Add([]byte(s), 2.5)
	}
	f.Fuzz(func(t *testing.T, data []byte, start float64) {
		if !(math.Abs(start) < 1e6) {
			return
		}
		out, faults := moveEvents("sub-01_task-a_events.tsv", data, start)
		if len(faults) > 0 {
			if x := faults[0]; len(faults) > 1 || out != nil || x.ID != "sidecar-syntax" || x.Found == "" || x.Expected == "" || x.Remedy == "" {
				t.Errorf("%q and %+v", out, faults)
			}
			return
		}
		was, err := dataset.ParseTable(data)
		if err != nil {
			t.Fatalf("no table, and no fault: %v", err)
		}
		is, err := dataset.ParseTable(out)
		if err != nil {
			t.Fatalf("not to be read back: %q: %v", out, err)
		}
		if d := cmp.Diff(was.Columns, is.Columns); d != "" || len(was.Rows) != len(is.Rows) {
			t.Fatalf("%d rows for %d, columns %s", len(is.Rows), len(was.Rows), d)
		}
		onset := was.Column("onset")
		for i, row := range was.Rows {
			for k, cell := range row {
				if cell == "" {
					cell = dataset.Missing // as every table is written
				}
				if k != onset || cell == dataset.Missing {
					if is.Rows[i][k] != cell {
						t.Fatalf("row %d: %q became %q", i, cell, is.Rows[i][k])
					}
					continue
				}
				a, b := parseOnset(t, cell), parseOnset(t, is.Rows[i][k])
				// Printed to 1e-6: half of that, and the rounding of the difference itself.
				if d := math.Abs(a - start - b); !(d <= 0.51e-6+4e-16*(math.Abs(a)+math.Abs(start))) {
					t.Fatalf("row %d: onset %q less %v became %q", i, cell, start, is.Rows[i][k])
				}
			}
		}
	})
}

func parseOnset(t *testing.T, cell string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(strings.TrimSpace(cell), 64)
	if err != nil {
		t.Fatalf("onset %q: %v", cell, err)
	}
	return v
}
