package pipeline

// The files of OUT that belong to no single run.

import (
	"bytes"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"github.com/tidwall/gjson"

	"evenkeel/dataset"
	"evenkeel/provenance"
	"evenkeel/quality"
)

// CheckOut holds OUT against DATASET: on it or inside it, other than below its
// derivatives/, is a usage error, and so is a folder that holds another dataset or
// anything else that is not ours: nobody's README is to be written over.
func CheckOut(root, out string) error {
	r, o, err := realPaths(root, out)
	if err != nil {
		return &UsageError{Where: out, Message: cause(err).Error()}
	}
	rel, err := filepath.Rel(r, o)
	inside := err == nil && rel != ".." && !strings.HasPrefix(rel, ".."+string(filepath.Separator))
	if inside {
		parts := strings.Split(rel, string(filepath.Separator))
		if parts[0] != "derivatives" || len(parts) < 2 {
			return &UsageError{Where: out, Message: "lies on or inside the raw dataset; give a folder outside it, or below " + filepath.Join(root, "derivatives") + ", as in " + filepath.Join(root, "derivatives", "evenkeel")}
		}
	}
	const remedy = "; give an empty or a new folder"
	data, err := readOwn(filepath.Join(o, descriptionName))
	switch {
	case err == nil && isOurs(data):
		return nil
	case err == nil:
		return &UsageError{Where: out, Message: "holds a dataset that evenkeel did not write" + remedy}
	}
	entries, err := os.ReadDir(o)
	if err != nil {
		return nil // not there yet, or no folder: creating it tells
	}
	for _, e := range entries {
		// The description is the first file written, so that a first invocation
		// that died before has left a hidden one at most. Other hidden names
		// (of a version control system, of a desktop) do not make a folder
		// somebody's work, but for the one that we would replace.
		if strings.HasPrefix(e.Name(), ".") && e.Name() != ".bidsignore" {
			continue
		}
		return &UsageError{Where: out, Message: "is not empty (" + e.Name() + ") and evenkeel did not write it" + remedy}
	}
	return nil
}

const descriptionName = "dataset_description.json"

// commonLock is held by whoever writes a file of OUT that belongs to no single run.
const commonLock = ".runs.tsv.lock"

func realPaths(a, b string) (ra, rb string, err error) {
	if ra, err = dataset.RealPath(a); err == nil {
		rb, err = dataset.RealPath(b)
	}
	return ra, rb, err
}

func isOurs(description []byte) bool {
	if !gjson.ValidBytes(description) {
		return false
	}
	ours := false
	for _, g := range gjson.GetBytes(description, "GeneratedBy").Array() {
		ours = ours || g.Get("Name").String() == "evenkeel"
	}
	return ours
}

// writeDescriptions writes dataset_description.json, README, .bidsignore and
// runs.json. The description comes first: it marks the folder as ours. Hidden files
// of any of them, and of runs.tsv, that a process left that died are removed.
func writeDescriptions(ctx context.Context, ds *dataset.Dataset, out string) error {
	d := dataset.Derivative{
		SourceName: ds.Name, SourceDOI: ds.DOI, Version: Version,
		RawLink: dataset.RawLinkFor(out, ds.Root),
	}
	files := []struct {
		name string
		data []byte
	}{
		{descriptionName, d.DescriptionJSON()},
		{"README", d.ReadmeText()},
		{".bidsignore", dataset.IgnoreText()},
		{"runs.json", runsDescription()},
	}
	names, same := []string{"runs.tsv"}, true
	for _, f := range files {
		names = append(names, f.name)
		have, err := readOwn(filepath.Join(out, f.name))
		same = same && err == nil && bytes.Equal(have, f.data)
	}
	if same && len(leftovers(out, names)) == 0 {
		return nil
	}
	// Another process may be writing them too.
	lock, err := lockFile(ctx, filepath.Join(out, commonLock), nil)
	switch create := (*CreateError)(nil); {
	case errors.As(err, &create) && same:
		return nil // nothing can be removed, and nothing has to be written
	case errors.As(err, &create):
		return &CreateError{Path: "a file in " + out, Err: cause(create.Err)}
	case err != nil:
		return err
	}
	defer lock.release()
	sweep(out, names)
	for _, f := range files {
		if err := replaceFile(filepath.Join(out, f.name), f.name, f.data); err != nil {
			return err
		}
	}
	return nil
}

