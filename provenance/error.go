package provenance

import (
	"strconv"
	"strings"
	"unicode/utf8"
)

// Error says what is wrong with a record. Every refusal of [Record.Marshal],
// [Parse] and [ReadFile] is one.
type Error struct {
	Record   string // path of the record or, where none is known, the run's stem; may be ""
	Field    string // where in the document, e.g. "entity.run:input-0001.evenkeel:bytes"; may be ""
	Found    string
	Expected string
	Err      error // what lies beneath, or nil
}

// Error gives one line: record, field, found, expected.
func (e *Error) Error() string {
	var b strings.Builder
	b.WriteString("record")
	if e.Record != "" {
		b.WriteString(" " + e.Record)
	}
	if e.Field != "" {
		b.WriteString(": " + e.Field)
	}
	if e.Found != "" {
		b.WriteString(": found " + e.Found)
	}
	if e.Expected != "" {
		b.WriteString(", expected " + e.Expected)
	}
	if e.Err != nil && e.Found == "" {
		b.WriteString(": " + e.Err.Error())
	}
	return b.String()
}

func (e *Error) Unwrap() error { return e.Err }

// show quotes what was found, cut to a length that fits a line.
func show(s string) string {
	const most = 80
	if len(s) > most {
		cut := most
		for cut > 0 && !utf8.RuneStart(s[cut]) {
			cut--
		}
		return strconv.Quote(s[:cut]) + "..."
	}
	return strconv.Quote(s)
}
