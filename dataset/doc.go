// Package dataset knows the BIDS tree: which BOLD runs exist, which sidecars
// apply to each, and how derivatives are named and described. It knows nothing
// of what a sidecar value means, nor of voxels.
//
// [Open] walks sub-*/[ses-*/]func and nothing else: derivatives, sourcedata,
// code, stimuli and dotfiles are never looked into. Nothing that looks like a
// BOLD image is passed over without a word: it becomes a [Run] (possibly with
// faults), a part-left-out warning in [Dataset.LeftOut], or a [Notice].
//
// The rules followed are those of the Brain Imaging Data Structure (BIDS)
// 1.11.1; the section is named beside each of them:
//
//	entities.go    order and format of entities (schema rules/entities, objects/formats)
//	name.go        file names (Common principles, "Filenames"; schema rules/files/raw/func)
//	walk.go        which files are runs
//	inherit.go     the inheritance principle (Common principles)
//	ignore.go      .bidsignore, with gitignore's pattern language
//	links.go       symbolic links, as annexed datasets have them
//	filter.go      selecting runs by entity
//	derivative.go  derivative names, BIDS URIs, dataset_description.json
//	tables.go      tab-separated tables (Common principles, "Tabular files")
//
// Everything is sorted by path, so that one tree always gives one answer. The
// values of this package are plain data, safe for concurrent reading.
package dataset
