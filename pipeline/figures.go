package pipeline

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"strconv"

	"evenkeel/quality"
	"evenkeel/realign"
)

// measures is everything measured on one run, by volume.
type measures struct {
	states      []string // "" where motion was not estimated
	shifts      [][3]float64
	turns       [][3]float64 // rad
	fd, rms     []float64
	dvarsRaw    []float64
	dvarsSteady []float64
	outside     []float64
	fit         []float64
	spikes      [][]float64 // volume, slice
	tsnrRaw     []float32
	tsnrSteady  []float32
	mask        []bool
	path        *realign.PathEstimate // nil where motion was not estimated
}

func undefined(n int) []float64 {
	v := make([]float64, n)
	for i := range v {
		v[i] = math.NaN()
	}
	return v
}

// measurePoses fills in what follows from the poses alone.
func (m *measures) measurePoses(po *posed, poses []realign.Pose, nt int) {
	m.fd, m.rms = undefined(nt), undefined(nt)
	m.outside, m.fit = undefined(nt), undefined(nt)
	m.states = make([]string, nt)
	m.shifts, m.turns = make([][3]float64, nt), make([][3]float64, nt)
	est := po.est
	if est == nil {
		return
	}
	m.path = po.path
	params := make([][]float64, nt)
	for n, v := range est.Volumes {
		m.states[n] = string(v.State)
		m.shifts[n], m.turns[n] = poses[n].Params(est.Centre)
		if v.State != realign.Lost {
			params[n] = append(append([]float64{}, m.shifts[n][:]...), m.turns[n][:]...)
			m.fit[n] = v.Fit
			m.outside[n] = v.Outside
		}
	}
	copy(m.fd, quality.FramewiseDisplacement(params, quality.FDRadiusMM))
	for n := 1; n < nt; n++ {
		if params[n] != nil && params[n-1] != nil {
			m.rms[n] = quality.RMSDeviation(poses[n].Matrix(), poses[n-1].Matrix(), est.Centre, quality.BallRadiusMM)
		}
	}
}

// counts marks the volumes that enter averages: all but the lost.
func (m *measures) counts() []bool {
	use := make([]bool, len(m.states))
	for n, s := range m.states {
		use[n] = s != string(realign.Lost)
	}
	return use
}

// headVoxels is how many voxels the head has.
func (m *measures) headVoxels() (n int) {
	for _, in := range m.mask {
		if in {
			n++
		}
	}
	return n
}

// measureRaw and measureSteady look at the series before and after.
func (m *measures) measureRaw(ctx context.Context, p *Plan, data []float32, nt, workers int) (err error) {
	m.dvarsRaw, m.tsnrRaw, err = m.look(ctx, data, nt, workers)
	if err != nil {
		return err
	}
	n := p.Grid.N
	m.spikes, err = quality.SliceSpikes(ctx, data, n[0], n[1], n[2], nt, p.Schedule.Axis, m.mask, workers)
	return err
}

func (m *measures) measureSteady(ctx context.Context, data []float32, nt, workers int) (err error) {
	m.dvarsSteady, m.tsnrSteady, err = m.look(ctx, data, nt, workers)
	return err
}

func (m *measures) look(ctx context.Context, data []float32, nt, workers int) (dvars []float64, tsnr []float32, err error) {
	nv := len(m.mask)
	dvars = undefined(nt)
	if m.headVoxels() > 0 {
		if dvars, err = quality.DVARS(ctx, data, nv, nt, m.mask, m.counts(), workers); err != nil {
			return nil, nil, err
		}
	}
	tsnr = make([]float32, nv)
	err = quality.TSNR(ctx, tsnr, data, nv, nt, m.counts(), workers)
	return dvars, tsnr, err
}

