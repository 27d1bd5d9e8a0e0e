package pipeline

import (
	"bytes"
	"cmp"
	"encoding/json"
	"os"
	"path/filepath"
	"slices"

	"evenkeel/provenance"
)

// upToDate returns the figures of a run whose record matches its inputs, the
// settings and the version, and whose every output is there with the size
// recorded; nil if it has to be computed. Cheap questions come first; the images
// are digested last.
func upToDate(out string, p *Plan) *Figures {
	at := func(rel string) string { return filepath.Join(out, filepath.FromSlash(rel)) }
	r, err := readRecord(at(p.Output("record")))
	if err != nil || r.Run != p.Run.Stem || r.Software.Version != Version {
		return nil
	}
	want, err := json.Marshal(p.Settings)
	if err != nil {
		return nil
	}
	var have bytes.Buffer
	if json.Compact(&have, r.Settings) != nil || !bytes.Equal(have.Bytes(), want) {
		return nil
	}
	if len(r.Outputs) != len(p.Outputs)-1 {
		return nil
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
		if !ok || err != nil || !info.Mode().IsRegular() || info.Size() != f.Bytes {
			return nil
		}
	}
	if len(r.Inputs) != len(p.Inputs) {
		return nil
	}
	inputs := slices.Clone(r.Inputs)
	slices.SortFunc(inputs, func(a, b provenance.File) int {
		return cmp.Or(cmp.Compare(a.Path, b.Path), cmp.Compare(a.Role, b.Role))
	})
	ours := slices.Clone(p.Inputs)
	slices.SortFunc(ours, func(a, b Input) int { return cmp.Or(cmp.Compare(a.Path, b.Path), cmp.Compare(a.Role, b.Role)) })
	for i, in := range ours {
		if f := inputs[i]; f.Path != in.Path || f.Role != in.Role || f.Bytes != in.stamp.size || (in.sha256 != "" && in.sha256 != f.SHA256) {
			return nil
		}
	}
	quality, err := os.ReadFile(at(p.Output("quality")))
	if err != nil {
		return nil
	}
	figures, err := parseFigures(quality)
	if err != nil {
		return nil
	}
	for i, in := range ours {
		if in.sha256 != "" {
			continue
		}
		sum, _, err := provenance.DigestFile(p.Dataset.Path(in.Path))
		if err != nil || sum != inputs[i].SHA256 {
			return nil
		}
	}
	return figures
}
