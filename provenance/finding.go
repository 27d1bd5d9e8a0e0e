package provenance

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
)

// The kinds of finding. What each means is in [Kinds].
const (
	Missing         = "missing"
	Changed         = "changed"
	Unreadable      = "unreadable"
	Unlisted        = "unlisted"
	ListedTwice     = "listed-twice"
	NoRecord        = "no-record"
	RecordInvalid   = "record-invalid"
	InputMissing    = "input-missing"
	InputChanged    = "input-changed"
	InputUnreadable = "input-unreadable"
	OtherVersion    = "other-version"
	ReplayDiffers   = "replay-differs"
	NotReplayed     = "not-replayed"
)

// Kind describes one kind of finding.
type Kind struct {
	ID         string
	Difference bool // false: worth knowing, but nothing differs
	When       string
}

// Kinds lists every kind, in the order of the documentation.
var Kinds = []Kind{
	{Missing, true, "a file that a record names as written is not there"},
	{Changed, true, "a file that a record names as written has another size or digest"},
	{Unreadable, true, "something cannot be read, is not a file, or is a link that leads out of the folder"},
	{Unlisted, true, "a file beside a record is listed by none"},
	{ListedTwice, true, "two records say that they wrote one file"},
	{NoRecord, true, "a corrected series has no record: it was left by something that did not finish, or the record was removed"},
	{RecordInvalid, true, "a record cannot be understood, was edited, or has the name of another run"},
	{InputMissing, true, "a raw file that a record names is not there, or is a link to a file that was not fetched"},
	{InputChanged, true, "a raw file that a record names has another size or digest"},
	{InputUnreadable, true, "a raw file that a record names cannot be read"},
	{OtherVersion, false, "a record was written by another version"},
	{ReplayDiffers, true, "a run computed again from its record gives something else than is there"},
	{NotReplayed, true, "a run cannot be computed again from its record"},
}

// Finding is one thing an audit noticed.
type Finding struct {
	Kind     string `json:"kind"`   // one of [Kinds]
	Record   string `json:"record"` // path of the record, relative to OUT; "" where none is concerned
	File     string `json:"file"`   // relative to OUT, or to the raw dataset for the kinds input-...
	Found    string `json:"found"`
	Expected string `json:"expected"`
}

// Difference tells whether the finding means that something is not as recorded.
// An unknown kind does.
func (f Finding) Difference() bool {
	for _, k := range Kinds {
		if k.ID == f.Kind {
			return k.Difference
		}
	}
	return true
}

// String gives the finding as one line that begins with its kind.
func (f Finding) String() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s: %s", f.Kind, f.File)
	if f.Found != "" {
		fmt.Fprintf(&b, ": found %s", f.Found)
	}
	if f.Expected != "" {
		fmt.Fprintf(&b, ", expected %s", f.Expected)
	}
	if f.Record != "" && f.Record != f.File {
		fmt.Fprintf(&b, " (%s)", f.Record)
	}
	return b.String()
}

// Differences counts the findings that are differences.
func Differences(findings []Finding) (n int) {
	for _, f := range findings {
		if f.Difference() {
			n++
		}
	}
	return n
}

// sortFindings puts them in the order of records, then files, then kinds.
func sortFindings(list []Finding) {
	slices.SortFunc(list, func(a, b Finding) int {
		return cmp.Or(cmp.Compare(a.Record, b.Record), cmp.Compare(a.File, b.File), cmp.Compare(a.Kind, b.Kind),
			cmp.Compare(a.Found, b.Found), cmp.Compare(a.Expected, b.Expected))
	})
}
