package dataset

import (
	"path"
	"strings"

	"evenkeel/fault"
)

// Filter keeps runs by entity labels; key is the BIDS key (sub, ses, task, run, dir, acq, echo ...), several labels of a key are alternatives.
// Labels may come with their prefix ("sub-01") or without; run and echo indices compare as numbers (1 = 01).
// A key with no labels asks nothing; a label that no run has matches nothing.
type Filter map[string][]string

// Select returns the runs the filter keeps, in order, including all echoes chosen.
func (d *Dataset) Select(f Filter) []Run {
	var out []Run
	for _, r := range d.Runs {
		if f.Match(r.Entities) {
			out = append(out, r)
		}
	}
	return out
}

// SelectLeftOut returns those of LeftOut that the filter would have kept.
func (d *Dataset) SelectLeftOut(f Filter) []fault.Fault {
	var out []fault.Fault
	for _, l := range d.LeftOut {
		if n, err := ParseName(path.Base(l.File)); err == nil && f.Match(n.Entities) {
			out = append(out, l)
		}
	}
	return out
}

// SelectNotices returns the notices that may concern what the filter keeps:
// all but those whose path names another label of an entity asked for.
func (d *Dataset) SelectNotices(f Filter) []Notice {
	var out []Notice
	for _, n := range d.Notices {
		if !f.excludes(n.Path) {
			out = append(out, n)
		}
	}
	return out
}

// Match reports whether the filter keeps a run of these entities. A run that
// lacks an entity that is asked for is not kept.
func (f Filter) Match(e Entities) bool {
	for key, labels := range f { // a conjunction: the order does not matter
		if len(labels) == 0 {
			continue
		}
		label, ok := e.Get(key)
		if !ok || !anyLabel(key, labels, label) {
			return false
		}
	}
	return true
}

// excludes reads the key-label pairs of every part of a path as they come,
// valid name or not.
func (f Filter) excludes(rel string) bool {
	for _, part := range strings.Split(rel, "/") {
		for _, field := range strings.Split(part, "_") {
			key, label, ok := strings.Cut(field, "-")
			if labels := f[key]; ok && len(labels) > 0 && !anyLabel(key, labels, label) {
				return true
			}
		}
	}
	return false
}

func anyLabel(key string, asked []string, label string) bool {
	for _, a := range asked {
		a = strings.TrimPrefix(a, key+"-")
		if a == label || indexKeys[key] && sameIndex(a, label) {
			return true
		}
	}
	return false
}

// sameIndex compares indices of any length as numbers.
func sameIndex(a, b string) bool {
	return checkLabel("run", a) == "" && checkLabel("run", b) == "" && strings.TrimLeft(a, "0") == strings.TrimLeft(b, "0")
}
