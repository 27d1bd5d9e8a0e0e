package phantom

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"io/fs"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"evenkeel/nifti"
)

// written is the cohort in a folder that did not exist.
func written(t *testing.T) (string, []TrueRun) {
	t.Helper()
	dir := filepath.Join(t.TempDir(), "ebb-light")
	runs, err := WriteCohort(context.Background(), dir, 2)
	if err != nil {
		t.Fatal(err)
	}
	return dir, runs
}

func tree(t *testing.T, dir string) map[string][]byte {
	t.Helper()
	files := map[string][]byte{}
	err := filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		b, err := os.ReadFile(path)
		rel, _ := filepath.Rel(dir, path)
		files[filepath.ToSlash(rel)] = b
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return files
}

func TestCohortOnDisk(t *testing.T) {
	dir, runs := written(t)
	files := tree(t, dir)
	t.Run("files", func(t *testing.T) {
		var names []string
		for n := range files {
			names = append(names, n)
		}
		slices.Sort(names)
		want := []string{"README", "dataset_description.json", "participants.json", "participants.tsv",
			"sub-alder/func/sub-alder_task-watch_bold.nii.gz", "sub-alder/func/sub-alder_task-watch_events.tsv",
			"sub-birch/func/sub-birch_task-watch_bold.json", "sub-birch/func/sub-birch_task-watch_bold.nii.gz", "sub-birch/func/sub-birch_task-watch_events.tsv",
			"sub-cedar/func/sub-cedar_task-watch_bold.json", "sub-cedar/func/sub-cedar_task-watch_bold.nii.gz", "sub-cedar/func/sub-cedar_task-watch_events.tsv",
			"task-watch_bold.json", "task-watch_events.json"}
		if !slices.Equal(names, want) {
			t.Errorf("files:\n got %v\nwant %v", names, want)
		}
	})
	t.Run("same bytes again", func(t *testing.T) {
		again := t.TempDir() // exists and is empty
		if _, err := WriteCohort(context.Background(), again, 1); err != nil {
			t.Fatal(err)
		}
		for n, b := range tree(t, again) {
			if !bytes.Equal(b, files[n]) {
				t.Errorf("%s differs between two writes", n)
			}
		}
	})
	t.Run("sidecars say what was simulated", func(t *testing.T) { checkSidecars(t, files, runs) })
	t.Run("images hold what was simulated", func(t *testing.T) { checkImages(t, dir, runs) })
	t.Run("nibabel opens them", func(t *testing.T) { checkNibabel(t, dir, runs) })
	t.Run("a folder in use is refused", func(t *testing.T) {
		if _, err := WriteCohort(context.Background(), dir, 1); err == nil || !strings.Contains(err.Error(), "not empty") {
			t.Errorf("got %v", err)
		}
		if _, err := WriteCohort(context.Background(), filepath.Join(dir, "README"), 1); err == nil {
			t.Error("a file in the place of the folder: expected an error")
		}
	})
}

// checkSidecars merges root and run sidecars key by key, as the standard's
// inheritance principle says, and undoes a negative SliceEncodingDirection.
func checkSidecars(t *testing.T, files map[string][]byte, runs []TrueRun) {
	for name, b := range files {
		if strings.HasSuffix(name, ".json") && !json.Valid(b) {
			t.Errorf("%s is not JSON", name)
		}
	}
	for _, r := range runs {
		var m struct {
			TaskName                                               string
			RepetitionTime, TotalReadoutTime, EffectiveEchoSpacing float64
			ReconMatrixPE, MultibandAccelerationFactor             int
			SliceTiming                                            []float64
			SliceEncodingDirection                                 string
		}
		sub := strings.SplitN(r.Stem, "_", 2)[0]
		for _, name := range []string{"task-watch_bold.json", sub + "/func/" + r.Stem + "_bold.json"} {
			if b, ok := files[name]; ok {
				if err := json.Unmarshal(b, &m); err != nil {
					t.Fatal(name, err)
				}
			}
		}
		times := m.SliceTiming
		if m.SliceEncodingDirection == "k-" {
			times = Reversed(times)
		}
		if !slices.Equal(times, r.Scan.SliceTimes) {
			t.Errorf("%s: slice times %v, simulated %v", r.Stem, times, r.Scan.SliceTimes)
		}
		if m.RepetitionTime != r.Scan.TR || m.TaskName != "watch" {
			t.Errorf("%s: repetition time %g, task %q", r.Stem, m.RepetitionTime, m.TaskName)
		}
		// Standard: TotalReadoutTime = EffectiveEchoSpacing (ReconMatrixPE - 1).
		near(t, "readout time", m.TotalReadoutTime, m.EffectiveEchoSpacing*float64(m.ReconMatrixPE-1), 1e-12)
		if m.ReconMatrixPE != r.Scan.N[1] {
			t.Errorf("%s: ReconMatrixPE %d", r.Stem, m.ReconMatrixPE)
		}
		if sub == "sub-birch" {
			at := map[float64]int{}
			for _, u := range times {
				at[u]++
			}
			for u, n := range at {
				if n != m.MultibandAccelerationFactor {
					t.Errorf("%d slices at %g s, MultibandAccelerationFactor %d", n, u, m.MultibandAccelerationFactor)
				}
			}
		}
		events := "onset\tduration\ttrial_type\n"
		for _, e := range r.Events {
			events += fmt.Sprintf("%g\t%g\tflash\n", e.Onset, e.Duration)
		}
		if got := string(files[sub+"/func/"+r.Stem+"_events.tsv"]); got != events || len(r.Events) < 2 {
			t.Errorf("%s: events %q", r.Stem, got)
		}
	}
}

