package nifti

import (
	"bytes"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"runtime"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// Every voxel type, version and byte order, written by nibabel 5.0 and numpy
// (testdata/generate.py): voxels and affine are those that nibabel reads.
func TestImagesOfNibabel(t *testing.T) {
	var golden struct {
		Images []struct {
			File, Type, Order string
			Version           int
			Shape             []int
			Affine            [4][4]float64
			Seconds           float64
			Values            []float32
		}
	}
	loadJSON(t, "images.json", &golden)
	seen := map[string]bool{}
	for _, g := range golden.Images {
		seen[fmt.Sprint(g.Type, g.Version, g.Order)] = true
		t.Run(g.File, func(t *testing.T) {
			path := filepath.Join("testdata", "images", g.File)
			var tap bytes.Buffer
			h, s, err := ReadSeries(path, &tap, 0)
			if err != nil {
				t.Fatal(err)
			}
			if h.Version != g.Version || h.BigEndian != (g.Order == "big") || h.Datatype.String() != g.Type {
				t.Errorf("read as NIfTI-%d, big-endian %v, %v", h.Version, h.BigEndian, h.Datatype)
			}
			shape := []int{s.NX, s.NY, s.NZ, s.NT}
			if d := cmp.Diff(g.Shape, shape[:len(g.Shape)]); d != "" {
				t.Error(d)
			}
			if i := sameFloats(s.Data, g.Values); i >= 0 {
				t.Errorf("voxel %d differs:\n got %v\nwant %v", i, s.Data, g.Values)
			}
			sameAffine(t, "affine", h.Affine(), g.Affine, 0)
			// pixdim[4] is float32: 6e-8 of it.
			if sec, known := h.SecondsPerVolume(); len(g.Shape) == 4 && (!known || math.Abs(sec-g.Seconds) > 1e-7*g.Seconds) {
				t.Errorf("%v s per volume, known %v; want %v", sec, known, g.Seconds)
			}
			if d := cmp.Diff(wholeFile(t, path), tap.Bytes()); d != "" {
				t.Errorf("tap saw other bytes than the file has: %s", d)
			}
			only, err := ReadHeader(path)
			if err != nil {
				t.Fatal(err)
			}
			if d := cmp.Diff(h, only, cmp.Comparer(func(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) })); d != "" {
				t.Errorf("ReadHeader and Open differ: %s", d)
			}
		})
	}
	for _, dt := range []Datatype{Uint8, Int8, Uint16, Int16, Uint32, Int32, Uint64, Int64, Float32, Float64} {
		for _, rest := range []string{"1little", "1big", "2little", "2big"} {
			if !seen[dt.String()+rest] {
				t.Errorf("no golden file of %v, %s", dt, rest)
			}
		}
	}
}

// wholeFile gives the bytes of an image, both files of a pair.
func wholeFile(t *testing.T, path string) []byte {
	t.Helper()
	hdr, img, err := parts(path)
	if err != nil {
		t.Fatal(err)
	}
	var all []byte
	for _, p := range []string{hdr, img} {
		if p == "" {
			continue
		}
		b, err := os.ReadFile(p)
		if err != nil {
			t.Fatal(err)
		}
		all = append(all, b...)
	}
	return all
}

