package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/urfave/cli/v2"

	"evenkeel/dataset"
	"evenkeel/fault"
	"evenkeel/pipeline"
)

func (s *session) surveyCommand() *cli.Command {
	return &cli.Command{
		Name:      "survey",
		Usage:     "read headers and sidecars, say what there is and what steady would do",
		ArgsUsage: "DATASET",
		Description: describe("Reads headers and sidecars only and writes nothing. One line a run: size, repetition\n"+
			"time, slice schedule, phase-encode axis and its direction in the body, what steady\n"+
			"would do; then every fault of the run. Words count slices from 1 in the order of the\n"+
			"array index (ascending: rising index, which need not be upward in the body); numbers\n"+
			"in tables, faults and options count from 0. The exit code is the one that steady\n"+
			"would return for the refusals that headers and sidecars show.", "evenkeel survey voyage --subject alder --json",
			codes(pipeline.ExitDone, pipeline.ExitSome, pipeline.ExitUsage, pipeline.ExitData, pipeline.ExitNoInput, pipeline.ExitBug, pipeline.ExitIO, pipeline.ExitInterrupt).
				but(pipeline.ExitDone, "steady would process every selected run").
				but(pipeline.ExitSome, "steady would refuse some runs, or could not read them").
				but(pipeline.ExitData, "steady would refuse every selected run").
				but(pipeline.ExitInterrupt, "interrupted: run the same command again")),
		Flags: slices.Concat(selectionFlags(), settingFlags(), []cli.Flag{memoryFlag(),
			&cli.BoolFlag{Name: "json", Usage: "the same as one JSON document"}}),
		Action: func(c *cli.Context) error {
			args, err := arguments(c, "DATASET")
			if err != nil {
				return err
			}
			req, err := request(c)
			if err != nil {
				return err
			}
			found, err := s.survey(c, args[0], req)
			if err != nil {
				return err
			}
			if c.Bool("json") {
				err = found.writeJSON(s.stdout)
			} else {
				err = found.writeText(s.stdout, nil, s.columns())
			}
			if err != nil {
				return &pipeline.IOError{Path: "standard output", Err: err}
			}
			return &exit{found.code()}
		},
	}
}

// surveyed is what a dataset holds for a request.
type surveyed struct {
	ds      *dataset.Dataset
	root    string
	plans   []*pipeline.Plan
	leftOut []fault.Fault
	notices []dataset.Notice
}

// survey opens the dataset and makes the plans; survey, steady and --plan all begin here.
func (s *session) survey(c *cli.Context, root string, req pipeline.Request) (*surveyed, error) {
	ds, err := dataset.Open(root)
	if err != nil {
		return nil, err
	}
	f := &surveyed{ds: ds, root: root, leftOut: ds.SelectLeftOut(req.Filter), notices: ds.SelectNotices(req.Filter)}
	if ds.Derivative {
		f.notices = nil // its own files are no slips of a raw dataset's
	}
	for _, n := range f.notices {
		s.log.warn("notice", n.String(), fields{"notice": n})
	}
	f.plans, err = pipeline.Survey(c.Context, ds, req)
	for _, p := range f.plans {
		if p.LacksEvents() {
			s.log.warn("no-events", p.Run.Stem+": --events: the run has no events table, so none is written", fields{"run": p.Run.Stem})
		}
	}
	if nothing := (*pipeline.NothingSelected)(nil); errors.As(err, &nothing) {
		// What was left out may be all there is.
		for _, x := range f.leftOut {
			s.log.fault("", x)
		}
	}
	return f, err
}

// hidden reports whether runs may have gone unseen.
func (f *surveyed) hidden() bool {
	return slices.ContainsFunc(f.notices, dataset.Notice.Hides)
}

// code is the exit status for what is refused already.
func (f *surveyed) code() int {
	var outcomes []pipeline.Outcome
	for _, p := range f.plans {
		o := pipeline.Outcome{Plan: p, State: pipeline.Done}
		switch {
		case len(p.Refusals()) > 0:
			o.State = pipeline.RefusedRun
		case p.Err != nil:
			o.State, o.Err = pipeline.Failed, p.Err
		}
		outcomes = append(outcomes, o)
	}
	return pipeline.ExitCode(nil, outcomes, f.hidden())
}