func checkImages(t *testing.T, dir string, runs []TrueRun) {
	for _, r := range runs {
		path := filepath.Join(dir, strings.SplitN(r.Stem, "_", 2)[0], "func", r.Stem+"_bold.nii.gz")
		h, s, err := nifti.ReadSeries(path, nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		if h.Affine() != r.Scan.Affine {
			t.Errorf("%s: affine %v, simulated %v", r.Stem, h.Affine(), r.Scan.Affine)
		}
		if tr, known := h.SecondsPerVolume(); tr != r.Scan.TR || !known || h.SliceDim() != 3 || h.Datatype != nifti.Int16 {
			t.Errorf("%s: header %+v", r.Stem, h)
		}
		if s.NX != r.Scan.N[0] || s.NY != r.Scan.N[1] || s.NZ != r.Scan.N[2] || s.NT != r.Scan.NT {
			t.Fatalf("%s: %d x %d x %d x %d", r.Stem, s.NX, s.NY, s.NZ, s.NT)
		}
		// The first volumes of a longer scan are a scan of their own.
		short := *r.Scan
		short.NT = 8
		data := simulate(t, &short, 2)
		// Half a stored unit, and float32 rounding of the value before and after.
		for i, v := range data {
			if !(math.Abs(float64(s.Data[i]-v)) <= cohortSlope/2+2*storage) {
				t.Fatalf("%s: sample %d is %g, simulated %g", r.Stem, i, s.Data[i], v)
			}
		}
	}
}

// checkNibabel: an independent reader sees the same affine from sform and qform
// (within the 0.02 mm that float32 quaternions allow), size, time and values.
func checkNibabel(t *testing.T, dir string, runs []TrueRun) {
	python := ""
	for _, p := range []string{"python3", "/usr/bin/python3"} {
		if python == "" && exec.Command(p, "-c", "import nibabel").Run() == nil {
			python = p
		}
	}
	if python == "" {
		t.Skip("skipped: no python3 with nibabel on this machine")
	}
	const script = `
import glob, json, sys, nibabel, numpy
out = {}
for f in glob.glob(sys.argv[1] + "/sub-*/func/*_bold.nii.gz"):
    i = nibabel.load(f); h = i.header
    d = numpy.asarray(i.dataobj)
    out[f.split("/")[-1]] = {"shape": i.shape, "affine": i.affine.ravel().tolist(), "qform": h.get_qform().ravel().tolist(),
        "zooms": [float(z) for z in h.get_zooms()], "units": h.get_xyzt_units(), "dims": h.get_dim_info(),
        "times": list(h.get_slice_times()) if int(h["slice_code"]) else None, "probe": float(d[20, 24, 15, 7]), "top": float(d.max())}
json.dump(out, sys.stdout)
`
	b, err := exec.Command(python, "-c", script, dir).Output()
	if err != nil {
		t.Fatal(err)
	}
	var images map[string]struct {
		Shape                []int
		Affine, Qform, Zooms []float64
		Units                []string
		Dims                 []int
		Times                []float64
		Probe, Top           float64
	}
	if err := json.Unmarshal(b, &images); err != nil {
		t.Fatal(err)
	}
	if len(images) != 3 {
		t.Fatalf("%d images", len(images))
	}
	for _, r := range runs {
		m := images[r.Stem+"_bold.nii.gz"]
		if !slices.Equal(m.Affine, r.Scan.Affine[:]) {
			t.Errorf("%s: affine %v, simulated %v", r.Stem, m.Affine, r.Scan.Affine)
		}
		for i := range m.Qform {
			arm := 1.0
			if i%4 != 3 {
				arm = 48 // voxels along an axis
			}
			near(t, r.Stem+": qform against sform, mm at the far end", m.Qform[i]*arm, m.Affine[i]*arm, 0.02)
		}
		if !slices.Equal(m.Shape, []int{40, 48, 30, 60}) || !slices.Equal(m.Units, []string{"mm", "sec"}) || !slices.Equal(m.Dims, []int{0, 1, 2}) ||
			!slices.Equal(m.Zooms, []float64{4, 4, 4.5, r.Scan.TR}) {
			t.Errorf("%s: header %+v", r.Stem, m)
		}
		for k, u := range m.Times {
			near(t, fmt.Sprintf("%s: slice %d by slice_code", r.Stem, k), u, r.Scan.SliceTimes[k], 1e-5) // float32 duration, times 29
		}
		if (m.Times == nil) != (r.Stem == "sub-birch_task-watch") {
			t.Errorf("%s: slice_code given: %v", r.Stem, m.Times != nil)
		}
		near(t, r.Stem+": a voxel", m.Probe, r.Scan.Value(20, 24, 15, 7), 6*cohortNoise)
		if m.Top > 32767*cohortSlope-100 {
			t.Errorf("%s: brightest value %g comes near the end of the stored range", r.Stem, m.Top)
		}
	}
}

func TestCohortTruth(t *testing.T) {
	runs := Cohort()
	if len(runs) != 3 {
		t.Fatalf("%d runs", len(runs))
	}
	jerked := 0
	for _, r := range runs {
		s := r.Scan
		points := s.Head.Points(8)
		matrixNear(t, r.Stem, s.Motion(0), Identity(), 1e-12)
		// The head is cut by the field at the top and fills every slice with a
		// region whose phase can be read, at the pose of the first volume.
		reference := Inverse(s.VolumePose(0))
		for k := range s.N[2] {
			strong := 0
			for j := range s.N[1] {
				for i := range s.N[0] {
					x := Apply(reference, Apply(s.Affine, [3]float64{float64(i), float64(j), float64(k)}))
					if w := r.ToneWeight(x); w > 0.2 && s.Head.At(x) > 300 {
						strong++
						if s.Blobs[r.Tones].Weight(x) > 0 {
							t.Fatalf("%s: the lantern's region meets the tone's at %v", r.Stem, x)
						}
					}
				}
			}
			if strong < 8 {
				t.Errorf("%s, slice %d: %d voxels carry the tone", r.Stem, k, strong)
			}
		}
		var largest, sudden float64
		for n := range s.NT {
			_, d := Displacement(s.VolumePose(n), s.VolumePose(0), points)
			largest = max(largest, d)
			for k := range s.N[2] {
				u := s.SliceTime(n, k)
				_, d := Displacement(s.Motion(u), s.Motion(u+1e-3), points)
				sudden = max(sudden, d)
			}
		}
		t.Logf("%s: largest rms displacement %.2f mm", r.Stem, largest)
		if largest < 0.3 || largest > 8 {
			t.Errorf("%s: largest displacement %g mm", r.Stem, largest)
		}
		for _, at := range r.Jerks {
			jerked++
			if _, jump := Displacement(s.Motion(at-1e-6), s.Motion(at), points); jump < 2 {
				t.Errorf("%s: the jerk at %g s moves the head by %g mm", r.Stem, at, jump)
			}
			if f := at/s.TR - math.Floor(at/s.TR); f < 0.3 || f > 0.8 {
				t.Errorf("%s: the jerk comes %.2f into the volume, not within it", r.Stem, f)
			}
		}
		if len(r.Jerks) == 0 && sudden > 0.1 {
			t.Errorf("%s: moves %g mm in a millisecond", r.Stem, sudden)
		}
		if r.Tone.Freq*s.TR > 0.4 || math.Abs(r.Tone.Freq*s.TR*float64(s.NT)-math.Round(r.Tone.Freq*s.TR*float64(s.NT))) < 0.05 {
			t.Errorf("%s: the tone of %g Hz is out of band or sits on a bin, which flatters a circular transform", r.Stem, r.Tone.Freq)
		}
	}
	if jerked != 1 {
		t.Errorf("%d runs with a jerk, want 1", jerked)
	}
	if det3(runs[0].Scan.Affine) > 0 || det3(runs[1].Scan.Affine) > 0 || det3(runs[2].Scan.Affine) < 0 || runs[1].Scan.Affine[1] == 0 {
		t.Error("want two left-handed grids, the second oblique, and a right-handed one")
	}
}

func TestWriteCohortStopsWhenCancelled(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if runs, err := WriteCohort(ctx, t.TempDir(), 2); err == nil || runs != nil {
		t.Errorf("got %v, %v", runs, err)
	}
}

// The four branches of the quaternion: turns near 180 degrees about each axis,
// against the matrix of nifti1.h.
func TestQuaternionBranches(t *testing.T) {
	for _, w := range [][3]float64{{0.1, -0.2, 0.3}, {3.1, 0.05, 0}, {0.02, 3.1, 0.01}, {0, 0.03, 3.1}, {math.Pi, 0, 0}, {0, 0, 0}} {
		m := Rigid([3]float64{}, w, [3]float64{})
		q := quaternion([9]float64{m[0], m[1], m[2], m[4], m[5], m[6], m[8], m[9], m[10]})
		b, c, d := q[0], q[1], q[2]
		a := math.Sqrt(max(0, 1-b*b-c*c-d*d))
		r := [9]float64{a*a + b*b - c*c - d*d, 2 * (b*c - a*d), 2 * (b*d + a*c),
			2 * (b*c + a*d), a*a + c*c - b*b - d*d, 2 * (c*d - a*b),
			2 * (b*d - a*c), 2 * (c*d + a*b), a*a + d*d - b*b - c*c}
		for i, v := range r {
			near(t, fmt.Sprintf("turn %v, entry %d", w, i), v, m[4*(i/3)+i%3], 1e-7) // a comes from 1-b^2-c^2-d^2, good to sqrt(1e-16) near 0
		}
	}
}