// The real series, against what nibabel says of them (testdata/series.json).
func TestRealSeries(t *testing.T) {
	root := os.Getenv("EVENKEEL_TEST_SERIES")
	if root == "" {
		t.Skip("EVENKEEL_TEST_SERIES is not set: the real series were not read")
	}
	var golden struct {
		Series []struct {
			File, Type      string
			Shape           [4]int
			Affine          [4][4]float64
			Pixdim4         float64
			Sum             float64
			Sum_squares     float64
			Last_volume_sum float64
			Max             float32
			Max_at          [4]int
		}
	}
	loadJSON(t, "series.json", &golden)
	if len(golden.Series) != 12 {
		t.Fatalf("%d series, want 12", len(golden.Series))
	}
	for _, g := range golden.Series {
		path := filepath.Join(root, filepath.FromSlash(g.File))
		digest := sha256.New()
		h, s, err := ReadSeries(path, digest, 0)
		if err != nil {
			t.Error(err)
			continue
		}
		if got := [4]int{s.NX, s.NY, s.NZ, s.NT}; got != g.Shape || h.Datatype.String() != g.Type {
			t.Errorf("%s: %v of %v, want %v of %s", g.File, got, h.Datatype, g.Shape, g.Type)
			continue
		}
		sameAffine(t, g.File, h.Affine(), g.Affine, 0)
		if h.Pixdim[4] != g.Pixdim4 {
			t.Errorf("%s: pixdim[4] %v, want %v", g.File, h.Pixdim[4], g.Pixdim4)
		}
		// Voxels are integers: these sums are exact in any order.
		var sum, squares, last float64
		for _, v := range s.Data {
			sum += float64(v)
			squares += float64(float64(v) * float64(v))
		}
		for _, v := range s.Volume(s.NT - 1) {
			last += float64(v)
		}
		if sum != g.Sum || squares != g.Sum_squares || last != g.Last_volume_sum {
			t.Errorf("%s: sums %v, %v, %v; want %v, %v, %v", g.File, sum, squares, last, g.Sum, g.Sum_squares, g.Last_volume_sum)
		}
		m := g.Max_at
		if v := s.Data[m[0]+s.NX*(m[1]+s.NY*(m[2]+s.NZ*m[3]))]; v != g.Max {
			t.Errorf("%s: voxel %v is %v, want %v", g.File, m, v, g.Max)
		}
		if want := sha256.Sum256(wholeFile(t, path)); !bytes.Equal(digest.Sum(nil), want[:]) {
			t.Errorf("%s: the digest through tap is not the file's", g.File)
		}
	}
}

// stored lists the Go types behind the voxel types, for an oracle that decodes
// with binary.Read and reflection.
var stored = map[Datatype]reflect.Type{
	Uint8: reflect.TypeFor[uint8](), Int8: reflect.TypeFor[int8](), Uint16: reflect.TypeFor[uint16](), Int16: reflect.TypeFor[int16](),
	Uint32: reflect.TypeFor[uint32](), Int32: reflect.TypeFor[int32](), Uint64: reflect.TypeFor[uint64](), Int64: reflect.TypeFor[int64](),
	Float32: reflect.TypeFor[float32](), Float64: reflect.TypeFor[float64](),
}

var allTypes = []Datatype{Uint8, Int8, Uint16, Int16, Uint32, Int32, Uint64, Int64, Float32, Float64}

// oracle decodes voxels with the standard library; slope is used as given.
func oracle(data []byte, dt Datatype, order binary.ByteOrder, slope, inter float64, scaled bool) []float32 {
	v := reflect.New(reflect.SliceOf(stored[dt]))
	v.Elem().Set(reflect.MakeSlice(reflect.SliceOf(stored[dt]), len(data)/dt.Bytes(), len(data)/dt.Bytes()))
	if err := binary.Read(bytes.NewReader(data), order, v.Interface()); err != nil {
		panic(err)
	}
	out := make([]float32, v.Elem().Len())
	for i := range out {
		x := v.Elem().Index(i).Convert(reflect.TypeFor[float64]()).Float()
		if scaled {
			x = float64(slope*x) + inter
		}
		out[i] = float32(x)
	}
	return out
}

