package pipeline

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"evenkeel/fault"
)

// Direction is the phase-encode axis of a run, in the words of its array and of
// the body.
type Direction struct {
	Axis string // "j-", as the sidecar says it; "j" with an unknown sign would be "j?"
	Body string // "A>P": from anterior to posterior, along the nearest world axis
}

// PhaseEncode describes the run's phase encoding; both words are "" when the
// sidecar does not tell.
func (p *Plan) PhaseEncode() Direction {
	a := p.Acq
	if a == nil || a.PhaseAxis < 0 || a.PhaseAxis > 2 || a.PhaseSign == 0 {
		return Direction{}
	}
	axis := string("ijk"[a.PhaseAxis])
	if a.PhaseSign < 0 {
		axis += "-"
	}
	// The column of the affine is where one step along the array axis leads.
	ends := [3][2]string{{"L", "R"}, {"P", "A"}, {"I", "S"}}
	best, size := 0, -1.0
	for w := range 3 {
		if v := math.Abs(p.Grid.Affine[4*w+a.PhaseAxis]); v > size {
			best, size = w, v
		}
	}
	from, to := ends[best][0], ends[best][1]
	if p.Grid.Affine[4*best+a.PhaseAxis]*float64(a.PhaseSign) < 0 {
		from, to = to, from
	}
	return Direction{Axis: axis, Body: from + ">" + to}
}

// VoxelMM gives the spacing of the grid along its three axes, in mm.
func (p *Plan) VoxelMM() [3]float64 {
	var out [3]float64
	for k := range out {
		s := 0.0
		for w := range 3 {
			v := p.Grid.Affine[4*w+k]
			s += float64(v * v)
		}
		out[k] = math.Sqrt(s)
	}
	return out
}

// ScheduleWords describes the slice schedule for people, "" when it is not known.
func (p *Plan) ScheduleWords() string {
	switch {
	case p.Acq == nil:
		return ""
	case p.Acq.ThreeDimensional:
		return "three-dimensional"
	case len(p.Schedule.Times) == 0 && slices.ContainsFunc(p.Faults, func(f fault.Fault) bool {
		return f.Level == fault.Refuse && strings.HasPrefix(f.Field, "SliceTiming") && f.ID != "slice-times-missing"
	}):
		return "unusable slice times"
	case len(p.Schedule.Times) == 0:
		return "no slice times"
	case len(p.Schedule.Times) != p.Grid.N[p.Schedule.Axis]:
		return "slice times of another number of slices"
	}
	for _, t := range p.Schedule.Times {
		if math.IsNaN(t) || math.IsInf(t, 0) || t < 0 {
			return "slice times out of range"
		}
	}
	return p.Schedule.Words()
}

// Size is the run's size as "64x64x36x200".
func (p *Plan) Size() string {
	if p.Header == nil {
		return "-"
	}
	nx, ny, nz, nt := p.Header.Size()
	return fmt.Sprintf("%dx%dx%dx%d", nx, ny, nz, nt)
}

// Short says in one or two words what steady does: "fourier+volume", "motion only".
func (p *Plan) Short() string {
	if !p.Runs() {
		return "refused"
	}
	var parts []string
	if p.Timing.Temporal {
		parts = append(parts, p.Settings.Time)
	}
	if p.Settings.Motion != "none" && len(parts) == 0 {
		return "motion only"
	}
	if p.Settings.Motion != "none" {
		parts = append(parts, p.Settings.Motion)
	}
	if len(parts) == 0 {
		return "copy"
	}
	return strings.Join(parts, "+")
}
