package dataset

import (
	"errors"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// The form of BIDS, Common principles, "Tabular files".
func TestTableText(t *testing.T) {
	table := NewTable("run", "state", "note")
	table.Append("sub-01_task-a", "", "a\tb")
	table.Append("1.5e-3", `"so"`, "5\" wide")
	want := "run\tstate\tnote\nsub-01_task-a\tn/a\t\"a\tb\"\n1.5e-3\t\"\"\"so\"\"\"\t5\" wide\n"
	if diff := cmp.Diff(want, string(table.Bytes())); diff != "" {
		t.Error(diff)
	}
	if table.Column("state") != 1 || table.Column("x") != -1 {
		t.Error("columns")
	}
	// The example of that section, an events table.
	got, err := ParseTable([]byte("onset\tduration\tresponse_time\ttrial_type\ttrial_extra\n200\t20.0\t15.8\tword\t中国人\n240\t5.0\t17.34e-1\tvisual\tn/a\n"))
	if err != nil {
		t.Fatal(err)
	}
	if got.Rows[0][4] != "中国人" || got.Rows[1][2] != "17.34e-1" || got.Rows[1][4] != Missing {
		t.Error(got)
	}
}

func TestTableReading(t *testing.T) {
	for _, c := range []struct {
		text string
		want Table
	}{
		{"a\tb\n1\t2", Table{[]string{"a", "b"}, [][]string{{"1", "2"}}}},
		{"\ufeffa\tb\r\n1\t\"2\r\n3\"\r\n\r\n", Table{[]string{"a", "b"}, [][]string{{"1", "2\r\n3"}}}},
		{"a\tb\n\t\n", Table{[]string{"a", "b"}, [][]string{{"", ""}}}},
		{"a\tb\n1\t", Table{[]string{"a", "b"}, [][]string{{"1", ""}}}},
		{"a", Table{[]string{"a"}, nil}},
	} {
		got, err := ParseTable([]byte(c.text))
		if err != nil {
			t.Errorf("%q: %v", c.text, err)
			continue
		}
		if diff := cmp.Diff(c.want, *got); diff != "" {
			t.Errorf("%q: %s", c.text, diff)
		}
	}
	for _, c := range []struct {
		text   string
		line   int
		reason string
	}{
		{"", 1, "empty"}, {"\n\n", 1, "empty"}, {"a\t\n", 1, "column 2 has no name"}, {"a\ta\n", 1, "two columns"},
		{"a\tb\n1\t2\n3\n", 3, "1 cells, expected 2"}, {"a\tb\n1\t\"x\ny\"\n3\n", 4, "1 cells"}, {"a\tb\n\n1\t2\n", 2, "1 cells"},
		{"a\n\"x", 2, "not closed"}, {"a\n\"x\"y", 2, "follows a closing quote"}, {"a\nb\xff", 2, "UTF-8"},
	} {
		got, err := ParseTable([]byte(c.text))
		var table *TableError
		if !errors.As(err, &table) || got != nil || table.Line != c.line || !strings.Contains(table.Reason, c.reason) {
			t.Errorf("%q: %v, %v", c.text, got, err)
		}
	}
}

func TestTableRoundTrip(t *testing.T) {
	cell := rapid.OneOf(rapid.StringMatching(`[\t\n\r" a]{1,5}`), rapid.StringMatching(`.{1,6}`), rapid.Just("n/a"), rapid.Just("\ufeff"), rapid.Just("\r\n"))
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(1, 4).Draw(t, "columns")
		columns := rapid.SliceOfNDistinct(cell.Filter(func(s string) bool { return strings.TrimSpace(s) != "" }), n, n, rapid.ID).Draw(t, "names")
		table := NewTable(columns...)
		for range rapid.IntRange(0, 4).Draw(t, "rows") {
			table.Append(rapid.SliceOfN(cell, n, n).Draw(t, "row")...)
		}
		got, err := ParseTable(table.Bytes())
		if err != nil {
			t.Fatalf("%q: %v", table.Bytes(), err)
		}
		if diff := cmp.Diff(table, got); diff != "" {
			t.Fatal(diff)
		}
	})
}

func FuzzTable(f *testing.F) {
	for _, s := range []string{"a\tb\n1\t2\n", "a\n\"x\ty\"\n", "\ufeffa\r\n\r\n", "a\n\"", "\xff"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		table, err := ParseTable(text)
		if err != nil {
			var typed *TableError
			if !errors.As(err, &typed) || typed.Line < 1 {
				t.Fatal(err)
			}
			return
		}
		again, err := ParseTable(table.Bytes())
		if err != nil {
			t.Fatalf("%q: %v", table.Bytes(), err)
		}
		for _, r := range table.Rows {
			for i := range r {
				if r[i] == "" {
					r[i] = Missing
				}
			}
		}
		if diff := cmp.Diff(table, again); diff != "" {
			t.Fatal(diff)
		}
	})
}

func TestTableMistakesPanic(t *testing.T) {
	for name, f := range map[string]func(){
		"no columns": func() { NewTable() },
		"repeated":   func() { NewTable("a", "a") },
		"blank":      func() { NewTable(" ") },
		"short row":  func() { NewTable("a", "b").Append("1") },
		"bad rows":   func() { (&Table{Columns: []string{"a"}, Rows: [][]string{{}}}).Bytes() },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", name)
				}
			}()
			f()
		}()
	}
}