// withoutLost leaves out the differences that a lost volume has a part in.
func (m *measures) withoutLost(v []float64) []float64 {
	out := append([]float64{}, v...)
	for n, s := range m.states {
		if s == string(realign.Lost) {
			out[n] = math.NaN()
			if n+1 < len(out) {
				out[n+1] = math.NaN()
			}
		}
	}
	return out
}

// betweenAligned keeps the differences between two aligned volumes.
func (m *measures) betweenAligned(v []float64) []float64 {
	out := append([]float64{}, v...)
	for n := range out {
		if n == 0 || m.states[n] != string(realign.Aligned) || m.states[n-1] != string(realign.Aligned) {
			out[n] = math.NaN()
		}
	}
	return out
}

// ofAligned keeps the values of aligned volumes.
func (m *measures) ofAligned(v []float64) []float64 {
	out := append([]float64{}, v...)
	for n, s := range m.states {
		if s != string(realign.Aligned) {
			out[n] = math.NaN()
		}
	}
	return out
}

// pathState is the word of pose_path.
func pathState(x *realign.PathEstimate) string {
	switch {
	case !x.Used:
		return quality.PathNotUsed
	case !x.Settled:
		return quality.PathNotSettled
	}
	return quality.PathUsed
}

// raisedFactor is how many times dvars_raw the dvars_steady of a volume must be to be
// pointed out: ours. Interpolation alone lowers it, so that above 1 already asks for a reason; the rest keeps
// noise out (see TestRaised).
const raisedFactor = 1.5

// raised names the aligned volumes, after an aligned one, whose change grew a lot by
// the correction: interpolation in time spreads a jerk over its neighbours.
func (m *measures) raised() []int {
	out := []int{}
	for n := 1; n < len(m.states); n++ {
		if m.states[n] == string(realign.Aligned) && m.states[n-1] == string(realign.Aligned) && m.dvarsSteady[n] > raisedFactor*m.dvarsRaw[n] {
			out = append(out, n)
		}
	}
	return out
}

// Figures are the numbers of a run that limits, the table of all runs and people look
// at. They are read back from its quality file, so that a run that is up to date has them too.
type Figures struct {
	Volumes, Aligned, Doubtful, Lost int
	MeanFD, MaxFD                    float64 // mm; NaN where undefined, as all below
	MeanFDAligned                    float64 // mm; between aligned volumes only
	MeanRMS                          float64 // mm
	PosePath                         string  // a word of quality's pose_path, "" where no path was asked for
	LastStep                         float64 // mm; of the pose path, NaN without one
	ExpectedError                    float64 // mm; of the pose path, over aligned volumes, NaN without one
	ResidualVolume, ResidualPath     float64 // in units of the noise, NaN without a path
	Explained                        float64 // share of the variance in the head, NaN without a path
	NoPath                           string  // why there is no path where one was asked for, or ""
	MaxShift                         float64 // mm, over aligned volumes
	MeanDVARSRaw, MeanDVARSSteady    float64 // %
	MedianTSNRRaw, MedianTSNRSteady  float64
	Raised                           []int // aligned volumes whose DVARS the correction raised a lot
}

// Digits after the decimal point, in tables and figures.
const (
	digitsTime  = 6
	digitsMM    = 6
	digitsTurn  = 7 // degree
	digitsShare = 6
)

