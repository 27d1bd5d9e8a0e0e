package slicetime

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// Words describes the schedule for people, in one line without a full stop:
//
//	sequential ascending, 15 excitations, 0.3333 s apart, no pause between volumes
//	interleaved ascending, even slices first (2nd, 4th, 6th, ...), 36 excitations, about 0.06971 s apart, then a pause of 0.4903 s
//	multiband 2 (slices 3 apart), interleaved ascending within each block of 3 slices, even slices first (2nd), 3 excitations, 0.16 s apart, ...
//
// Slices are counted from 1 in the order of the slice index, so that ascending
// means rising index. The gap between shots is called "about" where the list
// varies around it by no more than its rounding. A list that follows no pattern
// is called irregular, with the order of its first slices.
func (s Schedule) Words() string {
	n := len(s.Times)
	switch {
	case n == 0:
		return "no slices"
	case slices.ContainsFunc(s.Times, func(t float64) bool { return math.IsInf(t, 0) }):
		return "slice times that are not finite"
	}
	untimed := 0
	for _, t := range s.Times {
		if math.IsNaN(t) {
			untimed++
		}
	}
	if untimed == n {
		return "no slice has a time"
	}
	shots := s.Shots()
	var parts []string
	switch {
	case n == 1:
		parts = append(parts, "a single slice"+at(shots[0].Time))
	case len(shots) == 1:
		parts = append(parts, fmt.Sprintf("all %d slices at one instant%s", n-untimed, at(shots[0].Time)))
	default:
		parts = append(parts, order(shots)...)
		parts = append(parts, fmt.Sprintf("%d excitations", len(shots)), s.pace(shots))
	}
	if untimed > 0 {
		parts = append(parts, fmt.Sprintf("%d of %d slices without a time", untimed, n))
	}
	return strings.Join(parts, ", ")
}

// at says an instant unless it is the volume's start.
func at(t float64) string {
	if t == 0 {
		return ""
	}
	return fmt.Sprintf(", %s s after the volume's start", seconds(t))
}

// order says in which order the shots take the slices.
func order(shots []Shot) []string {
	bands, apart := banding(shots)
	var parts []string
	seq := make([]int, len(shots))
	for i, shot := range shots {
		seq[i] = shot.Slices[0]
	}
	within := ""
	switch {
	case bands == 1:
	case bands > 1 && apart == len(shots):
		parts = append(parts, fmt.Sprintf("multiband %d (slices %d apart)", bands, apart))
		within = fmt.Sprintf(" within each block of %d slices", apart)
	case bands > 1:
		few := make([]string, 0, len(shots[0].Slices))
		for _, i := range shots[0].Slices {
			few = append(few, fmt.Sprint(i+1))
		}
		return []string{fmt.Sprintf("multiband %d, irregular (the first shot takes slices %s)", bands, list(few, 8))}
	default:
		low, high := math.MaxInt, 0
		for _, shot := range shots {
			low, high = min(low, len(shot.Slices)), max(high, len(shot.Slices))
		}
		return []string{fmt.Sprintf("irregular: %d to %d slices in a shot", low, high)}
	}
	return append(parts, sequence(seq, within)...)
}

// banding returns how many slices every shot takes and the constant step
// between them (0 if it is not constant); 0 bands if shots differ.
func banding(shots []Shot) (bands, apart int) {
	bands = len(shots[0].Slices)
	for _, shot := range shots {
		if len(shot.Slices) != bands {
			return 0, 0
		}
	}
	if bands == 1 {
		return 1, 0
	}
	apart = shots[0].Slices[1] - shots[0].Slices[0]
	for _, shot := range shots {
		for i := 1; i < bands; i++ {
			if shot.Slices[i]-shot.Slices[i-1] != apart {
				return bands, 0
			}
		}
	}
	return bands, apart
}

