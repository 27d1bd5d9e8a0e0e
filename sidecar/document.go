package sidecar

import (
	"fmt"

	"evenkeel/fault"
)

// Source is one JSON file that applies to a run, in the order root to leaf.
type Source struct {
	Name string // relative path, for messages and origins
	Data []byte
}

// Origin says where a value came from.
type Origin struct{ File, Key string }

// Field is one sidecar value with its origin. Raw is its JSON, numbers as they
// stand in the file, without white space between the parts of a list.
type Field struct {
	Key, Raw string
	Origin   Origin
}

// Document is the merged sidecar of one run. It keeps the source bytes, which
// must not be changed while it is in use; it may be read by several goroutines.
type Document struct {
	values map[string]value
	files  []string // names of the sources, root to leaf
	// broken is set when a source could not be read. The values of that file are
	// unknown, so whatever the others say may have been overridden.
	broken bool
}

// value is one top-level value and where it stands.
type value struct {
	file       string
	data       []byte // the whole source, for positions
	start, end int
	// ambiguous values stand twice in their file; which one was meant cannot be
	// told, so they count as there but are never read.
	ambiguous bool
}

func (v value) raw() string { return string(v.data[v.start:v.end]) }

func (v value) place() position { return placeOf(v.data, v.start) }

// Merge parses and merges the sources, the lower file winning key by key (BIDS,
// "The Inheritance Principle", rule 5b; a key cannot be unset).
//
// The Document is never nil. The faults, in source order, are sidecar-syntax for
// files that are not JSON and for keys that stand twice, and private-field for
// every file that holds a field that can identify a person, overridden or not.
func Merge(sources []Source) (*Document, []fault.Fault) {
	doc := &Document{values: map[string]value{}}
	var faults []fault.Fault
	for _, src := range sources {
		doc.files = append(doc.files, src.Name)
		seen, bad := scan(src.Data)
		if bad != nil {
			doc.broken = true
			faults = append(faults, fault.New("sidecar-syntax", src.Name, "", bad.where()+bad.found, bad.expected, bad.remedy))
		}
		faults = append(faults, duplicateFaults(src, seen.duplicates)...)
		faults = append(faults, privateFaults(src, seen.private)...)
		if bad != nil {
			continue
		}
		for _, e := range seen.entries {
			doc.values[e.key] = value{file: src.Name, data: src.Data, start: e.start, end: e.end}
		}
		for _, d := range seen.duplicates {
			if !d.nested {
				v := doc.values[d.key]
				v.ambiguous = true
				doc.values[d.key] = v
			}
		}
	}
	return doc, faults
}

// mostDuplicates keeps a file made of nothing but duplicates from filling the
// screen; the count of the rest is given.
const mostDuplicates = 20

func duplicateFaults(src Source, dups []duplicate) []fault.Fault {
	var faults []fault.Fault
	for i, d := range dups {
		if i == mostDuplicates {
			faults = append(faults, fault.New("sidecar-syntax", src.Name, "",
				fmt.Sprintf("%d more keys that stand twice", len(dups)-i), "every key once in its object", "remove the duplicates"))
			break
		}
		key := showKey(d.key)
		faults = append(faults, fault.New("sidecar-syntax", src.Name, key,
			fmt.Sprintf("%s: %s a second time (first at %s)", placeOf(src.Data, d.at), key, placeOf(src.Data, d.first)),
			"every key once in its object",
			"remove one of the two: JSON does not say which would count"))
	}
	return faults
}

// leaf is the file nearest to the image, which is where a missing key is best
// added; without any sidecar it is the image itself.
func (d *Document) leaf(g Geometry) string {
	if len(d.files) == 0 {
		return g.File
	}
	return d.files[len(d.files)-1]
}