// qualityFile writes the run's figures, each with its definition and unit as
// package quality declares them.
func (m *measures) qualityFile(p *Plan) []byte {
	var o object
	figure := func(name string, extra ...member) {
		d := quality.Define(name)
		f := object{{"Description", d.Description}}
		if d.Unit != "" {
			f.add("Units", d.Unit)
		}
		f.add("Source", d.Source)
		o.add(name, append(f, extra...))
	}
	summary := func(s quality.Summary, digits int) []member {
		return []member{{"Mean", rounded(s.Mean, digits)}, {"Median", rounded(s.Median, digits)}, {"Max", rounded(s.Max, digits)}, {"N", s.N}}
	}
	series := func(name string, v, summarised []float64, digits int) {
		figure(name, append(summary(quality.Summarise(summarised), digits), member{"Volumes", roundedAll(v, digits)})...)
	}
	count := func(state realign.State) int {
		n := 0
		for _, s := range m.states {
			if s == string(state) {
				n++
			}
		}
		return n
	}
	value := func(name string, v any) { figure(name, member{"Value", v}) }
	value("volumes", len(m.states))
	value("volumes_aligned", count(realign.Aligned))
	value("volumes_doubtful", count(realign.Doubtful))
	value("volumes_lost", count(realign.Lost))
	value("max_shift", rounded(m.maxShift(), digitsMM))
	value("mean_fd_aligned", rounded(quality.Summarise(m.betweenAligned(m.fd)).Mean, digitsMM))
	series("fd", m.fd, m.fd, digitsMM)
	series("rms_ball", m.rms, m.rms, digitsMM)
	series("dvars_raw", m.dvarsRaw, m.withoutLost(m.dvarsRaw), digitsShare)
	series("dvars_steady", m.dvarsSteady, m.withoutLost(m.dvarsSteady), digitsShare)
	raised := m.raised()
	figure("dvars_raised", member{"Value", len(raised)}, member{"Volumes", raised})
	series("outside", m.outside, m.outside, digitsShare)
	series("fit", m.fit, m.fit, digitsShare)
	if m.path != nil && m.path.Used {
		series("expected_error", m.path.Expected, m.ofAligned(m.path.Expected), digitsMM)
		value("residual_volume", rounded(m.path.VolumeResidual, digitsShare))
		value("residual_path", rounded(m.path.PathResidual, digitsShare))
		value("explained", rounded(m.path.Explained, digitsShare))
	}
	if p.Settings.Motion == "path" && m.path != nil {
		state := member{"State", pathState(m.path)}
		if m.path.Used {
			figure("pose_path", state, member{"LastStep", rounded(m.path.LastStep, digitsMM)})
		} else {
			figure("pose_path", state, member{"Reason", m.path.Reason})
		}
	}
	figure("tsnr_raw", summary(quality.SummariseInside(m.tsnrRaw, m.mask), 4)...)
	figure("tsnr_steady", summary(quality.SummariseInside(m.tsnrSteady, m.mask), 4)...)
	rows := make([][]num, len(m.spikes))
	worst := math.NaN()
	at := [2]int{-1, -1}
	for t, row := range m.spikes {
		rows[t] = roundedAll(row, 3)
		for s, v := range row {
			if !math.IsNaN(v) && !(v <= worst) {
				worst, at = v, [2]int{t, s}
			}
		}
	}
	spikes := []member{{"Max", rounded(worst, 3)}}
	if at[0] >= 0 {
		spikes = append(spikes, member{"MaxVolume", at[0]}, member{"MaxSlice", at[1]})
	}
	figure("spikes", append(spikes, member{"VolumesSlices", rows})...)
	states := make([]any, len(m.states))
	for n, s := range m.states {
		if s != "" {
			states[n] = s
		}
	}
	figure("state", member{"Volumes", states})
	return o.file()
}

func (m *measures) maxShift() float64 {
	longest := math.NaN()
	for n, s := range m.states {
		if s != string(realign.Aligned) {
			continue
		}
		v := m.shifts[n]
		d := math.Sqrt(float64(v[0]*v[0]) + float64(v[1]*v[1]) + float64(v[2]*v[2]))
		if !(d <= longest) {
			longest = d
		}
	}
	return longest
}

