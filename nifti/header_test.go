package nifti

import (
	"encoding/base64"
	"encoding/binary"
	"fmt"
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
)

var bothOrders = []binary.ByteOrder{binary.LittleEndian, binary.BigEndian}

// fieldsOf lists the fields of a decoded header by their names in the standard.
func fieldsOf(r *rawHeader) values {
	f := values{
		"sizeof_hdr": {float64(r.sizeofHdr)}, "dim_info": {float64(r.DimInfo)}, "intent_code": {float64(r.IntentCode)},
		"intent_p1": {r.IntentP[0]}, "intent_p2": {r.IntentP[1]}, "intent_p3": {r.IntentP[2]},
		"datatype": {float64(r.Datatype)}, "bitpix": {float64(r.bitpix)}, "slice_start": {float64(r.SliceStart)},
		"pixdim": r.Pixdim[:], "vox_offset": {r.voxOffset}, "scl_slope": {r.SclSlope}, "scl_inter": {r.SclInter},
		"slice_end": {float64(r.SliceEnd)}, "slice_code": {float64(r.SliceCode)}, "xyzt_units": {float64(r.XYZTUnits)},
		"slice_duration": {r.SliceDuration}, "toffset": {r.Toffset}, "qform_code": {float64(r.QformCode)}, "sform_code": {float64(r.SformCode)},
		"quatern_b": {r.Quatern[0]}, "quatern_c": {r.Quatern[1]}, "quatern_d": {r.Quatern[2]},
		"qoffset_x": {r.Qoffset[0]}, "qoffset_y": {r.Qoffset[1]}, "qoffset_z": {r.Qoffset[2]},
		"srow_x": r.Srow[0][:], "srow_y": r.Srow[1][:], "srow_z": r.Srow[2][:],
	}
	for _, d := range r.Dim {
		f["dim"] = append(f["dim"], float64(d))
	}
	return f
}

// Each field alone, at its offset in the standard's table, is what the decoder
// finds under its name; nothing else moves. The encoder, little-endian, puts it
// back there.
func TestFieldOffsets(t *testing.T) {
	for version := 1; version <= 2; version++ {
		for _, order := range bothOrders {
			for _, row := range fieldTable {
				off, typ := row.off1, row.type1
				if version == 2 {
					off, typ = row.off2, row.type2
				}
				b := make([]byte, 540)
				want := fieldsOf(decodeHeader(b, version, order))
				for i := range row.n {
					putNumber(b[off+i*typeBytes[typ]:], order, typ, float64(i+3))
					want[row.name][i] = float64(i + 3)
				}
				r := decodeHeader(b, version, order)
				if d := cmp.Diff(want, fieldsOf(r)); d != "" {
					t.Errorf("NIfTI-%d, %v, %s at %d: -want +got\n%s", version, order, row.name, off, d)
				}
				// Back: set the same fields by way of the public header.
				r.bitpix, r.sizeofHdr = 0, 0
				back, err := encodeHeader(r.Header)
				if err != nil {
					t.Fatal(err)
				}
				switch row.name {
				case "sizeof_hdr", "bitpix": // follow from version and datatype
					continue
				case "vox_offset":
					if version == 1 { // moved into the public field by check only
						continue
					}
				}
				for i := range row.n {
					b := make([]byte, typeBytes[typ])
					putNumber(b, binary.LittleEndian, typ, float64(i+3))
					at := off + i*len(b)
					if string(back[at:at+len(b)]) != string(b) {
						t.Errorf("NIfTI-%d, %s[%d]: % x written at %d, want % x", version, row.name, i, back[at:at+len(b)], at, b)
					}
				}
			}
		}
	}
}

// Headers as nibabel 5.0 writes them (testdata/generate.py), every field with
// a number of its own.
func TestHeadersOfNibabel(t *testing.T) {
	var golden struct {
		Headers []struct {
			Version      int
			Order        string
			Base64       string
			Fields       values
			Sform, Qform [4][4]float64
		}
	}
	loadJSON(t, "headers.json", &golden)
	if len(golden.Headers) != 4 {
		t.Fatalf("%d headers, want 4", len(golden.Headers))
	}
	for _, g := range golden.Headers {
		t.Run(fmt.Sprintf("%d %s", g.Version, g.Order), func(t *testing.T) {
			b, err := base64.StdEncoding.DecodeString(g.Base64)
			if err != nil {
				t.Fatal(err)
			}
			version, order, ok := sniff(b)
			if !ok || version != g.Version || order != orderOf(g.Order) {
				t.Fatalf("taken for NIfTI-%d, %v", version, order)
			}
			got := fieldsOf(decodeHeader(b, version, order))
			delete(got, "sizeof_hdr")
			if d := cmp.Diff(g.Fields, got); d != "" {
				t.Errorf("-nibabel +got\n%s", d)
			}
			h, err := parseHeader("golden.nii", b, false)
			if err != nil {
				t.Fatal(err)
			}
			if h.BigEndian != (g.Order == "big") || h.SliceDim() != 3 {
				t.Errorf("BigEndian %v, slice axis %d", h.BigEndian, h.SliceDim())
			}
			if nx, ny, nz, nt := h.Size(); nx != 61 || ny != 62 || nz != 33 || nt != 241 {
				t.Errorf("size %d %d %d %d", nx, ny, nz, nt)
			}
			sameAffine(t, "sform", h.Affine(), g.Sform, 0)
			h.SformCode = 0
			// nibabel computes in float64 from the same fields, in another order
			// of operations: some units of 1e-16 times a number below 10.
			sameAffine(t, "qform", h.Affine(), g.Qform, 1e-13)
		})
	}
}