// A runColumn is a column of runs.tsv. Its description in runs.json is given here,
// or made from that of the figure that it summarises.
type runColumn struct {
	name   string
	cell   func(r runRow) string
	text   string          // "" with figure
	figure string          // a name of quality.Definitions
	levels []quality.Level // for a column of words
	of     string          // what is taken of the figure's values: "" for a single one
}

func words(name, text string, cell func(r runRow) string, levels ...quality.Level) runColumn {
	return runColumn{name: name, text: text, cell: cell, levels: levels}
}

func counted(name, figure string, get func(*Figures) int) runColumn {
	return runColumn{name: name, figure: figure, cell: func(r runRow) string { return r.count(get) }}
}

func measured(name, of, figure string, get func(*Figures) float64) runColumn {
	return runColumn{name: name, of: of, figure: figure, cell: func(r runRow) string { return r.figure(get) }}
}

// runColumns are the columns of runs.tsv, in their order.
var runColumns = []runColumn{
	words("run", "The run: the raw file's name without _bold.nii or _bold.nii.gz.", func(r runRow) string { return r.run }),
	words("file", "The raw file, relative to the raw dataset.", func(r runRow) string { return r.file }),
	words("state", "How the run ended, in this invocation or the last one that had it to do.", func(r runRow) string { return r.state },
		quality.Level{Value: string(Done), Description: "Every file of the run is there."},
		quality.Level{Value: string(RefusedRun), Description: "The run was refused for its data; fault says why. Files of an earlier time may still be there; no figures of them are given."},
		quality.Level{Value: string(Failed), Description: "Reading or writing broke off; the log of the invocation says where."},
		quality.Level{Value: string(Interrupted), Description: "The invocation was interrupted before the run was done; the same command goes on."}),
	words("fault", "The identifier of the first fault that refused the run.", func(r runRow) string { return r.fault }),
	counted("volumes", "volumes", func(f *Figures) int { return f.Volumes }),
	counted("aligned", "volumes_aligned", func(f *Figures) int { return f.Aligned }),
	counted("doubtful", "volumes_doubtful", func(f *Figures) int { return f.Doubtful }),
	counted("lost", "volumes_lost", func(f *Figures) int { return f.Lost }),
	measured("mean_fd", "Mean", "fd", func(f *Figures) float64 { return f.MeanFD }),
	measured("max_fd", "Largest value", "fd", func(f *Figures) float64 { return f.MaxFD }),
	measured("mean_fd_aligned", "", "mean_fd_aligned", func(f *Figures) float64 { return f.MeanFDAligned }),
	measured("mean_expected_error", "Mean", "expected_error", func(f *Figures) float64 { return f.ExpectedError }),
	measured("mean_rms_ball", "Mean", "rms_ball", func(f *Figures) float64 { return f.MeanRMS }),
	measured("max_shift", "", "max_shift", func(f *Figures) float64 { return f.MaxShift }),
	measured("mean_dvars_raw", "Mean", "dvars_raw", func(f *Figures) float64 { return f.MeanDVARSRaw }),
	measured("mean_dvars_steady", "Mean", "dvars_steady", func(f *Figures) float64 { return f.MeanDVARSSteady }),
	measured("median_tsnr_raw", "Median over the head", "tsnr_raw", func(f *Figures) float64 { return f.MedianTSNRRaw }),
	measured("median_tsnr_steady", "Median over the head", "tsnr_steady", func(f *Figures) float64 { return f.MedianTSNRSteady }),
	words("motion", "The setting motion that the run was done with: path, volume or none.", func(r runRow) string { return r.setting("motion") }),
	words("order", "The setting order that the run was done with: joint, time-first or space-first.", func(r runRow) string { return r.setting("order") }),
	words("pose_path", quality.Define("pose_path").Description+" n/a where these were not asked for.", func(r runRow) string {
		if r.figures == nil {
			return "n/a"
		}
		return cmp.Or(r.figures.PosePath, "n/a")
	}, quality.Define("pose_path").Levels...),
	words("outside_limits", "The columns of this row that are above a limit given to the invocation that last had the run to do, with commas between; n/a when none is.",
		func(r runRow) string { return r.outside }),
}

