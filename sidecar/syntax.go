package sidecar

// The scanner accepts exactly RFC 8259 JSON with an object at the top, in valid
// UTF-8, and beyond the grammar refuses what readers of JSON disagree about
// (RFC 7493, I-JSON): a key twice in one object and half of a surrogate pair. A
// byte-order mark at the start is skipped, as RFC 8259 section 8.1 allows.
//
// Messages never repeat text of the file: a broken file may break inside a name.

import (
	"bytes"
	"encoding/json"
	"fmt"
	"unicode/utf8"
)

const (
	// mostBytes bounds the work a file can ask for. Sidecars hold kilobytes; dumps
	// of whole scanner headers some megabytes.
	mostBytes = 16 << 20
	// mostDepth bounds recursion. BIDS metadata nest two or three deep.
	mostDepth = 100
)

// position is a place in a file for people: both count from 1, the column in
// characters, a line ending at LF, CR LF or CR.
type position struct{ line, column int }

func (p position) String() string { return fmt.Sprintf("line %d, column %d", p.line, p.column) }

func placeOf(data []byte, at int) position {
	at = min(at, len(data))
	text := bytes.TrimPrefix(data[:at], byteOrderMark)
	line, begin := 1, 0
	for i, c := range text {
		if c == '\n' || c == '\r' && (i+1 >= len(text) || text[i+1] != '\n') {
			line, begin = line+1, i+1
		}
	}
	return position{line, utf8.RuneCount(text[begin:]) + 1}
}

var byteOrderMark = []byte{0xEF, 0xBB, 0xBF}

// syntaxError says what is wrong with a file as a whole.
type syntaxError struct {
	at                      *position // nil when it concerns the whole file
	found, expected, remedy string
}

func (e *syntaxError) where() string {
	if e.at == nil {
		return ""
	}
	return e.at.String() + ": "
}

// entry is one member of the top-level object: its key, and the bytes
// [start, end) of its value.
type entry struct {
	key        string
	start, end int
}

// duplicate is a key that stands at two places of one object.
type duplicate struct {
	key       string
	first, at int
	nested    bool
}

// sighting is a key that can identify a person.
type sighting struct {
	key    string
	at     int
	nested bool
}

type scanned struct {
	entries    []entry
	duplicates []duplicate
	private    []sighting
}

// scan checks the whole file and returns its top-level members in order of
// appearance. On a syntax error it returns what was seen before it.
func scan(data []byte) (scanned, *syntaxError) {
	s := &scanner{data: data}
	err := s.file()
	return s.out, err
}

type scanner struct {
	data  []byte
	at    int
	depth int
	out   scanned
}

func (s *scanner) file() *syntaxError {
	if len(s.data) > mostBytes {
		return &syntaxError{nil, fmt.Sprintf("%d bytes", len(s.data)), fmt.Sprintf("at most %d bytes", mostBytes),
			"keep acquisition fields only: a sidecar of that size holds something else"}
	}
	switch {
	case bytes.HasPrefix(s.data, []byte{0xFE, 0xFF}), bytes.HasPrefix(s.data, []byte{0xFF, 0xFE}):
		return &syntaxError{nil, "UTF-16 text", "JSON in UTF-8", "save the file as UTF-8"}
	case bytes.HasPrefix(s.data, byteOrderMark):
		s.at = len(byteOrderMark)
	}
	s.space()
	if s.at == len(s.data) {
		return &syntaxError{nil, "an empty file", "a JSON object", "restore the file's content, or remove the file"}
	}
	rest := s.data[s.at:]
	if bytes.HasPrefix(rest, []byte("/annex/objects/")) {
		return &syntaxError{nil, "the placeholder of an annexed file", "a JSON object", "fetch the file's content first"}
	}
	if rest[0] != '{' {
		return s.fail(s.at, s.here(), "a JSON object, opened by '{'", "put the fields into one object")
	}
	if err := s.object(); err != nil {
		return err
	}
	s.space()
	if s.at < len(s.data) {
		return s.fail(s.at, s.here()+" after the object's end", "nothing more", "remove what follows the closing '}'")
	}
	return nil
}

func (s *scanner) fail(at int, found, expected, remedy string) *syntaxError {
	p := placeOf(s.data, at)
	return &syntaxError{&p, found, expected, remedy}
}

func (s *scanner) space() {
	for s.at < len(s.data) {
		switch s.data[s.at] {
		case ' ', '\t', '\n', '\r':
			s.at++
		default:
			return
		}
	}
}

// peek returns the next byte, or 0 at the end (a NUL in the file is no JSON
// either, so the two need not be told apart by callers).
func (s *scanner) peek() byte {
	if s.at < len(s.data) {
		return s.data[s.at]
	}
	return 0
}

