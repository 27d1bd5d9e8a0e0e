package nifti

// An encoder of headers and files that shares nothing with the package's own:
// it works from the table of offsets of the standard.

import (
	"bytes"
	"compress/gzip"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"maps"
	"math"
	"os"
	"path/filepath"
	"testing"
)

// fieldTable is the table of offsets of nifti1.h and nifti2.h, read off the
// comments beside the struct members ("/* 40 */") and, for NIfTI-2, the offset
// column of nifti2.h.
var fieldTable = []struct {
	name  string
	off1  int
	type1 string
	off2  int
	type2 string
	n     int
}{
	{"sizeof_hdr", 0, "i32", 0, "i32", 1},
	{"dim_info", 39, "u8", 524, "u8", 1},
	{"dim", 40, "i16", 16, "i64", 8},
	{"intent_p1", 56, "f32", 80, "f64", 1},
	{"intent_p2", 60, "f32", 88, "f64", 1},
	{"intent_p3", 64, "f32", 96, "f64", 1},
	{"intent_code", 68, "i16", 504, "i32", 1},
	{"datatype", 70, "i16", 12, "i16", 1},
	{"bitpix", 72, "i16", 14, "i16", 1},
	{"slice_start", 74, "i16", 224, "i64", 1},
	{"pixdim", 76, "f32", 104, "f64", 8},
	{"vox_offset", 108, "f32", 168, "i64", 1},
	{"scl_slope", 112, "f32", 176, "f64", 1},
	{"scl_inter", 116, "f32", 184, "f64", 1},
	{"slice_end", 120, "i16", 232, "i64", 1},
	{"slice_code", 122, "u8", 496, "i32", 1},
	{"xyzt_units", 123, "u8", 500, "i32", 1},
	{"slice_duration", 132, "f32", 208, "f64", 1},
	{"toffset", 136, "f32", 216, "f64", 1},
	{"qform_code", 252, "i16", 344, "i32", 1},
	{"sform_code", 254, "i16", 348, "i32", 1},
	{"quatern_b", 256, "f32", 352, "f64", 1},
	{"quatern_c", 260, "f32", 360, "f64", 1},
	{"quatern_d", 264, "f32", 368, "f64", 1},
	{"qoffset_x", 268, "f32", 376, "f64", 1},
	{"qoffset_y", 272, "f32", 384, "f64", 1},
	{"qoffset_z", 276, "f32", 392, "f64", 1},
	{"srow_x", 280, "f32", 400, "f64", 4},
	{"srow_y", 296, "f32", 432, "f64", 4},
	{"srow_z", 312, "f32", 464, "f64", 4},
}

var typeBytes = map[string]int{"u8": 1, "i16": 2, "i32": 4, "i64": 8, "f32": 4, "f64": 8}

func putNumber(b []byte, order binary.ByteOrder, typ string, v float64) {
	switch typ {
	case "u8":
		b[0] = byte(int(v))
	case "i16":
		order.PutUint16(b, uint16(int16(v)))
	case "i32":
		order.PutUint32(b, uint32(int32(v)))
	case "i64":
		order.PutUint64(b, uint64(int64(v)))
	case "f32":
		order.PutUint32(b, math.Float32bits(float32(v)))
	case "f64":
		order.PutUint64(b, math.Float64bits(v))
	}
}

// values of one field each, by name.
type values map[string][]float64

// image is what a test file is made of.
type image struct {
	version int
	order   binary.ByteOrder
	fields  values
	magic   string // "" for the right one
	flag    []byte // nil for four zeros
	gap     []byte // between flag and voxels
	data    []byte
	pair    bool
}

