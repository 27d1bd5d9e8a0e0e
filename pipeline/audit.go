package pipeline

import (
	"context"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/tidwall/gjson"

	"evenkeel/dataset"
	"evenkeel/provenance"
)

// Audit checks every record in out against the files it names, and against the
// raw files in raw; with raw "" they are looked for where out's DatasetLinks say.
// The raw dataset that was used is returned, "" if none could be found. A raw that
// was given and is not there is a [*dataset.NotFound], and so is a missing out.
// Findings that are no differences ([provenance.Finding.Difference]) are among
// the findings. done, if not nil, is told how many files of how many are
// digested. When ctx ends, so does the audit, with the error of ctx.
func Audit(ctx context.Context, out, raw string, done func(done, of int)) ([]provenance.Finding, provenance.Checked, string, error) {
	if err := isFolder(out); err != nil {
		return nil, provenance.Checked{}, "", &dataset.NotFound{Root: out, Err: err}
	}
	if raw != "" {
		if err := isFolder(raw); err != nil {
			return nil, provenance.Checked{}, "", &dataset.NotFound{Root: raw, Err: err}
		}
	} else {
		raw, _ = LinkedRaw(out)
	}
	findings, checked, err := provenance.Auditor{Out: out, Raw: raw, Version: Version, Workers: Cores(), Done: done}.Audit(ctx)
	if ctx.Err() != nil {
		return nil, checked, raw, ctx.Err()
	}
	if err != nil {
		return findings, checked, raw, &IOError{Path: out, Step: "auditing", Err: err}
	}
	if description, _ := readOwn(filepath.Join(out, descriptionName)); checked.Records == 0 && len(findings) == 0 && !isOurs(description) {
		return nil, checked, raw, &dataset.NotFound{Root: out, Err: errors.New("no dataset of evenkeel's, and no record (*_desc-steady_prov.json) in it")}
	}
	return findings, checked, raw, nil
}

func isFolder(name string) error {
	info, err := os.Stat(name)
	if err != nil {
		return cause(err)
	}
	if !info.IsDir() {
		return &fs.PathError{Op: "open", Path: name, Err: errors.New("not a folder")}
	}
	return nil
}

// LinkedRaw finds the raw dataset through DatasetLinks. With raw "", why says in words
// why there is none: OUT may have been moved, and whatever lies where the link
// now leads is not to be taken for the data.
func LinkedRaw(out string) (raw, why string) {
	raw, ok := dataset.FindRaw(out)
	if !ok {
		return "", "OUT does not tell where the raw dataset is"
	}
	link := raw
	if data, err := readOwn(filepath.Join(out, descriptionName)); err == nil {
		if v := gjson.GetBytes(data, "DatasetLinks."+dataset.RawName).String(); v != "" {
			link = v
		}
	}
	if isFolder(raw) != nil {
		return "", "the raw dataset is not at " + link
	}
	// A raw dataset has a description or, where that was forgotten, subjects.
	entries, _ := os.ReadDir(raw)
	if !slices.ContainsFunc(entries, func(e fs.DirEntry) bool {
		return e.Name() == descriptionName || strings.HasPrefix(e.Name(), "sub-")
	}) {
		return "", "the raw dataset is not at " + link
	}
	return raw, ""
}