// Any sound file of any kind gives the voxels that the standard library decodes,
// or says which is not finite.
func TestReadProperty(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		im := sample(rapid.IntRange(1, 2).Draw(t, "version"), rapid.SampledFrom(bothOrders).Draw(t, "order"))
		dt := rapid.SampledFrom(allTypes).Draw(t, "type")
		size := rapid.SampledFrom([]int{1, 2, 3, 5, 7, 8, 13})
		nx, ny, nz, nt := size.Draw(t, "nx"), size.Draw(t, "ny"), size.Draw(t, "nz"), rapid.IntRange(1, 4).Draw(t, "nt")
		dims := []float64{4, float64(nx), float64(ny), float64(nz), float64(nt), 1, 1, 1}
		if nt == 1 && rapid.Bool().Draw(t, "3-D") {
			dims[0], dims[4] = 3, 0
		} else if rapid.Bool().Draw(t, "more dimensions") {
			dims[0] = 7
		}
		im.set("dim", dims...).set("datatype", float64(dt)).set("bitpix", float64(8*dt.Bytes()))
		// Both exact in float32, so that NIfTI-1 holds them.
		slope := rapid.SampledFrom([]float64{0, 1, math.NaN(), math.Inf(1), 0.5, -3, 0.1171875}).Draw(t, "slope")
		inter := rapid.SampledFrom([]float64{0, -1024.5, 7}).Draw(t, "inter")
		im.set("scl_slope", slope).set("scl_inter", inter)
		im.gap = make([]byte, rapid.SampledFrom([]int{0, 1, 16, 4000}).Draw(t, "gap"))
		n := nx * ny * nz * nt * dt.Bytes()
		im.data = make([]byte, n)
		seed := rapid.Uint64().Draw(t, "seed")
		for i := range im.data {
			seed = seed*6364136223846793005 + 1442695040888963407
			im.data[i] = byte(seed >> 56)
		}
		scaled := slope != 0 && !math.IsNaN(slope) && !math.IsInf(slope, 0)
		want := oracle(im.data, dt, im.order, slope, inter, scaled)
		name, b := "a.nii", im.bytes()
		switch rapid.IntRange(0, 2).Draw(t, "file") {
		case 1:
			name, b = "a.nii.gz", zip(b)
		case 2:
			cut := rapid.IntRange(0, len(b)).Draw(t, "cut")
			name, b = "a.nii.gz", slicesConcat(zip(b[:cut]), zip(nil), zip(b[cut:]))
		}
		var tap bytes.Buffer
		r, err := openMemory(name, b, &tap)
		if err != nil {
			t.Fatal(err)
		}
		got, err := readAll(r)
		bad := slices.IndexFunc(want, func(v float32) bool { return v-v != 0 })
		if bad >= 0 {
			var e *Error
			field := fmt.Sprintf("voxel (%d,%d,%d), volume %d", bad%nx, bad/nx%ny, bad/nx/ny%nz, bad/nx/ny/nz)
			if !errors.As(err, &e) || e.Kind != KindValues || e.Field != field {
				t.Fatalf("%v, want a complaint about %s, which is %v", err, field, want[bad])
			}
			return
		}
		if err != nil {
			t.Fatal(err)
		}
		if i := sameFloats(got, want); i >= 0 {
			t.Fatalf("%v: voxel %d of %d/%d", dt, i, len(got), len(want))
		}
		if !bytes.Equal(tap.Bytes(), b) {
			t.Fatal("tap saw other bytes than the file has")
		}
	})
}

// Volumes larger than the chunk that is decoded at a time.
func TestReadAcrossChunks(t *testing.T) {
	for _, dt := range allTypes {
		im := sample(1, binary.BigEndian)
		nx, ny := 257, 1+2*chunkBytes/257/dt.Bytes()
		im.set("dim", 4, float64(nx), float64(ny), 1, 2).set("datatype", float64(dt)).set("bitpix", float64(8*dt.Bytes()))
		im.data = make([]byte, nx*ny*2*dt.Bytes())
		for i := range im.data {
			im.data[i] = byte(i % 61) // no exponent of a float is all ones
		}
		r, err := openMemory("a.nii", im.bytes(), nil)
		if err != nil {
			t.Fatal(err)
		}
		got, err := readAll(r)
		if err != nil {
			t.Fatal(err)
		}
		if i := sameFloats(got, oracle(im.data, dt, im.order, 1, 0, false)); i >= 0 {
			t.Errorf("%v: voxel %d differs", dt, i)
		}
	}
}

// nifti1.h: a vox_offset below the least possible means the least possible.
func TestSmallVoxOffset(t *testing.T) {
	for version, least := range map[int]int64{1: 352, 2: 544} {
		for _, off := range []float64{0, 10, float64(least) - 1} {
			r, err := openMemory("a.nii", sample(version, binary.LittleEndian).set("vox_offset", off).bytes(), nil)
			if err != nil {
				t.Fatal(err)
			}
			if got := r.Header().VoxOffset; got != least {
				t.Errorf("NIfTI-%d: vox_offset %v read as %d", version, off, got)
			}
			if _, err := readAll(r); err != nil {
				t.Error(err)
			}
		}
	}
}

