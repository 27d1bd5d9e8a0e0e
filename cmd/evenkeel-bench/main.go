// Command evenkeel-bench measures evenkeel against the cost of reading and
// writing the files, and against a script given, alternately and in one go. See
// docs/speed.md.
package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"os"
	"os/exec"
	"os/signal"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"syscall"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	if err := run(ctx, os.Args[1:], os.Stdout, os.Stderr); err != nil {
		if errors.Is(err, flag.ErrHelp) {
			return
		}
		fmt.Fprintln(os.Stderr, "evenkeel-bench:", err)
		stop()
		os.Exit(1)
	}
}

// settings are what the command line says.
type settings struct {
	times       int
	scriptTimes int
	sizes       []size
	survey      int
	program     string
	script      []string
	folder      string
	only        []string
	python      string
	growth      []int
	overhead    bool
}

// A size is nx, ny, nz, nt.
type size [4]int

func (s size) String() string { return fmt.Sprintf("%dx%dx%dx%d", s[0], s[1], s[2], s[3]) }

// copyBytes is one float32 copy of the run.
func (s size) copyBytes() int64 { return 4 * int64(s[0]) * int64(s[1]) * int64(s[2]) * int64(s[3]) }

func parseSize(text string) (s size, err error) {
	parts := strings.Split(text, "x")
	if len(parts) != 4 {
		return s, fmt.Errorf("size: found %q, expected four numbers as in 64x64x36x200", text)
	}
	for i, p := range parts {
		if s[i], err = strconv.Atoi(p); err != nil || s[i] < 2 || s[i] > 4096 {
			return s, fmt.Errorf("size: found %q in %q, expected a number from 2 to 4096", p, text)
		}
	}
	return s, nil
}

// run does what args say. The words below are how the program calls itself, so
// that each piece of work has a process of its own to be measured.
func run(ctx context.Context, args []string, stdout, stderr io.Writer) error {
	if len(args) > 0 {
		switch args[0] {
		case "floor", "floor-own":
			if len(args) != 3 {
				return errors.New("floor: expected IN OUT")
			}
			return floor(ctx, args[1], args[2], args[0] == "floor-own")
		case "synthesise":
			if len(args) != 3 {
				return errors.New("synthesise: expected DIR SIZE")
			}
			s, err := parseSize(args[2])
			if err != nil {
				return err
			}
			return synthesise(ctx, args[1], s)
		case "synthesise-many":
			if len(args) != 3 {
				return errors.New("synthesise-many: expected DIR RUNS")
			}
			n, err := strconv.Atoi(args[2])
			if err != nil {
				return err
			}
			return synthesiseMany(ctx, args[1], n)
		case "trust":
			if len(args) != 3 {
				return errors.New("trust: expected DIR OUT")
			}
			return trust(args[1], args[2], stdout)
		case "resample":
			if len(args) != 5 {
				return errors.New("resample: expected DIR WAY SIZE TIMES")
			}
			s, err := parseSize(args[3])
			if err != nil {
				return err
			}
			n, err := strconv.Atoi(args[4])
			if err != nil || n < 1 {
				return fmt.Errorf("resample: found %q, expected a number from 1", args[4])
			}
			return resampleOften(args[1], args[2], s, n, stdout)
		}
	}
	set, err := parse(args, stderr)
	if err != nil {
		return err
	}
	return measure(ctx, set, stdout, stderr)
}

