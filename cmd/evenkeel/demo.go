package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/dataset"
	"evenkeel/phantom"
	"evenkeel/pipeline"
)

func (s *session) demoCommand() *cli.Command {
	return &cli.Command{
		Name:      "demo",
		Usage:     "build a small invented cohort, run everything on it, print recovered against true",
		ArgsUsage: "[OUT]",
		Description: describe("Writes an invented cohort of three small runs with known motion and timing below OUT\n"+
			"(without OUT: in a new folder under the system's temporary one), runs survey, steady\n"+
			"and audit on it, and prints what was recovered against what is true. Under a minute.",
			"evenkeel demo ebb-light",
			codes(pipeline.ExitDone, pipeline.ExitUsage, pipeline.ExitBug, pipeline.ExitNoCreate, pipeline.ExitIO, pipeline.ExitInterrupt).
				but(pipeline.ExitDone, "the cohort was built, and every command ran and ended with 0").
				but(pipeline.ExitUsage, "the command line is wrong; nothing was started").
				but(pipeline.ExitNoCreate, "OUT cannot be created, or is not empty").
				but(pipeline.ExitInterrupt, "interrupted: run it again with a new OUT")),
		Action: func(c *cli.Context) error {
			args, err := arguments(c, "[OUT]")
			if err != nil {
				return err
			}
			dir := ""
			if len(args) > 0 {
				dir = args[0]
			}
			return s.demo(c.Context, dir)
		},
	}
}

func (s *session) demo(ctx context.Context, dir string) error {
	temporary := dir == ""
	if temporary {
		var err error
		if dir, err = os.MkdirTemp("", "evenkeel-demo-"); err != nil {
			return &pipeline.CreateError{Path: os.TempDir(), Err: err}
		}
	} else if entries, err := os.ReadDir(dir); err == nil && len(entries) > 0 {
		return &pipeline.CreateError{Path: dir, Err: errors.New("the folder is not empty; name a new one")}
	} else if err := os.MkdirAll(dir, 0o777); err != nil {
		return &pipeline.CreateError{Path: dir, Err: err}
	}
	raw, out := filepath.Join(dir, "raw"), filepath.Join(dir, "steady")
	s.log.info("demo", "building an invented cohort in "+raw, nil)
	truth, err := phantom.WriteCohort(ctx, raw, pipeline.Cores())
	if err != nil {
		if ctx.Err() != nil {
			return ctx.Err()
		}
		return &pipeline.IOError{Path: raw, Err: err}
	}
	for _, args := range [][]string{
		{"survey", raw},
		{"steady", raw, out, "--events"},
		{"audit", out},
	} {
		s.say("\n$ evenkeel %s\n", strings.Join(args, " "))
		if err := s.sub(ctx, args); err != nil {
			return err
		}
	}
	plans, err := s.demoPlans(ctx, raw)
	if err != nil {
		return err
	}
	s.say("\nRecovered against true\n")
	for i, p := range plans {
		r, err := pipeline.ReadResult(out, p)
		if err != nil {
			return err
		}
		s.compare(p, &truth[i], r)
	}
	s.say("\nFiles written in %s\n", out)
	err = filepath.WalkDir(out, func(name string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		info, err := d.Info()
		if err != nil {
			return err
		}
		rel, _ := filepath.Rel(out, name)
		s.say("  %9d  %s\n", info.Size(), filepath.ToSlash(rel))
		return nil
	})
	if err != nil {
		return &pipeline.IOError{Path: out, Err: err}
	}
	s.say("\nEverything is in %s\n", dir)
	if temporary {
		s.say("Nothing else needs that folder; remove it when you have seen enough.\n")
	}
	return nil
}

// sub runs another command of the program in this process, with the same streams and
// the same context.
func (s *session) sub(ctx context.Context, args []string) error {
	app := s.app()
	line, err := normalise(app, append([]string{"evenkeel"}, args...))
	if err != nil {
		return err
	}
	if s.log.json {
		line.args = slices.Insert(line.args, 2, "--log=json")
	}
	err = app.RunContext(ctx, line.args)
	var own *exit
	if errors.As(err, &own) && own.code == pipeline.ExitDone {
		return nil
	}
	return err
}

