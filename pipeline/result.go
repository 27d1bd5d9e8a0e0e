package pipeline

// Reading a finished run back from its files, and holding it against what is
// exactly true of an invented one: for the demo and for tests.

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"

	"evenkeel/internal/detmath"
	"evenkeel/nifti"
	"evenkeel/realign"
)

// A Result is a run as its files in OUT say.
type Result struct {
	Grid      realign.Grid
	SliceAxis int
	TR        float64 // s
	StartTime float64 // s
	Times     []float64
	Poses     []realign.Pose
	Steady    []float32 // data[x+nx*(y+ny*(z+nz*t))]
	Raw       []float32 // as Steady, before
	Volumes   int
}

// ReadResult reads the files of a finished run.
func ReadResult(out string, p *Plan) (*Result, error) {
	at := func(role string) string { return filepath.Join(out, filepath.FromSlash(p.Output(role))) }
	var side struct{ RepetitionTime, StartTime float64 }
	var pose struct{ Matrices [][4][4]float64 }
	for name, to := range map[string]any{at("steady-sidecar"): &side, at("pose-description"): &pose} {
		data, err := os.ReadFile(name)
		if err == nil {
			err = json.Unmarshal(data, to)
		}
		if err != nil {
			return nil, &IOError{Path: name, Step: "reading back", Err: err}
		}
	}
	h, steady, err := nifti.ReadSeries(at("steady-series"), nil, 0)
	if err != nil {
		return nil, err
	}
	_, raw, err := nifti.ReadSeries(p.Dataset.Path(p.Run.File), nil, p.Settings.Skip)
	if err != nil {
		return nil, err
	}
	if len(pose.Matrices) != steady.NT || raw.NT != steady.NT {
		return nil, &IOError{Path: at("steady-series"), Step: "reading back", Err: fmt.Errorf("%d volumes and %d poses", steady.NT, len(pose.Matrices))}
	}
	r := &Result{
		Grid:      realign.Grid{N: [3]int{steady.NX, steady.NY, steady.NZ}, Affine: h.Affine()},
		SliceAxis: p.Schedule.Axis, TR: side.RepetitionTime, StartTime: side.StartTime, Times: p.Timing.Rows,
		Steady: steady.Data, Raw: raw.Data, Volumes: steady.NT,
	}
	for _, m := range pose.Matrices {
		var flat [16]float64
		for i := range flat {
			flat[i] = m[i/4][i%4]
		}
		r.Poses = append(r.Poses, realign.FromMatrix(flat))
	}
	return r, nil
}

// PoseErrors holds the poses against the true motion: truth(t) takes a point of
// the head's own frame to where it is at time t (row-major 4x4, world mm), points
// fill the head in that frame. It returns the root mean square displacement in
// mm for each volume.
//
// Where the reference itself stands is arbitrary, so what all volumes have in
// common (for each point its mean place in the reference, over the volumes
// that count) is taken out first.
func (r *Result) PoseErrors(truth func(t float64) [16]float64, points [][3]float64, counts func(n int) bool) []float64 {
	places := make([][][3]float64, r.Volumes) // where the estimate puts each point, in the reference
	mean := make([][3]float64, len(points))
	used := 0.0
	for n := range places {
		m, back := truth(r.Times[n]), r.Poses[n].Inverse()
		places[n] = make([][3]float64, len(points))
		for i, x := range points {
			places[n][i] = back.Apply(applyMatrix(m, x))
		}
		if !counts(n) {
			continue
		}
		used++
		for i, y := range places[n] {
			for a := range 3 {
				mean[i][a] += y[a]
			}
		}
	}
	out := make([]float64, r.Volumes)
	for n := range places {
		sum := 0.0
		for i, y := range places[n] {
			for a := range 3 {
				d := y[a] - mean[i][a]/used
				sum += float64(d * d)
			}
		}
		out[n] = math.Sqrt(sum / float64(len(points)))
	}
	return out
}

func applyMatrix(m [16]float64, x [3]float64) [3]float64 {
	var y [3]float64
	for a := range y {
		y[a] = float64(m[4*a]*x[0]) + float64(m[4*a+1]*x[1]) + float64(m[4*a+2]*x[2]) + m[4*a+3]
	}
	return y
}

