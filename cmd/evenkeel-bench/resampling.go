package main

import (
	"context"
	_ "embed"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"

	"evenkeel/realign"
)

// Resampling on its own: the quintic spline with its prefilter, on one core, beside
// scipy's, which does the same sums in float64. Each has the same volume and
// affine, in a process of its own, and says itself what processor time a volume
// took, so that starting up does not count.

//go:embed resampling.py
var resamplingScript []byte

// Ways of resampling.
const (
	passesWay = "passes"  // one axis after the other
	atOnceWay = "at-once" // 216 taps
	scipyWay  = "scipy"
)

var ways = []struct {
	name, way string
	plain     bool
	volumes   float64 // how many in a go, against the others
	// How far the result may be from scipy's, in rms, as a share of what varies in it:
	// that is 8 of 900, which float32 holds to 6e-5; and for the passes as their noise differs at
	// this turn (1 %).
	apart float64
}{
	{passesWay, passesWay, false, 1, 0.03},
	{atOnceWay, atOnceWay, false, 0.5, 1e-4},
	{passesWay + "-plain", passesWay, true, 0.2, 0.03},
	{atOnceWay + "-plain", atOnceWay, true, 0.1, 1e-4},
	{scipyWay, scipyWay, false, 0.05, 0},
}

// resamplingCase invents the volume and the affine: noise about a level, a shift by
// parts of voxels and a turn of 0.7 degrees.
func resamplingCase(s size) (vol []float32, m realign.Map) {
	g := realign.Grid{N: [3]int(s[:3])}
	h := header(s)
	for r := range 3 {
		copy(g.Affine[4*r:], h.Srow[r][:])
	}
	g.Affine[15] = 1
	const turn = 0.007 // rad about each axis
	m = realign.PoseMap(g, realign.FromParams([3]float64{0.7, -1.1, 0.9}, [3]float64{turn, -turn, turn}, [3]float64{}))
	rnd := rand.New(rand.NewPCG(7, 11))
	vol = make([]float32, s[0]*s[1]*s[2])
	for i := range vol {
		vol[i] = float32(headLevel + noise*rnd.NormFloat64())
	}
	return vol, m
}

// writeCase puts it where the script finds it.
func writeCase(dir string, s size) error {
	vol, m := resamplingCase(s)
	if err := writeRaw(filepath.Join(dir, "volume.raw"), vol); err != nil {
		return err
	}
	// An affine is where it takes the corner and its neighbours.
	at := func(j, k int) (a, b [3]float64) {
		x, y, z := make([]float64, 2), make([]float64, 2), make([]float64, 2)
		m.Row(j, k, x, y, z)
		return [3]float64{x[0], y[0], z[0]}, [3]float64{x[1], y[1], z[1]}
	}
	o, x := at(0, 0)
	y, _ := at(1, 0)
	z, _ := at(0, 1)
	var text strings.Builder
	for r := range 3 {
		fmt.Fprintf(&text, "%.17g %.17g %.17g %.17g\n", x[r]-o[r], y[r]-o[r], z[r]-o[r], o[r])
	}
	text.WriteString("0 0 0 1\n")
	return os.WriteFile(filepath.Join(dir, "matrix.txt"), []byte(text.String()), 0o644)
}

func writeRaw(path string, v []float32) error {
	b := make([]byte, 0, 4*len(v))
	for _, x := range v {
		b = binary.LittleEndian.AppendUint32(b, math.Float32bits(x))
	}
	return os.WriteFile(path, b, 0o644)
}

func readRaw(path string, n int) ([]float32, error) {
	b, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	if len(b) != 4*n {
		return nil, fmt.Errorf("%s: found %d bytes, expected %d", path, len(b), 4*n)
	}
	v := make([]float32, n)
	for i := range v {
		v[i] = math.Float32frombits(binary.LittleEndian.Uint32(b[4*i:]))
	}
	return v, nil
}

// resampleOften is one process's work: it resamples as often as asked, writes the last
// volume and prints the processor time of one.
func resampleOften(dir, way string, s size, times int, stdout io.Writer) error {
	vol, m := resamplingCase(s)
	r, dst := realign.NewResampler([3]int(s[:3]), 5), make([]float32, len(vol))
	once := func() error {
		switch way {
		case atOnceWay:
			r.Load(vol)
			r.Eval(dst, m)
		case passesWay:
			if !r.Near(dst, vol, m) {
				return errors.New("resample: this turn is not for passes")
			}
		default:
			return fmt.Errorf("resample: found %q, expected %s or %s", way, passesWay, atOnceWay)
		}
		return nil
	}
	if err := once(); err != nil { // with its tables and its memory
		return err
	}
	begin := processSeconds()
	for range times {
		if err := once(); err != nil {
			return err
		}
	}
	spent := (processSeconds() - begin) / float64(times)
	if err := writeRaw(filepath.Join(dir, way+".raw"), dst); err != nil {
		return err
	}
	_, err := fmt.Fprintln(stdout, spent)
	return err
}

