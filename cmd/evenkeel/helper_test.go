package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"

	"evenkeel/nifti"
	"evenkeel/phantom"
)

func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){"evenkeel": main})
}

// The crew's run: a small invented head, coarse enough to be processed in well under a
// second, tall enough for the margins that estimation keeps.
var (
	crewSize  = [3]int{20, 24, 16}
	crewVoxel = [3]float64{9, 9, 9}
)

const (
	crewVolumes = 8
	crewTR      = 2.0
)

var crew = sync.OnceValues(func() ([]float32, error) {
	n := crewSize
	affine := [16]float64{-crewVoxel[0], 0, 0, crewVoxel[0] * float64(n[0]-1) / 2, 0, crewVoxel[1], 0, -crewVoxel[1] * float64(n[1]-1) / 2,
		0, 0, crewVoxel[2], -crewVoxel[2] * float64(n[2]-1) / 2, 0, 0, 0, 1}
	s := phantom.Scan{Head: phantom.NewHead(7), N: n, NT: crewVolumes, Affine: affine, TR: crewTR, SliceAxis: 2,
		SliceTimes: phantom.Interleaved(n[2], crewTR), Motion: phantom.Walk(7, 0.5, 0.01, 0.05, [3]float64{}), NoiseSD: 9, Seed: 7}
	return s.Simulate(context.Background(), 2)
})

// A sailor is one run to write: an image and its sidecar, sound unless changed.
type sailor struct {
	header  *nifti.Header
	data    []float32
	sidecar map[string]any
	gzip    bool
}

func newSailor() *sailor {
	data, err := crew()
	if err != nil {
		panic(err)
	}
	n := crewSize
	h := &nifti.Header{
		Version: 1, Datatype: nifti.Float32,
		Dim:       [8]int64{4, int64(n[0]), int64(n[1]), int64(n[2]), crewVolumes, 1, 1, 1},
		Pixdim:    [8]float64{1, crewVoxel[0], crewVoxel[1], crewVoxel[2], crewTR},
		DimInfo:   1 | 2<<2 | 3<<4,
		SliceCode: 3, SliceEnd: int64(n[2] - 1), SliceDuration: crewTR / float64(n[2]),
		SclSlope: 1, XYZTUnits: 2 | 8, SformCode: 1,
	}
	for a := range 3 {
		sign := 1.0
		if a == 0 {
			sign = -1
		}
		h.Srow[a][a] = sign * crewVoxel[a]
		h.Srow[a][3] = -sign * crewVoxel[a] * float64(n[a]-1) / 2
	}
	return &sailor{header: h, data: data, sidecar: map[string]any{
		"TaskName": "watch", "RepetitionTime": crewTR, "SliceTiming": phantom.Interleaved(n[2], crewTR),
		"PhaseEncodingDirection": "j-", "EchoTime": 0.03, "MRAcquisitionType": "2D",
	}}
}

// volumes keeps the first n.
func (s *sailor) volumes(n int) *sailor {
	nv := crewSize[0] * crewSize[1] * crewSize[2]
	s.header.Dim[4] = int64(n)
	s.data = s.data[:n*nv]
	return s
}

func (s *sailor) image() []byte {
	var b bytes.Buffer
	w, err := nifti.NewWriter(&b, s.header, s.gzip)
	if err != nil {
		panic(err)
	}
	nv := int(s.header.Dim[1] * s.header.Dim[2] * s.header.Dim[3])
	for data := s.data; len(data) > 0; data = data[nv:] {
		if err := w.WriteVolume(data[:nv]); err != nil {
			panic(err)
		}
	}
	if err := w.Close(); err != nil {
		panic(err)
	}
	return b.Bytes()
}

const (
	theRun  = "sub-01/func/sub-01_task-watch"
	theStem = "sub-01_task-watch"
)

// files makes the sailor's two files.
func (s *sailor) files(base string) map[string][]byte {
	ext := ".nii"
	if s.gzip {
		ext += ".gz"
	}
	side, err := json.MarshalIndent(s.sidecar, "", " ")
	if err != nil {
		panic(err)
	}
	return map[string][]byte{base + "_bold" + ext: s.image(), base + "_bold.json": side}
}

var description = []byte(`{"Name":"The crew","BIDSVersion":"1.11.1","DatasetType":"raw"}`)

// writeDataset writes files into a raw dataset in dir.
func writeDataset(dir string, files ...map[string][]byte) {
	all := map[string][]byte{"dataset_description.json": description}
	for _, f := range files {
		maps.Copy(all, f)
	}
	for _, name := range slices.Sorted(maps.Keys(all)) {
		full := filepath.Join(dir, filepath.FromSlash(name))
		if err := os.MkdirAll(filepath.Dir(full), 0o755); err != nil {
			panic(err)
		}
		if err := os.WriteFile(full, all[name], 0o644); err != nil {
			panic(err)
		}
	}
}

// claim marks a folder as an output of ours, as an earlier invocation does.
func claim(t *testing.T, out string) {
	t.Helper()
	if err := os.MkdirAll(out, 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(out, "dataset_description.json"), []byte(`{"GeneratedBy":[{"Name":"evenkeel"}]}`), 0o644); err != nil {
		t.Fatal(err)
	}
}

// run calls the program in this process.
func run(args ...string) (code int, stdout, stderr string) {
	var out, err bytes.Buffer
	code = Run(append([]string{"evenkeel"}, args...), strings.NewReader(""), &out, &err)
	return code, out.String(), err.String()
}

// noTrace fails the test if a Go trace or a runtime message reached the user.
func noTrace(t *testing.T, text string) {
	t.Helper()
	for _, sign := range []string{"goroutine ", "runtime error", "panic:", ".go:"} {
		if strings.Contains(text, sign) {
			t.Errorf("%q reached the user:\n%s", sign, text)
		}
	}
}

// outputs lists what stands below a folder, hidden files included.
func outputs(dir string) []string {
	var out []string
	filepath.WalkDir(dir, func(name string, d os.DirEntry, err error) error {
		if err == nil && !d.IsDir() {
			rel, _ := filepath.Rel(dir, name)
			out = append(out, filepath.ToSlash(rel))
		}
		return nil
	})
	return out
}

func mustRead(t *testing.T, name string) []byte {
	t.Helper()
	data, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	return data
}

func dump(code int, stdout, stderr string) string {
	return fmt.Sprintf("exit %d\nstdout:\n%s\nstderr:\n%s", code, stdout, stderr)
}
