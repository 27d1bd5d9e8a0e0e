package sidecar

import (
	"bytes"
	"encoding/json"
	"strings"
	"testing"
	"unicode/utf8"

	"pgregory.net/rapid"
)

// Positions were counted by hand.
var brokenFiles = []struct {
	name, text, found string
}{
	{"empty", "", "an empty file"},
	{"white space", " \n\t", "an empty file"},
	{"mark only", "\xEF\xBB\xBF", "an empty file"},
	{"annexed", "/annex/objects/MD5E-s1--x.json\n", "placeholder of an annexed file"},
	{"UTF-16", "\xFF\xFE{\x00}\x00", "UTF-16"},
	{"list at the top", "\n [1]", "line 2, column 2: a list"},
	{"number at the top", "7", "line 1, column 1: a digit"},
	{"cut short", "{\"RepetitionTime\": 2,", "line 1, column 22: the end of the file"},
	{"cut in a string", "{\n\"RepetitionTi", "line 2, column 1: a string without an end"},
	{"cut in a number", "{\"a\": -", "line 1, column 8: the end of the file"},
	{"trailing comma", "{\n  \"a\": 1,\n}", "line 2, column 9: a comma before the closing '}'"},
	{"trailing comma in a list", "{\"a\": [1, 2 , ]}", "line 1, column 13: a comma before the closing ']'"},
	{"no comma", "{\n \"a\": 1\n \"b\": 2}", "line 3, column 2: a string"},
	{"no colon", "{\"a\" 1}", "line 1, column 6: a digit"},
	{"no value", "{\"a\": }", "line 1, column 7: '}'"},
	{"two commas", "{\"a\": [1,,2]}", "line 1, column 10: ','"},
	{"single quotes", "{'a': 1}", "line 1, column 2: '''"},
	{"bare key", "{a: 1}", "line 1, column 2: a word without quotes"},
	{"comment", "{ // crew\n\"a\": 1}", "line 1, column 3: '/'"},
	{"NaN", "{\"SliceTiming\": [0, NaN]}", "line 1, column 21: NaN"},
	{"minus infinity", "{\"a\": -Infinity}", "line 1, column 7: -Infinity"},
	{"Python's truth", "{\"a\": True}", "line 1, column 7: True"},
	{"word", "{\"a\": Ishmael}", "line 1, column 7: a word without quotes"},
	{"word that begins well", "{\"a\": nullify}", "line 1, column 7: a word without quotes"},
	{"plus", "{\"a\": +1}", "line 1, column 7: '+'"},
	{"leading zero", "{\"a\": 012}", "line 1, column 7: a number with a zero in front"},
	{"point first", "{\"a\": .5}", "line 1, column 7: '.'"},
	{"point last", "{\"a\": 1.}", "line 1, column 9: '}'"},
	{"no exponent", "{\"a\": 1e}", "line 1, column 9: '}'"},
	{"decimal comma", "{\"a\": 0,5}", "line 1, column 9: a digit"},
	{"after the end", "{}\n{}", "line 2, column 1: an object after the object's end"},
	{"line break in a string", "{\"a\": \"x\ny\"}", "line 1, column 9: a line break inside a string"},
	{"tab in a string", "{\"a\": \"x\ty\"}", "line 1, column 9: a control character (byte 0x09)"},
	{"bad escape", `{"a": "\x"}`, "line 1, column 8: an escape that JSON does not have"},
	{"short escape", `{"a": "\u12"}`, "line 1, column 8: an escape that JSON does not have"},
	{"half a pair", `{"a": "\ud83d"}`, "line 1, column 8: half of a surrogate pair"},
	{"wrong half", `{"a": "\udc00\ud83d"}`, "half of a surrogate pair"},
	{"not UTF-8", "{\"a\": \"\xff\"}", "line 1, column 8: bytes that are not UTF-8"},
	{"Latin-1", "{\"a\": \"caf\xe9\"}", "line 1, column 11: bytes that are not UTF-8"},
	{"NUL", "{\"a\": 1\x00}", "line 1, column 8: a control character (byte 0x00)"},
	{"wrong bracket", "{\"a\": [1}", "line 1, column 9: '}'"},
	{"CR LF", "{\r\n\"a\": x\r\n}", "line 2, column 6: a word"},
	{"CR", "{\r\"a\": x\r}", "line 2, column 6: a word"},
	{"characters, not bytes", "{\"é\": x}", "line 1, column 7: a word"},
	{"column after a mark", "\xEF\xBB\xBF{x", "line 1, column 2: a word"},
	{"deep", `{"a":` + strings.Repeat("[", 200) + strings.Repeat("]", 200) + "}", "line 1, column 105: objects and lists nested more than 100 deep"},
	{"huge", `{"a": "` + strings.Repeat("x", mostBytes) + `"}`, "bytes"},
}

