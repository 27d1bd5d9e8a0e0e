package pipeline

// The pose along time: from the estimate to the pose of a row, of a slice, and to
// the shots table.

import (
	"bytes"
	"context"
	"fmt"
	"math"
	"strconv"

	"evenkeel/quality"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

// instants gives the time of each output volume's row, in seconds from the start of
// the first volume kept, on whose clock a path runs.
func (p *Plan) instants() []float64 {
	out := make([]float64, len(p.Timing.Rows))
	for n, t := range p.Timing.Rows {
		out[n] = t - float64(float64(p.Settings.Skip)*p.Timing.TR)
	}
	return out
}

// estimatePath follows the volume poses with a pose for every excitation, where that is
// asked for, on the series s they came from.
func (w *worker) estimatePath(ctx context.Context, p *Plan, g realign.Grid, s realign.Series, po *posed) (err error) {
	schedule := p.Schedule
	schedule.TR = p.Timing.TR
	switch {
	case p.Settings.Motion != "path":
		po.path = realign.FromVolumes(g, schedule, po.est, "one pose a volume was asked for")
	case p.Timing.TR <= 0:
		po.path = realign.FromVolumes(g, schedule, po.est, "the volumes are not equally spaced")
	case !p.timed():
		po.path = realign.FromVolumes(g, schedule, po.est, "no slice times, so no instant is known for a slice")
	default:
		est := *po.est
		est.Progress = w.within(p, "estimate", volumesShare, 1)
		po.path, err = realign.EstimatePath(ctx, g, s, schedule, &est, w.workers)
	}
	return err
}

// followed reports whether volume poses are to be followed with a path.
func (p *Plan) followed() bool {
	return p.Settings.Motion == "path" && p.Timing.TR > 0 && p.timed()
}

// timed reports whether every slice has a time.
func (p *Plan) timed() bool {
	return len(p.Schedule.Times) > 0 && len(p.Schedule.Times) == p.Grid.N[p.Schedule.Axis]
}

// rowPoses gives the pose of each row: that at its instant, with a path.
func (p *Plan) rowPoses(po *posed) []realign.Pose {
	if po.est == nil {
		return nil
	}
	out := make([]realign.Pose, len(po.est.Volumes))
	for n, t := range p.instants() {
		out[n] = po.path.At(n, t)
	}
	return out
}

func (po *posed) lost() []bool {
	out := make([]bool, len(po.est.Volumes))
	for n, v := range po.est.Volumes {
		out[n] = v.State == realign.Lost
	}
	return out
}

// kernel gives the temporal kernel that the settings ask for.
func (s Settings) kernel() slicetime.Options {
	opt := slicetime.Options{Kernel: slicetime.Fourier, Reach: s.SincReach}
	if s.Time == "sinc" {
		opt.Kernel = slicetime.Sinc
	}
	return opt
}

// degree gives the degree of the spline that the settings ask for.
func (s Settings) degree() int {
	if s.Space == "cubic" {
		return 3
	}
	return 5
}

// joint interpolates time and space together, in place.
func (w *worker) joint(ctx context.Context, p *Plan, po *posed, data []float32, nt int) error {
	if po.est == nil {
		return w.correctTime(ctx, p, data, nt)
	}
	schedule := p.Schedule
	schedule.TR = p.Timing.TR
	path, from := *po.path, 0.0
	if !path.Used || p.Pose.File != p.Run.File {
		// Only a path leaves a sharp reference behind, and only of its own series.
		const rebuilt = 0.68 // of the stage's time, roughly
		from = rebuilt
		est := *po.est
		est.Progress = w.within(p, "joint", 0, rebuilt)
		again, err := path.Rebuilt(ctx, p.Grid, realign.Floats(data, nt), schedule, &est, w.workers)
		if err != nil {
			return err
		}
		path = *again
	}
	path.Progress = w.within(p, "joint", from, 1)
	return path.Joint(ctx, p.Grid, data, nt, schedule, p.Timing.Temporal, p.instants()[0], p.Settings.kernel(), po.lost(), p.Settings.degree(), w.workers)
}

// shotsTable writes one row an excitation. Where there is no path, the excitations
// stand at the pose of their volume; where no times are known there is one row a
// volume.
func shotsTable(p *Plan, po *posed) []byte {
	var b bytes.Buffer
	b.WriteString("volume\tshot\ttime")
	for _, c := range []string{"shift_x", "shift_y", "shift_z", "turn_x", "turn_y", "turn_z"} {
		b.WriteString("\t" + c)
	}
	b.WriteByte('\n')
	type shot struct {
		time  float64
		slice int
	}
	var shots []shot
	if p.timed() && p.Timing.TR > 0 {
		for _, s := range p.Schedule.Shots() {
			shots = append(shots, shot{s.Time, s.Slices[0]})
		}
	}
	start := float64(float64(p.Settings.Skip) * p.Timing.TR)
	row := func(n, s int, time float64, pose realign.Pose) {
		fmt.Fprintf(&b, "%d\t%d\t%s", n, s, strconv.FormatFloat(time, 'f', digitsTime, 64))
		shift, turn := pose.Params(po.est.Centre)
		for k := range 6 {
			switch {
			case po.est.Volumes[n].State == realign.Lost:
				b.WriteString("\tn/a")
			case k < 3:
				b.WriteString("\t" + fixed(shift[k], digitsMM+1))
			default:
				b.WriteString("\t" + fixed(degrees(turn[k-3]), digitsTurn+1))
			}
		}
		b.WriteByte('\n')
	}
	for n := range po.est.Volumes {
		if len(shots) == 0 {
			row(n, 0, p.Timing.Rows[n], po.path.Path.Poses[n])
			continue
		}
		for s, x := range shots {
			row(n, s, start+float64(float64(n)*p.Timing.TR)+x.time, po.path.Slot(n, x.slice))
		}
	}
	return b.Bytes()
}

// shotsDescription is the table's data dictionary.
func shotsDescription(p *Plan, po *posed) []byte {
	var o object
	describe := func(name, description, unit, source string) {
		o.add(name, object{{"Description", description}, {"Units", unit}, {"Source", source}})
	}
	describe("volume", "Index of the output volume, from 0.", "1", "evenkeel")
	describe("shot", "Index of the shot within the volume, from 0, in the order of time. A shot here is one excitation of a slice, or of all slices taken together (multiband); it is no segment of k-space.", "1", "evenkeel")
	describe("time", "The instant of the excitation, counted from the start of the first volume of the raw file.", "s", "evenkeel")
	for _, name := range []string{"shift_x", "shift_y", "shift_z", "turn_x", "turn_y", "turn_z"} {
		d := quality.Define(name)
		describe(name, d.Description, d.Unit, d.Source)
	}
	o.add("RotationCentre", nums(po.est.Centre[:]))
	o.add("RotationOrder", rotationOrder)
	if p.timed() {
		groups := [][]int{}
		for _, s := range p.Schedule.Shots() {
			groups = append(groups, s.Slices)
		}
		o.add("SlicesOfShots", groups)
		o.add("SliceAxis", string("ijk"[p.Schedule.Axis]))
	}
	o.add("PathUsed", po.path.Used)
	if po.path.Reason != "" {
		o.add("Reason", po.path.Reason)
	}
	return o.file()
}

// pathOutcome says what the path found, for the record.
func (po *posed) pathOutcome() object {
	x := po.path
	o := object{{"used", x.Used}}
	if x.Reason != "" {
		o.add("reason", x.Reason)
	}
	if !x.Used {
		return o
	}
	o.add("passes", x.Passes)
	o.add("iterations", x.Iterations)
	o.add("noise", num(x.Sigma))
	o.add("residual_one_pose_a_volume", rounded(x.VolumeResidual, 6))
	o.add("residual_along_path", rounded(x.PathResidual, 6))
	o.add("explained", rounded(x.Explained, 6))
	o.add("log_evidence", rounded(x.Evidence, 3))
	o.add("last_step_mm", rounded(x.LastStep, digitsMM))
	o.add("settled", x.Settled)
	o.add("prior_strength_shift", num(x.StrengthShift))
	o.add("prior_strength_turn", num(x.StrengthTurn))
	o.add("expected_error_mm", roundedAll(x.Expected, digitsMM))
	return o
}

// fixed prints a number with so many digits; n/a if it is undefined, and no
// negative zero.
func fixed(v float64, digits int) string {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return "n/a"
	}
	if s := strconv.FormatFloat(v, 'f', digits, 64); s[0] != '-' || !allZero(s[1:]) {
		return s
	}
	return strconv.FormatFloat(0, 'f', digits, 64)
}

func allZero(s string) bool {
	for _, c := range s {
		if c != '0' && c != '.' {
			return false
		}
	}
	return true
}
