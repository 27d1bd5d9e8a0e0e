package main

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"time"
)

// A cost is what one process took.
type cost struct {
	wall, cpu float64 // s
	peak      int64   // bytes; 0 where the system does not tell
}

// A row is one thing measured.
type row struct {
	name  string
	costs []cost
}

// median gives the median of each number on its own.
func (r *row) median() cost {
	var wall, cpu, peak []float64
	for _, c := range r.costs {
		wall, cpu, peak = append(wall, c.wall), append(cpu, c.cpu), append(peak, float64(c.peak))
	}
	return cost{middle(wall), middle(cpu), int64(middle(peak))}
}

func middle(v []float64) float64 {
	if len(v) == 0 {
		return 0
	}
	v = slices.Sorted(slices.Values(v))
	n := len(v)
	return (v[(n-1)/2] + v[n/2]) / 2
}

// Names of the rows that the table refers to.
const (
	floorRow  = "floor"
	ownRow    = "floor-own"
	scriptRow = "script"

	resamplingRow = "resampling" // a table of its own
)

// programs are the ways in which the program is called.
var programs = []struct {
	name  string
	args  []string
	plain bool
}{
	{"default", nil, false},
	{"volume-first", []string{"--motion", "volume", "--reference", "first", "--time", "sinc"}, false},
	{"volume-mean", []string{"--motion", "volume", "--reference", "mean", "--time", "sinc"}, false},
	{"volume-first-plain", []string{"--motion", "volume", "--reference", "first", "--time", "sinc"}, true},
}

type bench struct {
	set    *settings
	dir    string
	self   string
	stderr io.Writer
}

// once runs a command and says what it took. The peak of a process cannot be seen
// below that of the process that started it: ours stays small for that.
func (b *bench) once(ctx context.Context, env []string, name string, args ...string) (cost, error) {
	cmd := exec.CommandContext(ctx, name, args...)
	cmd.Env = append(os.Environ(), env...)
	var said bytes.Buffer
	cmd.Stdout, cmd.Stderr = &said, &said
	begin := time.Now()
	err := cmd.Run()
	wall := time.Since(begin).Seconds()
	if err != nil {
		return cost{}, fmt.Errorf("%s: %w\n%s", strings.Join(append([]string{name}, args...), " "), err, said.Bytes())
	}
	st := cmd.ProcessState
	return cost{wall, (st.UserTime() + st.SystemTime()).Seconds(), peakBytes(st)}, nil
}

// oneThread keeps the threads of a numerical library from waiting in loops, which
// would be counted as work.
var oneThread = []string{"OPENBLAS_NUM_THREADS=1", "OMP_NUM_THREADS=1", "MKL_NUM_THREADS=1"}

// A variant is one way of processing one run.
type variant struct {
	*row
	size size
	do   func() (cost, error)
	n    int // how often
}

// variants invents a run, to be removed by the caller, and lists what is done with it.
func (b *bench) variants(ctx context.Context, s size) (all []variant, root string, err error) {
	root = filepath.Join(b.dir, "raw-"+s.String())
	fmt.Fprintf(b.stderr, "inventing %v\n", s)
	if _, err := b.once(ctx, nil, b.self, "synthesise", root, s.String()); err != nil {
		return nil, root, err
	}
	in := filepath.Join(root, filepath.FromSlash(runFile))
	add := func(name string, n int, do func() (cost, error)) {
		if len(b.set.only) == 0 || slices.Contains(b.set.only, name) || name == floorRow {
			all = append(all, variant{&row{name: name}, s, do, n})
		}
	}
	out, image := b.out(), b.out()+".nii.gz"
	for _, name := range []string{floorRow, ownRow} {
		add(name, b.set.times, func() (cost, error) { return b.once(ctx, nil, b.self, name, in, image) })
	}
	for _, p := range programs {
		var env []string
		if p.plain {
			env = []string{"EVENKEEL_PLAIN=1"}
		}
		add(p.name, b.set.times, func() (cost, error) {
			return b.once(ctx, env, b.set.program, append([]string{"steady", root, out}, p.args...)...)
		})
	}
	if len(b.set.script) > 0 {
		add(scriptRow, b.set.scriptTimes, func() (cost, error) {
			args := slices.Clone(b.set.script)
			for i, a := range args {
				switch a {
				case "IN":
					args[i] = in
				case "OUT":
					args[i] = image
				}
			}
			return b.once(ctx, oneThread, args[0], args[1:]...)
		})
	}
	return all, root, nil
}

// out is where a run's output goes, or with .nii.gz after it a single image.
func (b *bench) out() string { return filepath.Join(b.dir, "out") }

