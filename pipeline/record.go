package pipeline

import (
	"cmp"
	"path"
	"runtime"
	"runtime/debug"
	"slices"
	"strings"
	"time"

	"evenkeel/fault"
	"evenkeel/provenance"
	"evenkeel/sidecar"
)

// recorder gathers the log part of a record.
type recorder struct {
	started time.Time
	seconds map[string]float64
}

// What release/build.sh writes into the binaries that it makes (go build -ldflags -X): the
// revision of the source, and "true" when the source was not that revision's own.
var builtFrom, builtModified string

// Software names the program and its build, for records and for the version command. The
// revision is what a release was stamped with, or what Go found when it built from a checkout;
// "" for a program built from sources without git.
func Software() provenance.Software {
	s := provenance.Software{Name: "evenkeel", Version: Version, GoVersion: runtime.Version(),
		Revision: builtFrom, Modified: builtModified == "true"}
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return s
	}
	if builtFrom == "" {
		for _, set := range info.Settings {
			switch set.Key {
			case "vcs.revision":
				s.Revision = set.Value
			case "vcs.modified":
				s.Modified = set.Value == "true"
			}
		}
	}
	for _, d := range info.Deps {
		if d.Replace != nil {
			d = d.Replace
		}
		// A module replaced by a folder has a path of this machine.
		if strings.HasPrefix(d.Path, ".") || strings.HasPrefix(d.Path, "/") {
			continue
		}
		s.Modules = append(s.Modules, provenance.Module{Path: d.Path, Version: d.Version})
	}
	return s
}

// writeRecord writes the record of the run, last of its files.
func (p *Plan) writeRecord(pub *publisher, rec *recorder, inputs []provenance.File, m *measures, po *posed) error {
	r := provenance.Record{
		Run: p.Run.Stem, DatasetName: p.Dataset.Name,
		Inputs: inputs, Outputs: pub.files(),
		Settings: rawJSON(p.Settings),
		Accepted: p.accepted(),
		Software: Software(),
		Stages:   p.stages(m, po),
		Log: provenance.Log{Started: rec.started.UTC(), Ended: time.Now().UTC(), Architecture: runtime.GOARCH,
			CPUFeatures: CPUFeatures(), StageSeconds: rec.seconds},
	}
	for _, f := range p.Faults {
		r.Faults = append(r.Faults, rawJSON(f))
	}
	for _, f := range told(p.Acq) {
		r.Values = append(r.Values, provenance.Value{Key: f.Key, JSON: f.Raw, File: f.Origin.File})
	}
	data, err := r.Marshal()
	if err != nil {
		return err
	}
	return pub.writeBytes("record", p.Output("record"), data)
}

// told is every sidecar value that something written rests on, sorted by key: those that were
// used, and those that went into the sidecar of the series.
func told(a *sidecar.Acquisition) []sidecar.Field {
	all := slices.Concat(a.Used, a.Carried)
	slices.SortStableFunc(all, func(a, b sidecar.Field) int { return cmp.Compare(a.Key, b.Key) })
	return slices.CompactFunc(all, func(a, b sidecar.Field) bool { return a.Key == b.Key })
}

// accepted names the faults that the run has and the user accepted.
func (p *Plan) accepted() []string {
	var out []string
	for _, f := range p.Faults {
		k, _ := fault.Lookup(f.ID)
		if k.Level == fault.Refuse && f.Level == fault.Warn && !slices.Contains(out, f.ID) {
			out = append(out, f.ID)
		}
	}
	return out
}

// stages says what each step was told and what it did.
func (p *Plan) stages(m *measures, po *posed) []provenance.Stage {
	t := p.Timing
	var out []provenance.Stage
	add := func(name string, parameters, outcome object) {
		out = append(out, provenance.Stage{Name: name, Parameters: rawJSON(parameters), Outcome: rawJSON(outcome)})
	}
	n := p.Grid.N
	add("read", object{{"skip", p.Settings.Skip}}, object{{"size", []int{n[0], n[1], n[2], p.Volumes}}})
	if po.est != nil {
		par := object{{"motion", p.Settings.Motion}, {"reference", p.Settings.Reference.String()}, {"series", p.Pose.File}}
		for _, c := range po.est.Parameters {
			par.add(c.Name, num(c.Value))
		}
		vols := make([]object, len(po.est.Volumes))
		for i, v := range po.est.Volumes {
			vols[i] = object{{"state", v.State}, {"iterations", v.Iterations}}
			if v.Reason != "" {
				vols[i].add("reason", v.Reason)
			}
		}
		ref := object{{"reference_index", po.est.ReferenceIndex}, {"passes", po.est.Passes}, {"volumes", vols}}
		add("estimate", par, ref)
		if p.Settings.Motion == "path" {
			par := object{}
			for _, c := range po.path.Parameters {
				par.add(c.Name, num(c.Value))
			}
			add("path", par, po.pathOutcome())
		}
	}
	if t.Temporal {
		par := object{{"kernel", p.Settings.Time}, {"origin", num(t.Origin)}, {"repetition_time", num(t.TR)},
			{"slice_axis", string("ijk"[p.Schedule.Axis])}, {"slice_times", nums(p.Schedule.Times)}}
		if p.Settings.Time == "sinc" {
			par.add("reach", p.Settings.SincReach)
		}
		add("time", par, object{{"shots", len(p.Schedule.Shots())}, {"order", p.Schedule.Words()}})
	}
	if po.est != nil {
		add("space", object{{"spline", p.Settings.Space}, {"order", p.Settings.Order}}, object{{"spatial_interpolations", 1}})
	}
	add("measure", object{{"head_voxels", m.headVoxels()}}, object{{"max_shift", rounded(m.maxShift(), digitsMM)}})
	return out
}

// isOwn reports whether a path of OUT can only be a file of this run: it lies in
// the run's folder and its name is the run's stem with a desc of ours.
func isOwn(p *Plan, rel string) bool {
	return path.Dir(rel) == path.Dir(p.Output("record")) &&
		strings.HasPrefix(path.Base(rel), p.Run.Stem+"_desc-")
}
