package sidecar

import (
	"encoding/json"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"

	"evenkeel/fault"
)

// FuzzMerge: whatever the bytes, no panic; faults of our own identifiers, with
// every part filled in; the same bytes give the same answer; Used and Carried
// are sorted and hold valid JSON; slice times fit the image when there are any.
func FuzzMerge(f *testing.F) {
	f.Add([]byte(`{"RepetitionTime": 1}`), []byte(with()), 3)
	for _, c := range faultCases {
		f.Add([]byte("{}"), []byte(c.sidecar), 0)
	}
	for _, c := range brokenFiles {
		if len(c.text) < 1000 {
			f.Add([]byte(c.text), []byte(with()), 1)
		}
	}
	f.Fuzz(func(t *testing.T, root, leaf []byte, dim int) {
		sources := []Source{{"bold.json", root}, {leafName, leaf}}
		g := harbour
		g.SliceDim = dim
		doc, faults := Merge(sources)
		acq, more := doc.Acquisition(g)
		for _, x := range append(slices.Clone(faults), more...) {
			if !slices.Contains(own, x.ID) || x.File != "bold.json" && x.File != leafName || x.Found == "" || x.Expected == "" || x.Remedy == "" {
				t.Errorf("%+v", x)
			}
		}
		if acq.SliceTimes != nil && len(acq.SliceTimes) != g.Size[acq.SliceAxis] {
			t.Errorf("%d slice times along axis %d", len(acq.SliceTimes), acq.SliceAxis)
		}
		for _, s := range acq.SliceTimes {
			if !(s >= 0) || !finite(s) {
				t.Errorf("slice time %v", s)
			}
		}
		if !finite(acq.RepetitionTime) || acq.RepetitionTime < 0 {
			t.Errorf("repetition time %v", acq.RepetitionTime)
		}
		refused := slices.ContainsFunc(append(slices.Clone(faults), more...), func(x fault.Fault) bool { return x.Level == fault.Refuse })
		if !refused && acq.RepetitionTime == 0 {
			t.Error("no fault and no repetition time")
		}
		for _, fields := range [][]Field{acq.Used, acq.Carried} {
			for i, x := range fields {
				if !json.Valid([]byte(x.Raw)) || x.Origin.Key != x.Key || x.Origin.File == "" || i > 0 && fields[i-1].Key >= x.Key {
					t.Errorf("field %d: %+v", i, x)
				}
			}
		}
		doc, again := Merge(sources)
		acq2, more2 := doc.Acquisition(g)
		if d := cmp.Diff(append(faults, more...), append(again, more2...)); d != "" {
			t.Error(d)
		}
		if d := cmp.Diff(acq, acq2); d != "" {
			t.Error(d)
		}
	})
}