// parseFigures reads a quality file back.
func parseFigures(data []byte) (*Figures, error) {
	var q map[string]struct {
		Value, Mean, Median, Max num
	}
	dec := json.NewDecoder(bytes.NewReader(data))
	if err := dec.Decode(&q); err != nil {
		return nil, err
	}
	for _, name := range []string{"volumes", "fd", "tsnr_steady"} {
		if _, ok := q[name]; !ok {
			return nil, fmt.Errorf("no figure %s", name)
		}
	}
	count := func(name string) int { return int(q[name].Value) }
	optional := func(name string) struct{ Mean, Value float64 } {
		f, ok := q[name]
		if !ok {
			return struct{ Mean, Value float64 }{math.NaN(), math.NaN()}
		}
		return struct{ Mean, Value float64 }{float64(f.Mean), float64(f.Value)}
	}
	var more struct {
		Raised struct{ Volumes []int } `json:"dvars_raised"`
		Path   struct {
			State, Reason string
			LastStep      num
		} `json:"pose_path"`
	}
	more.Path.LastStep = num(math.NaN())
	if err := json.Unmarshal(data, &more); err != nil {
		return nil, err
	}
	return &Figures{
		Raised: more.Raised.Volumes, PosePath: more.Path.State, NoPath: more.Path.Reason, LastStep: float64(more.Path.LastStep),
		Volumes: count("volumes"), Aligned: count("volumes_aligned"), Doubtful: count("volumes_doubtful"), Lost: count("volumes_lost"),
		MeanFD: float64(q["fd"].Mean), MaxFD: float64(q["fd"].Max),
		MeanFDAligned: float64(q["mean_fd_aligned"].Value),
		MeanRMS:       float64(q["rms_ball"].Mean),
		ExpectedError: optional("expected_error").Mean, ResidualVolume: optional("residual_volume").Value, ResidualPath: optional("residual_path").Value, Explained: optional("explained").Value,
		MaxShift: float64(q["max_shift"].Value), MeanDVARSRaw: float64(q["dvars_raw"].Mean), MeanDVARSSteady: float64(q["dvars_steady"].Mean),
		MedianTSNRRaw: float64(q["tsnr_raw"].Median), MedianTSNRSteady: float64(q["tsnr_steady"].Median),
	}, nil
}

// Limits are the quality limits that a run is held against; nil is none. They
// change no output.
type Limits struct {
	MeanFD, MaxFD, MaxShift *float64 // mm
	Lost                    *int
}

// A Breach is a limit that a run is outside of.
type Breach struct {
	Column string // of runs.tsv
	Words  string
}

// Check holds the limits against the settings: a limit on a figure that no run
// will have could never be judged. It returns a [*UsageError].
func (l Limits) Check(set Settings) error {
	if set.Motion != "none" {
		return nil
	}
	for _, given := range []struct {
		is     bool
		option string
	}{{l.MeanFD != nil, "--limit-mean-fd"}, {l.MaxFD != nil, "--limit-max-fd"}, {l.MaxShift != nil, "--limit-max-shift"}, {l.Lost != nil, "--limit-lost"}} {
		if given.is {
			return &UsageError{Where: given.option, Message: "cannot be judged with --motion none, which estimates no pose; leave one of them out"}
		}
	}
	return nil
}

// Outside says which limits the figures are outside of. A figure that is
// undefined is outside no limit.
func (l Limits) Outside(f *Figures) []Breach {
	var out []Breach
	check := func(column, name string, limit *float64, v float64) {
		if limit != nil && v > *limit {
			out = append(out, Breach{column, fmt.Sprintf("%s %s mm is above the limit %s mm", name, decimal(v, 4), strconv.FormatFloat(*limit, 'g', -1, 64))})
		}
	}
	check("mean_fd", "mean FD", l.MeanFD, f.MeanFD)
	check("max_fd", "largest FD", l.MaxFD, f.MaxFD)
	check("max_shift", "longest shift", l.MaxShift, f.MaxShift)
	if l.Lost != nil && f.Lost > *l.Lost {
		what := "volumes"
		if f.Lost == 1 {
			what = "volume"
		}
		out = append(out, Breach{"lost", fmt.Sprintf("%d %s lost, above the limit %d", f.Lost, what, *l.Lost)})
	}
	return out
}
