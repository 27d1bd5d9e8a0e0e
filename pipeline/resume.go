package pipeline

import (
	"bytes"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"

	"evenkeel/internal/parallel"
	"evenkeel/provenance"
)

// Standing is what OUT holds of a run before it is processed.
type Standing struct {
	// Figures are those of a run that is up to date: its record matches its
	// inputs, the settings and the version, and every output is there with
	// the size recorded. nil otherwise.
	Figures *Figures
	// Why says why a run that OUT holds something of has to be computed again; "" for
	// one that is up to date, and for one that OUT holds nothing of.
	Why string
}

// String gives the standing for people: "up to date", "new", or "again: ..." with the reason.
func (s Standing) String() string {
	switch {
	case s.Figures != nil:
		return "up to date"
	case s.Why != "":
		return "again: " + s.Why
	}
	return "new"
}

// Standings says for every plan how its run stands in out, in the order of the plans, so
// that what [Steady] would do can be told without doing it. Plans that are refused have the zero value.
// Images of runs that may be up to date are digested; the error is that of ctx.
func Standings(ctx context.Context, plans []*Plan, out string, redo bool, workers int) ([]Standing, error) {
	standings := make([]Standing, len(plans))
	err := parallel.For(ctx, max(1, workers), len(plans), func(_, i int) error {
		if !plans[i].Runs() {
			return nil
		}
		var err error
		standings[i], err = standing(ctx, out, plans[i], redo)
		return err
	})
	return standings, err
}

// standing compares a run with what OUT holds of it. Cheap questions come first; the images
// are digested last. The error is that of ctx.
func standing(ctx context.Context, out string, p *Plan, redo bool) (Standing, error) {
	again := func(format string, a ...any) (Standing, error) {
		return Standing{Why: fmt.Sprintf(format, a...)}, nil
	}
	at := func(rel string) string { return filepath.Join(out, filepath.FromSlash(rel)) }
	r, err := readRecord(at(p.Output("record")))
	switch {
	case errors.Is(err, fs.ErrNotExist):
		for _, o := range p.Outputs {
			if _, err := os.Lstat(at(o.Path)); err == nil {
				return again("record missing")
			}
		}
		return Standing{}, nil
	case redo:
		return again("--redo")
	case err != nil:
		return again("record cannot be read")
	case r.Run != p.Run.Stem:
		return again("record of another run")
	case r.Software.Version != Version:
		return again("version %s -> %s", r.Software.Version, Version)
	}
	if differ := settingsDiffer(r.Settings, p.Settings); differ != "" {
		return again("%s", differ)
	}
	recorded := map[string]provenance.File{}
	for _, f := range r.Outputs {
		recorded[f.Path] = f
	}
	for _, o := range p.Outputs {
		if o.Role == "record" {
			continue
		}
		f, ok := recorded[o.Path]
		info, err := os.Stat(at(o.Path))
		switch {
		case !ok:
			return again("file not in the record: %s", path.Base(o.Path))
		case err != nil || !info.Mode().IsRegular():
			return again("file missing: %s", path.Base(o.Path))
		case info.Size() != f.Bytes:
			return again("file changed: %s", path.Base(o.Path))
		}
	}
	if len(r.Outputs) != len(p.Outputs)-1 {
		return again("the record names other files")
	}
	inputs := slices.Clone(r.Inputs)
	slices.SortFunc(inputs, func(a, b provenance.File) int {
		return cmp.Or(cmp.Compare(a.Path, b.Path), cmp.Compare(a.Role, b.Role))
	})
	ours := slices.Clone(p.Inputs)
	slices.SortFunc(ours, func(a, b Input) int { return cmp.Or(cmp.Compare(a.Path, b.Path), cmp.Compare(a.Role, b.Role)) })
	for _, in := range ours {
		if !slices.ContainsFunc(inputs, func(f provenance.File) bool { return f.Path == in.Path && f.Role == in.Role }) {
			return again("input new: %s", path.Base(in.Path))
		}
	}
	for _, f := range inputs {
		if !slices.ContainsFunc(ours, func(in Input) bool { return f.Path == in.Path && f.Role == in.Role }) {
			return again("input no longer used: %s", path.Base(f.Path))
		}
	}
	if len(inputs) != len(ours) {
		return again("other inputs")
	}
	for i, in := range ours {
		if f := inputs[i]; f.Bytes != in.stamp.size || (in.sha256 != "" && in.sha256 != f.SHA256) {
			return again("input changed: %s", path.Base(in.Path))
		}
	}
	quality, err := readOwn(at(p.Output("quality")))
	if err != nil {
		return again("file cannot be read: %s", path.Base(p.Output("quality")))
	}
	figures, err := parseFigures(quality)
	if err != nil {
		return again("file changed: %s", path.Base(p.Output("quality")))
	}
	for i, in := range ours {
		if in.sha256 != "" {
			continue
		}
		if err := ctx.Err(); err != nil {
			return Standing{}, err
		}
		sum, _, err := provenance.DigestFile(ctx, p.Dataset.Path(in.Path))
		switch {
		case ctx.Err() != nil:
			return Standing{}, ctx.Err()
		case err != nil:
			return again("input cannot be read: %s", path.Base(in.Path))
		case sum != inputs[i].SHA256:
			return again("input changed: %s", path.Base(in.Path))
		}
	}
	return Standing{Figures: figures}, nil
}

// settingsDiffer names the settings in which a record's differ from those asked for: "time
// fourier -> sinc"; "" when they are equal.
func settingsDiffer(recorded json.RawMessage, asked Settings) string {
	want, err := json.Marshal(asked)
	if err != nil {
		panic("pipeline: settings cannot be written as JSON: " + err.Error())
	}
	var compact bytes.Buffer
	if json.Compact(&compact, recorded) == nil && bytes.Equal(compact.Bytes(), want) {
		return ""
	}
	var have, now map[string]json.RawMessage
	if json.Unmarshal(recorded, &have) != nil || json.Unmarshal(want, &now) != nil {
		return "other settings"
	}
	plain := func(v json.RawMessage) string {
		var c bytes.Buffer
		if json.Compact(&c, v) != nil || c.Len() == 0 {
			return "nothing"
		}
		return strings.ReplaceAll(c.String(), `"`, "")
	}
	var parts []string
	for _, c := range Choices {
		if a, b := plain(have[c.Key]), plain(now[c.Key]); a != b {
			parts = append(parts, fmt.Sprintf("%s %s -> %s", c.Option(), a, b))
		}
	}
	if len(parts) == 0 {
		return "other settings"
	}
	return strings.Join(parts, ", ")
}
