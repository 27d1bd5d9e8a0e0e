package main

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"syscall"
	"testing"
	"time"

	"evenkeel/fault"
	"evenkeel/nifti"
	"evenkeel/phantom"
	"evenkeel/quality"
	"evenkeel/sidecar"
	"evenkeel/slicetime"
)

// process runs steady on a dataset and wants exit 0.
func process(t *testing.T, dir string, args ...string) (out string) {
	t.Helper()
	out = filepath.Join(t.TempDir(), "out")
	if code, stdout, stderr := run(append([]string{"steady", dir, out}, args...)...); code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	return out
}

func series(t *testing.T, name string) (*nifti.Header, []float32) {
	t.Helper()
	h, s, err := nifti.ReadSeries(name, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	return h, s.Data
}

func crewDataset(t *testing.T, change func(*sailor)) string {
	dir := filepath.Join(t.TempDir(), "raw")
	with(change)(dir)
	return dir
}

// Without time and motion every voxel passes through bit for bit, and the header
// keeps the geometry bit for bit, slice fields included: nothing was corrected.
func TestPassThrough(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	out := process(t, dir, "--time", "none", "--motion", "none")
	rh, rd := series(t, filepath.Join(dir, theRun+"_bold.nii"))
	h, d := series(t, filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"))
	if !slices.Equal(rd, d) {
		t.Error("voxels changed")
	}
	if h.Srow != rh.Srow || h.Quatern != rh.Quatern || h.Qoffset != rh.Qoffset || h.SformCode != rh.SformCode || h.QformCode != rh.QformCode || h.Pixdim != rh.Pixdim || h.Dim != rh.Dim {
		t.Error("the geometry changed")
	}
	if h.SliceCode != rh.SliceCode || h.SliceEnd != rh.SliceEnd || h.SliceDuration != rh.SliceDuration || h.Toffset != 0 {
		t.Error("slice fields or toffset changed, though no slice was moved")
	}
	// Of a run with one instant for all slices, time-corrected in name only, the same.
	dir = crewDataset(t, func(s *sailor) { s.sidecar["SliceTiming"] = make([]float64, crewSize[2]) })
	out = process(t, dir, "--motion", "none")
	if _, d := series(t, filepath.Join(out, theRun+"_desc-steady_bold.nii.gz")); !slices.Equal(rd, d) {
		t.Error("slices at one instant were moved in time")
	}
	if !bytes.Contains(mustRead(t, filepath.Join(out, theRun+"_desc-steady_bold.json")), []byte(`"SlicesAtOneInstant": true`)) {
		t.Error("slices that stand at one instant are not said to")
	}
}

// With --reference first and one pose a volume, the first volume is the standard: its own
// pose is the identity, and without a change in time its voxels stay bit for bit.
func TestFirstVolumeStaysPut(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	out := process(t, dir, "--time", "none", "--reference", "first", "--motion", "volume", "--order", "time-first")
	_, rd := series(t, filepath.Join(dir, theRun+"_bold.nii"))
	_, d := series(t, filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"))
	nv := len(d) / crewVolumes
	if !slices.Equal(rd[:nv], d[:nv]) {
		t.Error("the reference volume changed")
	}
	if slices.Equal(rd[nv:], d[nv:]) {
		t.Error("no other volume was resampled")
	}
	_, ref := series(t, filepath.Join(out, theRun+"_desc-steady_reference.nii.gz"))
	if !slices.Equal(ref, rd[:nv]) {
		t.Error("the reference is not the raw first volume")
	}
}

// A corrected series: header cleared of slice fields, toffset and StartTime agree,
// values finite; the table's columns, rows and formats; the mask of zeros and ones.
func TestWhatACorrectedRunSays(t *testing.T) {
	dir := crewDataset(t, func(s *sailor) { s.header.XYZTUnits = 2 | 16; s.header.Pixdim[4] = 1000 * crewTR })
	out := process(t, dir, "--skip", "2", "--time-origin", "0.5")
	h, d := series(t, filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"))
	if h.SliceCode != 0 || h.SliceStart != 0 || h.SliceEnd != 0 || h.SliceDuration != 0 {
		t.Error("slice fields are not cleared")
	}
	// 2 volumes of 2 s, and half a second into the third; the header counts milliseconds.
	if h.Toffset != 4500 || h.Dim[4] != crewVolumes-2 {
		t.Errorf("toffset %g ms, %d volumes", h.Toffset, h.Dim[4])
	}
	var side map[string]any
	if err := json.Unmarshal(mustRead(t, filepath.Join(out, theRun+"_desc-steady_bold.json")), &side); err != nil {
		t.Fatal(err)
	}
	if side["StartTime"] != 4.5 || side["SlicesAtOneInstant"] != true || side["SkullStripped"] != false || side["TaskName"] != "watch" ||
		side["RepetitionTime"] != 2.0 || side["PhaseEncodingDirection"] != "j-" || side["SliceTiming"] != nil {
		t.Errorf("sidecar: %v", side)
	}
	for i, v := range d {
		if math.IsNaN(float64(v)) || math.IsInf(float64(v), 0) {
			t.Fatalf("value %d is %g", i, v)
		}
	}
	_, mask := series(t, filepath.Join(out, theRun+"_desc-head_mask.nii.gz"))
	in := 0
	for _, v := range mask {
		if v != 0 && v != 1 {
			t.Fatalf("the mask holds %g", v)
		}
		in += int(v)
	}
	if in == 0 || in == len(mask) {
		t.Errorf("the mask holds %d of %d voxels", in, len(mask))
	}

	table := strings.Split(strings.TrimSuffix(string(mustRead(t, filepath.Join(out, theRun+"_desc-steady_pose.tsv"))), "\n"), "\n")
	// the columns that scripts may rely on
	head := strings.ReplaceAll("time shift_x shift_y shift_z turn_x turn_y turn_z fd rms_ball dvars_raw dvars_steady outside fit state", " ", "\t")
	if table[0] != head || len(table) != 1+crewVolumes-2 {
		t.Fatalf("%d lines, head %q", len(table), table[0])
	}
	decimals := []int{6, 6, 6, 6, 7, 7, 7, 6, 6, 6, 6, 6, 6}
	for n, line := range table[1:] {
		cells := strings.Split(line, "\t")
		for i, d := range decimals {
			undefined := n == 0 && i >= 7 && i <= 10
			if undefined != (cells[i] == "n/a") {
				t.Errorf("row %d column %d is %s", n, i, cells[i])
			}
			if _, frac, ok := strings.Cut(cells[i], "."); !undefined && (!ok || len(frac) != d) {
				t.Errorf("row %d column %d is %s, want %d decimals", n, i, cells[i], d)
			}
			if strings.HasPrefix(cells[i], "-0.") && strings.Trim(cells[i], "-0.") == "" {
				t.Errorf("row %d column %d is a negative zero", n, i)
			}
		}
		if want := strconv.FormatFloat(4.5+2*float64(n), 'f', 6, 64); cells[0] != want {
			t.Errorf("row %d is at %s s, want %s", n, cells[0], want)
		}
		if cells[13] != "aligned" {
			t.Errorf("row %d is %s", n, cells[13])
		}
	}
	var pose map[string]json.RawMessage
	if err := json.Unmarshal(mustRead(t, filepath.Join(out, theRun+"_desc-steady_pose.json")), &pose); err != nil {
		t.Fatal(err)
	}
	for _, c := range strings.Split(head, "\t") {
		var d struct{ Description, Units string }
		if json.Unmarshal(pose[c], &d) != nil || d.Description == "" || d.Units == "" {
			t.Errorf("column %s is not described: %s", c, pose[c])
		}
	}
	var mats [][4][4]float64
	var centre [3]float64
	if json.Unmarshal(pose["Matrices"], &mats) != nil || json.Unmarshal(pose["RotationCentre"], &centre) != nil || len(mats) != crewVolumes-2 || pose["RotationOrder"] == nil {
		t.Fatal("matrices, centre or order are missing")
	}
	// The table's parameters and the matrices are one pose: x' = R (x - c) + c + shift,
	// so that the centre goes to itself plus the shift.
	for n, m := range mats {
		cells := strings.Split(table[1+n], "\t")
		for a := range 3 {
			moved := m[a][0]*centre[0] + m[a][1]*centre[1] + m[a][2]*centre[2] + m[a][3] - centre[a]
			shift, _ := strconv.ParseFloat(cells[1+a], 64)
			if math.Abs(moved-shift) > 1e-6 { // the table's last digit
				t.Errorf("volume %d: the matrix shifts the centre by %g, the table says %g", n, moved, shift)
			}
		}
	}
	// fd against its definition, from the table itself (Power et al. 2012).
	row := func(n int) (v []float64) {
		for _, c := range strings.Split(table[1+n], "\t")[1:8] {
			x, _ := strconv.ParseFloat(c, 64)
			v = append(v, x)
		}
		return v
	}
	for n := 1; n < len(mats); n++ {
		a, b, fd := row(n-1), row(n), 0.0
		for i := range 3 {
			fd += math.Abs(b[i]-a[i]) + quality.FDRadiusMM*math.Abs(b[3+i]-a[3+i])*math.Pi/180
		}
		if math.Abs(fd-b[6]) > 1e-5 { // six numbers of 1e-6 mm or 1e-7 degree x 50 mm
			t.Errorf("volume %d: fd %g, by hand %g", n, b[6], fd)
		}
	}
}

// int16 says the same as float32 to half a step of its scaling, which the run's range sets.
func TestInt16Store(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	_, want := series(t, filepath.Join(process(t, dir), theRun+"_desc-steady_bold.nii.gz"))
	h, got := series(t, filepath.Join(process(t, dir, "--store", "int16"), theRun+"_desc-steady_bold.nii.gz"))
	lo, hi := slices.Min(want), slices.Max(want)
	step := float64(hi-lo) / 65535
	if h.Datatype != nifti.Int16 || h.SclSlope > 1.01*step || h.SclSlope < step/1.01 {
		t.Errorf("datatype %v, slope %g for a range of %g", h.Datatype, h.SclSlope, hi-lo)
	}
	for i := range want {
		// float32 rounding of slope x value adds a little to half a step.
		if math.Abs(float64(got[i]-want[i])) > 0.51*h.SclSlope+1e-4 {
			t.Fatalf("voxel %d: %g, want %g", i, got[i], want[i])
		}
	}
}

// Echoes of one run share the pose of the shortest, also when only another is written.
func TestEchoes(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "raw")
	base := "sub-01/func/sub-01_task-watch_echo-"
	for i, te := range []float64{0.030, 0.012, 0.048} {
		s := newSailor()
		s.sidecar["EchoTime"] = te
		s.data = slices.Clone(s.data)
		for j := range s.data {
			s.data[j] *= float32(1 - 0.2*float64(i))
		}
		writeDataset(dir, s.files(base+strconv.Itoa(i+1)))
	}
	all := process(t, dir)
	pose := func(out, echo string) []byte {
		return mustRead(t, filepath.Join(out, base+echo+"_desc-steady_pose.json"))
	}
	for _, e := range []string{"1", "3"} {
		if !bytes.Equal(pose(all, e), pose(all, "2")) {
			t.Errorf("echo %s has a pose of its own", e)
		}
		prov := mustRead(t, filepath.Join(all, base+e+"_desc-steady_prov.json"))
		if !bytes.Contains(prov, []byte("echo-2_bold.nii")) || !bytes.Contains(prov, []byte("pose-series")) {
			t.Errorf("the record of echo %s does not name the series its pose comes from", e)
		}
	}
	if bytes.Contains(mustRead(t, filepath.Join(all, base+"2_desc-steady_prov.json")), []byte("pose-series")) {
		t.Error("the shortest echo names itself as another")
	}
	one := process(t, dir, "--echo", "3")
	for _, f := range []string{"_desc-steady_pose.tsv", "_desc-steady_bold.nii.gz", "_desc-steady_quality.json"} {
		if !bytes.Equal(mustRead(t, filepath.Join(one, base+"3"+f)), mustRead(t, filepath.Join(all, base+"3"+f))) {
			t.Errorf("%s of echo 3 depends on whether the others are written", f)
		}
	}
	if slices.ContainsFunc(outputs(one), func(f string) bool { return strings.Contains(f, "echo-1") || strings.Contains(f, "echo-2") }) {
		t.Errorf("echoes that were not selected were written: %v", outputs(one))
	}
	if code, stdout, stderr := run("steady", dir, one, "--echo", "3"); code != 0 || !strings.Contains(stdout, "up-to-date") {
		t.Error(dump(code, stdout, stderr))
	}
	// The shortest echo, unfetched, keeps the others from being processed.
	if err := os.Remove(filepath.Join(dir, base+"2_bold.nii")); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink("gone", filepath.Join(dir, base+"2_bold.nii")); err != nil {
		t.Fatal(err)
	}
	if code, stdout, stderr := run("survey", dir, "--echo", "3"); code != 65 || !strings.Contains(stdout, "image-absent: "+base+"2_bold.nii") {
		t.Error(dump(code, stdout, stderr))
	}
}

// The single-band reference: used, recorded, and refused on another grid.
func TestSBRef(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	one := newSailor().volumes(1)
	one.header.Dim[0] = 3
	one.header.Dim[4] = 1
	name := filepath.Join(dir, theRun+"_sbref.nii")
	if err := os.WriteFile(name, one.image(), 0o644); err != nil {
		t.Fatal(err)
	}
	out := process(t, dir, "--reference", "sbref")
	_, ref := series(t, filepath.Join(out, theRun+"_desc-steady_reference.nii.gz"))
	if !slices.Equal(ref, one.data) {
		t.Error("the reference is not the sbref")
	}
	if !bytes.Contains(mustRead(t, filepath.Join(out, theRun+"_desc-steady_prov.json")), []byte("_sbref.nii")) {
		t.Error("the sbref is not in the record")
	}
	if code, _, _ := run("audit", out, "--dataset", dir); code != 0 {
		t.Error("audit does not hold")
	}
	one.header.Srow[2][3] += 1
	if err := os.WriteFile(name, one.image(), 0o644); err != nil {
		t.Fatal(err)
	}
	if code, stdout, stderr := run("survey", dir, "--reference", "sbref"); code != 65 || !strings.Contains(stdout, "reference-missing") {
		t.Error(dump(code, stdout, stderr))
	}
}

// A reference of several volumes is refused before anything is started.
func TestSBRefOfSeveralVolumes(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	if err := os.WriteFile(filepath.Join(dir, theRun+"_sbref.nii"), newSailor().volumes(2).image(), 0o644); err != nil {
		t.Fatal(err)
	}
	if code, stdout, stderr := run("survey", dir, "--reference", "sbref"); code != 65 || !strings.Contains(stdout, "image-size: "+theRun+"_sbref.nii: dim[4]: found 2 volumes, expected one") {
		t.Error(dump(code, stdout, stderr))
	}
}

// The longest reach that the options take is one that the kernel has.
func TestLongestReach(t *testing.T) {
	process(t, crewDataset(t, func(*sailor) {}), "--motion", "none", "--time", "sinc", "--sinc-reach", strconv.Itoa(slicetime.MaxReach))
}

// Onsets stay complete in the output: with FrameAcquisitionDuration where the run had it, else
// with the slice times; what we write, we can read (BIDS, "Timing parameters").
func TestOnsetsStayComplete(t *testing.T) {
	for name, change := range map[string]func(*sailor){
		"duration":    func(s *sailor) { s.sidecar["FrameAcquisitionDuration"] = 1.9; delete(s.sidecar, "SliceTiming") },
		"both":        func(s *sailor) { s.sidecar["FrameAcquisitionDuration"] = 1.9 },
		"slice times": func(*sailor) {},
		"one instant": func(s *sailor) { s.sidecar["SliceTiming"] = make([]float64, crewSize[2]) },
		"three dimensions": func(s *sailor) {
			s.sidecar["FrameAcquisitionDuration"] = 1.9
			s.sidecar["MRAcquisitionType"] = "3D"
			delete(s.sidecar, "SliceTiming")
		},
	} {
		dir := crewDataset(t, func(s *sailor) {
			delete(s.sidecar, "RepetitionTime")
			s.sidecar["VolumeTiming"] = []float64{0, 2, 5, 7, 9, 11, 14, 16}
			s.header.Pixdim[4] = 0
			change(s)
		})
		out := process(t, dir, "--time", "none", "--motion", "none")
		side := theRun + "_desc-steady_bold.json"
		doc, faults := sidecar.Merge([]sidecar.Source{{Name: side, Data: mustRead(t, filepath.Join(out, side))}})
		g := sidecar.Geometry{File: theRun + "_desc-steady_bold.nii.gz", Size: [4]int{crewSize[0], crewSize[1], crewSize[2], crewVolumes}}
		acq, more := doc.Acquisition(g)
		for _, f := range append(faults, more...) {
			if f.ID == "timing-conflict" || f.Level == fault.Refuse && f.ID != "volume-spacing" && f.ID != "slice-times-missing" {
				t.Errorf("%s: %s", name, f.Error())
			}
		}
		if had := name != "slice times" && name != "one instant"; had != (acq.FrameDuration == 1.9) {
			t.Errorf("%s: duration %g", name, acq.FrameDuration)
		}
		if first := strings.Split(string(mustRead(t, filepath.Join(out, theRun+"_desc-steady_pose.tsv"))), "\n")[1]; name == "three dimensions" && !strings.HasPrefix(first, "0.950000\t") {
			t.Errorf("%s: the first row is %q, not at the middle of 1.9 s", name, first)
		}
	}
}

// Where nothing is moved in time, the rows of the pose table stand at the middle of each volume,
// whatever --time says.
func TestRowsOfThreeDimensionalRuns(t *testing.T) {
	dir := crewDataset(t, func(s *sailor) {
		s.sidecar["MRAcquisitionType"] = "3D"
		s.sidecar["DelayTime"] = 0.5
		delete(s.sidecar, "SliceTiming")
	})
	for _, kernel := range []string{"fourier", "none"} {
		table := string(mustRead(t, filepath.Join(process(t, dir, "--time", kernel, "--motion", "none"), theRun+"_desc-steady_pose.tsv")))
		if !strings.Contains(table, "\n0.750000\t") || !strings.Contains(table, "\n2.750000\t") { // (2 - 0.5) / 2
			t.Errorf("--time %s: %s", kernel, table)
		}
	}
}

// runs.json describes every column of runs.tsv, and nothing else.
func TestRunsAreDescribed(t *testing.T) {
	out := process(t, crewDataset(t, func(*sailor) {}), "--motion", "none")
	head, _, _ := strings.Cut(string(mustRead(t, filepath.Join(out, "runs.tsv"))), "\n")
	var described map[string]struct {
		Description, Units string
		Levels             map[string]string
	}
	if err := json.Unmarshal(mustRead(t, filepath.Join(out, "runs.json")), &described); err != nil {
		t.Fatal(err)
	}
	columns := strings.Split(head, "\t")
	for _, c := range columns {
		if d := described[c]; d.Description == "" || d.Units == "" {
			t.Errorf("column %s: %+v", c, d)
		}
	}
	if len(described) != len(columns) || described["mean_fd"].Units != "mm" || described["state"].Levels["refused"] == "" {
		t.Errorf("%d descriptions for %d columns: %+v", len(described), len(columns), described)
	}
}

// The header's slice fields are told where the sidecar gives no times, and never used.
func TestHeaderScheduleIsTold(t *testing.T) {
	for _, c := range []struct {
		change func(*sailor)
		words  string
	}{
		{func(*sailor) {}, "the header's slice_code 3 would mean: interleaved ascending, odd slices first (1st, 3rd, 5th, ...), 16 excitations, 0.125 s apart, no pause between volumes (not used"},
		{func(s *sailor) {
			s.header.XYZTUnits = 2 | 16
			s.header.Pixdim[4] *= 1000
			s.header.SliceDuration *= 1000
		}, "16 excitations, 0.125 s apart"},
		{func(s *sailor) { s.header.SliceCode = 0 }, ""},
	} {
		dir := crewDataset(t, func(s *sailor) { delete(s.sidecar, "SliceTiming"); c.change(s) })
		code, stdout, stderr := run("survey", dir)
		if code != 65 || !strings.Contains(stdout, "slice-times-missing: ") || !strings.Contains(stdout, c.words) || (c.words == "") == strings.Contains(stdout, "slice_code") {
			t.Error(dump(code, stdout, stderr))
		}
	}
}

// Sizes of voxels are printed as the header holds them: in single precision.
func TestSingle(t *testing.T) {
	for v, want := range map[float64]float64{3.3750000000016875: 3.375, 3: 3, 2.0999999046325684: 2.1} {
		if got := single(v); got != want {
			t.Errorf("%v: %v, want %v", v, got, want)
		}
	}
}

// Uneven volume onsets with --time none: carried over, counted from the file's first volume.
func TestUnevenOnsets(t *testing.T) {
	onsets := []float64{0, 2, 5, 7, 9, 11, 14, 16}
	dir := crewDataset(t, func(s *sailor) {
		delete(s.sidecar, "RepetitionTime")
		s.sidecar["VolumeTiming"] = onsets
		s.header.Pixdim[4] = 0
	})
	out := process(t, dir, "--time", "none", "--skip", "1")
	side := string(mustRead(t, filepath.Join(out, theRun+"_desc-steady_bold.json")))
	if !strings.Contains(side, `"VolumeTiming": [2,5,7,9,11,14,16]`) || !strings.Contains(side, `"StartTime": 2,`) || strings.Contains(side, "RepetitionTime") {
		t.Errorf("sidecar: %s", side)
	}
	// slices of 2/16 s, the last at 1.875 s: the middle is 0.9375 s
	table := string(mustRead(t, filepath.Join(out, theRun+"_desc-steady_pose.tsv")))
	if !strings.Contains(table, "\n2.937500\t") || !strings.Contains(table, "\n5.937500\t") {
		t.Errorf("table: %s", table)
	}
}

// No output names a folder of this machine, or what a private field held.
func TestOutputsNameNoPlaceAndNoPerson(t *testing.T) {
	dir := crewDataset(t, func(s *sailor) {
		s.sidecar["PatientName"] = "Ahab"
		s.sidecar["InstitutionName"] = "Pequod"
		s.sidecar["AcquisitionTime"] = "11:22:33"
	})
	out := process(t, dir, "--events")
	for _, rel := range outputs(out) {
		data := mustRead(t, filepath.Join(out, rel))
		for _, word := range []string{dir, filepath.Dir(dir), out, os.TempDir() + "/", "Ahab", "Pequod", "11:22:33"} {
			if bytes.Contains(data, []byte(word)) {
				t.Errorf("%s holds %q", rel, word)
			}
		}
	}
}

// OUT that cannot be created: 73, and nothing is said of Go.
func TestOutCannotBeCreated(t *testing.T) {
	dir := crewDataset(t, func(*sailor) {})
	file := filepath.Join(t.TempDir(), "file")
	if err := os.WriteFile(file, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	code, stdout, stderr := run("steady", dir, filepath.Join(file, "out"))
	noTrace(t, stdout+stderr)
	if code != 73 {
		t.Error(dump(code, stdout, stderr))
	}
	// The folder of one run only.
	out := filepath.Join(t.TempDir(), "out")
	claim(t, out)
	if err := os.WriteFile(filepath.Join(out, "sub-01"), nil, 0o644); err != nil {
		t.Fatal(err)
	}
	if code, stdout, stderr := run("steady", dir, out); code != 73 {
		t.Error(dump(code, stdout, stderr))
	}
	if code, stdout, stderr := run("demo", dir); code != 73 {
		t.Error(dump(code, stdout, stderr))
	}
}

// Killed at any moment (no chance to clean up), the run is not taken for complete, the next
// invocation clears what was left, and the result is the one of an undisturbed run.
func TestKilledAndInterrupted(t *testing.T) {
	exe, err := exec.LookPath("evenkeel")
	if err != nil {
		t.Fatal(err)
	}
	dir := filepath.Join(t.TempDir(), "raw")
	for _, sub := range []string{"01", "02", "03"} {
		writeDataset(dir, newSailor().files("sub-"+sub+"/func/sub-"+sub+"_task-watch"))
	}
	whole := process(t, dir)
	for _, c := range []struct {
		signal syscall.Signal
		twice  bool
		delay  time.Duration
	}{{syscall.SIGKILL, false, 150 * time.Millisecond}, {syscall.SIGKILL, false, 400 * time.Millisecond}, {syscall.SIGINT, true, 150 * time.Millisecond}, {syscall.SIGTERM, true, 300 * time.Millisecond}} {
		out := filepath.Join(t.TempDir(), "out")
		var stderr bytes.Buffer
		cmd := exec.CommandContext(context.Background(), exe, "steady", dir, out, "--jobs", "1")
		cmd.Stderr = &stderr
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		time.Sleep(c.delay)
		cmd.Process.Signal(c.signal)
		if c.twice {
			time.Sleep(5 * time.Millisecond)
			cmd.Process.Signal(c.signal)
		}
		cmd.Wait()
		code := cmd.ProcessState.ExitCode()
		// A quick machine may have ended before.
		if c.signal != syscall.SIGKILL {
			if code != 75 && code != 0 {
				t.Errorf("%v: exit %d\n%s", c.signal, code, stderr.String())
			}
			for _, f := range outputs(out) {
				if strings.HasPrefix(filepath.Base(f), ".sub") || strings.HasPrefix(filepath.Base(f), ".runs") {
					t.Errorf("%v left %s", c.signal, f)
				}
			}
		}
		noTrace(t, stderr.String())
		if code, stdout, stderr := run("steady", dir, out); code != 0 {
			t.Fatal(dump(code, stdout, stderr))
		}
		got := outputs(out)
		if !slices.Equal(got, outputs(whole)) {
			t.Errorf("%v: files %v\nwant %v", c.signal, got, outputs(whole))
		}
		for _, f := range got {
			if strings.HasSuffix(f, "_prov.json") {
				continue
			}
			if !bytes.Equal(mustRead(t, filepath.Join(out, f)), mustRead(t, filepath.Join(whole, f))) {
				t.Errorf("%v: %s differs from an undisturbed run", c.signal, f)
			}
		}
	}
}

// realSeries returns the folder of the real series.
func realSeries(t *testing.T) string {
	t.Helper()
	dir := os.Getenv("EVENKEEL_TEST_SERIES")
	if dir == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: skipped, no real series to test with")
	}
	if _, err := os.Stat(dir); err != nil {
		t.Fatalf("EVENKEEL_TEST_SERIES is set, and: %v", err)
	}
	return dir
}

// The real series: 6 runs are complete and the 6 of two volumes are refused, 3; with
// --time none all 12 are complete, 0. Static scanner phantoms hardly move, and every
// output has its input's affine.
func TestRealSeries(t *testing.T) {
	dir := realSeries(t)
	out := filepath.Join(t.TempDir(), "out")
	code, stdout, stderr := run("steady", dir, out)
	noTrace(t, stdout+stderr)
	if code != 3 || strings.Count(stdout, " done ") != 6 || strings.Count(stdout, " refused      volumes-few\n") != 6 {
		t.Error(dump(code, stdout, stderr))
	}
	// A phantom at rest; the scanner's field drifts, so not zero.
	for stem, limit := range map[string]float64{"sub-phantomA/func/sub-phantomA_task-static": 0.06, "sub-phantomB/func/sub-phantomB_task-static": 0.10} {
		var q struct{ FD struct{ Mean float64 } }
		if err := json.Unmarshal(mustRead(t, filepath.Join(out, stem+"_desc-steady_quality.json")), &q); err != nil {
			t.Fatal(err)
		}
		if q.FD.Mean <= 0 || q.FD.Mean >= limit {
			t.Errorf("%s: mean FD %g mm, want below %g", stem, q.FD.Mean, limit)
		}
		t.Logf("%s: mean FD %.4f mm", stem, q.FD.Mean)
	}
	if code, stdout, stderr := run("audit", out, "--dataset", dir); code != 0 {
		t.Error(dump(code, stdout, stderr))
	}
	still := filepath.Join(t.TempDir(), "still")
	code, stdout, stderr = run("steady", dir, still, "--time", "none")
	if code != 0 || strings.Count(stdout, " done ") != 12 {
		t.Error(dump(code, stdout, stderr))
	}
	for _, rel := range outputs(still) {
		if !strings.HasSuffix(rel, "_desc-steady_bold.nii.gz") {
			continue
		}
		a, err := nifti.ReadHeader(filepath.Join(still, rel))
		if err != nil {
			t.Fatal(err)
		}
		b, err := nifti.ReadHeader(filepath.Join(dir, strings.Replace(rel, "_desc-steady_bold", "_bold", 1)))
		if err != nil {
			t.Fatal(err)
		}
		if a.Affine() != b.Affine() || a.QformCode != b.QformCode || a.SformCode != b.SformCode {
			t.Errorf("%s: another affine than its input", rel)
		}
	}
}

// The demo, as the README shows it. It takes most of a minute, so it runs where the real
// series do.
func TestDemo(t *testing.T) {
	realSeries(t)
	dir := filepath.Join(t.TempDir(), "ebb-light")
	start := time.Now()
	code, stdout, stderr := run("demo", dir)
	noTrace(t, stdout+stderr)
	if code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	t.Logf("%.1f s", time.Since(start).Seconds())
	for _, run := range phantom.Cohort() {
		if !strings.Contains(stdout, "\n  "+run.Stem+"\n") {
			t.Errorf("nothing is said of %s", run.Stem)
		}
	}
	if !strings.Contains(stdout, "0 differences") || !strings.Contains(stdout, dir) {
		t.Error(stdout)
	}
}
