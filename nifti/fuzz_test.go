package nifti

import (
	"errors"
	"io"
	"runtime"
	"slices"
	"testing"
)

var kinds = []string{KindHeader, KindSize, KindDatatype, KindAffine, KindCompressed, KindValues}

func mustBeTyped(t *testing.T, err error) {
	t.Helper()
	var e *Error
	if !errors.As(err, &e) || !slices.Contains(kinds, e.Kind) || e.File == "" || e.Field == "" || e.Found == "" || e.Expected == "" {
		t.Fatalf("%#v is not a whole Error", err)
	}
}

// FuzzHeader: any bytes give a header inside the limits or an Error; a header that
// was accepted can be written and comes back.
func FuzzHeader(f *testing.F) {
	for _, order := range bothOrders {
		for version := 1; version <= 2; version++ {
			im := sample(version, order)
			f.Add(im.header(), false)
			im.pair = true
			f.Add(im.header(), true)
		}
	}
	for _, c := range malformed {
		b := c.make()
		f.Add(b[:min(len(b), headerBytes2)], false)
	}
	f.Fuzz(func(t *testing.T, b []byte, pair bool) {
		h, err := parseHeader("fuzz", b, pair)
		if err != nil {
			mustBeTyped(t, err)
			return
		}
		nx, ny, nz, nt := h.Size()
		if nx < 1 || ny < 1 || nz < 1 || nt < 1 || h.VoxOffset < 0 || h.dataBytes() < 1 || h.VoxOffset+h.dataBytes() < 1 {
			t.Fatalf("accepted %+v", h)
		}
		for _, v := range h.Affine() {
			if !finite(v) {
				t.Fatalf("affine %v of %+v", h.Affine(), h)
			}
		}
		d := h.Derived(nt, h.Dim[0] == 3, Float32, true, 0)
		out, err := encodeHeader(d)
		if err != nil {
			t.Fatalf("read but not written: %v", err)
		}
		back, err := parseHeader("fuzz", out[:len(out)-flagBytes], false)
		if err != nil {
			t.Fatalf("written but not read: %v", err)
		}
		if back.Affine() != h.Affine() {
			t.Fatalf("affine %v became %v", h.Affine(), back.Affine())
		}
	})
}

// FuzzReader: any file gives its volumes or an Error, with memory bounded by the file's
// size, and tap sees the whole of a file that is read to its end.
func FuzzReader(f *testing.F) {
	for _, order := range bothOrders {
		for version := 1; version <= 2; version++ {
			b := sample(version, order).bytes()
			f.Add(b, false)
			f.Add(zip(b), true)
			f.Add(slicesConcat(zip(b[:350]), zip(b[350:])), true)
		}
	}
	for _, c := range malformed {
		if b := c.make(); len(b) < 1<<12 {
			f.Add(b, c.file == "a.nii.gz")
		}
	}
	f.Fuzz(func(t *testing.T, b []byte, compressed bool) {
		name := "fuzz.nii"
		if compressed {
			name += ".gz"
		}
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		var tap countZeros
		r, err := openMemory(name, b, &tap)
		if err != nil {
			mustBeTyped(t, err)
		} else {
			var dst []float32
			if n := r.h.voxels(); n <= 1<<20 {
				dst = make([]float32, n)
			}
			for err == nil {
				err = r.volume(dst, nil)
			}
			switch {
			case err != io.EOF:
				mustBeTyped(t, err)
			case tap.n != int64(len(b)):
				t.Fatalf("tap saw %d of %d bytes", tap.n, len(b))
			}
		}
		runtime.ReadMemStats(&after)
		// Our buffers, 4 MiB for dst, and the decoder's own: nothing grows
		// with what the header declares. A gzip header may carry 64 KiB.
		if n := after.TotalAlloc - before.TotalAlloc; n > 8<<20+64*uint64(len(b)) {
			t.Fatalf("%d bytes allocated for a file of %d", n, len(b))
		}
	})
}