// sample is a sound image: int16, 5x4x3, two volumes, no scaling.
func sample(version int, order binary.ByteOrder) *image {
	f := values{
		"dim": {4, 5, 4, 3, 2, 1, 1, 1}, "pixdim": {1, 3, 3, 4, 2, 0, 0, 0},
		"datatype": {4}, "bitpix": {16}, "xyzt_units": {10}, "scl_slope": {1},
		"sform_code": {1}, "srow_x": {-3, 0, 0, 10}, "srow_y": {0, 3, 0, -20}, "srow_z": {0, 0, 4, 5},
		"qform_code": {1}, "quatern_c": {1}, "qoffset_x": {10}, "qoffset_y": {-20}, "qoffset_z": {5},
	}
	im := &image{version: version, order: order, fields: f}
	im.data = make([]byte, 5*4*3*2*2)
	for i := range len(im.data) / 2 {
		order.PutUint16(im.data[2*i:], uint16(int16(37*i-1000)))
	}
	return im
}

func (im *image) set(name string, v ...float64) *image {
	im.fields[name] = v
	return im
}

func (im *image) header() []byte {
	size := 348
	if im.version == 2 {
		size = 540
	}
	f := maps.Clone(im.fields)
	if _, ok := f["sizeof_hdr"]; !ok {
		f["sizeof_hdr"] = []float64{float64(size)}
	}
	if _, ok := f["vox_offset"]; !ok && !im.pair {
		f["vox_offset"] = []float64{float64(size + 4 + len(im.gap))}
	}
	b := make([]byte, size)
	for _, t := range fieldTable {
		off, typ := t.off1, t.type1
		if im.version == 2 {
			off, typ = t.off2, t.type2
		}
		for i, v := range f[t.name] {
			putNumber(b[off+i*typeBytes[typ]:], im.order, typ, v)
		}
	}
	magic := im.magic
	if magic == "" {
		magic = map[bool]string{false: "n+", true: "ni"}[im.pair] + fmt.Sprint(im.version) + "\x00"
		if im.version == 2 {
			magic += "\r\n\x1a\n"
		}
	}
	if im.version == 1 {
		copy(b[344:348], magic)
	} else {
		copy(b[4:12], magic)
	}
	return b
}

// bytes is the whole one-file image.
func (im *image) bytes() []byte {
	flag := im.flag
	if flag == nil {
		flag = make([]byte, 4)
	}
	return slicesConcat(im.header(), flag, im.gap, im.data)
}

func slicesConcat(parts ...[]byte) []byte { return bytes.Join(parts, nil) }

// zip compresses with the standard library, at its best.
func zip(b []byte) []byte {
	var out bytes.Buffer
	w, _ := gzip.NewWriterLevel(&out, gzip.BestCompression)
	w.Write(b)
	w.Close()
	return out.Bytes()
}

type memory struct{ *bytes.Reader }

func (memory) Close() error { return nil }

// openMemory reads an image out of memory.
func openMemory(name string, b []byte, tap io.Writer) (*Reader, error) {
	return newReader(newStream(name, memory{bytes.NewReader(b)}, int64(len(b)), tap, fileBuffer), nil)
}

// readAll reads to io.EOF.
func readAll(r *Reader) ([]float32, error) {
	n := r.h.voxels()
	var all []float32
	for {
		v := make([]float32, n)
		switch err := r.ReadVolume(v); err {
		case nil:
			all = append(all, v...)
		case io.EOF:
			return all, nil
		default:
			return nil, err
		}
	}
}

func writeFile(t testing.TB, name string, b []byte) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, b, 0o666); err != nil {
		t.Fatal(err)
	}
	return path
}

func loadJSON(t testing.TB, name string, v any) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(b, v); err != nil {
		t.Fatal(err)
	}
}

// asError returns err as an *Error, or fails.
func asError(t testing.TB, err error) *Error {
	t.Helper()
	var e *Error
	if !errors.As(err, &e) {
		t.Fatalf("error %v (%T), want an *Error", err, err)
	}
	return e
}

func orderOf(name string) binary.ByteOrder {
	if name == "big" {
		return binary.BigEndian
	}
	return binary.LittleEndian
}

func sameFloats(a, b []float32) int {
	if len(a) != len(b) {
		return min(len(a), len(b))
	}
	for i := range a {
		if math.Float32bits(a[i]) != math.Float32bits(b[i]) {
			return i
		}
	}
	return -1
}