// A pair may be named by either half, and either half may be compressed.
func TestPairNames(t *testing.T) {
	for _, c := range []struct{ hdr, img, open string }{
		{"a.hdr", "a.img", "a.hdr"}, {"a.hdr", "a.img", "a.img"}, {"a.hdr.gz", "a.img.gz", "a.hdr.gz"}, {"a.hdr.gz", "a.img.gz", "a.img.gz"},
		{"a.hdr", "a.img.gz", "a.hdr"}, {"a.hdr", "a.img.gz", "a.img.gz"}, {"a.hdr.gz", "a.img", "a.img"},
	} {
		for _, tail := range []string{"", "\x00\x00\x00\x00", "\x01\x00\x00\x00\x10\x00\x00\x00\x06\x00\x00\x00comment!"} {
			im := sample(1, binary.LittleEndian)
			im.pair = true
			im.set("vox_offset", 16)
			dir := t.TempDir()
			hdr, img := append(im.header(), tail...), append(make([]byte, 16), im.data...)
			for name, b := range map[string][]byte{c.hdr: hdr, c.img: img} {
				if strings.HasSuffix(name, ".gz") {
					b = zip(b)
				}
				if err := os.WriteFile(filepath.Join(dir, name), b, 0o666); err != nil {
					t.Fatal(err)
				}
			}
			var tap bytes.Buffer
			_, s, err := ReadSeries(filepath.Join(dir, c.open), &tap, 0)
			if err != nil {
				t.Errorf("%v: %v", c, err)
				continue
			}
			if i := sameFloats(s.Data, oracle(im.data, Int16, im.order, 1, 0, false)); i >= 0 {
				t.Errorf("%v: voxel %d differs", c, i)
			}
			if !bytes.Equal(tap.Bytes(), wholeFile(t, filepath.Join(dir, c.open))) {
				t.Errorf("%v: tap saw other bytes", c)
			}
		}
	}
}