// inView marks the voxels of the reference that lay inside the field of view,
// between the centres of its outermost voxels, in every volume: nothing else
// can be recovered.
func (r *Result) inView() []bool {
	n := r.Grid.N
	out := make([]bool, n[0]*n[1]*n[2])
	for i := range out {
		out[i] = true
	}
	x, y, z := make([]float64, n[0]), make([]float64, n[0]), make([]float64, n[0])
	within := func(v float64, n int) bool { return v >= 0 && v <= float64(n-1) }
	for _, p := range r.Poses {
		if p == realign.Identity {
			continue // whose map may leave the field by a rounding
		}
		m := realign.PoseMap(r.Grid, p)
		for k := range n[2] {
			for j := range n[1] {
				m.Row(j, k, x, y, z)
				row := out[n[0]*(j+n[1]*k):][:n[0]]
				for i := range row {
					row[i] = row[i] && within(x[i], n[0]) && within(y[i], n[1]) && within(z[i], n[2])
				}
			}
		}
	}
	return out
}

// PhaseErrors fits sin(2 pi freq t + phase), a constant and a slope to the average
// of each slice's voxels, weighted by weight (of a voxel's world position), with t the
// time that the output says its volumes refer to, and returns found less true
// phase in rad, within (-pi, pi]; NaN for a slice without weight. Voxels that left
// the field of view in some volume are left out, and so is a slice most of which did.
func (r *Result) PhaseErrors(data []float32, freq, phase float64, weight func(x [3]float64) float64) []float64 {
	n := r.Grid.N
	course := make([][]float64, n[r.SliceAxis])
	total, whole := make([]float64, n[r.SliceAxis]), make([]float64, n[r.SliceAxis])
	for s := range course {
		course[s] = make([]float64, r.Volumes)
	}
	nv := n[0] * n[1] * n[2]
	seen := r.inView()
	v := 0
	for z := range n[2] {
		for y := range n[1] {
			for x := range n[0] {
				s := [3]int{x, y, z}[r.SliceAxis]
				w := weight(applyMatrix(r.Grid.Affine, [3]float64{float64(x), float64(y), float64(z)}))
				whole[s] += w
				if seen[v] && w > 0 {
					total[s] += w
					for t := range r.Volumes {
						course[s][t] += float64(w * float64(data[t*nv+v]))
					}
				}
				v++
			}
		}
	}
	out := make([]float64, len(course))
	for s, c := range course {
		if total[s] == 0 || total[s] < whole[s]/2 {
			out[s] = math.NaN()
			continue
		}
		basis := make([][4]float64, r.Volumes)
		for t := range basis {
			angle := 2 * math.Pi * freq * (r.StartTime + float64(float64(t)*r.TR))
			basis[t] = [4]float64{1, float64(t)/float64(r.Volumes) - 0.5, detmath.Sin(angle), detmath.Cos(angle)}
		}
		fit := leastSquares(basis, c)
		// A sin(wt + p) = A cos p sin wt + A sin p cos wt.
		d := detmath.Atan2(fit[3], fit[2]) - phase
		for d > math.Pi {
			d -= 2 * math.Pi
		}
		for d <= -math.Pi {
			d += 2 * math.Pi
		}
		out[s] = d
	}
	return out
}

// leastSquares solves the normal equations of four unknowns by elimination with
// pivoting.
func leastSquares(rows [][4]float64, y []float64) [4]float64 {
	var a [4][5]float64
	for t, r := range rows {
		for i := range 4 {
			for j := range 4 {
				a[i][j] += float64(r[i] * r[j])
			}
			a[i][4] += float64(r[i] * y[t])
		}
	}
	for i := range 4 {
		p := i
		for k := i + 1; k < 4; k++ {
			if math.Abs(a[k][i]) > math.Abs(a[p][i]) {
				p = k
			}
		}
		a[i], a[p] = a[p], a[i]
		for k := range 4 {
			if k == i || a[i][i] == 0 {
				continue
			}
			f := a[k][i] / a[i][i]
			for j := i; j < 5; j++ {
				a[k][j] -= float64(f * a[i][j])
			}
		}
	}
	var x [4]float64
	for i := range x {
		if a[i][i] != 0 {
			x[i] = a[i][4] / a[i][i]
		}
	}
	return x
}
