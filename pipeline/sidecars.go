package pipeline

import (
	"encoding/json"
	"slices"

	"evenkeel/dataset"
)

// sources gives the BIDS URIs of the images the series is computed from.
func (p *Plan) sources() []string {
	var out []string
	for _, in := range p.Inputs {
		if in.Role != "sidecar" && in.Role != "events" {
			out = append(out, dataset.URI(dataset.RawName, in.Path))
		}
	}
	return out
}

// timingFields are written by us from the plan: as they stand in the raw sidecar
// they may not be true of the output.
var timingFields = []string{"RepetitionTime", "VolumeTiming", "SliceTiming", "SliceEncodingDirection", "StartTime", "SlicesAtOneInstant", "DelayTime", "FrameAcquisitionDuration"}

// steadySidecar describes the series.
func (p *Plan) steadySidecar(po *posed) []byte {
	t, a := p.Timing, p.Acq
	var o object
	o.add("Description", "BOLD series: "+p.did(po))
	o.add("Sources", p.sources())
	o.add("SkullStripped", false)
	if p.Settings.Motion == "none" {
		// Nothing was moved: the series stands on its own raw grid.
		o.add("SpatialReference", "orig")
	} else {
		o.add("SpatialReference", dataset.URI("", p.Output("reference")))
	}
	if t.Onsets != nil && t.TR == 0 {
		o.add("VolumeTiming", nums(t.Onsets))
		// Onsets are complete only with the duration of a volume or the times
		// of its slices (BIDS, "Timing parameters").
		if a.FrameDuration > 0 {
			o.add("FrameAcquisitionDuration", num(a.FrameDuration))
		}
	} else if t.TR > 0 {
		o.add("RepetitionTime", num(t.TR))
	}
	o.add("StartTime", num(t.StartTime))
	o.add("SlicesAtOneInstant", t.AtOneInstant)
	if a.DelayTime > 0 && t.TR > 0 {
		o.add("DelayTime", num(a.DelayTime))
	}
	if p.Settings.Skip > 0 {
		o.add("NumberOfVolumesDiscardedByUser", p.Settings.Skip)
	}
	needed := t.Onsets != nil && t.TR == 0 && a.FrameDuration == 0
	if len(a.SliceTimes) > 0 && (!t.AtOneInstant || needed) {
		// By increasing slice index, whatever direction the raw sidecar gave.
		o.add("SliceTiming", nums(a.SliceTimes))
		o.add("SliceEncodingDirection", string("ijk"[a.SliceAxis]))
	}
	if a.TaskName != "" {
		o.add("TaskName", a.TaskName)
	}
	for _, f := range a.Carried {
		taken := slices.Contains(timingFields, f.Key) ||
			slices.ContainsFunc(o, func(m member) bool { return m.key == f.Key })
		if !taken {
			o.add(f.Key, json.RawMessage(f.Raw))
		}
	}
	return o.file()
}

func (p *Plan) referenceSidecar(po *posed) []byte {
	var o object
	how := "; raw intensities, not moved in time."
	what := map[string]string{
		"mean":   "Average of the aligned volumes, mapped back by one pose a volume and standing at the pose of the first of them",
		"first":  "The first volume kept",
		"middle": "The middle volume of those kept",
		"sbref":  "The run's single-band reference",
		"":       "The volume chosen among those kept",
	}[p.Settings.Reference.Word]
	if p.Settings.Reference.Word == "mean" {
		switch {
		case po.est == nil:
			what = "Average of all volumes kept, as they stand"
		case po.path.Used:
			what = "Average of the aligned volumes, standing at the pose of the first of them: in and around the head rebuilt from all of them, slice by slice along the pose path, their differences in brightness taken out, and sharpened by what it failed to predict of them; further out the plain average"
			how = "; not moved in time."
		}
	}
	if p.Pose.File != p.Run.File {
		what += ", from the shortest echo"
	}
	o.add("Description", what+how)
	uris := []string{dataset.URI(dataset.RawName, p.Pose.File)}
	if p.Settings.Reference.Word == "sbref" {
		uris = []string{dataset.URI(dataset.RawName, p.Pose.SBRef)}
	}
	o.add("Sources", uris)
	o.add("SkullStripped", false)
	o.add("SpatialReference", "orig")
	return o.file()
}

func (p *Plan) maskSidecar() []byte {
	var o object
	o.add("Description", "The head in the reference: 1 inside, 0 outside. Motion is estimated from these voxels and a thin rim around them, without the outermost planes of the field of view (the record says how many of each); figures are taken over these.")
	o.add("Sources", []string{dataset.URI("", p.Output("reference"))})
	o.add("SpatialReference", dataset.URI("", p.Output("reference")))
	return o.file()
}
