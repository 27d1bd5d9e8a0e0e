package nifti

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"crypto/sha256"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os/exec"
	"runtime"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// writeAll writes an image whose volumes follow one another in v.
func writeAll(w io.Writer, h *Header, compress bool, v []float32) error {
	wr, err := NewWriter(w, h, compress)
	if err != nil {
		return err
	}
	n := h.voxels()
	for ; len(v) > 0; v = v[n:] {
		if err := wr.WriteVolume(v[:n]); err != nil {
			return err
		}
	}
	return wr.Close()
}

// What is written comes back: geometry bit for bit, floats bit for bit,
// integers to half a step or to the end of their range.
func TestWriteProperty(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		size := rapid.SampledFrom([]int64{1, 2, 3, 5, 7, 8, 13})
		f32 := rapid.Custom(func(t *rapid.T) float64 { return float64(rapid.Float32Range(-1e4, 1e4).Draw(t, "")) })
		dt := rapid.SampledFrom(allTypes).Draw(t, "type")
		in := &Header{Version: rapid.IntRange(1, 2).Draw(t, "version"), BigEndian: rapid.Bool().Draw(t, "big"), Datatype: Int16,
			Dim: [8]int64{4, size.Draw(t, "nx"), size.Draw(t, "ny"), size.Draw(t, "nz"), 9, 1, 1, 1}, XYZTUnits: 10,
			DimInfo: 57, IntentCode: 5, IntentP: [3]float64{f32.Draw(t, "p1"), 2, 3}, SliceCode: 3, SliceEnd: 4, SliceDuration: 0.5,
			QformCode: 1, SformCode: int32(rapid.IntRange(0, 1).Draw(t, "sform"))}
		for i := range 3 {
			in.Pixdim[1+i] = float64(rapid.Float32Range(0.5, 9).Draw(t, "voxel"))
			in.Quatern[i] = float64(rapid.Float32Range(-0.5, 0.5).Draw(t, "quatern"))
			in.Qoffset[i] = f32.Draw(t, "offset")
			for j := range 4 {
				in.Srow[i][j] = f32.Draw(t, "srow")
			}
			in.Srow[i][i] = float64(1e5 + float32(i)) // never singular
		}
		in.Pixdim[0], in.Pixdim[4] = rapid.SampledFrom([]float64{-1, 0, 1}).Draw(t, "qfac"), float64(rapid.Float32Range(0.1, 9).Draw(t, "tr"))
		nt := rapid.IntRange(1, 4).Draw(t, "nt")
		h := in.Derived(nt, nt == 1 && rapid.Bool().Draw(t, "3-D"), dt, rapid.Bool().Draw(t, "clear"), 0.75)
		_, _, isInt := dt.limits()
		if isInt {
			h.SclSlope = rapid.SampledFrom([]float64{0, 1, 0.5, -2, 0.1}).Draw(t, "slope")
			h.SclInter = rapid.SampledFrom([]float64{0, 100.5}).Draw(t, "inter")
		}
		v := rapid.SliceOfN(rapid.Float32Range(-70000, 70000), h.voxels()*nt, h.voxels()*nt).Draw(t, "voxels")
		compress := rapid.Bool().Draw(t, "gzip")
		var out bytes.Buffer
		if err := writeAll(&out, h, compress, v); err != nil {
			t.Fatal(err)
		}
		name := "a.nii"
		if compress {
			name += ".gz"
		}
		r, err := openMemory(name, out.Bytes(), nil)
		if err != nil {
			t.Fatal(err)
		}
		got, err := readAll(r)
		if err != nil {
			t.Fatal(err)
		}
		want := *h
		if h.Version == 1 {
			want.SclSlope = float64(float32(h.SclSlope))
		}
		if d := cmp.Diff(&want, r.Header()); d != "" {
			t.Fatalf("header: -written +read\n%s", d)
		}
		if !isInt {
			if i := sameFloats(got, v); i >= 0 {
				t.Fatalf("voxel %d of %v is %v, wrote %v", i, dt, got[i], v[i])
			}
			return
		}
		slope, inter, _ := r.Header().Scaling()
		lo, hi, _ := dt.limits()
		a, b := slope*lo+inter, slope*hi+inter
		for i, x := range v {
			nearest := min(max(float64(x), min(a, b)), max(a, b))
			// Half a step, and the rounding of the value read to float32.
			if e := math.Abs(float64(got[i]) - nearest); e > math.Abs(slope)/2*(1+1e-12)+math.Abs(nearest)*6e-8 {
				t.Fatalf("voxel %d of %v is %v, wrote %v (slope %v, inter %v)", i, dt, got[i], x, slope, inter)
			}
		}
	})
}

