package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/fault"
	"evenkeel/pipeline"
	"evenkeel/quality"
)

func (s *session) steadyCommand() *cli.Command {
	return &cli.Command{
		Name:      "steady",
		Usage:     "estimate motion, correct slice timing, resample once, write the derivative dataset",
		ArgsUsage: "DATASET OUT",
		Description: describe("For every selected run: estimates motion on the raw series, moves every slice to one\n"+
			"instant, resamples each volume once, and writes series, poses, figures and record\n"+
			"into OUT. Runs that are complete and up to date are skipped, so the same command\n"+
			"again goes on where it was interrupted. Results do not depend on --jobs, --memory\n"+
			"or the machine.", "evenkeel steady voyage voyage-steady --task watch --limit-mean-fd 0.3",
			codes(pipeline.ExitDone, pipeline.ExitSome, pipeline.ExitOutside, pipeline.ExitUsage, pipeline.ExitData, pipeline.ExitNoInput,
				pipeline.ExitBug, pipeline.ExitNoCreate, pipeline.ExitIO, pipeline.ExitInterrupt).
				but(pipeline.ExitOutside, "everything is done, but a run is outside a limit given")),
		Flags: slices.Concat(selectionFlags(), settingFlags(), limitFlags(), []cli.Flag{
			&cli.StringFlag{Name: "jobs", Usage: "`N` runs at once", DefaultText: "chosen from cores and runs"},
			memoryFlag(),
			&cli.BoolFlag{Name: "redo", Usage: "recompute runs whose record is up to date"},
			&cli.BoolFlag{Name: "plan", Usage: "print what would be done as far as headers and sidecars show, and which runs are up to date or done again and why; write nothing"},
			&cli.BoolFlag{Name: "no-report", Usage: "leave report.html to a later report (this version writes none yet)"},
		}),
		Action: func(c *cli.Context) error {
			args, err := arguments(c, "DATASET", "OUT")
			if err != nil {
				return err
			}
			return s.steady(c, args[0], args[1])
		},
	}
}

func (s *session) steady(c *cli.Context, root, out string) error {
	req, err := request(c)
	if err != nil {
		return err
	}
	job := pipeline.Job{Out: out, Memory: req.Memory, Redo: c.Bool("redo"), Observe: s.observe}
	if c.IsSet("jobs") {
		if job.Jobs, err = count(c, "jobs", 1); err != nil {
			return err
		}
	}
	if job.Limits, err = limits(c); err != nil {
		return err
	}
	if err := job.Limits.Check(req.Settings); err != nil {
		return err
	}
	found, err := s.survey(c, root, req)
	if err != nil {
		return err
	}
	if err := pipeline.CheckOut(root, out); err != nil {
		return err
	}
	if c.Bool("plan") {
		standings, err := pipeline.Standings(c.Context, found.plans, out, job.Redo, pipeline.Cores())
		if err != nil {
			return err
		}
		if err := found.writeText(s.stdout, standings, s.columns()); err != nil {
			return &pipeline.IOError{Path: "standard output", Err: err}
		}
		return &exit{found.code()}
	}
	for _, f := range found.leftOut {
		s.log.fault("", f)
	}
	runs := 0
	for _, p := range found.plans {
		if p.Runs() {
			runs++
		}
		for _, f := range p.Faults {
			if f.Level == fault.Warn { // those that refuse come with the run's end
				s.log.fault(p.Run.Stem, f)
			}
		}
	}
	s.log.startProgress(float64(runs))
	outcomes, err := pipeline.Steady(c.Context, found.ds, found.plans, job)
	s.log.stopProgress()
	if werr := writeOutcomes(s.stdout, outcomes); werr != nil && err == nil {
		err = &pipeline.IOError{Path: "standard output", Err: werr}
	}
	if err != nil && !errors.Is(err, context.Canceled) && !gone(err) {
		s.log.error("failed", err.Error(), nil)
	}
	if len(outcomes) > 0 || err == nil {
		s.log.info("summary", summary(outcomes), nil)
	}
	return &exit{pipeline.ExitCode(err, outcomes, found.hidden())}
}