func parse(args []string, stderr io.Writer) (*settings, error) {
	set := &settings{}
	fs := flag.NewFlagSet("evenkeel-bench", flag.ContinueOnError)
	fs.SetOutput(stderr)
	fs.Usage = func() {
		fmt.Fprint(stderr, "usage: evenkeel-bench [options]\n\nMeasures the program `evenkeel` on invented runs beside the cost of decoding, widening\nand encoding the same files, alternately, and prints medians and ratios.\n\n")
		fs.PrintDefaults()
	}
	var sizes, script, only, growth string
	fs.IntVar(&set.times, "times", 5, "how often each thing is measured")
	fs.IntVar(&set.scriptTimes, "script-times", 0, "how often the script is measured (default: as often as the rest)")
	fs.StringVar(&sizes, "sizes", "64x64x36x200,104x104x72x400", "runs to invent, `NXxNYxNZxNT` each")
	fs.IntVar(&set.survey, "survey", 1000, "`RUNS` of the dataset that is surveyed (0: none)")
	fs.StringVar(&set.program, "program", "", "the evenkeel to measure (default: built from the module in the current folder)")
	fs.StringVar(&script, "script", "", "a command to measure beside it; the words IN and OUT become the run and a new .nii.gz")
	fs.StringVar(&set.folder, "folder", "", "where to put runs and outputs (default: a temporary folder, removed in the end)")
	fs.StringVar(&only, "only", "", "measure just these rows, by `NAMES` as in the table, with commas (docs/speed.md tells them); resampling needs -python")
	fs.StringVar(&set.python, "python", "", "a Python with numpy and scipy: also measure resampling alone, beside scipy's")
	fs.StringVar(&growth, "growth", "", "instead of all else, measure how the cost of a volume grows with their number, on the grid of the first\nof the sizes: `COUNTS` of volumes with commas, as 100,200,400,800")
	fs.BoolVar(&set.overhead, "overhead", false, "instead of all else, measure what digests and syncing cost of a run's processor time")
	if err := fs.Parse(args); err != nil {
		return nil, err
	}
	if fs.NArg() > 0 {
		return nil, fmt.Errorf("found %q, expected options only", fs.Arg(0))
	}
	if set.times < 1 {
		return nil, fmt.Errorf("times: found %d, expected 1 or more", set.times)
	}
	if set.scriptTimes <= 0 || set.scriptTimes > set.times {
		set.scriptTimes = set.times
	}
	for _, text := range strings.Split(sizes, ",") {
		if text == "" {
			continue
		}
		s, err := parseSize(text)
		if err != nil {
			return nil, err
		}
		set.sizes = append(set.sizes, s)
	}
	for _, text := range strings.Split(growth, ",") {
		if text == "" {
			continue
		}
		n, err := strconv.Atoi(text)
		if err != nil || n < 2 || n > 4096 || len(set.growth) > 0 && n <= set.growth[len(set.growth)-1] {
			return nil, fmt.Errorf("growth: found %q, expected numbers from 2 to 4096, each larger than the one before", text)
		}
		set.growth = append(set.growth, n)
	}
	if len(set.growth) == 1 || len(set.growth) > 1 && len(set.sizes) == 0 {
		return nil, errors.New("growth: expected two counts or more, and a size whose grid they have")
	}
	set.script = strings.Fields(script)
	if only != "" {
		set.only = strings.Split(only, ",")
	}
	names := []string{floorRow, ownRow, scriptRow, resamplingRow}
	for _, p := range programs {
		names = append(names, p.name)
	}
	for _, name := range set.only {
		if !slices.Contains(names, name) {
			return nil, fmt.Errorf("only: found %q, expected some of %s", name, strings.Join(names, ", "))
		}
		if name == resamplingRow && set.python == "" {
			return nil, errors.New("only: resampling needs -python")
		}
	}
	return set, nil
}

// measure does everything.
func measure(ctx context.Context, set *settings, stdout, stderr io.Writer) (err error) {
	self, err := os.Executable()
	if err != nil {
		return err
	}
	dir, err := os.MkdirTemp(set.folder, "evenkeel-bench-")
	if err != nil {
		return err
	}
	defer func() {
		if e := os.RemoveAll(dir); err == nil {
			err = e
		}
	}()
	if set.program == "" {
		set.program = filepath.Join(dir, "evenkeel")
		if out, err := exec.CommandContext(ctx, "go", "build", "-o", set.program, "evenkeel/cmd/evenkeel").CombinedOutput(); err != nil {
			return fmt.Errorf("building evenkeel: %w (run this in the module, or name a --program)\n%s", err, out)
		}
	}
	fmt.Fprintf(stdout, "%d cores, %s, %s/%s; medians of %d, alternated\n", runtime.NumCPU(), runtime.Version(), runtime.GOOS, runtime.GOARCH, set.times)
	b := &bench{set: set, dir: dir, self: self, stderr: stderr}
	if len(set.growth) > 0 {
		return b.growth(ctx, stdout)
	}
	if set.overhead {
		for _, s := range set.sizes {
			if err := b.overhead(ctx, s, stdout); err != nil {
				return err
			}
		}
		return nil
	}
	wants := func(name string) bool { return len(set.only) == 0 || slices.Contains(set.only, name) }
	for _, s := range set.sizes {
		if len(set.only) == 1 && wants(resamplingRow) {
			break
		}
		rows, err := b.size(ctx, s)
		if err != nil {
			return err
		}
		writeTable(stdout, s, rows)
	}
	if set.python != "" && wants(resamplingRow) {
		for _, s := range set.sizes {
			rows, err := b.resampling(ctx, s)
			if err != nil {
				return err
			}
			writeResampling(stdout, s, rows)
		}
	}
	if set.survey > 0 {
		row, err := b.survey(ctx)
		if err != nil {
			return err
		}
		writeSurvey(stdout, set.survey, row)
	}
	return nil
}
