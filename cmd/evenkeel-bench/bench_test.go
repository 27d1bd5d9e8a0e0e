package main

import (
	"bytes"
	"context"
	"encoding/json"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"evenkeel/nifti"
)

// Both floors give the voxels of the run, as float32, in the same bytes.
func TestFloor(t *testing.T) {
	dir := t.TempDir()
	s := size{13, 11, 7, 9}
	if err := run(context.Background(), []string{"synthesise", dir, s.String()}, io.Discard, io.Discard); err != nil {
		t.Fatal(err)
	}
	in := filepath.Join(dir, filepath.FromSlash(runFile))
	_, want, err := nifti.ReadSeries(in, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	var files [][]byte
	for _, name := range []string{"floor", "floor-own"} {
		out := filepath.Join(dir, name+".nii.gz")
		if err := run(context.Background(), []string{name, in, out}, io.Discard, io.Discard); err != nil {
			t.Fatal(err)
		}
		h, got, err := nifti.ReadSeries(out, nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		if h.Datatype != nifti.Float32 || got.NT != s[3] {
			t.Errorf("%s: %v, %d volumes", name, h.Datatype, got.NT)
		}
		for i, v := range got.Data {
			if v != want.Data[i] {
				t.Fatalf("%s: voxel %d is %v, want %v", name, i, v, want.Data[i])
			}
		}
		b, err := os.ReadFile(out)
		if err != nil {
			t.Fatal(err)
		}
		files = append(files, b)
	}
	if !bytes.Equal(files[0], files[1]) {
		t.Error("the two floors write other bytes")
	}
	// A file that is cut off ends the floor.
	b, _ := os.ReadFile(in)
	short := filepath.Join(dir, "short.nii.gz")
	if err := os.WriteFile(short, b[:len(b)/2], 0o644); err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{"floor", "floor-own"} {
		if run(context.Background(), []string{name, short, filepath.Join(dir, "x.nii.gz")}, io.Discard, io.Discard) == nil {
			t.Errorf("%s: half a file was accepted", name)
		}
	}
}

// A run is the same at every time, looks like a head and has a sidecar with all
// slice times.
func TestSynthesise(t *testing.T) {
	one, two := t.TempDir(), t.TempDir()
	s := size{20, 20, 12, 6}
	for _, dir := range []string{one, two} {
		if err := synthesise(context.Background(), dir, s); err != nil {
			t.Fatal(err)
		}
	}
	a, _ := os.ReadFile(filepath.Join(one, filepath.FromSlash(runFile)))
	b, _ := os.ReadFile(filepath.Join(two, filepath.FromSlash(runFile)))
	if len(a) == 0 || !bytes.Equal(a, b) {
		t.Error("two calls give different runs")
	}
	_, series, err := nifti.ReadSeries(filepath.Join(one, filepath.FromSlash(runFile)), nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	if v := series.Volume(0); v[0] > 60 || v[10+20*(10+20*6)] < 200 {
		t.Errorf("corner %v, centre %v", v[0], v[10+20*(10+20*6)])
	}
	var side struct{ SliceTiming []float64 }
	j, _ := os.ReadFile(filepath.Join(one, "sub-01/func/sub-01_task-watch_bold.json"))
	if err := json.Unmarshal(j, &side); err != nil || len(side.SliceTiming) != 12 || side.SliceTiming[2] != 0.166667 || side.SliceTiming[1] != 1 {
		t.Errorf("%v %v", err, side)
	}
	many := filepath.Join(t.TempDir(), "many")
	if err := run(context.Background(), []string{"synthesise-many", many, "12"}, io.Discard, io.Discard); err != nil {
		t.Fatal(err)
	}
	if found, _ := filepath.Glob(many + "/sub-*/func/*_bold.nii.gz"); len(found) != 12 {
		t.Errorf("%d runs of 12", len(found))
	}
}

func TestTable(t *testing.T) {
	rows := []*row{
		{floorRow, []cost{{2, 1, 8 << 20}, {9, 9, 9 << 20}, {1, 0.5, 7 << 20}}},
		{"default", []cost{{4, 3, 16 << 20}, {6, 3, 16 << 20}}},
		{scriptRow, []cost{{50, 45, 32 << 20}}},
	}
	var out strings.Builder
	writeTable(&out, size{64, 64, 32, 8}, rows) // one copy is 4 MiB
	for _, want := range []string{
		"| floor | 2.000 | 1.000 | 8 | 1.00 | 1.00 | 2.00 | 25.00 | 45.00 | 125.00 |",
		"| default | 5.000 | 3.000 | 16 | 2.50 | 3.00 | 4.00 | 10.00 | 15.00 | 375.00 |",
		"| script | 50.000 | 45.000 | 32 | 25.00 | 45.00 | 8.00 | 1.00 | 1.00 | 5625.00 |",
	} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("no %q in\n%s", want, out.String())
		}
	}
	if m := middle([]float64{4, 1, 3, 2}); m != 2.5 {
		t.Errorf("the median of four is %v", m)
	}
}

func TestParse(t *testing.T) {
	set, err := parse([]string{"-times", "3", "-sizes", "8x8x8x8,9x9x9x9", "-script", "python3 it.py IN OUT"}, io.Discard)
	if err != nil || set.times != 3 || set.scriptTimes != 3 || len(set.sizes) != 2 || set.sizes[1] != (size{9, 9, 9, 9}) || len(set.script) != 4 {
		t.Errorf("%+v, %v", set, err)
	}
	if set, err := parse([]string{"-growth", "100,200,400", "-python", "python3"}, io.Discard); err != nil || len(set.growth) != 3 || set.growth[2] != 400 || set.python != "python3" {
		t.Errorf("%+v, %v", set, err)
	}
	for _, bad := range [][]string{{"-sizes", "8x8x8"}, {"-sizes", "8x8x8xo"}, {"-sizes", "8x8x8x1"}, {"-times", "0"}, {"-growth", "100"}, {"-growth", "200,100"}, {"-growth", "a,b"}, {"-growth", "100,200", "-sizes", ""}, {"more"}, {"-nonsense"}} {
		if _, err := parse(bad, io.Discard); err == nil {
			t.Errorf("%v: accepted", bad)
		}
	}
}

// What a process took is what it took.
func TestOnce(t *testing.T) {
	b := &bench{}
	c, err := b.once(context.Background(), []string{"AHOY=1"}, "/bin/sh", "-c", `test "$AHOY" = 1 && i=0; while [ $i -lt 100000 ]; do i=$((i+1)); done`)
	if err != nil {
		t.Skip("no /bin/sh: ", err)
	}
	if c.cpu <= 0 || c.wall < c.cpu/2 || c.wall > 60 {
		t.Errorf("%+v", c)
	}
	if _, err := b.once(context.Background(), nil, "/bin/sh", "-c", "echo aground >&2; exit 3"); err == nil || !strings.Contains(err.Error(), "aground") {
		t.Errorf("%v", err)
	}
}

// Each way of resampling says what it took and leaves its result; the two agree but for
// what is told apart.
func TestResampleOften(t *testing.T) {
	dir := t.TempDir()
	s := size{32, 32, 30, 2}
	var out [2][]float32
	for i, way := range []string{passesWay, atOnceWay} {
		var said strings.Builder
		if err := run(context.Background(), []string{"resample", dir, way, s.String(), "2"}, &said, io.Discard); err != nil {
			t.Fatal(err)
		}
		if v, err := strconv.ParseFloat(strings.TrimSpace(said.String()), 64); err != nil || !(v > 0 && v < 10) {
			t.Errorf("%s: %q", way, said.String())
		}
		var err error
		if out[i], err = readRaw(filepath.Join(dir, way+".raw"), s[0]*s[1]*s[2]); err != nil {
			t.Fatal(err)
		}
	}
	if d := apart(out[0], out[1], s); !(d > 1e-4 && d < 0.03) {
		t.Errorf("apart by %g", d)
	}
	vol, _ := resamplingCase(s)
	if d := apart(vol, out[1], s); !(d > 0.1) {
		t.Errorf("not moved: apart by %g", d)
	}
	for _, bad := range [][]string{{dir, "sideways", s.String(), "2"}, {dir, passesWay, s.String(), "0"}, {dir, passesWay, "8x8", "2"}, {dir, passesWay}} {
		if err := run(context.Background(), append([]string{"resample"}, bad...), io.Discard, io.Discard); err == nil {
			t.Errorf("%v: accepted", bad)
		}
	}
}

// The whole section, beside scipy: that it does the same is checked inside.
func TestResampling(t *testing.T) {
	// Debian's own first: another python3 may come before it and lack scipy.
	python := ""
	for _, p := range []string{"/usr/bin/python3", "python3"} {
		if exec.Command(p, "-c", "import scipy.ndimage").Run() == nil {
			python = p
			break
		}
	}
	if python == "" {
		t.Skip("no python3 with scipy")
	}
	b := &bench{set: &settings{times: 1, python: python}, dir: t.TempDir(), self: built(t), stderr: io.Discard}
	s := size{40, 36, 33, 2}
	rows, err := b.resampling(context.Background(), s)
	if err != nil {
		t.Fatal(err)
	}
	var out strings.Builder
	writeResampling(&out, s, rows)
	if len(rows) != len(ways) || !strings.Contains(out.String(), "| passes |") || !strings.HasSuffix(out.String(), "| 1.0 |\n") {
		t.Error(out.String())
	}
	b.set.python = "/bin/false"
	if _, err := b.resampling(context.Background(), s); err == nil {
		t.Error("an interpreter that fails passes")
	}
}

// built is this command.
func built(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "bench")
	if out, err := exec.Command("go", "build", "-o", path, ".").CombinedOutput(); err != nil {
		t.Skipf("no go to build with: %v\n%s", err, out)
	}
	return path
}