// observe turns what happens to runs into log lines.
func (s *session) observe(e pipeline.Event) {
	run := e.Plan.Run.Stem
	switch e.Kind {
	case pipeline.RunWaiting:
		s.log.info("waiting", run+": another process holds this run, waiting for it", fields{"run": run})
	case pipeline.RunStarted:
		again := ""
		if e.Why != "" {
			again = "again (" + e.Why + "): "
		}
		s.log.info("started", run+": "+again+e.Plan.What(), fields{"run": run, "file": e.Plan.Run.File, "why": e.Why})
	case pipeline.RunStage:
		s.advance(e.Plan, e.Stage, 0)
		if s.log.json {
			s.log.info("stage", e.Stage, fields{"run": run, "stage": e.Stage})
		}
	case pipeline.RunShare:
		s.advance(e.Plan, e.Stage, e.Share)
	case pipeline.RunEnded:
		s.ended(run, e.Outcome)
	}
}

// stageShares is roughly what part of a run's time each stage takes: measured on the runs of the
// demo (40x48x30x60, two cores), reading and writing counted up for larger, compressed series. A
// stage that is not here stands for others.
var stageShares = map[string]float64{"estimate": 0.80, "read": 0.03, "measure-raw": 0.01, "time": 0.03, "space": 0.08, "measure-steady": 0.01, "write": 0.04}

// advance moves the bar when a run has done a share of a stage, by that and the stages before
// it; with stage "" the run has ended, and counts as a whole.
func (s *session) advance(p *pipeline.Plan, stage string, share float64) {
	at := 1.0
	if i := slices.Index(pipeline.Stages, stage); i >= 0 {
		of, in := stageShares[stage], standsFor(stage)
		at = 0
		for _, before := range pipeline.Stages[:i] {
			if slices.Contains(in, before) {
				of += stageShares[before]
			} else {
				at += stageShares[before]
			}
		}
		at += share * of
	}
	if s.reached == nil {
		s.reached = map[*pipeline.Plan]float64{}
	}
	// space-first goes back a stage, and a pass may be repeated; the bar does not go back.
	if at > s.reached[p] && p.Runs() {
		if s.reached[p] == 0 && stage == "" {
			s.log.skip(at) // up to date
		} else {
			s.log.step(at - s.reached[p])
		}
		s.reached[p] = at
	}
}

// standsFor names the stages that one stands for.
func standsFor(stage string) []string {
	switch stage {
	case "joint":
		return []string{"time", "space"}
	case "steady":
		return []string{"read", "measure-raw", "time", "space", "measure-steady"}
	}
	return nil
}

func (s *session) ended(run string, o *pipeline.Outcome) {
	s.advance(o.Plan, "", 0)
	f := fields{"run": run, "state": o.State}
	switch o.State {
	case pipeline.Done:
		if o.StageSeconds != nil {
			f["stage_seconds"] = o.StageSeconds
		}
		s.log.info("done", run+": done", f)
	case pipeline.UpToDate:
		s.log.info("up-to-date", run+": up to date", f)
	case pipeline.RefusedRun:
		for _, x := range o.Faults {
			if x.Level == fault.Refuse {
				s.log.fault(run, x)
			}
		}
		s.log.info("refused", run+": refused", f)
	case pipeline.Interrupted:
		s.log.info("interrupted", run+": interrupted, not written", f)
	case pipeline.Failed:
		var bug *pipeline.BugError
		if errors.As(o.Err, &bug) {
			s.log.bug(bug)
		} else {
			s.log.error("failed", run+": "+o.Err.Error(), f)
		}
	}
	if f := o.Figures; f != nil && len(f.Raised) > 0 {
		s.log.warn("dvars-raised", fmt.Sprintf("%s: the correction raised DVARS to more than 1.5 times in %s %s: %s; look at these volumes, leave them out, or compare with another --order",
			run, plural(len(f.Raised), "volume"), list(f.Raised, 12), raisedBy(o.Plan)), fields{"run": run, "volumes": f.Raised})
	}
	if f := o.Figures; f != nil && f.PosePath == quality.PathNotSettled {
		s.log.warn("path-not-settled", fmt.Sprintf("%s: the pose path has not settled: some poses still moved by %s mm at the end, so they are off by about as much there and the expected error is too small; look at the poses, or compare with --motion volume",
			run, millimetres(f.LastStep)), fields{"run": run, "last_step_mm": f.LastStep})
	}
	for _, b := range o.Outside {
		s.log.error("outside-limit", run+": "+b.Words, fields{"run": run})
	}
	if o.Older {
		s.log.warn("older-outputs", run+": outputs of an earlier time are still in OUT and stay as they are; evenkeel audit tells whether they fit the data as they are", fields{"run": run})
	}
}

