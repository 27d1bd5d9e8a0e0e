package nifti

import (
	"bytes"
	"encoding/binary"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// malformed lists files that must be refused, each with the kind of complaint,
// the field that it names and, in text, a word of what was found. early: the
// header alone betrays it, so that ReadHeader refuses too.
var malformed = []struct {
	name, file  string
	make        func() []byte
	kind, field string
	text        string
	early       bool
}{
	// Not NIfTI.
	{"empty", "a.nii", func() []byte { return nil }, KindHeader, "sizeof_hdr", "0 bytes", true},
	{"three bytes", "a.nii", func() []byte { return []byte{92, 1, 0} }, KindHeader, "sizeof_hdr", "3 bytes", true},
	{"text", "a.nii", func() []byte { return []byte(strings.Repeat("bold and brave\n", 50)) }, KindHeader, "sizeof_hdr", "348", true},
	{"sizeof_hdr", "a.nii", le1(set("sizeof_hdr", 347)), KindHeader, "sizeof_hdr", "found 347", true},
	{"gzip under a plain name", "a.nii", func() []byte { return zip(le1(nil)()) }, KindHeader, "sizeof_hdr", "gzip", true},
	{"NIfTI-1 header cut off", "a.nii", cut(le1(nil), 347), KindHeader, "header", "347 bytes", true},
	{"NIfTI-2 header cut off", "a.nii", cut(le2(nil), 400), KindHeader, "header", "400 bytes", true},
	{"no magic", "a.nii", le1(func(im *image) { im.magic = "\x00\x00\x00\x00" }), KindHeader, "magic", "ANALYZE", true},
	{"magic of a pair", "a.nii", le1(func(im *image) { im.magic = "ni1\x00" }), KindHeader, "magic", "renamed", true},
	{"magic of the other version", "a.nii", le1(func(im *image) { im.magic = "n+2\x00" }), KindHeader, "magic", "n+2", true},
	{"magic after a text transfer", "a.nii", le2(func(im *image) { im.magic = "n+2\x00\n\x1a\n\x00" }), KindHeader, "magic", "as text", true},
	{"one-file magic in a header file", "a.hdr", le1(nil), KindHeader, "magic", "n+1", true},

	// Dimensions.
	{"dim[0] of zero", "a.nii", le1(dim(0, 0)), KindHeader, "dim[0]", "found 0", true},
	{"dim[0] of eight", "a.nii", le1(dim(0, 8)), KindHeader, "dim[0]", "found 8", true},
	{"dim[0] negative", "a.nii", le1(dim(0, -4)), KindHeader, "dim[0]", "found -4", true},
	{"two dimensions", "a.nii", le1(dim(0, 2)), KindSize, "dim[0]", "2 dimensions", true},
	{"dim[1] of zero", "a.nii", le1(dim(1, 0)), KindSize, "dim[1]", "found 0", true},
	{"dim[3] negative", "a.nii", be1(dim(3, -3)), KindSize, "dim[3]", "found -3", true},
	{"no volume", "a.nii", le1(dim(4, 0)), KindSize, "dim[4]", "found 0", true},
	{"dim[4] negative, NIfTI-2", "a.nii", be2(dim(4, -1)), KindSize, "dim[4]", "found -1", true},
	{"a fifth dimension", "a.nii", le1(set("dim", 5, 5, 4, 3, 1, 2, 1, 1)), KindSize, "dim[5]", "found 2", true},
	{"a product beyond 63 bits", "a.nii", le2(set("dim", 4, 1<<40, 1<<40, 1<<40, 1<<40, 1, 1, 1)), KindSize, "dim", "below 2^63", true},
	{"a product that wraps to nothing", "a.nii", le2(set("dim", 4, 1<<32, 1<<32, 1, 1, 1, 1, 1)), KindSize, "dim", "below 2^63", true},
	{"more volumes than bytes", "a.nii", le1(dim(4, 3)), KindSize, "voxels", "cut off", true},
	{"fewer volumes than bytes", "a.nii", le1(dim(4, 1)), KindSize, "voxels", "120 bytes after the last voxel", true},
	{"declared far beyond what deflate can hold", "a.nii.gz", gz(le2(set("dim", 4, 1<<12, 1<<12, 1<<12, 1<<6, 1, 1, 1))), KindSize, "voxels", "compressed bytes", true},

	// Voxel types.
	{"unknown type", "a.nii", le1(set("datatype", 0)), KindDatatype, "datatype", "unknown (0)", true},
	{"complex", "a.nii", le1(set("datatype", 32), set("bitpix", 64)), KindDatatype, "datatype", "complex64 (32)", true},
	{"rgb", "a.nii", le1(set("datatype", 128), set("bitpix", 24)), KindDatatype, "datatype", "rgb24 (128)", true},
	{"128 bits", "a.nii", be2(set("datatype", 1536), set("bitpix", 128)), KindDatatype, "datatype", "float128", true},
	{"a type nobody has", "a.nii", le1(set("datatype", 5)), KindDatatype, "datatype", "(5)", true},
	{"bitpix against datatype", "a.nii", le1(set("bitpix", 8)), KindDatatype, "bitpix", "expected 16 for int16", true},

	// Offset and scaling.
	{"vox_offset negative", "a.nii", le1(set("vox_offset", -352)), KindHeader, "vox_offset", "-352", true},
	{"vox_offset a fraction", "a.nii", le1(set("vox_offset", 352.5)), KindHeader, "vox_offset", "352.5", true},
	{"vox_offset not a number", "a.nii", le1(set("vox_offset", math.NaN())), KindHeader, "vox_offset", "NaN", true},
	{"vox_offset infinite", "a.nii", be1(set("vox_offset", math.Inf(1))), KindHeader, "vox_offset", "+Inf", true},
	{"vox_offset beyond every file", "a.nii", le1(set("vox_offset", 1e30)), KindHeader, "vox_offset", "1", true},
	{"vox_offset negative, NIfTI-2", "a.nii", le2(set("vox_offset", -1)), KindHeader, "vox_offset", "-1", true},
	{"vox_offset beyond the file", "a.nii", le1(set("vox_offset", 4096)), KindSize, "voxels", "cut off", true},
	{"vox_offset of bytes too small", "a.nii", le1(set("vox_offset", 368)), KindSize, "voxels", "cut off", true},
	{"scl_inter not finite", "a.nii", le1(set("scl_slope", 2), set("scl_inter", math.NaN())), KindHeader, "scl_inter", "NaN", true},
	{"scl_inter infinite", "a.nii", be2(set("scl_slope", 1), set("scl_inter", math.Inf(-1))), KindHeader, "scl_inter", "-Inf", true},
	{"time step not a number", "a.nii", le1(set("pixdim", 1, 3, 3, 4, math.NaN())), KindHeader, "pixdim[4]", "NaN", true},

	// Place in space.
	{"sform of zeros", "a.nii", le1(set("srow_x", 0, 0, 0, 0), set("srow_y", 0, 0, 0, 0), set("srow_z", 0, 0, 0, 0)), KindAffine, "srow_x, srow_y, srow_z", "zero", true},
	{"sform with two equal axes", "a.nii", le1(set("srow_x", 1, 1, 0, 0), set("srow_y", 2, 2, 0, 0), set("srow_z", 3, 3, 1, 0)), KindAffine, "srow_x, srow_y, srow_z", "not singular", true},
	{"sform with axes in one plane, rounded", "a.nii", le1(set("srow_x", 1, 0.1, 1.1, 0), set("srow_y", 0.3, 1, 1.3, 0), set("srow_z", 0.7, 0.9, 1.6, 0)), KindAffine, "srow_x, srow_y, srow_z", "not singular", true},
	{"sform not finite", "a.nii", be1(set("srow_y", 0, 3, math.NaN(), 0)), KindAffine, "srow_x, srow_y, srow_z", "NaN in row 2, column 3", true},
	{"sform offset infinite", "a.nii", le1(set("srow_z", 0, 0, 4, math.Inf(1))), KindAffine, "srow_x, srow_y, srow_z", "+Inf in row 3, column 4", true},
	{"quaternion too long", "a.nii", le1(set("sform_code", 0), set("quatern_b", 0.5)), KindAffine, "quatern_b, quatern_c, quatern_d", "0.5, 1, 0", true},
	{"quaternion not a number", "a.nii", le1(set("sform_code", 0), set("quatern_b", math.NaN())), KindAffine, "quatern_b, quatern_c, quatern_d", "NaN", true},
	{"qfac not a number", "a.nii", le1(set("sform_code", 0), set("pixdim", math.NaN(), 3, 3, 4, 2)), KindAffine, "pixdim[0]", "NaN", true},
	{"qoffset infinite", "a.nii", le1(set("sform_code", 0), set("qoffset_y", math.Inf(-1))), KindAffine, "qoffset_y", "-Inf", true},
	{"voxel size of zero", "a.nii", le1(set("sform_code", 0), set("pixdim", 1, 3, 0, 4, 2)), KindAffine, "pixdim[2]", "found 0", true},
	{"voxel size negative, no codes", "a.nii", le1(set("sform_code", 0), set("qform_code", 0), set("pixdim", 1, 3, 3, -4, 2)), KindAffine, "pixdim[3]", "found -4", true},

	// Length of the file.
	{"one byte short", "a.nii", cut(le1(nil), -1), KindSize, "voxels", "cut off", true},
	{"header and nothing else", "a.nii", cut(le1(nil), 352), KindSize, "voxels", "352 bytes: it is cut off", true},
	{"one byte too many", "a.nii", more(le1(nil), "\x01"), KindSize, "voxels", "1 byte after the last voxel", true},
	{"zero padding", "a.nii", more(le1(nil), strings.Repeat("\x00", 512)), KindSize, "voxels", "512 zero bytes (padding) after the last voxel", true},
	{"voxels short, compressed", "a.nii.gz", gz(cut(le1(nil), -1)), KindSize, "voxels", "591 bytes: the image is cut off", false},
	{"no voxels, compressed", "a.nii.gz", gz(cut(le1(nil), 352)), KindSize, "voxels", "cut off", false},
	{"extension cut off, compressed", "a.nii.gz", gz(cut(le1(func(im *image) { im.gap = make([]byte, 160) }), 400)), KindSize, "voxels", "400 bytes", false},
	{"too many bytes, compressed", "a.nii.gz", gz(more(le2(nil), "ahoy")), KindSize, "voxels", "4 bytes after the last voxel", false},
	{"zero padding, compressed", "a.nii.gz", gz(more(le1(nil), "\x00\x00\x00")), KindSize, "voxels", "3 zero bytes (padding)", false},
	{"a bomb behind the voxels", "a.nii.gz", gz(more(le1(nil), strings.Repeat("\x00", 17<<20))), KindSize, "voxels", "16 MiB or more", false},

	// Compression.
	{"empty, compressed", "a.nii.gz", func() []byte { return nil }, KindCompressed, "gzip header", "an empty file", true},
	{"plain under a compressed name", "a.nii.gz", le1(nil), KindCompressed, "gzip header", "5c 01", true},
	{"one byte of gzip", "a.nii.gz", func() []byte { return []byte{0x1f} }, KindCompressed, "gzip header", "1f", true},
	{"gzip header cut off", "a.nii.gz", cut(gz(le1(nil)), 8), KindCompressed, "gzip stream", "cut off", true},
	{"another method than deflate", "a.nii.gz", poke(gz(le1(nil)), 2, 7), KindCompressed, "gzip header", "damaged", true},
	{"gzip stream cut in the header", "a.nii.gz", cut(gz(le1(nil)), 40), KindCompressed, "gzip stream", "cut off", true},
	{"gzip stream cut in the voxels", "a.nii.gz", cut(gz(le1(noise)), -60), KindCompressed, "gzip stream", "cut off", false},
	{"gzip checksum cut off", "a.nii.gz", cut(gz(le1(nil)), -3), KindCompressed, "gzip stream", "cut off", false},
	{"gzip checksum wrong", "a.nii.gz", poke(gz(le1(nil)), -8, 0xa5), KindCompressed, "gzip checksum", "differ", false},
	{"gzip length wrong", "a.nii.gz", poke(gz(le1(nil)), -1, 1), KindCompressed, "gzip checksum", "differ", false},
	{"a reserved block type", "a.nii.gz", poke(gz(le1(nil)), 10, 0x07), KindCompressed, "gzip data", "damaged", true},
	{"garbage after gzip", "a.nii.gz", more(gz(le1(nil)), "ahoy"), KindCompressed, "gzip stream", "4 bytes after its end", false},
	{"zeros after gzip", "a.nii.gz", more(gz(le1(nil)), strings.Repeat("\x00", 512)), KindCompressed, "gzip stream", "512 zero bytes (padding) after its end", false},
	{"half a member after gzip", "a.nii.gz", more(gz(le1(nil)), "\x1f\x8b\x08\x00"), KindCompressed, "gzip stream", "cut off", false},
	{"a second image after gzip", "a.nii.gz", func() []byte { b := gz(le1(nil))(); return append(b, b...) }, KindSize, "voxels", "592 bytes after the last voxel", false},

	// Voxels.
	{"NaN", "a.nii", le1(float(7, math.NaN())), KindValues, "voxel (2,1,0), volume 0", "NaN", false},
	{"infinity", "a.nii.gz", gz(be2(float(60+59, math.Inf(-1)))), KindValues, "voxel (4,3,2), volume 1", "-Inf", false},
	{"beyond float32", "a.nii", le1(double(60, 1e39)), KindValues, "voxel (0,0,0), volume 1", "+Inf", false},
	{"beyond float32 by scaling", "a.nii", le2(set("scl_slope", 1e300)), KindValues, "voxel (0,0,0), volume 0", "after scaling", false},
}

// ---- what the table is made of

type change = func(*image)

func build(version int, order binary.ByteOrder, changes []change) func() []byte {
	return func() []byte {
		im := sample(version, order)
		for _, c := range changes {
			if c != nil {
				c(im)
			}
		}
		return im.bytes()
	}
}

func le1(c ...change) func() []byte { return build(1, binary.LittleEndian, c) }
func be1(c ...change) func() []byte { return build(1, binary.BigEndian, c) }
func le2(c ...change) func() []byte { return build(2, binary.LittleEndian, c) }
func be2(c ...change) func() []byte { return build(2, binary.BigEndian, c) }

func set(name string, v ...float64) change { return func(im *image) { im.set(name, v...) } }
func dim(i int, v float64) change          { return func(im *image) { im.fields["dim"][i] = v } }

// noise makes voxels that do not compress.
func noise(im *image) {
	seed := uint64(1)
	for i := range im.data {
		seed = seed*6364136223846793005 + 1442695040888963407
		im.data[i] = byte(seed >> 56)
	}
}

// float and double turn the voxels into ones, but for one.
func float(at int, v float64) change {
	return func(im *image) {
		im.set("datatype", 16).set("bitpix", 32)
		im.data = make([]byte, 4*120)
		for i := range 120 {
			putNumber(im.data[4*i:], im.order, "f32", 1)
		}
		putNumber(im.data[4*at:], im.order, "f32", v)
	}
}

func double(at int, v float64) change {
	return func(im *image) {
		im.set("datatype", 64).set("bitpix", 64)
		im.data = make([]byte, 8*120)
		putNumber(im.data[8*at:], im.order, "f64", v)
	}
}

// cut keeps the first n bytes, or all but the last -n.
func cut(f func() []byte, n int) func() []byte {
	return func() []byte {
		b := f()
		if n < 0 {
			return b[:len(b)+n]
		}
		return b[:n]
	}
}

func more(f func() []byte, s string) func() []byte {
	return func() []byte { return append(f(), s...) }
}

// poke changes the byte at i, from the end if negative, to v, or to another
// value if it is v already.
func poke(f func() []byte, i int, v byte) func() []byte {
	return func() []byte {
		b, v := f(), v
		at := i
		if at < 0 {
			at += len(b)
		}
		if b[at] == v {
			v++
		}
		b[at] = v
		return b
	}
}

func gz(f func() []byte) func() []byte { return func() []byte { return zip(f()) } }

func TestMalformed(t *testing.T) {
	if len(malformed) < 40 {
		t.Fatalf("only %d cases", len(malformed))
	}
	for _, c := range malformed {
		t.Run(c.name, func(t *testing.T) {
			path := writeFile(t, c.file, c.make())
			if strings.HasSuffix(path, ".hdr") {
				im := sample(1, binary.LittleEndian)
				if err := os.WriteFile(strings.TrimSuffix(path, ".hdr")+".img", im.data, 0o666); err != nil {
					t.Fatal(err)
				}
			}
			h, s, err := ReadSeries(path, nil, 0)
			if err == nil {
				t.Fatal("accepted")
			}
			if h != nil || s != nil {
				t.Error("a header or series came with the error")
			}
			e := asError(t, err)
			if e.Kind != c.kind || e.Field != c.field || e.File != path || !strings.Contains(e.Error(), c.text) {
				t.Errorf("got %s\nwant kind %q, field %q, the file and %q", e, c.kind, c.field, c.text)
			}
			if e.Found == "" || e.Expected == "" || !strings.HasPrefix(e.Error(), e.Kind+": "+path) {
				t.Errorf("incomplete: %#v", e)
			}
			_, err = ReadHeader(path)
			if c.early {
				if asError(t, err).Kind != c.kind {
					t.Errorf("ReadHeader: %v", err)
				}
			} else if err != nil {
				t.Errorf("ReadHeader read past the header: %v", err)
			}
		})
	}
}

// The other decoder gives the same complaints, and the same voxels.
func TestOtherInflate(t *testing.T) {
	defer func(was bool) { otherInflate = was }(otherInflate)
	for _, c := range malformed {
		if !strings.HasSuffix(c.file, ".gz") {
			continue
		}
		path := writeFile(t, c.file, c.make())
		var said [2]*Error
		for i, other := range []bool{false, true} {
			otherInflate = other
			_, _, err := ReadSeries(path, nil, 0)
			said[i] = asError(t, err)
		}
		if a, b := said[0], said[1]; a.Kind != b.Kind || a.Field != b.Field || a.Found != b.Found || a.Expected != b.Expected {
			t.Errorf("%s: ours says %v\nthe other %v", c.name, a, b)
		}
	}
	path := writeFile(t, "a.nii.gz", slicesConcat(zip(le1(noise)()[:400]), zip(le1(noise)()[400:])))
	var got [2]*Series
	for i, other := range []bool{false, true} {
		otherInflate = other
		var err error
		if _, got[i], err = ReadSeries(path, nil, 0); err != nil {
			t.Fatal(err)
		}
	}
	if i := sameFloats(got[0].Data, got[1].Data); i >= 0 {
		t.Errorf("voxel %d differs", i)
	}
}

func TestMalformedPairs(t *testing.T) {
	sound := func() *image {
		im := sample(1, binary.LittleEndian)
		im.pair = true
		return im
	}
	h, d := sound().header(), sound().data
	for _, c := range []struct {
		name               string
		hdr, img           []byte
		kind, field, where string
	}{
		{"one-file magic", func() []byte { im := sound(); im.magic = "n+1\x00"; return im.header() }(), d, KindHeader, "magic", ".hdr"},
		{"half a flag", append(bytes.Clone(h), 0, 0), d, KindHeader, "extension", ".hdr"},
		{"bytes after an empty flag", append(bytes.Clone(h), 0, 0, 0, 0, 7), d, KindSize, "header", ".hdr"},
		{"voxels short", h, d[:len(d)-1], KindSize, "voxels", ".img"},
		{"voxels and more", h, append(bytes.Clone(d), 0), KindSize, "voxels", ".img"},
		{"vox_offset into nothing", sound().set("vox_offset", 8).header(), d, KindSize, "voxels", ".img"},
		{"header cut off", h[:300], d, KindHeader, "header", ".hdr"},
	} {
		path := writeFile(t, "a.hdr", c.hdr)
		if err := os.WriteFile(strings.TrimSuffix(path, ".hdr")+".img", c.img, 0o666); err != nil {
			t.Fatal(err)
		}
		for _, err := range []error{
			func() error { _, _, err := ReadSeries(path, nil, 0); return err }(),
			func() error { _, err := ReadHeader(path); return err }(),
		} {
			if err == nil {
				t.Errorf("%s: accepted", c.name)
				continue
			}
			if e := asError(t, err); e.Kind != c.kind || e.Field != c.field || filepath.Ext(e.File) != c.where {
				t.Errorf("%s: %v", c.name, e)
			}
		}
	}
}

func TestNotARegularFile(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "a.nii")
	if err := os.Mkdir(dir, 0o777); err != nil {
		t.Fatal(err)
	}
	_, err := Open(dir, nil)
	if e := asError(t, err); e.Kind != KindHeader || e.Field != "file" || e.Found != "a folder" {
		t.Error(e)
	}
	_, err = Open(filepath.Join(dir, "a.dat"), nil)
	if e := asError(t, err); e.Kind != KindHeader || e.Field != "file name" {
		t.Error(e)
	}
}