// sequence says how seq runs through the slices lowest to highest of it.
func sequence(seq []int, within string) []string {
	low := slices.Min(seq)
	n := slices.Max(seq) - low + 1
	up := make([]int, len(seq)) // from the low end
	down := make([]int, len(seq))
	for i, v := range seq {
		up[i], down[i] = v-low, n-1-(v-low)
	}
	if n == len(seq) {
		for step := 1; step <= (n+1)/2; step++ {
			for _, way := range []struct {
				pos  []int
				name string
			}{{up, "ascending"}, {down, "descending"}} {
				if !passes(way.pos, step) {
					continue
				}
				switch step {
				case 1:
					return []string{"sequential " + way.name + within}
				case 2:
					parity := "odd"
					if (seq[0]+1)%2 == 0 {
						parity = "even"
					}
					return []string{"interleaved " + way.name + within, parity + " slices first (" + firstPass(seq, step) + ")"}
				}
				return []string{fmt.Sprintf("interleaved %s%s in steps of %d", way.name, within, step), firstPass(seq, step) + " first"}
			}
		}
		if step := cycle(up); step > 0 {
			return []string{fmt.Sprintf("in steps of %d%s, going round past the last slice", step, within), ordinal(seq[0]+1) + " first"}
		}
	}
	few := make([]string, len(seq))
	for i, v := range seq {
		few[i] = fmt.Sprint(v + 1)
	}
	return []string{fmt.Sprintf("irregular order%s (slices %s)", within, list(few, 6))}
}

// passes reports whether pos, a permutation of 0..n-1, consists of runs that each
// rise by step through all positions of one remainder. It is enough that every
// run begins below step: what a run left out would have to begin another above it.
func passes(pos []int, step int) bool {
	for i, p := range pos {
		if p >= step && (i == 0 || p != pos[i-1]+step) {
			return false
		}
	}
	return true
}

// cycle returns the step k if pos advances by k modulo its length throughout, else 0.
func cycle(pos []int) int {
	n := len(pos)
	if n < 3 {
		return 0
	}
	k := ((pos[1]-pos[0])%n + n) % n
	for i := 1; i < n; i++ {
		if (pos[i-1]+k)%n != pos[i] {
			return 0
		}
	}
	return k
}

// firstPass names the slices of the first run of steps, counted from 1.
func firstPass(seq []int, step int) string {
	names := []string{ordinal(seq[0] + 1)}
	for i := 1; i < len(seq); i++ {
		if d := seq[i] - seq[i-1]; d != step && d != -step {
			break
		}
		names = append(names, ordinal(seq[i]+1))
	}
	return list(names, 3)
}

// list joins the first few names; an ellipsis stands for the rest.
func list(names []string, few int) string {
	if len(names) > few {
		names = append(slices.Clone(names[:few]), "...")
	}
	return strings.Join(names, ", ")
}

func ordinal(n int) string {
	suffix := "th"
	if n%100 < 11 || n%100 > 13 {
		switch n % 10 {
		case 1:
			suffix = "st"
		case 2:
			suffix = "nd"
		case 3:
			suffix = "rd"
		}
	}
	return fmt.Sprint(n, suffix)
}

// Lists of slice times are printed by scanners to as little as 2.5 ms, so that
// one gap errs by as much (rounding up here, down there).
const listRounding = 0.0025

// pace says how far apart the shots are and what is left of the repetition time.
func (s Schedule) pace(shots []Shot) string {
	n := len(shots)
	mean := (shots[n-1].Time - shots[0].Time) / float64(n-1)
	least, most := math.Inf(1), 0.0
	for i := 1; i < n; i++ {
		gap := shots[i].Time - shots[i-1].Time
		least, most = min(least, gap), max(most, gap)
	}
	// A hair above the limits: the times are decimal fractions in binary.
	const hair = 1e-9
	even := most-least <= 2*listRounding+hair && most-least <= mean/5
	text := ""
	switch {
	case most-least <= 1e-5+hair: // six printed digits
		text = seconds(mean) + " s apart"
	case even:
		text = "about " + seconds(mean) + " s apart"
	default:
		text = fmt.Sprintf("unevenly %s to %s s apart", seconds(least), seconds(most))
	}
	if !(s.TR > 0) || math.IsInf(s.TR, 0) {
		return text
	}
	// After the last shot comes one more gap before the next volume could begin.
	pause := s.TR - (shots[n-1].Time - shots[0].Time) - mean
	if !even {
		pause += mean
		return text + fmt.Sprintf(", %s s from the last shot to the next volume's first", seconds(pause))
	}
	// Less than a twentieth of a gap, or of what rounding leaves, is none.
	switch slack := max(mean/20, 2*listRounding); {
	case pause > slack:
		return text + ", then a pause of " + seconds(pause) + " s"
	case pause < -slack:
		return text + ", the volumes overlapping by " + seconds(-pause) + " s"
	}
	return text + ", no pause between volumes"
}

// seconds prints four significant digits without trailing zeros.
func seconds(t float64) string {
	text := fmt.Sprintf("%.4g", t)
	if strings.Contains(text, "e") {
		text = strings.TrimRight(strings.TrimRight(fmt.Sprintf("%.6f", t), "0"), ".")
	}
	return text
}
