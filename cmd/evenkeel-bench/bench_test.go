package main

import (
	"bytes"
	"context"
	"encoding/json"
	"io"
	"os"
	"path/filepath"
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
	for _, bad := range [][]string{{"-sizes", "8x8x8"}, {"-sizes", "8x8x8xo"}, {"-sizes", "8x8x8x1"}, {"-times", "0"}, {"more"}, {"-nonsense"}} {
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
