package dataset

import (
	"slices"
	"strings"

	"evenkeel/fault"
)

// The inheritance principle (BIDS, Common principles), rule by rule:
//
//	2a  a metadata file applies to files in its own folder and below
//	2b  both have the same suffix (an events table: the suffix events)
//	2c  it has no entity that the data file lacks or has with another label
//	3   a metadata file that can apply to nothing is an error (a Notice here)
//	4   in each folder at most one file may apply (sidecar-ambiguous)
//	5a  of tables, only the one lowest in the tree counts
//	5b  JSON files are merged from the root down, key by key, lower wins
//
// Merging as in 5b is the business of package sidecar; here the files are
// found and put in order, from root to leaf.

// associate is a metadata file of one folder.
type associate struct {
	rel  string
	name Name
	flaw *flaw // why it cannot be read, or nil
}

// level is one folder on the way from the root to the data: root, subject,
// session, func.
type level struct {
	sidecars []associate // *_bold.json, sorted by rel
	events   []associate // *_events.tsv, sorted by rel
}

// applying returns the files that apply to the entities.
func applying(files []associate, target Entities) []associate {
	var out []associate
	for _, f := range files {
		if f.name.Entities.Within(target) {
			out = append(out, f)
		}
	}
	return out
}

// ambiguous says that several files of one folder apply to the image (rule 4).
func ambiguous(image, what string, several []associate) fault.Fault {
	paths := make([]string, len(several))
	for i, s := range several {
		paths[i] = s.rel
	}
	return fault.New("sidecar-ambiguous", image, "", strings.Join(paths, " and "),
		"at most one "+what+" in a folder that applies to the image",
		"merge them, or name them so that only one applies")
}

// inheritSidecars fills Sidecars and the faults about them; the ones that
// apply are marked in used.
func inheritSidecars(r *Run, levels []level, used map[string]bool) {
	for _, l := range levels {
		found := applying(l.sidecars, r.Entities)
		if len(found) > 1 {
			r.Faults = append(r.Faults, ambiguous(r.File, "sidecar", found))
		}
		for _, f := range found {
			used[f.rel] = true
			if f.flaw != nil {
				r.Faults = append(r.Faults, f.flaw.fault(f.rel))
				continue
			}
			r.Sidecars = append(r.Sidecars, f.rel)
		}
	}
}

// inheritEvents fills Events or EventsFault.
func inheritEvents(r *Run, levels []level) {
	for _, l := range slices.Backward(levels) { // the lowest first (rule 5a)
		found := applying(l.events, r.Entities)
		switch {
		case len(found) == 0:
			continue
		case len(found) > 1:
			f := ambiguous(r.File, "events table", found)
			r.EventsFault = &f
		case found[0].flaw != nil:
			f := found[0].flaw.fault(found[0].rel)
			r.EventsFault = &f
		default:
			r.Events = found[0].rel
		}
		return
	}
}

// findSBRef fills SBRef or SBRefFault from the single-band references of the
// run's own folder. The standard ties a reference to its run only by equal
// entities, and says that a name without part is a magnitude image; a reference
// of several echoes may be there once, without the entity echo. So the first
// of these is taken: equal entities; equal but for part-mag against none; then
// both again without echo.
func findSBRef(r *Run, refs map[string][]associate) {
	for _, e := range []Entities{r.Entities, r.Entities.Without("echo")} {
		other := e.Without("part")
		if len(other) == len(e) {
			other = e.With("part", "mag")
		}
		for _, candidate := range []Entities{e, other} {
			found := refs[candidate.String()]
			switch {
			case len(found) == 0:
				continue
			case len(found) > 1:
				f := twice(found)
				r.SBRefFault = &f
			case found[0].flaw != nil:
				f := found[0].flaw.fault(found[0].rel)
				r.SBRefFault = &f
			default:
				r.SBRef = found[0].rel
			}
			return
		}
	}
}

// twice says that one image is there under several extensions; one file is
// allowed for given entities and suffix, whatever its extension.
func twice(files []associate) fault.Fault {
	paths := make([]string, len(files))
	for i, f := range files {
		paths[i] = f.rel
	}
	return fault.New("image-twice", files[0].rel, "", strings.Join(paths, " and "), "one image file for one run",
		"delete or move away the one that is not meant")
}
