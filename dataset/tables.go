package dataset

import (
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"
)

// Missing stands for a value that is not there (BIDS, "Tabular files").
const Missing = "n/a"

// Table is a tab-separated table with one header row. Cells are text; whoever
// makes a table formats its numbers (decimal point, exponent e or E).
type Table struct {
	Columns []string
	Rows    [][]string // each as long as Columns
}

// TableError says what is wrong with a table and where.
type TableError struct {
	Line   int // of the text, from 1
	Reason string
}

func (e *TableError) Error() string { return fmt.Sprintf("line %d: %s", e.Line, e.Reason) }

// NewTable returns a table without rows. Blank or repeated column names are a
// mistake of ours and panic.
func NewTable(columns ...string) *Table {
	if reason := checkColumns(columns); reason != "" {
		panic("dataset: " + reason)
	}
	return &Table{Columns: slices.Clone(columns)}
}

// Append adds a row. A number of cells other than that of the columns is a
// mistake of ours and panics. An empty cell counts as missing.
func (t *Table) Append(cells ...string) {
	if len(cells) != len(t.Columns) {
		panic(fmt.Sprintf("dataset: a row of %d cells in a table of %d columns", len(cells), len(t.Columns)))
	}
	t.Rows = append(t.Rows, slices.Clone(cells))
}

// Column returns the index of a column, or -1.
func (t *Table) Column(name string) int { return slices.Index(t.Columns, name) }

// Bytes writes the table: UTF-8, a line feed after every row, n/a for empty
// cells, and quotes (doubled inside) around cells that hold a tab, a line break
// or begin with a quote. Bytes that are not UTF-8 become U+FFFD.
func (t *Table) Bytes() []byte {
	var b strings.Builder
	writeRow(&b, t.Columns)
	for _, r := range t.Rows {
		if len(r) != len(t.Columns) {
			panic(fmt.Sprintf("dataset: a row of %d cells in a table of %d columns", len(r), len(t.Columns)))
		}
		writeRow(&b, r)
	}
	return []byte(b.String())
}

func writeRow(b *strings.Builder, cells []string) {
	for i, c := range cells {
		if i > 0 {
			b.WriteByte('\t')
		}
		c = strings.ToValidUTF8(c, "\ufffd")
		switch {
		case c == "":
			b.WriteString(Missing)
		case strings.ContainsAny(c, "\t\n\r") || c[0] == '"' || strings.HasPrefix(c, "\ufeff"):
			b.WriteString(`"` + strings.ReplaceAll(c, `"`, `""`) + `"`)
		default:
			b.WriteString(c)
		}
	}
	b.WriteByte('\n')
}

func checkColumns(columns []string) string {
	if len(columns) == 0 {
		return "a table has no columns"
	}
	for i, c := range columns {
		if strings.TrimSpace(c) == "" {
			return fmt.Sprintf("column %d has no name", i+1)
		}
		if slices.Contains(columns[:i], c) {
			return "two columns are called " + quoted(c)
		}
	}
	return ""
}

// ParseTable reads a table. Lines may end in a line feed or in carriage return
// and line feed; a byte order mark and line ends after the last row are passed
// over. Cells come as they are, "n/a" and empty ones included. Any error is a
// [*TableError].
func ParseTable(text []byte) (*Table, error) {
	if !utf8.Valid(text) {
		line := 1
		for rest := text; len(rest) > 0; {
			r, n := utf8.DecodeRune(rest)
			if r == utf8.RuneError && n == 1 {
				break
			}
			if r == '\n' {
				line++
			}
			rest = rest[n:]
		}
		return nil, &TableError{Line: line, Reason: "not UTF-8"}
	}
	s := strings.TrimPrefix(string(text), "\ufeff")
	s = strings.TrimRight(s, "\r\n")
	if s == "" {
		return nil, &TableError{Line: 1, Reason: "the table is empty"}
	}
	var t Table
	for line := 1; s != ""; {
		at := line
		cells, rest, newlines, err := readRow(s)
		if err != "" {
			return nil, &TableError{Line: at, Reason: err}
		}
		s, line = rest, line+newlines
		if t.Columns == nil {
			if reason := checkColumns(cells); reason != "" {
				return nil, &TableError{Line: at, Reason: reason}
			}
			t.Columns = cells
			continue
		}
		if len(cells) != len(t.Columns) {
			return nil, &TableError{Line: at, Reason: fmt.Sprintf("%d cells, expected %d, one for each column", len(cells), len(t.Columns))}
		}
		t.Rows = append(t.Rows, cells)
	}
	return &t, nil
}

// readRow takes one row off s, and counts the line feeds in it, its own included.
func readRow(s string) (cells []string, rest string, newlines int, reason string) {
	for {
		var cell string
		if s != "" && s[0] == '"' {
			var b strings.Builder
			i := 1
			for ; ; i++ {
				if i >= len(s) {
					return nil, "", 0, "a quote is opened and not closed"
				}
				if s[i] == '"' {
					if i+1 < len(s) && s[i+1] == '"' {
						i++
					} else {
						break
					}
				}
				if s[i] == '\n' {
					newlines++
				}
				b.WriteByte(s[i])
			}
			cell, s = b.String(), s[i+1:]
			if s != "" && s[0] != '\t' && s[0] != '\n' && !strings.HasPrefix(s, "\r\n") {
				return nil, "", 0, "text follows a closing quote"
			}
		} else {
			end := strings.IndexAny(s, "\t\n")
			if end < 0 {
				end = len(s)
			}
			cell, s = s[:end], s[end:]
			if strings.HasPrefix(s, "\n") {
				cell = strings.TrimSuffix(cell, "\r")
			}
		}
		cells = append(cells, cell)
		s = strings.TrimPrefix(s, "\r")
		switch {
		case s == "":
			return cells, "", newlines, ""
		case s[0] == '\n':
			return cells, s[1:], newlines + 1, ""
		}
		s = s[1:] // the tab
	}
}
