package dataset

import (
	"bytes"
	"encoding/json"
	"fmt"
	"net/url"
	"os"
	"path/filepath"
	"strings"
)

// BIDSVersion is the release of the standard that the derivatives follow.
const BIDSVersion = "1.11.1"

// RawName is the dataset name that stands for the raw dataset in BIDS URIs.
const RawName = "raw"

// URI writes a BIDS URI: bids:<name>:<path>, name "" = this dataset. The path
// is relative to that dataset, with slashes.
func URI(name, path string) string {
	return "bids:" + name + ":" + strings.TrimLeft(path, "/")
}

// Derivative describes the output dataset for its dataset_description.json.
//
// The standard wants every dataset name that a BIDS URI uses to be a key of
// DatasetLinks. Where the raw dataset is, is told by RawLink, or else by its
// DOI. With neither, the value is [Unlinked], a name that says no more than that
// the place is not told: the URIs of the raw files are then still the same bytes
// wherever the output lies, and an audit must be told the place.
type Derivative struct {
	Name                      string // "" = one made from SourceName
	SourceName, SourceVersion string // of the raw dataset; "" = not known
	SourceDOI                 string // of the raw dataset, as a URI ([Dataset.DOI]); "" = none
	Version                   string // of evenkeel
	// RawLink is where the raw dataset is, relative to OUT, as [RawLinkFor] gives it; "" = not told.
	RawLink string
}

// Unlinked stands in DatasetLinks for a raw dataset whose place is not told.
const Unlinked = "urn:evenkeel:place-not-told"

// link is the value of DatasetLinks.raw.
func (d Derivative) link() string {
	switch {
	case d.RawLink != "":
		return d.RawLink
	case d.SourceDOI != "":
		return d.SourceDOI
	}
	return Unlinked
}

type generator struct {
	Name        string
	Version     string `json:",omitempty"`
	Description string
}

type source struct {
	URL     string `json:",omitempty"`
	DOI     string `json:",omitempty"`
	Version string `json:",omitempty"`
}

// DescriptionJSON gives the content of OUT/dataset_description.json (BIDS,
// Derivatives, "Derived dataset and pipeline description"). It holds no
// absolute path.
func (d Derivative) DescriptionJSON() []byte {
	name := d.Name
	if name == "" {
		name = "Steady BOLD series"
		if d.SourceName != "" {
			name += " of " + d.SourceName
		}
	}
	description := struct {
		Name           string
		BIDSVersion    string
		DatasetType    string
		GeneratedBy    []generator
		SourceDatasets []source          `json:",omitempty"`
		DatasetLinks   map[string]string `json:",omitempty"` // of one key, so of one order
	}{
		Name: name, BIDSVersion: BIDSVersion, DatasetType: "derivative",
		GeneratedBy: []generator{{Name: "evenkeel", Version: d.Version,
			Description: "Slice timing and head motion of EPI BOLD series, corrected with one resampling of each volume"}},
	}
	if s := (source{URL: d.RawLink, DOI: d.SourceDOI, Version: d.SourceVersion}); s != (source{}) {
		description.SourceDatasets = []source{s}
	}
	description.DatasetLinks = map[string]string{RawName: d.link()}
	var b bytes.Buffer
	enc := json.NewEncoder(&b)
	enc.SetEscapeHTML(false)
	enc.SetIndent("", "  ")
	if err := enc.Encode(description); err != nil {
		panic("dataset: description does not encode: " + err.Error()) // strings always do
	}
	return b.Bytes()
}

// ReadmeText gives the content of OUT/README.
func (d Derivative) ReadmeText() []byte {
	var b strings.Builder
	of := ""
	if d.SourceName != "" {
		of = "\nRaw dataset: " + oneLine(d.SourceName) + "\n"
	}
	fmt.Fprintf(&b, `Steady BOLD series
==================

Written by evenkeel%s. In each series every voxel of a volume refers to one head
position and, where slices were moved in time, to one instant, as far as the settings
asked for it. Each record names the order chosen:
  joint        the anatomy that the reference predicts of each slice is taken out, what
               is left is moved in time and mapped to the reference once, and the
               reference's anatomy is put back: the anatomy of each output voxel comes
               from the reference, and only the remainder is interpolated
  time-first   slices are moved in time, then volumes are resampled
  space-first  the other way round
"Steady" in the names of files means no more than that: it does not say that volumes
from before the magnetisation was in equilibrium were removed.
%s
FOR RESEARCH ONLY. Not a medical device; not for diagnosis or treatment.
PRIVACY. Images of a head can identify a person. Share this folder under the same
rules as the raw data.

Files of each run
-----------------
STEM is the raw file's name without _bold.nii or _bold.nii.gz. The files stand in the
same sub-*/[ses-*/]func folder as the raw file.

`, version(d.Version), of)
	for _, o := range Outputs {
		for i, ext := range o.Exts {
			if i > 0 {
				b.WriteString(", " + ext)
				continue
			}
			b.WriteString(OutputPath(Run{Stem: "STEM"}, o.Desc, o.Suffix, ext))
		}
		b.WriteString("\n    " + o.Content + "\n")
	}
	b.WriteString(`
Files of the dataset
--------------------
runs.tsv, runs.json
    one row a run: its state, what refused it if it was refused, and its main figures;
    the .json describes every column, with its unit
dataset_description.json
    what made this dataset, and where the raw one is if that can be told without naming
    folders outside both (otherwise: evenkeel audit --dataset DIR)
.bidsignore
    the files above that BIDS has no name for yet

Time axis
---------
Volume n stands at StartTime + n RepetitionTime (the .json of the series) from the start of
the first raw volume, which raw events are counted from too. Where slices were not moved
in time (SlicesAtOneInstant is false) that is the start of the volume. So use the raw events and
take StartTime into account, or use the events table of this folder (if it was asked
for), whose onsets are on the time axis of the series already. Never both.

A run is complete when its record (_prov.json) is there: it is written last, and names
every other file with its digest. "evenkeel audit" checks them. Missing values in tables
are n/a. The columns of a pose table are described, with units, in the .json beside it;
the figures of quality carry their definitions.
`)
	return []byte(b.String())
}