// Round half to even and the ends of each range.
func TestIntegerRounding(t *testing.T) {
	cases := map[Datatype][][2]float64{
		Int16:  {{0.5, 0}, {1.5, 2}, {2.5, 2}, {-0.5, 0}, {-1.5, -2}, {32767.4, 32767}, {32768, 32767}, {1e9, 32767}, {-32768.4, -32768}, {-1e9, -32768}},
		Uint16: {{65535, 65535}, {65536, 65535}, {-1, 0}, {0.5, 0}, {1.5, 2}},
		Int8:   {{127.4, 127}, {200, 127}, {-128, -128}, {-129, -128}, {-1.5, -2}},
		Uint8:  {{255, 255}, {256, 255}, {-0.6, 0}, {254.5, 254}},
		Int32:  {{2147483648, 2147483647}, {-2147483648, -2147483648}, {-3e9, -2147483648}, {-7, -7}},
		Uint32: {{4294967296, 4294967295}, {-5, 0}, {4294967040, 4294967040}},
		Int64:  {{9.3e18, math.MaxInt64}, {-9.3e18, math.MinInt64}, {-3, -3}},
		Uint64: {{1.9e19, math.MaxUint64}, {-3, 0}, {1 << 63, 1 << 63}},
	}
	for dt, list := range cases {
		for _, c := range list {
			b := appendVoxels(make([]byte, 0, 8), []float32{float32(c[0])}, dt, 1, 0)
			got := oracle(b, dt, binary.LittleEndian, 1, 0, false)[0]
			if got != float32(c[1]) {
				t.Errorf("%v: %v stored as %v, want %v", dt, c[0], got, c[1])
			}
		}
	}
	// float32 hides the last bit of the largest 64-bit values.
	if b := appendVoxels(make([]byte, 0, 8), []float32{1e30}, Int64, 1, 0); binary.LittleEndian.Uint64(b) != math.MaxInt64 {
		t.Errorf("1e30 as int64: % x", b)
	}
	if b := appendVoxels(make([]byte, 0, 8), []float32{1e30}, Uint64, 1, 0); binary.LittleEndian.Uint64(b) != math.MaxUint64 {
		t.Errorf("1e30 as uint64: % x", b)
	}
}

func TestInt16Scaling(t *testing.T) {
	if s, i := Int16Scaling(42.5, 42.5); s != 1 || i != 42.5 {
		t.Errorf("a constant: %v, %v", s, i)
	}
	for _, c := range [][2]float32{{0, 1}, {-32768, 32767}, {1e6, 1e6 + 1}, {-math.MaxFloat32, math.MaxFloat32}, {0, 1e-44}, {-5, -4}} {
		checkInt16Scaling(t, c[0], c[1])
	}
	rapid.Check(t, func(t *rapid.T) {
		a, b := rapid.Float32Range(-1e6, 1e6).Draw(t, "a"), rapid.Float32Range(-1e6, 1e6).Draw(t, "b")
		checkInt16Scaling(t, min(a, b), max(a, b))
	})
}

