package phantom

import "context"

// TrueRun is what is exactly known about one run of the demo cohort.
type TrueRun struct {
	Stem string
	Scan *Scan
}

// WriteCohort writes the invented demo cohort (three small runs: one interleaved, one multiband, one with a jerk) as a raw BIDS dataset
// into dir (which must not exist or be empty) and returns what is true of it, in the order of the runs' names.
func WriteCohort(ctx context.Context, dir string, workers int) ([]TrueRun, error) { panic("todo") }