// writeText writes a line a run, its faults below it. standings, if not nil, add how each run
// stands in OUT. With columns above 0, no line is longer: rows are shortened, faults go on below.
func (f *surveyed) writeText(w io.Writer, standings []pipeline.Standing, columns int) error {
	head := []string{"run", "size", "TR", "slices", "phase", "steady"}
	if standings != nil {
		head = append(head, "in OUT")
	}
	rows := [][]string{head}
	for i, p := range f.plans {
		row := []string{p.Run.Stem, p.Size(), repetition(p), shortSchedule(p), phase(p), p.Short()}
		switch {
		case standings == nil:
		case p.Runs():
			row = append(row, standings[i].String())
		default:
			row = append(row, "-")
		}
		rows = append(rows, row)
	}
	width := fit(rows, columns)
	var b strings.Builder
	under := func(indent, text string) {
		lines := []string{text}
		if columns > 0 {
			lines = wrap(text, max(20, columns-len(indent)-2))
		}
		for i, l := range lines {
			if i > 0 {
				l = "  " + l
			}
			b.WriteString(indent + l + "\n")
		}
	}
	for n, r := range rows {
		var line strings.Builder
		for i, cell := range r {
			if i > 0 {
				line.WriteString("  ")
			}
			fmt.Fprintf(&line, "%-*s", width[i], cell)
		}
		b.WriteString(strings.TrimRight(line.String(), " ") + "\n")
		if n == 0 {
			continue
		}
		p := f.plans[n-1]
		if p.Err != nil {
			under("  ", p.Err.Error())
		}
		for _, x := range p.Faults {
			level := string(x.Level)
			if accepted(x) {
				level = "accepted"
			}
			under("  ", fmt.Sprintf("%s (%s)", x.Error(), level))
		}
	}
	for _, x := range f.leftOut {
		under("", fmt.Sprintf("%s (%s)", x.Error(), x.Level))
	}
	_, err := io.WriteString(w, b.String())
	return err
}

// fit returns the width of every column of a table, columns being two apart; with columns above 0
// it first shortens cells, in the widest columns, so that a row fits, down to
// a few letters each.
func fit(rows [][]string, columns int) []int {
	width := make([]int, len(rows[0]))
	total := 2 * (len(width) - 1)
	for i := range width {
		for _, r := range rows {
			width[i] = max(width[i], utf8.RuneCountInString(r[i]))
		}
		total += width[i]
	}
	if columns <= 0 {
		return width
	}
	// widest gives the widest column, -1 if that is no wider than least.
	widest := func(from, least int) int {
		at := -1
		for i := from; i < len(width); i++ {
			if width[i] > least && (at < 0 || width[i] > width[at]) {
				at = i
			}
		}
		return at
	}
	for ; total > columns; total-- {
		i := widest(1, 12) // the run's name is shortened last
		if i < 0 {
			i = widest(0, 6)
		}
		if i < 0 {
			break
		}
		width[i]--
	}
	for _, r := range rows {
		for i, cell := range r {
			if letters := []rune(cell); len(letters) > width[i] {
				// The end of a run's name tells runs apart, elsewhere the beginning says most.
				if i == 0 {
					r[i] = "…" + string(letters[len(letters)-width[i]+1:])
				} else {
					r[i] = string(letters[:width[i]-1]) + "…"
				}
			}
		}
	}
	return width
}

func repetition(p *pipeline.Plan) string {
	switch {
	case p.Acq == nil:
		return "-"
	case p.Timing.TR > 0:
		return fmt.Sprintf("%.4g s", p.Timing.TR)
	case len(p.Acq.VolumeOnsets) > 0:
		return "uneven"
	}
	return "?"
}

func phase(p *pipeline.Plan) string {
	d := p.PhaseEncode()
	if d.Axis == "" {
		return "?"
	}
	return d.Axis + " " + d.Body
}

// shortSchedule keeps the first words of the schedule: a line has 80 columns. The JSON form has them all.
func shortSchedule(p *pipeline.Plan) string {
	words := p.ScheduleWords()
	if words == "" {
		return "-"
	}
	var out []string
	for _, part := range strings.Split(words, ", ") {
		part, _, _ = strings.Cut(part, " (")
		part, _, _ = strings.Cut(part, " within ")
		if len(out) > 0 && (strings.HasPrefix(part, "even ") || strings.HasPrefix(part, "odd ") || part[0] >= '0' && part[0] <= '9') {
			break
		}
		out = append(out, part)
		if !strings.HasPrefix(part, "multiband") {
			break
		}
	}
	return strings.Join(out, ", ")
}