// alternate does everything in turn, as often as it is to be done.
func (b *bench) alternate(all []variant) error {
	for i := range b.set.times {
		for _, v := range all {
			if i >= v.n {
				continue
			}
			c, err := v.do()
			if err != nil {
				return err
			}
			v.costs = append(v.costs, c)
			fmt.Fprintf(b.stderr, "%v %d/%d %-20s %7.3f s, CPU %7.3f s, %4d MiB\n", v.size, i+1, v.n, v.name, c.wall, c.cpu, c.peak>>20)
			if err := os.RemoveAll(b.out()); err != nil {
				return err
			}
			if err := os.RemoveAll(b.out() + ".nii.gz"); err != nil {
				return err
			}
		}
	}
	return nil
}

// size measures everything on one invented run.
func (b *bench) size(ctx context.Context, s size) ([]*row, error) {
	all, root, err := b.variants(ctx, s)
	defer os.RemoveAll(root)
	if err != nil {
		return nil, err
	}
	if err := b.alternate(all); err != nil {
		return nil, err
	}
	var rows []*row
	for _, v := range all {
		rows = append(rows, v.row)
	}
	return rows, nil
}

// growth measures everything on runs of one grid and more and more volumes, all in
// turn, so that a change of load falls on every length.
func (b *bench) growth(ctx context.Context, stdout io.Writer) error {
	var all []variant
	grid := b.set.sizes[0]
	for _, n := range b.set.growth {
		grid[3] = n
		some, root, err := b.variants(ctx, grid)
		defer os.RemoveAll(root)
		if err != nil {
			return err
		}
		all = append(all, some...)
	}
	if err := b.alternate(all); err != nil {
		return err
	}
	writeGrowth(stdout, grid, b.set.growth, all)
	return nil
}

// writeGrowth prints the processor time of a volume by the number of volumes. all has
// the rows of the first number, then those of the second, and so on.
func writeGrowth(w io.Writer, s size, counts []int, all []variant) {
	fmt.Fprintf(w, "\n%dx%dx%d, CPU ms / volume by the number of volumes, and by how much it grows\n\n| what |", s[0], s[1], s[2])
	for _, n := range counts {
		fmt.Fprintf(w, " %d |", n)
	}
	fmt.Fprintf(w, " growth from %d |\n| --- |%s --- |\n", counts[0], strings.Repeat(" --- |", len(counts)))
	rows := len(all) / len(counts)
	for r := range rows {
		fmt.Fprintf(w, "| %s |", all[r].name)
		var first, last float64
		for k, n := range counts {
			last = 1e3 * all[k*rows+r].median().cpu / float64(n)
			if k == 0 {
				first = last
			}
			fmt.Fprintf(w, " %.2f |", last)
		}
		fmt.Fprintf(w, " %+.1f %% |\n", 100*(last/first-1))
	}
}

// survey measures a survey of many small runs.
func (b *bench) survey(ctx context.Context) (*row, error) {
	root := filepath.Join(b.dir, "raw-many")
	fmt.Fprintf(b.stderr, "inventing %d small runs\n", b.set.survey)
	if _, err := b.once(ctx, nil, b.self, "synthesise-many", root, fmt.Sprint(b.set.survey)); err != nil {
		return nil, err
	}
	r := &row{name: "survey"}
	for range b.set.times {
		c, err := b.once(ctx, nil, b.set.program, "survey", root)
		if err != nil {
			return nil, err
		}
		r.costs = append(r.costs, c)
	}
	return r, nil
}

// writeTable prints the medians and the ratios.
func writeTable(w io.Writer, s size, rows []*row) {
	var floor, script cost
	for _, r := range rows {
		switch r.name {
		case floorRow:
			floor = r.median()
		case scriptRow:
			script = r.median()
		}
	}
	ratio := func(a, b float64) string {
		if a == 0 || b == 0 {
			return "-"
		}
		return fmt.Sprintf("%.2f", a/b)
	}
	fmt.Fprintf(w, "\n%v, one float32 copy %.0f MiB\n\n", s, float64(s.copyBytes())/(1<<20))
	fmt.Fprintln(w, "| what | wall s | CPU s | peak MiB | wall / floor | CPU / floor | peak / copy | script / this, wall | CPU | CPU ms / volume |")
	fmt.Fprintln(w, "| --- | --- | --- | --- | --- | --- | --- | --- | --- | --- |")
	for _, r := range rows {
		m := r.median()
		fmt.Fprintf(w, "| %s | %.3f | %.3f | %d | %s | %s | %s | %s | %s | %.2f |\n", r.name, m.wall, m.cpu, m.peak>>20, ratio(m.wall, floor.wall), ratio(m.cpu, floor.cpu),
			ratio(float64(m.peak), float64(s.copyBytes())), ratio(script.wall, m.wall), ratio(script.cpu, m.cpu), 1e3*m.cpu/float64(s[3]))
	}
}

func writeSurvey(w io.Writer, runs int, r *row) {
	m := r.median()
	fmt.Fprintf(w, "\nsurvey of %d runs: %.3f s, CPU %.3f s, %d MiB\n", runs, m.wall, m.cpu, m.peak>>20)
}
