package main

import (
	"compress/gzip"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"strings"

	"evenkeel/internal/parallel"
	"evenkeel/nifti"
)

// The invented runs are for time alone: a head of blobs in an ellipsoid that drifts
// slowly, with the noise of a magnitude image, blended between exact key poses
// because that is quick. How exact poses come out is measured elsewhere, on runs
// made for it.

const (
	repetition = 2.0 // s
	runFile    = "sub-01/func/sub-01_task-watch_bold.nii.gz"
	noise      = 9.0
	headLevel  = 900.0
)

// header describes a run that covers 210 x 210 x 130 mm.
func header(s size) *nifti.Header {
	h := &nifti.Header{Version: 1, Datatype: nifti.Int16, Dim: [8]int64{4, int64(s[0]), int64(s[1]), int64(s[2]), int64(s[3]), 1, 1, 1}, SclSlope: 1, XYZTUnits: 2 | 8, SformCode: 1}
	h.Pixdim = [8]float64{1, 0, 0, 0, repetition}
	for i, mm := range [3]float64{210, 210, 130} {
		h.Pixdim[1+i] = float64(float32(mm / float64(s[i])))
		h.Srow[i][i] = h.Pixdim[1+i]
		h.Srow[i][3] = float64(float32(-h.Pixdim[1+i] * float64(s[i]-1) / 2))
	}
	return h
}

// sidecar is that of an interleaved run.
func sidecar(nz int) map[string]any {
	times := make([]float64, nz)
	n := 0
	for _, first := range []int{0, 1} {
		for k := first; k < nz; k += 2 {
			times[k] = math.Round(float64(n)*repetition/float64(nz)*1e6) / 1e6
			n++
		}
	}
	return map[string]any{"TaskName": "watch", "RepetitionTime": repetition, "PhaseEncodingDirection": "j-", "SliceTiming": times}
}

func writeJSON(path string, v any) error {
	b, err := json.MarshalIndent(v, "", "  ")
	if err != nil {
		return err
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return err
	}
	return os.WriteFile(path, append(b, '\n'), 0o644)
}

func describe(root string) error {
	return writeJSON(filepath.Join(root, "dataset_description.json"), map[string]any{"Name": "Runs to measure time with (invented)", "BIDSVersion": "1.10.0", "DatasetType": "raw"})
}

// create makes a .nii.gz as scanners' converters do, with deflate level 6 in one
// stream, out of volumes made by fill.
func create(ctx context.Context, path string, h *nifti.Header, fill func(worker, n int, dst []float32) error) (err error) {
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return err
	}
	f, err := os.Create(path)
	if err != nil {
		return err
	}
	defer func() {
		if e := f.Close(); err == nil {
			err = e
		}
	}()
	zw, err := gzip.NewWriterLevel(f, 6)
	if err != nil {
		return err
	}
	if err := nifti.WriteVolumes(ctx, zw, h, false, runtime.GOMAXPROCS(0), fill); err != nil {
		return err
	}
	return zw.Close()
}

// synthesise writes a raw dataset of one run.
func synthesise(ctx context.Context, root string, s size) error {
	if err := describe(root); err != nil {
		return err
	}
	h := header(s)
	if err := writeJSON(filepath.Join(root, strings.TrimSuffix(filepath.FromSlash(runFile), ".nii.gz")+".json"), sidecar(s[2])); err != nil {
		return err
	}
	rnd := rand.New(rand.NewPCG(7, 11))
	var blobs [24][4]float64 // centre in mm, level; widths apart
	var widths [24]float64
	for i := range blobs {
		for k, spread := range [3]float64{30, 38, 24} {
			blobs[i][k] = spread * rnd.NormFloat64()
		}
		blobs[i][3] = 280 * rnd.NormFloat64()
		widths[i] = 7 + 9*rnd.Float64()
	}
	keys := max(3, s[3]/25)
	poses := make([][6]float64, keys) // mm and rad
	for k := 1; k < keys; k++ {
		for i, step := range [6]float64{0.3, 0.3, 0.4, 0.004, 0.003, 0.003} {
			poses[k][i] = poses[k-1][i] + step*rnd.NormFloat64()
		}
	}
	nv := s[0] * s[1] * s[2]
	volumes := make([][]float32, keys)
	err := parallel.For(ctx, runtime.GOMAXPROCS(0), keys, func(_, k int) error {
		p := poses[k]
		vol := make([]float32, 0, nv)
		for z := range s[2] {
			for y := range s[1] {
				for x := range s[0] {
					// Small angles: rotations to first order will do.
					a := h.Srow[0][0]*float64(x) + h.Srow[0][3] - p[0]
					b := h.Srow[1][1]*float64(y) + h.Srow[1][3] - p[1]
					c := h.Srow[2][2]*float64(z) + h.Srow[2][3] - p[2]
					a, b, c = a+p[5]*b-p[4]*c, b-p[5]*a+p[3]*c, c+p[4]*a-p[3]*b
					q := math.Sqrt(a*a/(68*68) + b*b/(84*84) + c*c/(56*56))
					edge := 1 / (1 + math.Exp((q-1)*18))
					v := headLevel
					if edge > 1e-4 {
						for i, g := range blobs {
							d := (a-g[0])*(a-g[0]) + (b-g[1])*(b-g[1]) + (c-g[2])*(c-g[2])
							if w := 2 * widths[i] * widths[i]; d < 8*w {
								v += g[3] * math.Exp(-d/w)
							}
						}
					}
					vol = append(vol, float32(max(v, 60)*edge))
				}
			}
		}
		volumes[k] = vol
		return nil
	})
	if err != nil {
		return err
	}
	return create(ctx, filepath.Join(root, filepath.FromSlash(runFile)), h, func(_, n int, dst []float32) error {
		rnd := rand.New(rand.NewPCG(uint64(n), 13))
		u := float64(n) / float64(max(1, s[3]-1)) * float64(keys-1)
		i := min(int(u), keys-2)
		f := float32(u - float64(i))
		for j := range dst {
			v := float64(volumes[i][j]*(1-f) + volumes[i+1][j]*f)
			re, im := v+noise*rnd.NormFloat64(), noise*rnd.NormFloat64()
			dst[j] = float32(math.Sqrt(re*re + im*im))
		}
		return nil
	})
}

// synthesiseMany writes a raw dataset of many tiny runs, ten a subject, with one
// sidecar at the root and a short one beside each.
func synthesiseMany(ctx context.Context, root string, runs int) error {
	if err := describe(root); err != nil {
		return err
	}
	s := size{6, 5, 4, 8}
	common := sidecar(s[2])
	common["MagneticFieldStrength"] = 3
	if err := writeJSON(filepath.Join(root, "task-watch_bold.json"), common); err != nil {
		return err
	}
	for i := range runs {
		base := filepath.Join(root, fmt.Sprintf("sub-%03d", i/10+1), "func", fmt.Sprintf("sub-%03d_task-watch_run-%02d_bold", i/10+1, i%10+1))
		err := create(ctx, base+".nii.gz", header(s), func(_, n int, dst []float32) error {
			for j := range dst {
				dst[j] = float32((j*j + n*7 + i) % 1009)
			}
			return nil
		})
		if err != nil {
			return err
		}
		if err := writeJSON(base+".json", map[string]any{"EchoTime": 0.03}); err != nil {
			return err
		}
	}
	return nil
}
