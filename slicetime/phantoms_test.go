package slicetime_test

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"evenkeel/nifti"
	"evenkeel/slicetime"
)

// Two objects that do not move, 16 and 18 volumes: nothing is there to be
// corrected, and what comes out must vary no more in time than what was measured.
func TestStaticPhantomsStayQuiet(t *testing.T) {
	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: the real series are not here")
	}
	for _, name := range []string{"phantomA", "phantomB"} {
		base := filepath.Join(root, "sub-"+name, "func", "sub-"+name+"_task-static_bold")
		_, series, err := nifti.ReadSeries(base+".nii.gz", nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		text, err := os.ReadFile(base + ".json")
		if err != nil {
			t.Fatal(err)
		}
		var sidecar struct {
			SliceTiming    []float64
			RepetitionTime float64
		}
		if err := json.Unmarshal(text, &sidecar); err != nil {
			t.Fatal(err)
		}
		s := slicetime.Schedule{Times: sidecar.SliceTiming, Axis: 2, TR: sidecar.RepetitionTime}
		nt, voxels := series.NT, len(series.Data)/series.NT
		mean := func(v int) (m float64) {
			for n := range nt {
				m += float64(series.Data[v+voxels*n]) / float64(nt)
			}
			return m
		}
		// The object: above half of what the brightest fiftieth exceeds (the
		// usual rough mask; that it holds the object alone does not matter here).
		levels := make([]float64, voxels)
		for v := range levels {
			levels[v] = mean(v)
		}
		sorted := slices.Sorted(slices.Values(levels))
		cut := sorted[voxels*98/100] / 2
		spread := func(data []float32) float64 {
			sum, count := 0.0, 0
			for v, level := range levels {
				if level < cut {
					continue
				}
				m, squares := 0.0, 0.0
				for n := range nt {
					m += float64(data[v+voxels*n]) / float64(nt)
				}
				for n := range nt {
					d := float64(data[v+voxels*n]) - m
					squares += d * d
				}
				sum += math.Sqrt(squares / float64(nt-1))
				count++
			}
			return sum / float64(count)
		}
		untouched := spread(series.Data)
		for _, kernel := range []slicetime.Kernel{slicetime.Fourier, slicetime.Sinc} {
			data := slices.Clone(series.Data)
			if err := slicetime.Correct(t.Context(), data, series.NX, series.NY, series.NZ, nt, s, s.Middle(), slicetime.Options{Kernel: kernel}, 2); err != nil {
				t.Fatal(err)
			}
			after := spread(data)
			t.Logf("%s, %d volumes, %s: temporal SD %.2f, untouched %.2f", name, nt, kernel, after, untouched)
			if !(after <= untouched) {
				t.Errorf("%s, %s: temporal SD %.3f, untouched %.3f", name, kernel, after, untouched)
			}
		}
	}
}
