package provenance

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"unicode/utf8"
)

// node is a JSON value that keeps the order of its keys.
type node struct {
	kind    kind
	text    string   // of a string, or a number as written
	keys    []string // of an object, in the order of the document
	members map[string]*node
	items   []*node // of an array
}

type kind int

const (
	isNull kind = iota
	isBool
	isNumber
	isString
	isArray
	isObject
)

func (k kind) String() string {
	return [...]string{"null", "a truth value", "a number", "a string", "an array", "an object"}[k]
}

// parseTree reads one JSON value. Beyond the grammar (RFC 8259) it wants UTF-8,
// every key of an object once, nothing after the value, and no more than
// MaxDepth levels. The error has no record and no field.
func parseTree(data []byte) (*node, *Error) {
	if len(data) > MaxBytes {
		return nil, &Error{Found: fmt.Sprintf("%d bytes", len(data)), Expected: fmt.Sprintf("at most %d", MaxBytes)}
	}
	if !utf8.Valid(data) {
		return nil, &Error{Found: "bytes that are not UTF-8", Expected: "JSON"}
	}
	// Depth first: whatever follows may then use the stack.
	if deep(data) {
		return nil, &Error{Found: fmt.Sprintf("more than %d levels", MaxDepth), Expected: fmt.Sprintf("at most %d", MaxDepth)}
	}
	var whole json.RawMessage
	if err := json.Unmarshal(data, &whole); err != nil {
		found := "no JSON: " + err.Error()
		if s := (*json.SyntaxError)(nil); errors.As(err, &s) {
			line, column := place(data, s.Offset)
			found = fmt.Sprintf("no JSON: %v (line %d, column %d)", err, line, column)
		}
		return nil, &Error{Found: found, Expected: "JSON", Err: err}
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.UseNumber()
	n, err := readNode(d)
	if err != nil {
		return nil, &Error{Found: err.Error(), Expected: "JSON with every key of an object once", Err: err}
	}
	if _, err := d.Token(); err != io.EOF {
		return nil, &Error{Found: "more after the end", Expected: "one JSON value"}
	}
	return n, nil
}

func readNode(d *json.Decoder) (*node, error) {
	t, err := d.Token()
	if err != nil {
		return nil, err
	}
	switch t := t.(type) {
	case nil:
		return &node{kind: isNull}, nil
	case bool:
		return &node{kind: isBool, text: fmt.Sprint(t)}, nil
	case json.Number:
		return &node{kind: isNumber, text: t.String()}, nil
	case string:
		return &node{kind: isString, text: t}, nil
	case json.Delim:
		n := &node{kind: isArray}
		if t == '{' {
			n = &node{kind: isObject, members: map[string]*node{}}
		}
		for d.More() {
			key := ""
			if n.kind == isObject {
				k, err := d.Token()
				if err != nil {
					return nil, err
				}
				key = k.(string)
				if n.members[key] != nil {
					return nil, fmt.Errorf("the key %s twice in one object", show(key))
				}
			}
			v, err := readNode(d)
			if err != nil {
				return nil, err
			}
			if n.kind == isObject {
				n.keys = append(n.keys, key)
				n.members[key] = v
			} else {
				n.items = append(n.items, v)
			}
		}
		_, err := d.Token() // the closing bracket
		return n, err
	}
	return nil, fmt.Errorf("an unknown token %v", t)
}

// deep tells whether brackets outside strings nest beyond MaxDepth.
func deep(data []byte) bool {
	level, quoted := 0, false
	for i := 0; i < len(data); i++ {
		switch c := data[i]; {
		case quoted && c == '\\':
			i++
		case c == '"':
			quoted = !quoted
		case quoted:
		case c == '{' || c == '[':
			if level++; level > MaxDepth {
				return true
			}
		case c == '}' || c == ']':
			level--
		}
	}
	return false
}

// place turns an offset into a line and a column, both from 1.
func place(data []byte, offset int64) (line, column int) {
	before := data[:min(max(offset-1, 0), int64(len(data)))]
	return 1 + bytes.Count(before, []byte("\n")), len(before) - bytes.LastIndexByte(before, '\n')
}
