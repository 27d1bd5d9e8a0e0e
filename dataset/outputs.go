package dataset

import (
	"path"
	"strings"
)

// Output is one kind of file that stands in the derivative dataset beside the
// place of each raw run.
type Output struct {
	Desc, Suffix string
	Exts         []string
	// Named is true when BIDS 1.11.1 has a name for such a file. The others are
	// listed in .bidsignore. A desc on an events table is not among the
	// standard's derivative names either (schema rules/files/deriv).
	Named   bool
	Content string
}

// Outputs lists every kind of file once; README and .bidsignore follow from it.
var Outputs = []Output{
	{Desc: "steady", Suffix: "bold", Exts: []string{".nii.gz", ".json"}, Named: true,
		Content: "the series: at the head position of the reference, and at one instant if slices were moved in time"},
	{Desc: "steady", Suffix: "reference", Exts: []string{".nii.gz", ".json"},
		Content: "the volume that every other was aligned to; with a pose path it is rebuilt from them"},
	{Desc: "head", Suffix: "mask", Exts: []string{".nii.gz", ".json"}, Named: true,
		Content: "the head, 1 inside; motion is estimated from it and a rim, figures are taken over it"},
	{Desc: "steady", Suffix: "pose", Exts: []string{".tsv", ".json"},
		Content: "the head's position at each volume, one row a volume; the .json describes every column, with its unit"},
	{Desc: "shots", Suffix: "pose", Exts: []string{".tsv", ".json"},
		Content: "the head's position at each excitation, with --motion path; a shot is one excitation, no segment of k-space"},
	{Desc: "steady", Suffix: "quality", Exts: []string{".json"},
		Content: "figures of quality before and after, each with its unit and definition"},
	{Desc: "raw", Suffix: "tsnr", Exts: []string{".nii.gz"},
		Content: "temporal signal to noise before"},
	{Desc: "steady", Suffix: "tsnr", Exts: []string{".nii.gz"},
		Content: "temporal signal to noise after"},
	{Desc: "steady", Suffix: "events", Exts: []string{".tsv"},
		Content: "the events with onsets on the time axis of the series, if they were asked for"},
	{Desc: "steady", Suffix: "prov", Exts: []string{".json"},
		Content: "the record: what was read, with digests, every setting, and what was done (W3C PROV-JSON)"},
}

// rootOutputs are the files of ours at the root of the derivative dataset that
// BIDS has no name for.
var rootOutputs = []string{"report.html", "runs.tsv", "runs.json"}

// longestOutput is what an output's name adds to the stem at most, with room
// for the marks of the hidden name under which it is written first: a dot and a
// number of up to ten digits.
var longestOutput = func() int {
	longest := 0
	for _, o := range Outputs {
		for _, ext := range o.Exts {
			longest = max(longest, len(OutputPath(Run{}, o.Desc, o.Suffix, ext)))
		}
	}
	return longest + 1 + 10
}()

// OutputPath gives the relative slash path of a derivative of run r: dir/STEM_desc-<desc>_<suffix><ext>; desc "" leaves desc out.
func OutputPath(r Run, desc, suffix, ext string) string {
	base := r.Stem
	if desc != "" {
		base += "_desc-" + desc
	}
	return path.Join(r.Dir, base+"_"+suffix+ext)
}

// IgnoreText gives the content of OUT/.bidsignore: the files that BIDS has no
// name for yet.
func IgnoreText() []byte {
	var b strings.Builder
	b.WriteString("# Files that BIDS has no name for yet; README says what they are.\n")
	for _, name := range rootOutputs {
		b.WriteString("/" + name + "\n")
	}
	for _, o := range Outputs {
		if o.Named {
			continue
		}
		for _, ext := range o.Exts {
			b.WriteString("*_desc-" + o.Desc + "_" + o.Suffix + ext + "\n")
		}
	}
	return []byte(b.String())
}