func version(v string) string {
	if v == "" {
		return ""
	}
	return " " + v
}

func oneLine(s string) string { return strings.Join(strings.Fields(s), " ") }

// RawLinkFor decides how the derivative dataset in folder out says where the
// raw dataset in folder root is: as a path relative to out, a URI reference with
// slashes, or "" when that would tell more than a name of the dataset's own.
// The folders need not exist; links are resolved first. A path is given
//
//  1. when out lies in root (derivatives/x gives "../.."), or root in out
//     ("sourcedata/raw");
//  2. when both are in one folder ("../name");
//  3. when out is in a folder derivatives beside root ("../../name"), and in
//     cases 2 and 3 also when root is in a folder sourcedata there.
//
// None is given for 2 and 3 when the folder that holds both is the root of the
// file system or one of home folders, because the names in it are people's.
func RawLinkFor(out, root string) string {
	o, err := RealPath(out)
	if err != nil {
		return ""
	}
	r, err := RealPath(root)
	if err != nil {
		return ""
	}
	home, err := os.UserHomeDir()
	if err == nil {
		home, err = RealPath(home)
	}
	if err != nil {
		home = ""
	}
	return rawLink(o, r, home)
}

func rawLink(out, root, home string) string {
	rel, err := filepath.Rel(out, root)
	if err != nil || rel == "." {
		return ""
	}
	parts := strings.Split(filepath.ToSlash(rel), "/")
	up := 0
	for up < len(parts) && parts[up] == ".." {
		up++
	}
	down := parts[up:]
	if up > 0 && len(down) > 0 {
		common := out
		for range up {
			common = filepath.Dir(common)
		}
		nested := len(down) == 2 && down[0] == "sourcedata"
		level := up == 1 || up == 2 && filepath.Base(filepath.Dir(out)) == "derivatives"
		if !level || len(down) != 1 && !nested || holdsHomes(common, home) {
			return ""
		}
	}
	for i, p := range parts {
		parts[i] = url.PathEscape(p)
	}
	link := strings.Join(parts, "/")
	if strings.Contains(parts[0], ":") {
		link = "./" + link // or it would read as a scheme
	}
	return link
}

// holdsHomes reports whether a folder is one whose entries are named after people.
func holdsHomes(dir, home string) bool {
	if filepath.Dir(dir) == dir {
		return true
	}
	switch strings.ToLower(filepath.Base(dir)) {
	case "home", "homes", "users":
		return true
	}
	return home != "" && dir != home && inside(dir, home)
}

// RealPath resolves links in the part of a path that exists, so that two names of
// one folder compare equal.
func RealPath(p string) (string, error) {
	abs, err := filepath.Abs(p)
	if err != nil {
		return "", err
	}
	for dir, rest := abs, ""; ; dir, rest = filepath.Dir(dir), filepath.Join(filepath.Base(dir), rest) {
		if real, err := filepath.EvalSymlinks(dir); err == nil {
			return filepath.Join(real, rest), nil
		}
		if filepath.Dir(dir) == dir {
			return abs, nil
		}
	}
}

// FindRaw returns the folder of the raw dataset that the derivative dataset in
// folder out links to; ok is false when its description names none, or one that
// is not on this machine (a DOI). The folder need not exist.
func FindRaw(out string) (dir string, ok bool) {
	t, err := newTree(out)
	if err != nil {
		return "", false
	}
	w := walker{tree: t}
	data, err := w.readSmall("dataset_description.json")
	if err != nil {
		return "", false
	}
	o, ok := parseObject(data)
	if !ok {
		return "", false
	}
	link := text(o, "DatasetLinks."+RawName)
	if link == "" || strings.ContainsRune(link, 0) {
		return "", false
	}
	u, err := url.Parse(link)
	switch {
	case err != nil, u.Path == "", u.Host != "", u.Scheme != "" && u.Scheme != "file":
		return "", false
	case filepath.IsAbs(filepath.FromSlash(u.Path)):
		return filepath.FromSlash(u.Path), true
	case u.Scheme != "":
		return "", false
	}
	return filepath.Join(t.real, filepath.FromSlash(u.Path)), true
}