// The JSON document. Members may be added, never changed.
type (
	surveyDocument struct {
		Dataset string           `json:"dataset"`
		Runs    []surveyRun      `json:"runs"`
		LeftOut []fault.Fault    `json:"left_out"`
		Notices []dataset.Notice `json:"notices"`
	}
	surveyRun struct {
		Run         string            `json:"run"`
		File        string            `json:"file"`
		Entities    map[string]string `json:"entities"`
		Geometry    *surveyGeometry   `json:"geometry"`
		Timing      *surveyTiming     `json:"timing"`
		Schedule    *surveySchedule   `json:"schedule"`
		PhaseEncode *surveyPhase      `json:"phase_encode"`
		Series      string            `json:"series"`
		Plan        surveyPlan        `json:"plan"`
		Faults      []fault.Fault     `json:"faults"`
	}
	surveyGeometry struct {
		Size    [4]int        `json:"size"`
		VoxelMM [3]float64    `json:"voxel_mm"`
		Affine  [4][4]float64 `json:"affine"`
	}
	surveyTiming struct {
		RepetitionTime *float64 `json:"repetition_time"` // s; null with unequal volume onsets
		HeaderSeconds  float64  `json:"header_seconds"`  // pixdim[4], s
		Origin         float64  `json:"origin"`          // s
		StartTime      float64  `json:"start_time"`      // s
		AtOneInstant   bool     `json:"slices_at_one_instant"`
	}
	surveySchedule struct {
		Words      string    `json:"words"`
		Axis       string    `json:"axis"`
		Shots      int       `json:"shots"`
		Multiband  int       `json:"multiband"` // slices in the largest shot
		SliceTimes []float64 `json:"slice_times"`
	}
	surveyPhase struct {
		Axis      string `json:"axis"`
		Direction string `json:"direction"`
	}
	surveyPlan struct {
		Action   string            `json:"action"` // process, refuse, fail
		Words    string            `json:"words"`
		PoseFrom string            `json:"pose_from"` // the file the pose is estimated on, "" if none is
		Volumes  int               `json:"volumes"`
		Memory   int64             `json:"memory_bytes"`
		Settings pipeline.Settings `json:"settings"`
		Outputs  []string          `json:"outputs"`
		Error    string            `json:"error,omitempty"`
	}
)

func (f *surveyed) writeJSON(w io.Writer) error {
	doc := surveyDocument{Dataset: f.root, Runs: []surveyRun{}, LeftOut: append([]fault.Fault{}, f.leftOut...), Notices: append([]dataset.Notice{}, f.notices...)}
	for _, p := range f.plans {
		doc.Runs = append(doc.Runs, describeRun(p))
	}
	b, err := json.MarshalIndent(doc, "", "  ")
	if err != nil {
		return err
	}
	_, err = w.Write(append(b, '\n'))
	return err
}

func describeRun(p *pipeline.Plan) surveyRun {
	r := surveyRun{Run: p.Run.Stem, File: p.Run.File, Entities: map[string]string{}, Faults: append([]fault.Fault{}, p.Faults...)}
	for _, e := range p.Run.Entities {
		r.Entities[e.Key] = e.Label
	}
	if p.Header != nil {
		g := &surveyGeometry{}
		for i, v := range p.VoxelMM() {
			g.VoxelMM[i] = single(v)
		}
		g.Size[0], g.Size[1], g.Size[2], g.Size[3] = p.Header.Size()
		for i, v := range p.Grid.Affine {
			g.Affine[i/4][i%4] = v
		}
		r.Geometry = g
	}
	if p.Acq != nil {
		t := &surveyTiming{Origin: p.Timing.Origin, StartTime: p.Timing.StartTime, AtOneInstant: p.Timing.AtOneInstant}
		if finite(p.Timing.TR) && p.Timing.TR > 0 {
			t.RepetitionTime = &p.Timing.TR
		}
		t.HeaderSeconds, _ = p.Header.SecondsPerVolume()
		if finite(t.Origin) && finite(t.StartTime) && finite(t.HeaderSeconds) {
			r.Timing = t
		}
		sched := &surveySchedule{Words: p.ScheduleWords(), Axis: string("ijk"[p.Schedule.Axis]), SliceTimes: []float64{}}
		good := true
		for _, v := range p.Schedule.Times {
			good = good && finite(v)
		}
		if good && len(p.Schedule.Times) > 0 {
			sched.SliceTimes = p.Schedule.Times
			for _, shot := range p.Schedule.Shots() {
				sched.Shots++
				sched.Multiband = max(sched.Multiband, len(shot.Slices))
			}
		}
		r.Schedule = sched
		if d := p.PhaseEncode(); d.Axis != "" {
			r.PhaseEncode = &surveyPhase{d.Axis, d.Body}
		}
		r.Series = p.Acq.Series
	}
	r.Plan = surveyPlan{Action: "process", Words: p.What(), Volumes: p.Volumes, Memory: p.Memory(1), Settings: p.Settings, Outputs: []string{}}
	switch {
	case len(p.Refusals()) > 0:
		r.Plan.Action = "refuse"
	case p.Err != nil:
		r.Plan.Action, r.Plan.Error = "fail", p.Err.Error()
	default:
		for _, o := range p.Outputs {
			r.Plan.Outputs = append(r.Plan.Outputs, o.Path)
		}
		if p.Settings.Motion != "none" {
			r.Plan.PoseFrom = p.Pose.File
		}
	}
	return r
}

// single is the shortest decimal that stands for v in single precision, which is all
// that most headers hold.
func single(v float64) float64 {
	s, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', -1, 32), 64)
	return s
}

func finite(v float64) bool { return v-v == 0 }
