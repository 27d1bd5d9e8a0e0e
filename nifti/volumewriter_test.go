package nifti

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"context"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"math"
	"os/exec"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"pgregory.net/rapid"

	"evenkeel/internal/parallel"
)

// The checksum of joined pieces is that of hash/crc32 over the whole.
func TestJoinedChecksums(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		pieces := rapid.SliceOf(rapid.SliceOfN(rapid.Byte(), 0, 300)).Draw(t, "pieces")
		var j joiner
		var all []byte
		for _, p := range pieces {
			j.add(crc32.ChecksumIEEE(p), len(p))
			all = append(all, p...)
		}
		if want := crc32.ChecksumIEEE(all); j.crc != want {
			t.Fatalf("%08x, want %08x", j.crc, want)
		}
	})
	if raceEnabled {
		return // a second of work, and nothing to race
	}
	// Beyond 2^32 bits, where the powers come round.
	long := make([]byte, 1<<20)
	tail, want := uint32(0), crc32.ChecksumIEEE([]byte("ahoy"))
	var j joiner
	j.add(want, 4)
	for range 600 {
		tail = crc32.Update(tail, crc32.IEEETable, long)
		want = crc32.Update(want, crc32.IEEETable, long)
	}
	j.add(tail, 600<<20)
	if j.crc != want {
		t.Errorf("600 MiB: %08x, want %08x", j.crc, want)
	}
}

func TestFirstNotFinite(t *testing.T) {
	for n := range 40 {
		v := make([]float32, n)
		for i := range v {
			v[i] = []float32{0, math.MaxFloat32, -math.MaxFloat32, float32(math.Copysign(0, -1)), 1e-45}[i%5]
		}
		if i := firstNotFinite(v); i != -1 {
			t.Errorf("%d finite values: %d", n, i)
		}
		for at := range v {
			for _, bad := range []float64{math.NaN(), math.Inf(1), math.Inf(-1)} {
				w := append([]float32{}, v...)
				w[at], w[n-1] = float32(bad), float32(bad)
				if i := firstNotFinite(w); i != at {
					t.Errorf("%v at %d of %d: %d", bad, at, n, i)
				}
			}
		}
	}
}

// volumes numbered by their content.
func numbered(h *Header, n int, dst []float32) {
	for i := range dst {
		dst[i] = float32((i*i+7919*n)%2551) / 10
	}
}

// An image made by any number of goroutines, with any number of slots, has the
// bytes that a Writer gives it. Sizes on both sides of a piece and a block.
func TestVolumeWriterBytes(t *testing.T) {
	for _, c := range []struct {
		dims [4]int
		dt   Datatype
	}{
		{[4]int{5, 4, 3, 23}, Float32},
		{[4]int{64, 64, 4, 9}, Float32},  // a piece, exactly
		{[4]int{64, 64, 64, 3}, Float32}, // a block, exactly
		{[4]int{67, 64, 64, 3}, Float32},
		{[4]int{128, 128, 33, 3}, Float32}, // two blocks and a bit
		{[4]int{61, 62, 33, 5}, Int16},
		{[4]int{61, 62, 33, 2}, Uint8},
		{[4]int{61, 62, 33, 2}, Float64},
	} {
		h := benchHeader(c.dims[0], c.dims[1], c.dims[2], c.dims[3], c.dt)
		if c.dt == Int16 {
			h.SclSlope, h.SclInter = Int16Scaling(0, 255.1)
		}
		for _, compress := range []bool{true, false} {
			var want bytes.Buffer
			v := make([]float32, h.voxels())
			w, err := NewWriter(&want, h, compress)
			if err != nil {
				t.Fatal(err)
			}
			for n := range c.dims[3] {
				numbered(h, n, v)
				if err := w.WriteVolume(v); err != nil {
					t.Fatal(err)
				}
			}
			if err := w.Close(); err != nil {
				t.Fatal(err)
			}
			for _, workers := range []int{1, 3, 8} {
				for _, slots := range []int{1, 5} {
					var got bytes.Buffer
					vw, err := NewVolumeWriter(&got, h, compress, slots)
					if err != nil {
						t.Fatal(err)
					}
					err = parallel.For(context.Background(), workers, c.dims[3], func(_, n int) error {
						v := make([]float32, h.voxels())
						numbered(h, n, v)
						if n%3 == 0 {
							time.Sleep(time.Millisecond) // some arrive late
						}
						return vw.Volume(n, v)
					})
					if err != nil {
						t.Fatal(err)
					}
					if err := vw.Close(); err != nil {
						t.Fatal(err)
					}
					if !bytes.Equal(got.Bytes(), want.Bytes()) {
						t.Fatalf("%v %v, compressed %v, %d workers, %d slots: other bytes than one writer's", c.dims, c.dt, compress, workers, slots)
					}
				}
				var got bytes.Buffer
				if err := WriteVolumes(context.Background(), &got, h, compress, workers, func(_, n int, dst []float32) error { numbered(h, n, dst); return nil }); err != nil {
					t.Fatal(err)
				}
				if !bytes.Equal(got.Bytes(), want.Bytes()) {
					t.Fatalf("%v %v, compressed %v, %d workers: WriteVolumes gives other bytes", c.dims, c.dt, compress, workers)
				}
				got.Reset()
				data := make([]float32, h.voxels()*c.dims[3])
				for n := range c.dims[3] {
					numbered(h, n, data[n*h.voxels():][:h.voxels()])
				}
				if err := WriteSeries(context.Background(), &got, h, compress, workers, data); err != nil {
					t.Fatal(err)
				}
				if !bytes.Equal(got.Bytes(), want.Bytes()) {
					t.Fatalf("%v %v, compressed %v, %d workers: WriteSeries gives other bytes", c.dims, c.dt, compress, workers)
				}
			}
			if !compress {
				continue
			}
			// One member, whole, for the standard library; and for gunzip.
			in := bufio.NewReader(bytes.NewReader(want.Bytes()))
			zr, err := gzip.NewReader(in)
			if err != nil {
				t.Fatal(err)
			}
			zr.Multistream(false)
			if n, err := io.Copy(io.Discard, zr); err != nil || n != 352+h.dataBytes() {
				t.Fatalf("%d bytes, %v", n, err)
			}
			if _, err := in.ReadByte(); err != io.EOF {
				t.Error("something follows the first member")
			}
			if gunzip, err := exec.LookPath("gunzip"); err == nil {
				if out, err := exec.Command(gunzip, "-t", writeFile(t, "a.nii.gz", want.Bytes())).CombinedOutput(); err != nil {
					t.Errorf("gunzip -t: %v %s", err, out)
				}
			}
		}
	}
}