func sameAffine(t *testing.T, name string, got [16]float64, want [4][4]float64, tolerance float64) {
	t.Helper()
	for i, v := range got {
		if d := math.Abs(v - want[i/4][i%4]); !(d <= tolerance) {
			t.Errorf("%s: element %d,%d is %v, want %v", name, i/4, i%4, v, want[i/4][i%4])
		}
	}
}

// Affines of qforms, by the formula of nifti1.h in numpy float64 and by nibabel
// (testdata/generate.py; the cases of the standard's text among them).
func TestQuaternions(t *testing.T) {
	var golden struct {
		Cases []struct {
			Name                     string
			Quatern, Pixdim, Qoffset [3]float64
			Qfac                     float64
			Affine, Nibabel          [4][4]float64
		}
	}
	loadJSON(t, "quaternions.json", &golden)
	if len(golden.Cases) < 9 {
		t.Fatalf("%d cases", len(golden.Cases))
	}
	for _, g := range golden.Cases {
		h := Header{Version: 1, QformCode: 1, Quatern: g.Quatern, Qoffset: g.Qoffset}
		h.Pixdim = [8]float64{g.Qfac, g.Pixdim[0], g.Pixdim[1], g.Pixdim[2]}
		// Both are float64 sums of a few products below 10.
		sameAffine(t, g.Name, h.Affine(), g.Affine, 1e-13)
		// nibabel has a rule of its own near a = 0: it leaves b, c and d as long
		// as float32 made them, up to 1e-7 from one.
		sameAffine(t, g.Name+" (nibabel)", h.Affine(), g.Nibabel, 1e-6)
		if e := h.checkAffine(); e != nil {
			t.Errorf("%s: %v", g.Name, e)
		}
	}
}

// The rule for a near zero, nifti2_io.c nifti_quatern_to_dmat44: below 1e-7 for
// a squared, a is zero and b, c, d are of length one.
func TestQuaternionNearHalfTurn(t *testing.T) {
	for _, over := range []float64{-0.9e-7, 0, 1e-7, 1e-4} {
		n := math.Sqrt((1 + over) / 2)
		r := rotation(n, n, 0)
		want := [9]float64{0, 1, 0, 1, 0, 0, 0, 0, -1}
		for i := range r {
			if math.Abs(r[i]-want[i]) > 1e-15 { // a = 0 exactly: rounding alone
				t.Errorf("squares that sum to 1%+g: element %d is %v, want %v", over, i, r[i], want[i])
			}
		}
	}
	n := math.Sqrt((1 - 1.1e-7) / 2)
	if r := rotation(n, n, 0); math.Abs(r[2]) < 1e-4 {
		t.Errorf("a squared of 1.1e-7 is taken for zero: %v", r)
	}
}

func TestAffineMethods(t *testing.T) {
	h := Header{Version: 1, Pixdim: [8]float64{-1, 2, 3, 4}, Quatern: [3]float64{0, 1, 0}, Qoffset: [3]float64{7, 8, 9},
		Srow: [3][4]float64{{5, 0, 0, 1}, {0, 5, 0, 2}, {0, 0, 5, 3}}}
	if got, want := h.Affine(), [16]float64{2, 0, 0, 0, 0, 3, 0, 0, 0, 0, 4, 0, 0, 0, 0, 1}; got != want {
		t.Errorf("no code: %v, want the voxel sizes alone, %v", got, want)
	}
	h.QformCode = 1 // (0,1,0) with qfac -1: the usual left-handed axial grid
	if got, want := h.Affine(), [16]float64{-2, 0, 0, 7, 0, 3, 0, 8, 0, 0, 4, 9, 0, 0, 0, 1}; got != want {
		t.Errorf("qform: %v, want %v", got, want)
	}
	h.SformCode = 4
	if got, want := h.Affine(), [16]float64{5, 0, 0, 1, 0, 5, 0, 2, 0, 0, 5, 3, 0, 0, 0, 1}; got != want {
		t.Errorf("both: %v, want the sform, %v", got, want)
	}
}