// raisedBy says what probably raised DVARS in some volumes.
func raisedBy(p *pipeline.Plan) string {
	if p.Timing.Temporal {
		return "probably a jerk nearby was spread by the interpolation in time, or a pose is wrong there"
	}
	return "probably a pose is wrong there"
}

// writeOutcomes writes one line a run, in the order of the runs.
func writeOutcomes(w io.Writer, outcomes []pipeline.Outcome) error {
	width := 0
	for _, o := range outcomes {
		width = max(width, len(o.Plan.Run.Stem))
	}
	var b strings.Builder
	for _, o := range outcomes {
		line := fmt.Sprintf("%-*s  %-11s", width, o.Plan.Run.Stem, o.State)
		switch f := o.Figures; {
		case f != nil:
			line += "  " + figures(f)
			if len(o.Outside) > 0 {
				line += "; outside a limit"
			}
		case o.State == pipeline.RefusedRun:
			var ids []string
			for _, x := range o.Faults {
				if x.Level == fault.Refuse && !slices.Contains(ids, x.ID) {
					ids = append(ids, x.ID)
				}
			}
			line += "  " + strings.Join(ids, ", ")
		}
		b.WriteString(strings.TrimRight(line, " ") + "\n")
	}
	_, err := io.WriteString(w, b.String())
	return err
}

// figures puts a run's main figures in words.
func figures(f *pipeline.Figures) string {
	line := fmt.Sprintf("%s, FD mean %s max %s mm", counted(f.Volumes, "volume"), millimetres(f.MeanFD), millimetres(f.MaxFD))
	if a := millimetres(f.MeanFDAligned); a != millimetres(f.MeanFD) {
		line += " (mean over aligned volumes " + a + ")"
	}
	line += fmt.Sprintf(", %d doubtful, %d lost", f.Doubtful, f.Lost)
	switch f.PosePath {
	case quality.PathUsed, quality.PathNotSettled:
		line += "; path: "
		if f.PosePath == quality.PathNotSettled {
			line += "not settled (last step " + millimetres(f.LastStep) + " mm), "
		}
		line += fmt.Sprintf("residuals %.3f times the noise (one pose a volume: %.3f), %.2f %% of variance explained, expected error %s mm",
			f.ResidualPath, f.ResidualVolume, 100*f.Explained, millimetres(f.ExpectedError))
	case quality.PathNotUsed:
		line += "; path not used, one pose a volume: " + f.NoPath
	}
	return line
}

// plural gives the word without its number.
func plural(n int, what string) string {
	if n != 1 {
		what += "s"
	}
	return what
}

// list writes at most that many numbers.
func list(v []int, most int) string {
	var parts []string
	for i, n := range v {
		if i == most {
			parts = append(parts, fmt.Sprintf("and %d more", len(v)-most))
			break
		}
		parts = append(parts, strconv.Itoa(n))
	}
	return strings.Join(parts, ", ")
}

func millimetres(v float64) string {
	if math.IsNaN(v) {
		return "n/a"
	}
	return strconv.FormatFloat(v, 'f', 3, 64)
}

// summary counts how the runs ended.
func summary(outcomes []pipeline.Outcome) string {
	n := map[pipeline.State]int{}
	for _, o := range outcomes {
		n[o.State]++
	}
	var parts []string
	for _, s := range []pipeline.State{pipeline.Done, pipeline.UpToDate, pipeline.RefusedRun, pipeline.Failed, pipeline.Interrupted} {
		if n[s] > 0 {
			parts = append(parts, fmt.Sprintf("%d %s", n[s], strings.ReplaceAll(string(s), "-", " ")))
		}
	}
	if len(parts) == 0 {
		return "no runs in this part"
	}
	return strings.Join(parts, ", ")
}