// runsDescription is the data dictionary of runs.tsv (BIDS, "Tabular files").
func runsDescription() []byte {
	var o object
	for _, c := range runColumns {
		var d object
		if c.figure == "" {
			d.add("Description", c.text)
			d.add("Units", "n/a")
		} else {
			def := quality.Define(c.figure)
			if c.of == "" {
				d.add("Description", def.Description)
			} else {
				d.add("Description", c.of+" of "+c.figure+", over the values that its summary covers. "+c.figure+": "+def.Description)
			}
			d.add("Units", def.Unit)
			d.add("Source", def.Source)
		}
		if len(c.levels) > 0 {
			d.add("Levels", levelsObject(c.levels))
		}
		o.add(c.name, d)
	}
	return o.file()
}

type runRow struct {
	run, file, state, fault string
	outside                 string // columns above a limit, with commas; or n/a
	figures                 *Figures
	settings                json.RawMessage // of the record
	cells                   []string        // a row kept from the table as it stood
}

// setting gives a setting that is a word.
func (r runRow) setting(key string) string {
	return cmp.Or(gjson.GetBytes(r.settings, key).String(), "n/a")
}

func (r runRow) count(get func(*Figures) int) string {
	if r.figures == nil {
		return "n/a"
	}
	return strconv.Itoa(get(r.figures))
}

func (r runRow) figure(get func(*Figures) float64) string {
	if r.figures == nil {
		return "n/a"
	}
	v := get(r.figures)
	if v != v {
		return "n/a"
	}
	return decimal(v, 4)
}

// writeRuns rebuilds runs.tsv: a row for every run refused, failed or interrupted, in this
// invocation or, as the table said so far, in an earlier one that had other runs
// to do (another part of the cohort); and a row "done" for every other record in OUT.
// A run refused now whose outputs of an earlier time are still there counts as refused and has
// no figures: theirs are not of the inputs as they are.
func writeRuns(ctx context.Context, out string, outcomes []Outcome) error {
	// Parts of a cohort may end at the same time.
	name := filepath.Join(out, "runs.tsv")
	lock, err := lockFile(ctx, filepath.Join(out, commonLock), nil)
	if create := (*CreateError)(nil); errors.As(err, &create) {
		// Nothing can be written, which is no matter where nothing changes.
		table, terr := runsTable(out, outcomes)
		if have, rerr := readOwn(name); terr == nil && rerr == nil && bytes.Equal(have, table) {
			return nil
		}
		return &CreateError{Path: "a file in " + out, Err: cause(create.Err)}
	}
	if err != nil {
		return err
	}
	defer lock.release()
	table, err := runsTable(out, outcomes)
	if err != nil {
		return err
	}
	return replaceFile(name, "runs.tsv", table)
}