// resampling measures every way on one grid, in turn.
func (b *bench) resampling(ctx context.Context, s size) ([]*row, error) {
	dir, err := os.MkdirTemp(b.dir, "resampling-")
	if err != nil {
		return nil, err
	}
	defer os.RemoveAll(dir)
	if err := writeCase(dir, s); err != nil {
		return nil, err
	}
	script := filepath.Join(dir, "resampling.py")
	if err := os.WriteFile(script, resamplingScript, 0o644); err != nil {
		return nil, err
	}
	voxels := s[0] * s[1] * s[2]
	rows := make([]*row, len(ways))
	for i, w := range ways {
		rows[i] = &row{name: w.name}
	}
	for round := range b.set.times {
		for i, w := range ways {
			times := strconv.Itoa(max(1, int(6e6*w.volumes/float64(voxels))))
			env := []string{"GOMAXPROCS=1"}
			name, args := b.self, []string{"resample", dir, w.way, s.String(), times}
			switch {
			case w.way == scipyWay:
				env = oneThread
				name, args = b.set.python, []string{script, dir, strconv.Itoa(s[0]), strconv.Itoa(s[1]), strconv.Itoa(s[2]), times}
			case w.plain:
				env = append(env, "EVENKEEL_PLAIN=1")
			}
			cmd := exec.CommandContext(ctx, name, args...)
			cmd.Env = append(os.Environ(), env...)
			cmd.Stderr = b.stderr
			said, err := cmd.Output()
			if err != nil {
				return nil, fmt.Errorf("%s: %w (-python must name an interpreter with numpy and scipy)", strings.Join(cmd.Args, " "), err)
			}
			cpu, err := strconv.ParseFloat(strings.TrimSpace(string(said)), 64)
			if err != nil {
				return nil, fmt.Errorf("%s: %w", name, err)
			}
			rows[i].costs = append(rows[i].costs, cost{cpu: cpu})
			fmt.Fprintf(b.stderr, "resampling %dx%dx%d %d/%d %-15s CPU %8.3f ms\n", s[0], s[1], s[2], round+1, b.set.times, w.name, 1e3*cpu)
		}
	}
	want, err := readRaw(filepath.Join(dir, scipyWay+".raw"), voxels)
	if err != nil {
		return nil, err
	}
	for _, w := range ways {
		got, err := readRaw(filepath.Join(dir, w.way+".raw"), voxels)
		if err != nil {
			return nil, err
		}
		if d := apart(got, want, s); !(d <= w.apart) {
			return nil, fmt.Errorf("resampling: %s and scipy differ by %.2g of what varies, expected %.2g at most: they do not do the same", w.name, d, w.apart)
		}
	}
	return rows, nil
}

// apart is the rms difference of two volumes over the SD of the second, a third of the grid away
// from its faces: each has a rule of its own there, which is felt 0.43^n of it n voxels inside.
func apart(got, want []float32, s size) float64 {
	var d, v, sum, n float64
	for z := s[2] / 3; z < s[2]-s[2]/3; z++ {
		for y := s[1] / 3; y < s[1]-s[1]/3; y++ {
			for x := s[0] / 3; x < s[0]-s[0]/3; x++ {
				i := x + s[0]*(y+s[1]*z)
				e, w := float64(got[i])-float64(want[i]), float64(want[i])-headLevel
				d += e * e
				v += w * w
				sum += w
				n++
			}
		}
	}
	return math.Sqrt(d / (v - sum*sum/n))
}

func writeResampling(w io.Writer, s size, rows []*row) {
	var scipy float64
	for _, r := range rows {
		if r.name == scipyWay {
			scipy = r.median().cpu
		}
	}
	fmt.Fprintf(w, "\nresampling of %dx%dx%d, quintic with its prefilter, on one core\n\n", s[0], s[1], s[2])
	fmt.Fprintln(w, "| what | CPU ms / volume | ns / voxel | scipy / this |")
	fmt.Fprintln(w, "| --- | --- | --- | --- |")
	for _, r := range rows {
		cpu := r.median().cpu
		fmt.Fprintf(w, "| %s | %.3f | %.2f | %.1f |\n", r.name, 1e3*cpu, 1e9*cpu/float64(s[0]*s[1]*s[2]), scipy/cpu)
	}
}