// nibabel reads volumes made by several goroutines.
func TestNibabelReadsVolumes(t *testing.T) {
	const python = "/usr/bin/python3"
	if err := exec.Command(python, "-c", "import nibabel, numpy").Run(); err != nil {
		t.Skip("no python3 with nibabel and numpy: that others read our files was not tried")
	}
	h := benchHeader(67, 64, 64, 4, Float32)
	var out bytes.Buffer
	if err := WriteVolumes(context.Background(), &out, h, true, 3, func(_, n int, dst []float32) error { numbered(h, n, dst); return nil }); err != nil {
		t.Fatal(err)
	}
	const script = `
import sys, nibabel as nib, numpy as np
d = nib.load(sys.argv[1]).get_fdata(dtype=np.float32)
i = np.arange(d[..., 0].size, dtype=np.int64)
for n in range(d.shape[3]):
    want = ((i * i + 7919 * n) % 2551).astype(np.float32) / np.float32(10)
    assert np.array_equal(d[..., n].ravel(order="F"), want), n
print(d.shape)`
	b, err := exec.Command(python, "-c", script, writeFile(t, "a.nii.gz", out.Bytes())).CombinedOutput()
	if err != nil || strings.TrimSpace(string(b)) != "(67, 64, 64, 4)" {
		t.Errorf("%v %s", err, b)
	}
}

func TestVolumeWriterRefuses(t *testing.T) {
	h := benchHeader(3, 2, 1, 3, Int16)
	v := make([]float32, 6)
	if _, err := NewVolumeWriter(io.Discard, benchHeader(3, 2, 1, 3, 128), true, 1); asError(t, err).Field != "datatype" {
		t.Error(err)
	}
	fresh := func() *VolumeWriter {
		w, err := NewVolumeWriter(io.Discard, h, true, 2)
		if err != nil {
			t.Fatal(err)
		}
		return w
	}
	for name, c := range map[string]struct {
		do   func(w *VolumeWriter) error
		text string
	}{
		"one more":         {func(w *VolumeWriter) error { return w.Volume(3, v) }, "more than the 3"},
		"before the first": {func(w *VolumeWriter) error { return w.Volume(-1, v) }, "more than the 3"},
		"twice, written":   {func(w *VolumeWriter) error { w.Volume(0, v); return w.Volume(0, v) }, "volume 0 a second time"},
		"twice, waiting":   {func(w *VolumeWriter) error { w.Volume(1, v); return w.Volume(1, v) }, "volume 1 a second time"},
		"too few":          {func(w *VolumeWriter) error { w.Volume(0, v); return w.Close() }, "1 volumes written of the 3"},
		"a hole":           {func(w *VolumeWriter) error { w.Volume(1, v); return w.Close() }, "0 volumes written of the 3"},
		"aborted":          {func(w *VolumeWriter) error { w.Abort(errDisk); w.Abort(io.EOF); return w.Volume(0, v) }, errDisk.Error()},
	} {
		w := fresh()
		if err := c.do(w); err == nil || !strings.Contains(err.Error(), c.text) {
			t.Errorf("%s: %v", name, err)
		}
		if err := w.Close(); err == nil || !strings.Contains(err.Error(), c.text) {
			t.Errorf("%s: Close after it: %v", name, err)
		}
	}
	w := fresh()
	e := asError(t, w.Volume(1, []float32{0, 0, 0, 0, float32(math.NaN()), 0}))
	if e.Kind != KindValues || e.Field != "voxel (1,1,0), volume 1" {
		t.Error(e)
	}
	if err := w.Volume(0, v); err != error(e) {
		t.Errorf("after it: %v", err)
	}
}