// strangers are words that other languages write where JSON has none. They are
// a closed vocabulary, so they may be shown.
var strangers = []string{"NaN", "Infinity", "-Infinity", "nan", "inf", "-inf", "True", "False", "None", "undefined"}

// here names what stands at the scanner's place without repeating text.
func (s *scanner) here() string {
	if s.at >= len(s.data) {
		return "the end of the file"
	}
	for _, w := range strangers {
		if bytes.HasPrefix(s.data[s.at:], []byte(w)) && !letter(s.data, s.at+len(w)) {
			return w
		}
	}
	switch c := s.data[s.at]; {
	case c == '"':
		return "a string"
	case c == '[':
		return "a list"
	case c == '{':
		return "an object"
	case c >= '0' && c <= '9':
		return "a digit"
	case letter(s.data, s.at):
		return "a word without quotes"
	case c < 0x20 || c == 0x7F:
		return fmt.Sprintf("a control character (byte 0x%02X)", c)
	case c >= 0x80:
		return "a character outside ASCII"
	default:
		return fmt.Sprintf("'%c'", c)
	}
}

func letter(data []byte, at int) bool {
	return at < len(data) && (data[at]|0x20 >= 'a' && data[at]|0x20 <= 'z')
}

// remedyHere fits the remedy to the usual causes.
func (s *scanner) remedyHere() string {
	found := s.here()
	switch {
	case found == "the end of the file":
		return "the file is cut short: restore it"
	case found == "NaN" || found == "Infinity" || found == "-Infinity" || found == "nan" || found == "inf" || found == "-inf":
		return "JSON has no such number: write the true value, or remove the field"
	case found == "True" || found == "False" || found == "None":
		return "write true, false or null in lower-case letters"
	case s.peek() == '\'':
		return "use double quotes"
	case s.peek() == '/' || s.peek() == '#':
		return "remove the comment: JSON has none"
	default:
		return "correct the JSON at this place"
	}
}

// value moves over one value of any kind.
func (s *scanner) value() *syntaxError {
	switch c := s.peek(); {
	case c == '{':
		return s.object()
	case c == '[':
		return s.list(nil)
	case c == '"':
		_, err := s.text()
		return err
	case c == '-' && !(s.at+1 < len(s.data) && letter(s.data, s.at+1)), c >= '0' && c <= '9':
		return s.number()
	}
	for _, w := range []string{"true", "false", "null"} {
		if bytes.HasPrefix(s.data[s.at:], []byte(w)) && !letter(s.data, s.at+len(w)) {
			s.at += len(w)
			return nil
		}
	}
	expected := "a value"
	if c := s.peek(); c == '+' || c == '.' {
		expected = "a number that begins with a digit or '-'"
	}
	return s.fail(s.at, s.here(), expected, s.remedyHere())
}

func (s *scanner) enter() *syntaxError {
	if s.depth++; s.depth > mostDepth {
		return s.fail(s.at, fmt.Sprintf("objects and lists nested more than %d deep", mostDepth), "a few levels",
			"keep acquisition fields only")
	}
	return nil
}

func (s *scanner) object() *syntaxError {
	if err := s.enter(); err != nil {
		return err
	}
	top := s.depth == 1
	first := map[string]int{}
	s.at++
	s.space()
	if s.peek() == '}' {
		s.at++
		s.depth--
		return nil
	}
	for {
		if s.peek() != '"' {
			return s.fail(s.at, s.here(), "a key in double quotes", s.remedyHere())
		}
		keyAt := s.at
		key, err := s.text()
		if err != nil {
			return err
		}
		at, twice := first[key]
		if twice {
			s.out.duplicates = append(s.out.duplicates, duplicate{key, at, keyAt, !top})
		} else {
			first[key] = keyAt
		}
		if identifies(key) {
			s.out.private = append(s.out.private, sighting{key, keyAt, !top})
		}
		s.space()
		if s.peek() != ':' {
			return s.fail(s.at, s.here(), "':' after the key", s.remedyHere())
		}
		s.at++
		s.space()
		start := s.at
		if err := s.value(); err != nil {
			return err
		}
		if top {
			s.out.entries = append(s.out.entries, entry{key, start, s.at})
		}
		done, err := s.next('}')
		if done || err != nil {
			return err
		}
	}
}

// list moves over a list and calls each, if given, with the bytes [start, end)
// of every element.
func (s *scanner) list(each func(start, end int)) *syntaxError {
	if err := s.enter(); err != nil {
		return err
	}
	s.at++
	s.space()
	if s.peek() == ']' {
		s.at++
		s.depth--
		return nil
	}
	for {
		start := s.at
		if err := s.value(); err != nil {
			return err
		}
		if each != nil {
			each(start, s.at)
		}
		done, err := s.next(']')
		if done || err != nil {
			return err
		}
	}
}