func checkInt16Scaling(t interface{ Fatalf(string, ...any) }, lo, hi float32) {
	s, inter := Int16Scaling(lo, hi)
	if s != float64(float32(s)) || inter != float64(float32(inter)) {
		t.Fatalf("[%v, %v]: slope %v, inter %v are not float32", lo, hi, s, inter)
	}
	if lo == hi {
		return
	}
	a, b := (float64(lo)-inter)/s, (float64(hi)-inter)/s
	if a < -32768.0000001 || b > 32767.0000001 {
		t.Fatalf("[%v, %v]: clipped, %v to %v", lo, hi, a, b)
	}
	// Filled to within the rounding of inter to float32 (half of 1.2e-7 of it, in
	// steps, at each end), a step, and that of the slope.
	spare := 65535 - (b - a)
	if limit := 2 + 2*math.Abs(inter)*1.2e-7/s + 65535*2.4e-7; spare > limit && s > 1e-37 {
		t.Fatalf("[%v, %v]: %v steps unused, at most %v expected", lo, hi, spare, limit)
	}
}

// The bytes depend on header and voxels alone: not on the cores. Three
// blocks and a bit, one that ends with the image, and one that is small.
func TestWriterBytes(t *testing.T) {
	for _, bytesOfVoxels := range []int{100, blockBytes, 3*blockBytes + 1000} {
		h := benchHeader(bytesOfVoxels/4, 1, 1, 2, Float32)
		h.Version = 2
		if bytesOfVoxels == blockBytes { // the voxels fill one block
			h.Version, h.Dim = 1, [8]int64{3, int64(bytesOfVoxels / 4 / 16), 16, 1}
			if h.dataBytes() != blockBytes {
				t.Fatalf("%d bytes are not one block", h.dataBytes())
			}
		}
		_, _, _, nt := h.Size()
		var v []float32
		for range nt {
			for i := range h.voxels() {
				v = append(v, float32(math.Sqrt(float64(len(v)%1009)))+float32(i))
			}
		}
		var plain, one, two bytes.Buffer
		defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
		for procs, out := range []*bytes.Buffer{&one, &two} {
			runtime.GOMAXPROCS(1 + 3*procs)
			if err := writeAll(out, h, true, v); err != nil {
				t.Fatal(err)
			}
		}
		if err := writeAll(&plain, h, false, v); err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(one.Bytes(), two.Bytes()) {
			t.Errorf("%d bytes: one core and four give different files", bytesOfVoxels)
		}
		// RFC 1952: deflate, no flags (so no name), no time, unknown system.
		if want := []byte{0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 255}; !bytes.HasPrefix(one.Bytes(), want) {
			t.Errorf("gzip header % x, want % x", one.Bytes()[:10], want)
		}
		// One member, whole, for the standard library.
		in := bufio.NewReader(&one)
		zr, err := gzip.NewReader(in)
		if err != nil {
			t.Fatal(err)
		}
		zr.Multistream(false)
		back, err := io.ReadAll(zr)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := in.ReadByte(); err != io.EOF {
			t.Errorf("%d bytes: something follows the first member", bytesOfVoxels)
		}
		if !bytes.Equal(back, plain.Bytes()) {
			t.Errorf("%d bytes: the compressed file holds other bytes than the plain one", bytesOfVoxels)
		}
	}
}

// The bytes of a compressed image are pinned: they must be the same on every
// processor (run this with GOAMD64=v1 and v3, and on arm64), and a compressor that
// changes them with a new version changes the digests in records.
func TestWriterDigest(t *testing.T) {
	for dt, want := range map[Datatype]string{
		Float32: "b00432ac39400e0796f523e86a998389f408bcd74226fd89ec98b81095410e10",
		Int16:   "5c87e1528b2c53f5d1924c0ac9bcf9978e89cf003cf72ae8287ea2c429cb7724",
		Uint8:   "c5db0fff54f8b23271c79ec8b90b8d6e8ac6072a62be81e7fa553166d1a6997c",
	} {
		h := benchHeader(61, 62, 33, 3, dt)
		if dt == Int16 {
			h.SclSlope, h.SclInter = Int16Scaling(0, 255.1)
		}
		v := make([]float32, h.voxels()*3)
		for i := range v {
			v[i] = float32(i*i%2551) / 10
		}
		digest := sha256.New()
		if err := writeAll(digest, h, true, v); err != nil {
			t.Fatal(err)
		}
		if got := fmt.Sprintf("%x", digest.Sum(nil)); got != want {
			t.Errorf("%v: digest %s, want %s", dt, got, want)
		}
	}
}