// Units of nifti1.h: 8 s, 16 ms, 24 us; 32 Hz, 40 ppm and 48 rad/s are not
// times.
func TestTimeUnits(t *testing.T) {
	for _, c := range []struct {
		units int32
		sec   float64
		known bool
	}{{10, 2, true}, {8, 2, true}, {18, 0.002, true}, {26, 0.000002, true}, {2, 2, false}, {0, 2, false}, {34, 2, false}, {42, 2, false}, {50, 2, false}} {
		h := Header{Version: 1, Dim: [8]int64{4, 2, 2, 2, 9}, XYZTUnits: c.units}
		h.Pixdim[4] = 2
		if sec, known := h.SecondsPerVolume(); sec != c.sec || known != c.known {
			t.Errorf("units %d: %v s, known %v; want %v, %v", c.units, sec, known, c.sec, c.known)
		}
		// toffset is stored in the same unit: 2 s is as many units as make
		// a second, twice.
		d := h.Derived(9, false, Float32, true, 2)
		if got := d.Toffset * c.sec / 2; math.Abs(got-2) > 1e-12 {
			t.Errorf("units %d: toffset %v, which is %v s, want 2 s", c.units, d.Toffset, got)
		}
	}
	h := Header{Dim: [8]int64{3, 2, 2, 2}, XYZTUnits: 10}
	if _, known := h.SecondsPerVolume(); known {
		t.Error("a 3-D image knows a time from volume to volume")
	}
}

func TestDerived(t *testing.T) {
	h := &Header{Version: 1, BigEndian: true, Dim: [8]int64{4, 5, 4, 3, 2}, Pixdim: [8]float64{-1, float64(float32(3.3)), 3, 4, 2},
		Datatype: Int16, DimInfo: 57, SliceCode: 3, SliceStart: 1, SliceEnd: 2, SliceDuration: 0.5, SclSlope: 2, SclInter: 3, XYZTUnits: 18,
		IntentCode: 5, IntentP: [3]float64{1, 2, 3}, QformCode: 1, SformCode: 2, Quatern: [3]float64{0.1, 0.2, 0.3}, Qoffset: [3]float64{1, 2, 3},
		Srow: [3][4]float64{{1, 2, 3, 4}, {5, 6, 7, 8}, {9, 10, 11, 13}}, VoxOffset: 400}
	was := *h
	want := *h
	want.BigEndian, want.Datatype, want.SclSlope, want.SclInter, want.VoxOffset = false, Float32, 1, 0, 352
	want.Dim, want.Toffset = [8]int64{4, 5, 4, 3, 7, 1, 1, 1}, 1500
	if d := cmp.Diff(&want, h.Derived(7, false, Float32, false, 1.5)); d != "" {
		t.Errorf("4-D: -want +got\n%s", d)
	}
	want.SliceCode, want.SliceStart, want.SliceEnd, want.SliceDuration = 0, 0, 0, 0
	want.Dim, want.Pixdim[4] = [8]int64{3, 5, 4, 3, 1, 1, 1, 1}, 0
	if d := cmp.Diff(&want, h.Derived(1, true, Float32, true, 1.5)); d != "" {
		t.Errorf("3-D: -want +got\n%s", d)
	}
	if d := cmp.Diff(&was, h); d != "" {
		t.Errorf("the header itself changed\n%s", d)
	}
}

// nifti1.h, "DATA SCALING", and nibabel's reading of a slope that is not finite.
func TestScaling(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	for _, c := range []struct {
		slope, inter, s, i float64
		scaled             bool
	}{{0, 5, 1, 0, false}, {1, 0, 1, 0, false}, {nan, 5, 1, 0, false}, {inf, 5, 1, 0, false}, {-inf, nan, 1, 0, false}, {nan, nan, 1, 0, false},
		{0, nan, 1, 0, false}, {2, 0, 2, 0, true}, {1, 3, 1, 3, true}, {-0.5, 1, -0.5, 1, true}} {
		h := Header{SclSlope: c.slope, SclInter: c.inter}
		if s, i, scaled := h.Scaling(); s != c.s || i != c.i || scaled != c.scaled {
			t.Errorf("slope %v, inter %v: %v %v %v", c.slope, c.inter, s, i, scaled)
		}
	}
}

// What is set is what is read, in every unit (nifti1.h, NIFTI_UNITS_*), and nothing
// but pixdim[4] changes.
func TestSetSecondsPerVolume(t *testing.T) {
	for units, stored := range map[int32]float64{0: 2.5, 8: 2.5, 16: 2500, 24: 2.5e6, 2 | 16: 2500} {
		h := Header{XYZTUnits: units, SliceDuration: stored}
		h.Dim[0] = 4
		h.SetSecondsPerVolume(2.5)
		want := Header{XYZTUnits: units, SliceDuration: stored}
		want.Dim[0], want.Pixdim[4] = 4, stored
		if h != want {
			t.Errorf("units %d: stored %g, want %g", units, h.Pixdim[4], stored)
		}
		if sec, _ := h.SecondsPerVolume(); sec != 2.5 {
			t.Errorf("units %d: read back as %g s", units, sec)
		}
		if sec := h.SecondsPerSlice(); sec != 2.5 {
			t.Errorf("units %d: slices of %g s", units, sec)
		}
	}
}