// Those who wait for a volume that will never come are woken: by an error of the
// file, of a value, of the caller, and by a panic.
func TestVolumeWriterWakes(t *testing.T) {
	h := benchHeader(30, 20, 10, 40, Float32)
	bad := make([]float32, h.voxels())
	bad[7] = float32(math.Inf(1))
	for name, c := range map[string]struct {
		w     io.Writer
		first func(w *VolumeWriter)
	}{
		"file":   {&full{30}, func(w *VolumeWriter) { w.Volume(0, make([]float32, h.voxels())) }},
		"value":  {io.Discard, func(w *VolumeWriter) { w.Volume(0, bad) }},
		"caller": {io.Discard, func(w *VolumeWriter) { w.Abort(errDisk) }},
		"panic": {panics{}, func(w *VolumeWriter) {
			defer func() { recover() }()
			w.Volume(0, make([]float32, h.voxels()))
		}},
	} {
		vw, err := NewVolumeWriter(c.w, h, true, 2)
		if err != nil {
			t.Fatal(err)
		}
		var wg sync.WaitGroup
		for n := 2; n < 8; n++ {
			wg.Go(func() {
				if err := vw.Volume(n, make([]float32, h.voxels())); err == nil {
					t.Errorf("%s: volume %d was accepted", name, n)
				}
			})
		}
		time.Sleep(5 * time.Millisecond)
		c.first(vw)
		wg.Wait()
		if vw.Close() == nil {
			t.Errorf("%s: closed", name)
		}
	}
}

type panics struct{}

func (panics) Write([]byte) (int, error) { panic("ours") }

// WriteVolumes ends with the first error in the order of volumes, the end of ctx,
// or the panic of fill.
func TestWriteVolumesBreaksOff(t *testing.T) {
	h := benchHeader(30, 20, 10, 40, Float32)
	for _, workers := range []int{1, 4} {
		err := WriteVolumes(context.Background(), io.Discard, h, true, workers, func(_, n int, dst []float32) error {
			if n >= 11 {
				return fmt.Errorf("volume %d: %w", n, errDisk)
			}
			return nil
		})
		if !errors.Is(err, errDisk) || !strings.Contains(err.Error(), "volume 11") {
			t.Errorf("%d workers: %v", workers, err)
		}
		ctx, cancel := context.WithCancel(context.Background())
		err = WriteVolumes(ctx, io.Discard, h, true, workers, func(_, n int, dst []float32) error {
			if n == 9 {
				cancel()
			}
			return nil
		})
		if !errors.Is(err, context.Canceled) {
			t.Errorf("%d workers: %v", workers, err)
		}
		func() {
			defer func() {
				if p, ok := recover().(*parallel.Panic); !ok || p.Value != "ours" {
					t.Errorf("%d workers: recovered %v", workers, p)
				}
			}()
			WriteVolumes(context.Background(), io.Discard, h, true, workers, func(_, n int, dst []float32) error {
				if n == 3 {
					panic("ours")
				}
				return nil
			})
		}()
		var whole bytes.Buffer
		fill := func(_, n int, dst []float32) error { numbered(h, n, dst); return nil }
		if err := WriteVolumes(context.Background(), &whole, h, true, workers, fill); err != nil {
			t.Fatal(err)
		}
		for _, n := range []int{0, 9, 10, 300, whole.Len() / 2, whole.Len() - 1} {
			if err := WriteVolumes(context.Background(), &full{n}, h, true, workers, fill); !errors.Is(err, errDisk) {
				t.Errorf("room for %d of %d bytes: %v", n, whole.Len(), err)
			}
		}
	}
}

// After the first volumes nothing is allocated.
func TestVolumeWriterAllocates(t *testing.T) {
	if raceEnabled {
		t.Skip("the race detector allocates")
	}
	for _, dt := range []Datatype{Float32, Int16, Uint8} {
		h := benchHeader(64, 64, 36, 400, dt)
		w, err := NewVolumeWriter(io.Discard, h, true, 3)
		if err != nil {
			t.Fatal(err)
		}
		v := make([]float32, h.voxels())
		numbered(h, 0, v)
		n := 0
		do := func(times int) uint64 {
			var before, after runtime.MemStats
			runtime.ReadMemStats(&before)
			for range times {
				if err := w.Volume(n, v); err != nil {
					t.Fatal(err)
				}
				n++
			}
			runtime.ReadMemStats(&after)
			return after.TotalAlloc - before.TotalAlloc
		}
		do(5)
		// Something else of the process may allocate a little meanwhile.
		if got := do(10); got > 4<<10 {
			t.Errorf("%v: %d bytes for ten volumes", dt, got)
		}
	}
}
