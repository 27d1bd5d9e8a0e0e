package pipeline

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"

	"evenkeel/dataset"
	"evenkeel/fault"
)

// moveEvents returns an events table with its onsets moved to the output's time
// axis: seconds from the instant that the first output volume refers to,
// instead of from the start of the file's first raw volume (so the onset less
// the output's StartTime). Onsets may become negative; every other column, and
// an onset that is n/a, stays as it is.
//
// A table without an onset column, or with an onset that is no number, gives the
// fault sidecar-syntax with its line.
func moveEvents(file string, data []byte, startTime float64) ([]byte, []fault.Fault) {
	bad := func(line int, found, expected string) []fault.Fault {
		return []fault.Fault{fault.New("sidecar-syntax", file, "onset", fmt.Sprintf("%s (line %d)", found, line), expected,
			"mend the table, or leave --events out")}
	}
	table, err := dataset.ParseTable(data)
	var flaw *dataset.TableError
	if errors.As(err, &flaw) {
		return nil, bad(flaw.Line, flaw.Reason, "a table of events")
	} else if err != nil {
		return nil, bad(1, err.Error(), "a table of events")
	}
	col := table.Column("onset")
	if col < 0 {
		return nil, bad(1, "no such column", "a column called onset, as every events table has")
	}
	for i, cells := range table.Rows {
		if cells[col] == dataset.Missing {
			continue
		}
		t, err := strconv.ParseFloat(strings.TrimSpace(cells[col]), 64)
		if err != nil || math.IsNaN(t) || math.IsInf(t, 0) {
			// The value itself is not repeated: a shifted cell could hold
			// anything, a name included.
			return nil, bad(i+2, "no number", "seconds, or n/a")
		}
		cells[col] = decimal(t-startTime, 6)
	}
	return table.Bytes(), nil
}

// decimal writes v with at most that many digits after the point, without
// trailing zeros and without a negative zero.
func decimal(v float64, digits int) string {
	s := strconv.FormatFloat(v, 'f', digits, 64)
	if strings.Contains(s, ".") {
		s = strings.TrimRight(strings.TrimRight(s, "0"), ".")
	}
	if s == "-0" {
		s = "0"
	}
	return s
}
