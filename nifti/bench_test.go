package nifti

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/klauspost/compress/flate"
)

// benchVolumes makes volumes that compress as EPI does: a ball of signal about
// 1000 with noise of 10, and noise alone around it, not rounded to integers.
func benchVolumes(nx, ny, nz, nt int) [][]float32 {
	rnd := rand.New(rand.NewPCG(1, 2))
	out := make([][]float32, nt)
	for t := range out {
		v := make([]float32, 0, nx*ny*nz)
		for z := range nz {
			for y := range ny {
				for x := range nx {
					dx, dy, dz := float64(2*x-nx)/float64(nx), float64(2*y-ny)/float64(ny), float64(2*z-nz)/float64(nz)
					s := 0.0
					if r := dx*dx + dy*dy + dz*dz; r < 0.7 {
						s = 1000 + 300*math.Sin(7*dx)*math.Cos(9*dy+dz)
					}
					re, im := s+10*rnd.NormFloat64(), 10*rnd.NormFloat64()
					v = append(v, float32(math.Sqrt(re*re+im*im)))
				}
			}
		}
		out[t] = v
	}
	return out
}

func benchHeader(nx, ny, nz, nt int, dt Datatype) *Header {
	h := &Header{Version: 1, Dim: [8]int64{4, int64(nx), int64(ny), int64(nz), int64(nt), 1, 1, 1}, Datatype: dt, XYZTUnits: 10}
	h.Pixdim = [8]float64{1, 3, 3, 3, 2}
	return h
}

func benchFile(b *testing.B, vols [][]float32, h *Header, name string) string {
	path := filepath.Join(b.TempDir(), name)
	f, err := os.Create(path)
	if err != nil {
		b.Fatal(err)
	}
	w, err := NewWriter(f, h, filepath.Ext(name) == ".gz")
	if err != nil {
		b.Fatal(err)
	}
	for _, v := range vols {
		if err := w.WriteVolume(v); err != nil {
			b.Fatal(err)
		}
	}
	if err := w.Close(); err != nil {
		b.Fatal(err)
	}
	if err := f.Close(); err != nil {
		b.Fatal(err)
	}
	return path
}

// BenchmarkRead gives the speed in stored bytes.
func BenchmarkRead(b *testing.B) {
	const nx, ny, nz, nt = 64, 64, 36, 20
	vols := benchVolumes(nx, ny, nz, nt)
	for _, dt := range []Datatype{Int16, Float32, Uint8, Float64} {
		for _, name := range []string{"a.nii", "a.nii.gz"} {
			for _, scaled := range []bool{false, true} {
				h := benchHeader(nx, ny, nz, nt, dt)
				if scaled {
					if dt != Int16 {
						continue
					}
					h.SclSlope, h.SclInter = 0.5, 3
				}
				b.Run(fmt.Sprintf("%v/%s/scaled=%v", dt, name, scaled), func(b *testing.B) {
					path := benchFile(b, vols, h, name)
					b.SetBytes(h.dataBytes())
					dst := make([]float32, nx*ny*nz)
					for b.Loop() {
						r, err := Open(path, nil)
						if err != nil {
							b.Fatal(err)
						}
						for err == nil {
							err = r.ReadVolume(dst)
						}
						if err != io.EOF {
							b.Fatal(err)
						}
						r.Close()
					}
				})
			}
		}
	}
}

// BenchmarkWrite gives the speed in stored bytes.
func BenchmarkWrite(b *testing.B) {
	const nx, ny, nz, nt = 64, 64, 36, 20
	vols := benchVolumes(nx, ny, nz, nt)
	for _, dt := range []Datatype{Float32, Int16} {
		for _, compress := range []bool{false, true} {
			b.Run(fmt.Sprintf("%v/gzip=%v", dt, compress), func(b *testing.B) {
				h := benchHeader(nx, ny, nz, nt, dt)
				b.SetBytes(h.dataBytes())
				for b.Loop() {
					w, err := NewWriter(io.Discard, h, compress)
					if err != nil {
						b.Fatal(err)
					}
					for _, v := range vols {
						if err := w.WriteVolume(v); err != nil {
							b.Fatal(err)
						}
					}
					if err := w.Close(); err != nil {
						b.Fatal(err)
					}
				}
			})
		}
	}
}

// BenchmarkLevels is what level rests on: speed on one core and size of each
// level for noise as interpolation leaves it, for integers and for a mask.
func BenchmarkLevels(b *testing.B) {
	const nx, ny, nz, nt = 64, 64, 36, 8
	vols := benchVolumes(nx, ny, nz, nt)
	var mask [][]float32
	for _, v := range vols {
		m := make([]float32, len(v))
		for i, x := range v {
			if x > 300 {
				m[i] = 1
			}
		}
		mask = append(mask, m)
	}
	for _, c := range []struct {
		name string
		dt   Datatype
		vols [][]float32
	}{{"float32", Float32, vols}, {"int16", Int16, vols}, {"mask", Uint8, mask}} {
		var raw []byte
		for _, v := range c.vols {
			raw = append(raw, appendVoxels(make([]byte, 0, len(v)*c.dt.Bytes()), v, c.dt, 1, 0)...)
		}
		for _, level := range []int{flate.HuffmanOnly, 1, 2, 3, 5, 6, 9} {
			b.Run(fmt.Sprintf("%s/%d", c.name, level), func(b *testing.B) {
				b.SetBytes(int64(len(raw)))
				var out bytes.Buffer
				for b.Loop() {
					out.Reset()
					fw, err := flate.NewWriter(&out, level)
					if err != nil {
						b.Fatal(err)
					}
					for at := 0; at < len(raw); at += blockBytes {
						fw.Write(raw[at:min(at+blockBytes, len(raw))])
						fw.Flush()
						fw.Reset(&out)
					}
				}
				b.ReportMetric(float64(out.Len())/float64(len(raw)), "size")
			})
		}
	}
}