func TestGrowth(t *testing.T) {
	v := func(name string, cpu ...float64) variant {
		r := &row{name: name}
		for _, c := range cpu {
			r.costs = append(r.costs, cost{cpu: c})
		}
		return variant{row: r}
	}
	var out strings.Builder
	writeGrowth(&out, size{8, 9, 7, 400}, []int{100, 200, 400}, []variant{v(floorRow, 1), v("default", 4, 5, 9), v(floorRow, 2), v("default", 11), v(floorRow, 4), v("default", 22)})
	want := "\n8x9x7, CPU ms / volume by the number of volumes, and by how much it grows\n\n| what | 100 | 200 | 400 | growth from 100 |\n| --- | --- | --- | --- | --- |\n" +
		"| floor | 10.00 | 10.00 | 10.00 | +0.0 % |\n| default | 50.00 | 55.00 | 55.00 | +10.0 % |\n"
	if out.String() != want {
		t.Errorf("%s\nwant\n%s", out.String(), want)
	}
	b := &bench{set: &settings{times: 1, sizes: []size{{9, 8, 7, 1}}, growth: []int{3, 5}, only: []string{ownRow}}, dir: t.TempDir(), self: built(t), stderr: io.Discard}
	out.Reset()
	if err := b.growth(context.Background(), &out); err != nil {
		t.Fatal(err)
	}
	if !strings.Contains(out.String(), "9x8x7") || !strings.Contains(out.String(), "| floor-own |") || strings.Contains(out.String(), "default") {
		t.Error(out.String())
	}
	if left, _ := os.ReadDir(b.dir); len(left) != 0 {
		t.Errorf("left behind: %v", left)
	}
}

// What trust costs is told of whole runs, and nothing is left behind.
func TestOverhead(t *testing.T) {
	program := filepath.Join(t.TempDir(), "evenkeel")
	if out, err := exec.Command("go", "build", "-o", program, "evenkeel/cmd/evenkeel").CombinedOutput(); err != nil {
		t.Skipf("no go to build with: %v\n%s", err, out)
	}
	b := &bench{set: &settings{times: 1, program: program}, dir: t.TempDir(), self: built(t), stderr: io.Discard}
	var out strings.Builder
	if err := b.overhead(context.Background(), size{24, 24, 16, 12}, &out); err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"24x24x16x12, processor", "\n| default | ", "\n| volume-first | "} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("%q is not in\n%s", want, out.String())
		}
	}
	if left, _ := os.ReadDir(b.dir); len(left) != 0 {
		t.Errorf("left behind: %v", left)
	}
}