// The whole file is known: header by the table of offsets, an empty flag, voxels.
func TestWriterHeaderBytes(t *testing.T) {
	for version := 1; version <= 2; version++ {
		im := sample(version, binary.LittleEndian)
		r, err := openMemory("a.nii", im.bytes(), nil)
		if err != nil {
			t.Fatal(err)
		}
		v, err := readAll(r)
		if err != nil {
			t.Fatal(err)
		}
		var out bytes.Buffer
		if err := writeAll(&out, r.Header(), false, v); err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(im.bytes(), out.Bytes()); d != "" {
			t.Errorf("NIfTI-%d read and written: %s", version, d)
		}
	}
}

func TestWriterRefuses(t *testing.T) {
	base := func() *Header { return benchHeader(3, 2, 1, 2, Int16) }
	nan := math.NaN()
	for name, c := range map[string]struct {
		change      func(h *Header)
		kind, field string
	}{
		"version":            {func(h *Header) { h.Version = 3 }, KindHeader, "version"},
		"dim too long":       {func(h *Header) { h.Dim[1] = 40000 }, KindHeader, "dim[1]"},
		"dim of zero":        {func(h *Header) { h.Dim[2] = 0 }, KindSize, "dim[2]"},
		"type":               {func(h *Header) { h.Datatype = 128 }, KindDatatype, "datatype"},
		"singular":           {func(h *Header) { h.SformCode = 1 }, KindAffine, "srow_x, srow_y, srow_z"},
		"scaled float":       {func(h *Header) { h.Datatype, h.SclSlope = Float32, 2 }, KindHeader, "scl_slope"},
		"slope out of range": {func(h *Header) { h.SclSlope = 1e-60 }, KindHeader, "scl_slope"},
		"inter":              {func(h *Header) { h.SclSlope, h.SclInter = 2, nan }, KindHeader, "scl_inter"},
		"toffset too long":   {func(h *Header) { h.Toffset = 1e300 }, KindHeader, "toffset"},
		"slice code":         {func(h *Header) { h.SliceCode = 300 }, KindHeader, "slice_code"},
	} {
		h := base()
		c.change(h)
		var out bytes.Buffer
		_, err := NewWriter(&out, h, false)
		if err == nil {
			t.Errorf("%s: accepted", name)
			continue
		}
		if e := asError(t, err); e.Kind != c.kind || e.Field != c.field {
			t.Errorf("%s: %v", name, e)
		}
	}
	for _, compress := range []bool{false, true} {
		w, err := NewWriter(io.Discard, base(), compress)
		if err != nil {
			t.Fatal(err)
		}
		if err := w.WriteVolume(make([]float32, 6)); err != nil {
			t.Fatal(err)
		}
		if err := w.Close(); err == nil || !strings.Contains(err.Error(), "1 volumes written of the 2") {
			t.Errorf("closed one volume short: %v", err)
		}
		w, _ = NewWriter(io.Discard, base(), compress)
		for range 2 {
			if err := w.WriteVolume(make([]float32, 6)); err != nil {
				t.Fatal(err)
			}
		}
		if err := w.WriteVolume(make([]float32, 6)); err == nil {
			t.Error("a third volume of two was accepted")
		}
		w, _ = NewWriter(io.Discard, base(), compress)
		if e := asError(t, w.WriteVolume([]float32{0, 0, 0, 0, float32(nan), 0})); e.Kind != KindValues || e.Field != "voxel (1,1,0), volume 0" {
			t.Error(e)
		}
	}
}