// runsTable makes the content of runs.tsv.
func runsTable(out string, outcomes []Outcome) ([]byte, error) {
	rows := map[string]runRow{}
	outside := map[string]string{} // by run
	if data, err := readOwn(filepath.Join(out, "runs.tsv")); err == nil {
		for _, r := range earlierRows(data) {
			outside[r.run] = r.outside
			if r.state != string(Done) {
				rows[r.run] = r
			}
		}
	}
	for _, o := range outcomes {
		delete(rows, o.Plan.Run.Stem)
		columns := []string{}
		for _, b := range o.Outside {
			columns = append(columns, b.Column)
		}
		outside[o.Plan.Run.Stem] = strings.Join(columns, ",")
		if o.State == RefusedRun || o.State == Failed || o.State == Interrupted {
			rows[o.Plan.Run.Stem] = runRow{run: o.Plan.Run.Stem, file: o.Plan.Run.File, state: string(o.State), fault: firstFault(o), outside: "n/a"}
		}
	}
	err := walkRecords(out, func(rel string, r *provenance.Record) {
		if _, ok := rows[r.Run]; ok {
			return // what keeps the run from being done is what needs attention
		}
		row := runRow{run: r.Run, state: string(Done), fault: "n/a", settings: r.Settings, outside: cmp.Or(outside[r.Run], "n/a")}
		for _, f := range r.Inputs {
			if f.Role == "series" {
				row.file = f.Path
			}
		}
		for _, f := range r.Outputs {
			if f.Role == "quality" {
				if data, err := readOwn(filepath.Join(out, filepath.FromSlash(f.Path))); err == nil {
					row.figures, _ = parseFigures(data)
				}
			}
		}
		rows[r.Run] = row
	})
	if err != nil {
		return nil, err
	}
	sorted := make([]runRow, 0, len(rows))
	for _, r := range rows {
		sorted = append(sorted, r)
	}
	slices.SortFunc(sorted, func(a, b runRow) int { return cmp.Or(cmp.Compare(a.file, b.file), cmp.Compare(a.run, b.run)) })
	var b bytes.Buffer
	for i, c := range runColumns {
		if i > 0 {
			b.WriteByte('\t')
		}
		b.WriteString(c.name)
	}
	b.WriteByte('\n')
	for _, r := range sorted {
		cells := r.cells
		if cells == nil {
			for _, c := range runColumns {
				cells = append(cells, c.cell(r))
			}
		}
		b.WriteString(strings.Join(cells, "\t") + "\n")
	}
	return b.Bytes(), nil
}

func firstFault(o Outcome) string {
	for _, f := range o.Faults {
		if f.Level == "error" {
			return f.ID
		}
	}
	return "n/a"
}

// earlierRows returns the rows of the table as it stands; nil if another version wrote it.
func earlierRows(data []byte) []runRow {
	lines := strings.Split(strings.TrimSuffix(string(data), "\n"), "\n")
	head := strings.Split(lines[0], "\t")
	if len(head) != len(runColumns) {
		return nil // of another version
	}
	for i, c := range runColumns {
		if head[i] != c.name {
			return nil
		}
	}
	var out []runRow
	for _, line := range lines[1:] {
		cells := strings.Split(line, "\t")
		if len(cells) == len(head) {
			out = append(out, runRow{run: cells[0], file: cells[1], state: cells[2], fault: cells[3], outside: cells[len(cells)-1], cells: cells})
		}
	}
	return out
}

// walkRecords calls fn for every record in OUT that can be read, in the order of
// their paths.
func walkRecords(out string, fn func(rel string, r *provenance.Record)) error {
	err := filepath.WalkDir(out, func(name string, d fs.DirEntry, err error) error {
		if err != nil {
			if errors.Is(err, fs.ErrNotExist) {
				return nil // taken away meanwhile by another process
			}
			return err
		}
		if d.IsDir() || !strings.HasSuffix(name, "_desc-steady_prov.json") || strings.HasPrefix(d.Name(), ".") {
			return nil
		}
		r, err := readRecord(name)
		if err != nil {
			return nil // audit says what is wrong with it
		}
		rel, err := filepath.Rel(out, name)
		if err == nil {
			fn(filepath.ToSlash(rel), r)
		}
		return nil
	})
	if err != nil {
		return &IOError{Path: "runs.tsv", Step: "looking for records", Err: err}
	}
	return nil
}