func TestBrokenFiles(t *testing.T) {
	for _, c := range brokenFiles {
		t.Run(c.name, func(t *testing.T) {
			doc, faults := Merge([]Source{{leafName, []byte(c.text)}})
			if len(faults) != 1 {
				t.Fatalf("want one fault, got\n%s", list(faults))
			}
			f := faults[0]
			if f.ID != "sidecar-syntax" || f.File != leafName || f.Field != "" || f.Expected == "" || f.Remedy == "" || !strings.Contains(f.Found, c.found) {
				t.Errorf("want %q in\n%s", c.found, f.Error())
			}
			if strings.Contains(f.Error(), "Ishmael") || strings.Contains(f.Error(), "crew") {
				t.Errorf("text of the file in %s", f.Error())
			}
			acq, more := doc.Acquisition(harbour)
			if acq == nil || len(more) > 0 {
				t.Errorf("a file that could not be read draws consequences:\n%s", list(more))
			}
		})
	}
}

func TestMarkIsSkipped(t *testing.T) {
	if _, faults := read(harbour, "\xEF\xBB\xBF"+with()); len(faults) > 0 {
		t.Errorf("\n%s", list(faults))
	}
}

func TestDuplicates(t *testing.T) {
	_, faults := Merge([]Source{{leafName, []byte("{\"a\": 1,\n \"b\": {\"c\": 1, \"\\u0063\": 2},\n \"a\": 2, \"d\": {\"a\": 1}}")}})
	if len(faults) != 2 {
		t.Fatalf("\n%s", list(faults))
	}
	if f := faults[0]; f.Field != "c" || !strings.Contains(f.Found, "line 2, column 16: c a second time (first at line 2, column 8)") {
		t.Error(f.Error())
	}
	if f := faults[1]; f.Field != "a" || !strings.Contains(f.Found, "line 3, column 2: a a second time (first at line 1, column 2)") {
		t.Error(f.Error())
	}
	var b strings.Builder
	for range 1000 {
		b.WriteString(`"Captain Ahab": 1, `)
	}
	_, faults = Merge([]Source{{leafName, []byte("{" + b.String() + `"z": 0}`)}})
	if len(faults) != mostDuplicates+1 || !strings.Contains(faults[mostDuplicates].Found, "979 more") {
		t.Errorf("%d faults, the last: %s", len(faults), faults[len(faults)-1].Error())
	}
	if strings.Contains(list(faults), "Ahab") {
		t.Error("a key that reads like a name is shown")
	}
}

// A key that stands twice is neither believed nor missed.
func TestDuplicateIsNotRead(t *testing.T) {
	acq, faults := read(harbour, strings.Replace(with(), `"RepetitionTime": 2`, `"RepetitionTime": 2, "RepetitionTime": 3`, 1))
	if len(faults) != 1 || faults[0].Field != "RepetitionTime" || acq.RepetitionTime != 0 {
		t.Errorf("RepetitionTime %v\n%s", acq.RepetitionTime, list(faults))
	}
}

// The scanner is held against encoding/json: it accepts what that accepts, but
// for the rules that go further (object at the top, UTF-8, no half pairs, depth).
func TestScannerAgreesWithStandardLibrary(t *testing.T) {
	accepted, refused := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		text := []byte(with())
		if rapid.Bool().Draw(t, "small") {
			text = []byte(`{"a":[-0.1e+3,{"b\u00e9":null}],"c":"\"\\/","d":true}`)
		}
		// Piece together, cut and alter bytes that matter to the grammar.
		for range rapid.IntRange(0, 3).Draw(t, "edits") {
			at := rapid.IntRange(0, len(text)-1).Draw(t, "at")
			c := rapid.SampledFrom([]byte("{}[],:\"\\-+.eE01tfn u/\n\t\x00\xc3")).Draw(t, "byte")
			switch rapid.IntRange(0, 2).Draw(t, "kind") {
			case 0:
				text[at] = c
			case 1:
				text = append(text[:at:at], append([]byte{c}, text[at:]...)...)
			default:
				if len(text) > 1 {
					text = append(text[:at:at], text[at+1:]...)
				}
			}
		}
		_, bad := scan(text)
		standard := json.Valid(text) && utf8.Valid(text) && bytes.HasPrefix(bytes.TrimLeft(text, " \t\r\n"), []byte("{"))
		if (bad == nil) != standard {
			t.Fatalf("accepted %v, encoding/json %v: %q", bad == nil, standard, text)
		}
		if standard {
			accepted++
		} else {
			refused++
		}
	})
	if accepted == 0 || refused == 0 {
		t.Errorf("the check saw %d good and %d bad texts", accepted, refused)
	}
}
