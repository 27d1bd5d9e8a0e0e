package pipeline

// The files of OUT that belong to no single run.

import (
	"bytes"
	"cmp"
	"context"
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
)

// CheckOut holds OUT against DATASET: on it or inside it, other than below its
// derivatives/, is a usage error, and so is a folder that holds another dataset.
func CheckOut(root, out string) error {
	r, o := realPath(root), realPath(out)
	rel, err := filepath.Rel(r, o)
	inside := err == nil && rel != ".." && !strings.HasPrefix(rel, ".."+string(filepath.Separator))
	if inside {
		parts := strings.Split(rel, string(filepath.Separator))
		if parts[0] != "derivatives" || len(parts) < 2 {
			return &UsageError{Where: out, Message: "lies on or inside the raw dataset; give a folder outside it, or below " + filepath.Join(root, "derivatives") + ", as in " + filepath.Join(root, "derivatives", "evenkeel")}
		}
	}
	data, err := os.ReadFile(filepath.Join(out, "dataset_description.json"))
	if err == nil && !isOurs(data) {
		return &UsageError{Where: out, Message: "holds a dataset that evenkeel did not write; give an empty or a new folder"}
	}
	return nil
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

// realPath resolves links as far as the path exists, so that two names of one
// folder compare equal.
func realPath(name string) string {
	abs, err := filepath.Abs(name)
	if err != nil {
		return filepath.Clean(name)
	}
	rest := ""
	for dir := abs; ; dir = filepath.Dir(dir) {
		if real, err := filepath.EvalSymlinks(dir); err == nil {
			return filepath.Join(real, rest)
		}
		if dir == filepath.Dir(dir) {
			return abs
		}
		rest = filepath.Join(filepath.Base(dir), rest)
	}
}

// writeDescriptions writes dataset_description.json, README and .bidsignore.
func writeDescriptions(ds *dataset.Dataset, out string) error {
	d := dataset.Derivative{
		SourceName: ds.Name, SourceDOI: ds.DOI, Version: Version,
		RawLink: dataset.RawLinkFor(out, ds.Root),
	}
	for _, f := range []struct {
		name string
		data []byte
	}{
		{"dataset_description.json", d.DescriptionJSON()},
		{"README", d.ReadmeText()},
		{".bidsignore", dataset.IgnoreText()},
	} {
		if err := replaceFile(filepath.Join(out, f.name), f.name, f.data); err != nil {
			return err
		}
	}
	return nil
}

// runColumns are the columns of runs.tsv, each with what it holds.
var runColumns = []struct {
	name string
	cell func(r runRow) string
}{
	{"run", func(r runRow) string { return r.run }},
	{"file", func(r runRow) string { return r.file }},
	{"state", func(r runRow) string { return r.state }},
	{"fault", func(r runRow) string { return r.fault }},
	{"volumes", func(r runRow) string { return r.count(func(f *Figures) int { return f.Volumes }) }},
	{"aligned", func(r runRow) string { return r.count(func(f *Figures) int { return f.Aligned }) }},
	{"doubtful", func(r runRow) string { return r.count(func(f *Figures) int { return f.Doubtful }) }},
	{"lost", func(r runRow) string { return r.count(func(f *Figures) int { return f.Lost }) }},
	{"mean_fd", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MeanFD }) }},
	{"max_fd", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MaxFD }) }},
	{"mean_rms_ball", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MeanRMS }) }},
	{"max_shift", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MaxShift }) }},
	{"mean_dvars_raw", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MeanDVARSRaw }) }},
	{"mean_dvars_steady", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MeanDVARSSteady }) }},
	{"median_tsnr_raw", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MedianTSNRRaw }) }},
	{"median_tsnr_steady", func(r runRow) string { return r.figure(func(f *Figures) float64 { return f.MedianTSNRSteady }) }},
}

type runRow struct {
	run, file, state, fault string
	figures                 *Figures
	cells                   []string // a row kept from the table as it stood
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

// writeRuns rebuilds runs.tsv: a row "done" for every record in OUT, and a row for
// every run refused or failed, in this invocation or, as the table said so
// far, in an earlier one that had other runs to do (another part of the cohort).
func writeRuns(ctx context.Context, out string, outcomes []Outcome) error {
	// Parts of a cohort may end at the same time.
	lock, err := lockFile(ctx, filepath.Join(out, ".runs.tsv.lock"), nil)
	if err != nil {
		return err
	}
	defer lock.release()
	rows := map[string]runRow{}
	name := filepath.Join(out, "runs.tsv")
	if data, err := os.ReadFile(name); err == nil {
		for _, r := range keptRows(data) {
			rows[r.run] = r
		}
	}
	for _, o := range outcomes {
		delete(rows, o.Plan.Run.Stem)
		if o.State == RefusedRun || o.State == Failed {
			rows[o.Plan.Run.Stem] = runRow{run: o.Plan.Run.Stem, file: o.Plan.Run.File, state: string(o.State), fault: firstFault(o)}
		}
	}
	err = walkRecords(out, func(rel string, r *provenance.Record) {
		row := runRow{run: r.Run, state: string(Done), fault: "n/a"}
		for _, f := range r.Inputs {
			if f.Role == "series" {
				row.file = f.Path
			}
		}
		for _, f := range r.Outputs {
			if f.Role == "quality" {
				if data, err := os.ReadFile(filepath.Join(out, filepath.FromSlash(f.Path))); err == nil {
					row.figures, _ = parseFigures(data)
				}
			}
		}
		if have, ok := rows[r.Run]; ok && have.cells == nil {
			// Refused now, but complete once: the files are still there
			// and whole, and what keeps them from being made again is
			// what needs attention.
			have.figures = row.figures
			rows[r.Run] = have
			return
		}
		rows[r.Run] = row
	})
	if err != nil {
		return err
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
	return replaceFile(name, "runs.tsv", b.Bytes())
}

func firstFault(o Outcome) string {
	for _, f := range o.Faults {
		if f.Level == "error" {
			return f.ID
		}
	}
	return "n/a"
}

// keptRows returns the rows of an earlier table that no record speaks for.
func keptRows(data []byte) []runRow {
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
		if len(cells) == len(head) && (cells[2] == string(RefusedRun) || cells[2] == string(Failed)) {
			out = append(out, runRow{run: cells[0], file: cells[1], state: cells[2], fault: cells[3], cells: cells})
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