// Wherever the writer below fails, its error comes through.
func TestWriterBreaksOff(t *testing.T) {
	h := benchHeader(700, 500, 1, 3, Float32) // 4 MB, some blocks
	v := make([]float32, 700*500*3)
	for i := range v {
		v[i] = float32(i*7919%65521) * 1.0001
	}
	for _, compress := range []bool{false, true} {
		var whole bytes.Buffer
		if err := writeAll(&whole, h, compress, v); err != nil {
			t.Fatal(err)
		}
		for _, n := range []int{0, 5, 10, 1 << 20, whole.Len() / 2, whole.Len() - 8, whole.Len() - 1} {
			if err := writeAll(&full{n}, h, compress, v); !errors.Is(err, errDisk) {
				t.Errorf("gzip %v, room for %d of %d bytes: %v", compress, n, whole.Len(), err)
			}
		}
		if err := writeAll(&full{whole.Len()}, h, compress, v); err != nil {
			t.Error(err)
		}
	}
}

// nibabel opens what we write, with our affine and voxels.
func TestNibabelReadsUs(t *testing.T) {
	const python = "/usr/bin/python3"
	if err := exec.Command(python, "-c", "import nibabel, numpy").Run(); err != nil {
		t.Skip("no python3 with nibabel and numpy: that others read our files was not tried")
	}
	const script = `
import sys, json, nibabel as nib, numpy as np
out = []
for path in sys.argv[1:]:
    i = nib.load(path)
    out.append({"affine": i.affine.tolist(), "shape": list(i.shape), "values": np.asarray(i.dataobj, dtype=float).ravel(order="F").tolist()})
print(json.dumps(out))`
	args := []string{"-c", script}
	var want [][]float32
	var headers []*Header
	for version := 1; version <= 2; version++ {
		for _, dt := range []Datatype{Float32, Int16, Uint8} {
			for _, gz := range []string{"", ".gz"} {
				h := benchHeader(3, 2, 2, 2, dt)
				h.Version, h.QformCode = version, 1
				h.Quatern, h.Qoffset = [3]float64{0.5, 0.5, 0.25}, [3]float64{1, 2, 3}
				if dt == Int16 {
					h.SclSlope, h.SclInter = Int16Scaling(-3, 40)
				}
				v := make([]float32, 24)
				for i := range v {
					v[i] = float32(i)
				}
				var out bytes.Buffer
				if err := writeAll(&out, h, gz != "", v); err != nil {
					t.Fatal(err)
				}
				args = append(args, writeFile(t, fmt.Sprintf("a%d.nii%s", len(args), gz), out.Bytes()))
				want, headers = append(want, v), append(headers, h)
			}
		}
	}
	b, err := exec.Command(python, args...).Output()
	if err != nil {
		t.Fatal(err)
	}
	var got []struct {
		Affine [4][4]float64
		Shape  []int
		Values []float64
	}
	if err := json.Unmarshal(b, &got); err != nil {
		t.Fatal(err)
	}
	if len(got) != len(want) {
		t.Fatalf("%d of %d files", len(got), len(want))
	}
	for i, g := range got {
		if d := cmp.Diff([]int{3, 2, 2, 2}, g.Shape); d != "" {
			t.Error(d)
		}
		sameAffine(t, args[i+2], headers[i].Affine(), g.Affine, 1e-13) // float64 sums of a few products below 10
		slope, _, _ := headers[i].Scaling()
		tolerance := 0.0
		if headers[i].Datatype == Int16 {
			tolerance = slope / 2 * 1.0001 // half a step
		}
		for j, v := range g.Values {
			if math.Abs(v-float64(want[i][j])) > tolerance {
				t.Errorf("%s: voxel %d is %v, wrote %v", args[i+2], j, v, want[i][j])
			}
		}
	}
}