func (s *session) demoPlans(ctx context.Context, raw string) ([]*pipeline.Plan, error) {
	ds, err := dataset.Open(raw)
	if err != nil {
		return nil, err
	}
	set := pipeline.DefaultSettings()
	set.Events = true
	return pipeline.Survey(ctx, ds, pipeline.Request{Settings: set, Workers: 1})
}

func (s *session) say(format string, a ...any) { fmt.Fprintf(s.stdout, format, a...) }

// compare prints what was recovered of one run.
func (s *session) compare(p *pipeline.Plan, truth *phantom.TrueRun, r *pipeline.Result) {
	scan := truth.Scan
	const step = 8 // mm; coarse, but a rigid error is the same function everywhere
	var points [][3]float64
	for x := -120.0; x <= 120; x += step {
		for y := -120.0; y <= 120; y += step {
			for z := -120.0; z <= 120; z += step {
				if at := [3]float64{x, y, z}; scan.Head.Inside(at) {
					points = append(points, at)
				}
			}
		}
	}
	// A volume that a jerk falls into has no one pose.
	torn := func(n int) bool {
		start := float64(n) * scan.TR
		return slices.ContainsFunc(truth.Jerks, func(t float64) bool { return t >= start && t < start+scan.TR })
	}
	errs := r.PoseErrors(scan.Motion, points, func(n int) bool { return !torn(n) })
	sum, worst, whole, moved := 0.0, 0.0, 0, 0.0
	at0 := scan.Motion(r.Times[0])
	for n, e := range errs {
		if torn(n) {
			continue
		}
		sum += e * e
		worst = max(worst, e)
		whole++
		moved = max(moved, distance(scan.Motion(r.Times[n]), at0, points))
	}
	s.say("\n  %s\n", truth.Stem)
	s.say("    true motion        up to %.2f mm (rms over the head, against the first volume)\n", moved)
	s.say("    pose error         rms %.4f mm, largest %.4f mm, over %d volumes\n", math.Sqrt(sum/float64(whole)), worst, whole)
	for n, e := range errs {
		if torn(n) {
			s.say("    volume %-3d         %.2f mm: the jerk falls into it, so it has no one pose\n", n, e)
		}
	}
	// The reference stands at the pose of the first volume.
	back := inverse(at0)
	weight := func(x [3]float64) float64 { return truth.ToneWeight(apply(back, x)) }
	before := r.PhaseErrors(r.Raw, truth.Tone.Freq, truth.Tone.Phase, weight)
	after := r.PhaseErrors(r.Steady, truth.Tone.Freq, truth.Tone.Phase, weight)
	toMS := 1000 / (2 * math.Pi * truth.Tone.Freq)
	s.say("    activation         %.3f Hz, true phase %.2f degrees; -: a slice that left the field of view\n", truth.Tone.Freq, truth.Tone.Phase*180/math.Pi)
	for _, row := range []struct {
		name string
		v    []float64
	}{{"before", before}, {"after", after}} {
		rms, most := spread(row.v)
		s.say("    phase error %-6s rms %.2f degrees (%.0f ms), largest %.2f degrees (%.0f ms); by slice:\n",
			row.name, rms*180/math.Pi, rms*toMS, most*180/math.Pi, most*toMS)
		for i := 0; i < len(row.v); i += 10 {
			s.say("     ")
			for _, v := range row.v[i:min(i+10, len(row.v))] {
				if math.IsNaN(v) {
					s.say("      -")
					continue
				}
				s.say(" %6.2f", v*180/math.Pi)
			}
			s.say("\n")
		}
	}
}

// spread gives root mean square and largest magnitude, undefined values left out.
func spread(v []float64) (rms, most float64) {
	n := 0
	for _, x := range v {
		if math.IsNaN(x) {
			continue
		}
		n++
		rms += x * x
		most = max(most, math.Abs(x))
	}
	return math.Sqrt(rms / float64(max(1, n))), most
}

// distance is the root mean square distance between two places of the head.
func distance(a, b [16]float64, points [][3]float64) float64 {
	sum := 0.0
	for _, x := range points {
		p, q := apply(a, x), apply(b, x)
		for i := range 3 {
			sum += (p[i] - q[i]) * (p[i] - q[i])
		}
	}
	return math.Sqrt(sum / float64(max(1, len(points))))
}

func apply(m [16]float64, x [3]float64) [3]float64 { return phantom.Apply(m, x) }

func inverse(m [16]float64) [16]float64 { return phantom.Inverse(m) }
