package pipeline

import (
	"bytes"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

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
	text := strings.TrimPrefix(string(data), "\ufeff")
	lines := strings.Split(strings.ReplaceAll(text, "\r\n", "\n"), "\n")
	head := strings.Split(lines[0], "\t")
	col := slices.Index(head, "onset")
	if col < 0 {
		return nil, bad(1, "no such column", "a column called onset, as every events table has")
	}
	var out bytes.Buffer
	out.WriteString(lines[0] + "\n")
	for i, line := range lines[1:] {
		if line == "" && i == len(lines)-2 {
			break
		}
		cells := strings.Split(line, "\t")
		if len(cells) != len(head) {
			return nil, bad(i+2, fmt.Sprintf("%d cells", len(cells)), fmt.Sprintf("%d, as the first line has", len(head)))
		}
		if cells[col] != "n/a" {
			t, err := strconv.ParseFloat(strings.TrimSpace(cells[col]), 64)
			if err != nil || math.IsNaN(t) || math.IsInf(t, 0) {
				// The value itself is not repeated: a shifted cell could
				// hold anything, a name included.
				return nil, bad(i+2, "no number", "seconds, or n/a")
			}
			cells[col] = decimal(t-startTime, 6)
		}
		out.WriteString(strings.Join(cells, "\t") + "\n")
	}
	return out.Bytes(), nil
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
