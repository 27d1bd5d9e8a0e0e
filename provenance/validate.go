package provenance

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io/fs"
	"math"
	"strings"
	"time"
	"unicode"
	"unicode/utf8"
)

// What a record may hold is decided here, once: Marshal asks before it writes
// and Parse after it has read.

// validate returns the first thing that is wrong with r, or nil.
func (r *Record) validate() *Error {
	bad := func(field, found, expected string) *Error {
		return &Error{Record: r.Run, Field: field, Found: found, Expected: expected}
	}
	if why := pathFault(r.Run); why != "" || strings.Contains(r.Run, "/") {
		return &Error{Field: "Run", Found: show(r.Run), Expected: "the stem of a file name"}
	}
	if !utf8.ValidString(r.DatasetName) {
		return bad("DatasetName", show(r.DatasetName), "UTF-8")
	}
	for _, list := range []struct {
		name  string
		files []File
	}{{"Inputs", r.Inputs}, {"Outputs", r.Outputs}} {
		seen := make(map[string]bool, len(list.files))
		for i, f := range list.files {
			at := fmt.Sprintf("%s[%d]", list.name, i)
			switch {
			case !isName(f.Role):
				return bad(at+".Role", show(f.Role), "a word")
			case pathFault(f.Path) != "":
				return bad(at+".Path", show(f.Path), pathFault(f.Path))
			case seen[f.Path]:
				return bad(at+".Path", show(f.Path)+" twice", "every file once")
			case !isDigest(f.SHA256):
				return bad(at+".SHA256", show(f.SHA256), "64 lower-case hexadecimal digits")
			case f.Bytes < 0:
				return bad(at+".Bytes", fmt.Sprint(f.Bytes), "a number of bytes")
			}
			seen[f.Path] = true
		}
	}
	if why := objectFault(r.Settings); why != "" {
		return bad("Settings", why, "a JSON object")
	}
	seen := map[string]bool{}
	for i, id := range r.Accepted {
		if !isName(id) || seen[id] {
			return bad(fmt.Sprintf("Accepted[%d]", i), show(id), "the identifier of a fault, once")
		}
		seen[id] = true
	}
	for i, f := range r.Faults {
		if why := objectFault(f); why != "" || len(f) == 0 {
			return bad(fmt.Sprintf("Faults[%d]", i), why, "a JSON object")
		}
	}
	values := map[[2]string]bool{}
	for i, v := range r.Values {
		at := fmt.Sprintf("Values[%d]", i)
		switch {
		case !isName(v.Key):
			return bad(at+".Key", show(v.Key), "the key of a sidecar value")
		case pathFault(v.File) != "":
			return bad(at+".File", show(v.File), pathFault(v.File))
		case values[[2]string{v.File, v.Key}]:
			return bad(at, show(v.Key)+" of "+show(v.File)+" twice", "every value once")
		}
		if _, err := parseTree([]byte(v.JSON)); err != nil {
			return bad(at+".JSON", err.Found, err.Expected)
		}
		values[[2]string{v.File, v.Key}] = true
	}
	stages := map[string]bool{}
	for i, s := range r.Stages {
		at := fmt.Sprintf("Stages[%d]", i)
		if !isName(s.Name) || stages[s.Name] {
			return bad(at+".Name", show(s.Name), "a name that no other stage has")
		}
		stages[s.Name] = true
		if why := objectFault(s.Parameters); why != "" {
			return bad(at+".Parameters", why, "a JSON object")
		}
		if why := objectFault(s.Outcome); why != "" {
			return bad(at+".Outcome", why, "a JSON object")
		}
	}
	s := r.Software
	if !isName(s.Name) {
		return bad("Software.Name", show(s.Name), "the name of a program")
	}
	if !isName(s.Version) {
		return bad("Software.Version", show(s.Version), "a version")
	}
	if !utf8.ValidString(s.Revision) || !utf8.ValidString(s.GoVersion) {
		return bad("Software", show(s.Revision+" "+s.GoVersion), "UTF-8")
	}
	for i, m := range s.Modules {
		// The two are written as path@version and split at the last @.
		if !isName(m.Path) || !utf8.ValidString(m.Version) || strings.Contains(m.Version, "@") {
			return bad(fmt.Sprintf("Software.Modules[%d]", i), show(m.Path+" "+m.Version), "the path and version of a module")
		}
	}
	l := r.Log
	for _, at := range []struct {
		name string
		time time.Time
	}{{"Log.Started", l.Started}, {"Log.Ended", l.Ended}} {
		if y := at.time.UTC().Year(); y < 1 || y > 9999 {
			return bad(at.name, fmt.Sprint("the year ", y), "a year from 1 to 9999")
		}
	}
	if !l.Started.IsZero() && !l.Ended.IsZero() && l.Ended.Before(l.Started) {
		// PROV-CONSTRAINTS: an activity does not end before it starts.
		return bad("Log.Ended", stamp(l.Ended), "no earlier than "+stamp(l.Started))
	}
	if !utf8.ValidString(l.Architecture) {
		return bad("Log.Architecture", show(l.Architecture), "UTF-8")
	}
	for i, c := range l.CPUFeatures {
		if !isName(c) {
			return bad(fmt.Sprintf("Log.CPUFeatures[%d]", i), show(c), "a word")
		}
	}
	for _, name := range sortedKeys(l.StageSeconds) {
		if v := l.StageSeconds[name]; !utf8.ValidString(name) || !(v >= 0) || math.IsInf(v, 0) {
			return bad("Log.StageSeconds", fmt.Sprintf("%s: %v", show(name), v), "a number of seconds")
		}
	}
	return nil
}

// pathFault returns what a path should be, "" if it is that.
func pathFault(p string) string {
	switch {
	case p == "":
		return "a path"
	case strings.ContainsRune(p, '\\'):
		return "a path with slashes, without a backslash"
	case p[0] == '/', len(p) > 1 && p[1] == ':' && unicode.IsLetter(rune(p[0])):
		return "a path relative to its dataset"
	case !fs.ValidPath(p) || p == ".":
		// Empty, "." and ".." elements, and what is not UTF-8.
		return "a clean path that stays inside its dataset"
	case strings.ContainsFunc(p, unicode.IsControl):
		return "a path without control characters"
	}
	return ""
}

// isName tells whether s is some UTF-8 text without control characters.
func isName(s string) bool {
	return s != "" && utf8.ValidString(s) && !strings.ContainsFunc(s, unicode.IsControl)
}

func isDigest(s string) bool {
	return len(s) == 64 && strings.Trim(s, "0123456789abcdef") == ""
}

// objectFault returns what stands where a JSON object should, "" if it is one
// or absent.
func objectFault(raw json.RawMessage) string {
	if len(raw) == 0 {
		return ""
	}
	n, err := parseTree(raw)
	switch {
	case err != nil:
		return err.Found
	case n.kind != isObject:
		return n.kind.String()
	}
	return ""
}

// compact returns JSON without the white space between its tokens; raw must be
// JSON.
func compact(raw []byte) string {
	var b bytes.Buffer
	if err := json.Compact(&b, raw); err != nil {
		panic("provenance: compact: " + err.Error())
	}
	return b.String()
}

// stamp writes a time as an xsd:dateTime in UTC.
func stamp(t time.Time) string { return t.UTC().Format(time.RFC3339Nano) }