// Where both a plain and a compressed partner are there, the one that is stored
// as the half that was named belongs to it.
func TestPairPartner(t *testing.T) {
	im := sample(1, binary.LittleEndian)
	im.pair = true
	other := bytes.Clone(im.data)
	other[0]++
	dir := t.TempDir()
	for name, b := range map[string][]byte{"a.hdr": im.header(), "a.img": im.data, "a.hdr.gz": zip(im.header()), "a.img.gz": zip(other)} {
		if err := os.WriteFile(filepath.Join(dir, name), b, 0o666); err != nil {
			t.Fatal(err)
		}
	}
	for name, want := range map[string][]byte{"a.hdr": im.data, "a.hdr.gz": other} {
		_, s, err := ReadSeries(filepath.Join(dir, name), nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		if sameFloats(s.Data, oracle(want, Int16, im.order, 1, 0, false)) >= 0 {
			t.Errorf("%s was read with the partner of the other", name)
		}
	}
}

func TestReadSeriesSkip(t *testing.T) {
	b := sample(1, binary.LittleEndian).bytes()
	path := writeFile(t, "a.nii", b)
	_, whole, err := ReadSeries(path, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	var tap bytes.Buffer
	h, s, err := ReadSeries(path, &tap, 1)
	if err != nil {
		t.Fatal(err)
	}
	if h.Dim[4] != 2 || s.NT != 1 || sameFloats(s.Data, whole.Volume(1)) >= 0 || !bytes.Equal(tap.Bytes(), b) {
		t.Errorf("after one volume left out: %d volumes, %d bytes through tap", s.NT, tap.Len())
	}
	if _, _, err := ReadSeries(path, nil, 2); asError(t, err).Kind != KindSize || asError(t, err).Field != "dim[4]" {
		t.Error(err)
	}
}

// A failure of the file system is no complaint about the file.
func TestFileSystemErrors(t *testing.T) {
	dir := t.TempDir()
	link := filepath.Join(dir, "link.nii.gz")
	if err := os.Symlink(filepath.Join(dir, "not", "fetched"), link); err != nil {
		t.Fatal(err)
	}
	im := sample(1, binary.LittleEndian)
	im.pair = true
	lonely := writeFile(t, "lonely.hdr", im.header())
	for _, path := range []string{filepath.Join(dir, "none.nii"), filepath.Join(dir, "none.nii.gz"), filepath.Join(dir, "none.img"), link, lonely} {
		for name, err := range map[string]error{
			"ReadHeader": func() error { _, err := ReadHeader(path); return err }(),
			"Open":       func() error { _, err := Open(path, nil); return err }(),
			"ReadSeries": func() error { _, _, err := ReadSeries(path, nil, 0); return err }(),
		} {
			var e *Error
			if !errors.Is(err, fs.ErrNotExist) || errors.As(err, &e) {
				t.Errorf("%s %s: %v, want a wrapped fs.ErrNotExist", name, path, err)
			}
		}
	}
}

var errDisk = errors.New("the disk is gone")

// breaking fails after n bytes.
type breaking struct {
	memory
	n int
}

func (b *breaking) Read(p []byte) (int, error) {
	if b.n == 0 {
		return 0, errDisk
	}
	n, err := b.memory.Read(p[:min(len(p), b.n)])
	b.n -= n
	return n, err
}

type full struct{ n int }

func (f *full) Write(p []byte) (int, error) {
	if f.n -= len(p); f.n < 0 {
		return 0, errDisk
	}
	return len(p), nil
}

// Wherever reading breaks off, or tap does, the cause comes through and is not
// taken for damage to the file.
func TestReadingBreaksOff(t *testing.T) {
	plain := sample(1, binary.LittleEndian).bytes()
	for name, b := range map[string][]byte{"a.nii": plain, "a.nii.gz": zip(plain), "b.nii.gz": slicesConcat(zip(plain[:400]), zip(plain[400:]))} {
		for n := range len(b) {
			for _, s := range []*stream{
				newStream(name, &breaking{memory{bytes.NewReader(b)}, n}, int64(len(b)), nil, 16),
				newStream(name, memory{bytes.NewReader(b)}, int64(len(b)), &full{n}, 16),
			} {
				r, err := newReader(s, nil)
				if err == nil {
					_, err = readAll(r)
				}
				var e *Error
				if !errors.Is(err, errDisk) || errors.As(err, &e) {
					t.Fatalf("%s, after %d of %d bytes: %v", name, n, len(b), err)
				}
			}
		}
	}
}

// A reader that met an error gives it again.
func TestErrorsStay(t *testing.T) {
	b := sample(1, binary.LittleEndian).bytes()
	r, err := openMemory("a.nii.gz", zip(b[:len(b)-1]), nil)
	if err != nil {
		t.Fatal(err)
	}
	_, err = readAll(r)
	if again := r.ReadVolume(make([]float32, 60)); err == nil || again != err {
		t.Errorf("%v, then %v", err, again)
	}
}

// A header may declare what it likes: refusing it takes no memory to speak of.
func TestRefusalAllocatesLittle(t *testing.T) {
	huge := sample(2, binary.LittleEndian).set("dim", 4, 1<<20, 1<<20, 1<<10, 1<<8)
	for name, b := range map[string][]byte{
		"a.nii": huge.bytes(), "a.nii.gz": zip(huge.bytes()),
		"b.nii":    sample(2, binary.LittleEndian).set("vox_offset", 1<<60).bytes(),
		"b.nii.gz": zip(sample(1, binary.LittleEndian).set("vox_offset", 1<<40).bytes()),
	} {
		path := writeFile(t, name, b)
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		_, _, err := ReadSeries(path, nil, 0)
		runtime.ReadMemStats(&after)
		if e := asError(t, err); e.Kind != KindSize {
			t.Errorf("%s: %v", name, e)
		}
		// Buffers of file and decoder, some 120 KB; 1 MiB leaves room for other goroutines.
		if n := after.TotalAlloc - before.TotalAlloc; n > 1<<20 {
			t.Errorf("%s: %d bytes allocated", name, n)
		}
	}
}