// next moves over a comma, or over the closing bracket and says done.
func (s *scanner) next(closing byte) (done bool, err *syntaxError) {
	s.space()
	switch s.peek() {
	case closing:
		s.at++
		s.depth--
		return true, nil
	case ',':
		comma := s.at
		s.at++
		s.space()
		if s.peek() == closing {
			return false, s.fail(comma, fmt.Sprintf("a comma before the closing '%c'", closing), "no comma after the last value", "remove the comma")
		}
		return false, nil
	}
	remedy := s.remedyHere()
	if c := s.peek(); c == '"' {
		remedy = "put a comma between the values"
	}
	return false, s.fail(s.at, s.here(), fmt.Sprintf("',' or '%c'", closing), remedy)
}

func (s *scanner) digits() bool {
	from := s.at
	for c := s.peek(); c >= '0' && c <= '9'; c = s.peek() {
		s.at++
	}
	return s.at > from
}

func (s *scanner) number() *syntaxError {
	begin := s.at
	if s.peek() == '-' {
		s.at++
	}
	zero := s.peek() == '0'
	from := s.at
	if !s.digits() {
		return s.fail(s.at, s.here(), "a digit after '-'", s.remedyHere())
	}
	if zero && s.at > from+1 {
		return s.fail(begin, "a number with a zero in front", "a number without leading zeros", "remove the leading zeros")
	}
	if s.peek() == '.' {
		s.at++
		if !s.digits() {
			return s.fail(s.at, s.here(), "a digit after the decimal point", "add a zero, or remove the point")
		}
	}
	if c := s.peek(); c == 'e' || c == 'E' {
		s.at++
		if c := s.peek(); c == '+' || c == '-' {
			s.at++
		}
		if !s.digits() {
			return s.fail(s.at, s.here(), "a digit in the exponent", s.remedyHere())
		}
	}
	return nil
}

// text moves over a string and returns what it says.
func (s *scanner) text() (string, *syntaxError) {
	begin := s.at
	escaped := false
	s.at++
	for {
		if s.at >= len(s.data) {
			return "", s.fail(begin, "a string without an end", "a closing double quote", "close the string; if the file is cut short, restore it")
		}
		switch c := s.data[s.at]; {
		case c == '"':
			s.at++
			raw := s.data[begin:s.at]
			if !escaped {
				return string(raw[1 : len(raw)-1]), nil
			}
			var out string
			// Cannot fail: every escape was checked on the way here.
			_ = json.Unmarshal(raw, &out)
			return out, nil
		case c == '\\':
			escaped = true
			if err := s.escape(); err != nil {
				return "", err
			}
		case c == '\n' || c == '\r':
			return "", s.fail(s.at, "a line break inside a string", "a closing double quote, or \\n", "close the string on its line")
		case c < 0x20:
			return "", s.fail(s.at, s.here()+" inside a string", "an escape such as \\t", "remove the character")
		case c < utf8.RuneSelf:
			s.at++
		default:
			r, n := utf8.DecodeRune(s.data[s.at:])
			if r == utf8.RuneError && n <= 1 {
				return "", s.fail(s.at, "bytes that are not UTF-8", "UTF-8 text", "save the file as UTF-8")
			}
			s.at += n
		}
	}
}

func (s *scanner) escape() *syntaxError {
	begin := s.at
	s.at++
	switch s.peek() {
	case '"', '\\', '/', 'b', 'f', 'n', 'r', 't':
		s.at++
		return nil
	case 'u':
		code, ok := hex4(s.data, s.at+1)
		if !ok {
			break
		}
		s.at += 5
		if code < 0xD800 || code > 0xDFFF {
			return nil
		}
		if code < 0xDC00 && s.at+1 < len(s.data) && s.data[s.at] == '\\' && s.data[s.at+1] == 'u' {
			if low, ok := hex4(s.data, s.at+2); ok && low >= 0xDC00 && low <= 0xDFFF {
				s.at += 6
				return nil
			}
		}
		return s.fail(begin, "half of a surrogate pair", "a whole character", "write the character itself, in UTF-8")
	}
	return s.fail(begin, "an escape that JSON does not have", `one of \" \\ \/ \b \f \n \r \t \u`, `write a backslash as \\`)
}

func hex4(data []byte, at int) (rune, bool) {
	if at+4 > len(data) {
		return 0, false
	}
	var code rune
	for _, c := range data[at : at+4] {
		switch {
		case c >= '0' && c <= '9':
			code = code<<4 | rune(c-'0')
		case c|0x20 >= 'a' && c|0x20 <= 'f':
			code = code<<4 | rune(c|0x20-'a'+10)
		default:
			return 0, false
		}
	}
	return code, true
}

// elements returns the bytes [start, end) of each element of the list that
// begins at the given place of an already accepted file.
func elements(data []byte, start int) [][2]int {
	var out [][2]int
	s := &scanner{data: data, at: start}
	s.list(func(a, b int) { out = append(out, [2]int{a, b}) })
	return out
}
