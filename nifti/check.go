package nifti

// The limits of a header, checked before anything is allocated.

import (
	"encoding/binary"
	"fmt"
	"math"
	"strings"
)

// maxDeflate is the best ratio of the deflate format: a match of 258 bytes
// takes at least one bit for its length and one for its distance (RFC 1951,
// 3.2.5), so that a byte gives 8/2*258 = 1032 bytes at most.
const maxDeflate = 1032

// parseHeader reads and checks the header at the start of b, of which the
// file has no more than b if b is shorter than the longest header. pair says
// whether the file's name is that of a pair.
func parseHeader(file string, b []byte, pair bool) (*Header, error) {
	fail := func(kind, field, found, expected string) (*Header, error) {
		return nil, &Error{Kind: kind, File: file, Field: field, Found: found, Expected: expected}
	}
	if len(b) < 4 {
		return fail(KindHeader, "sizeof_hdr", fmt.Sprintf("a file of %d bytes", len(b)), "a header of 348 (NIfTI-1) or 540 bytes (NIfTI-2)")
	}
	version, order, ok := sniff(b)
	if !ok {
		found := fmt.Sprint(int32(binary.LittleEndian.Uint32(b)))
		if isGzip(b) {
			found = "a gzip stream under a name that does not end in .gz"
		}
		return fail(KindHeader, "sizeof_hdr", found, "348 (NIfTI-1) or 540 (NIfTI-2) in either byte order")
	}
	size := headerBytes1
	if version == 2 {
		size = headerBytes2
	}
	if len(b) < size {
		return fail(KindHeader, "header", fmt.Sprintf("%d bytes", len(b)), fmt.Sprintf("%d bytes of NIfTI-%d header", size, version))
	}
	r := decodeHeader(b[:size], version, order)
	if e := r.check(pair); e != nil {
		e.File = file
		return nil, e
	}
	return r.Header, nil
}

// check holds magic, bitpix and vox_offset against the standard, then the
// fields of the public header.
func (r *rawHeader) check(pair bool) *Error {
	one, two := magicOne1, magicPair1
	if r.Version == 2 {
		one, two = magicOne2, magicPair2
	}
	want, other, name := one, two, ".nii"
	if pair {
		want, other, name = two, one, ".hdr"
	}
	if r.magic != want {
		e := &Error{Kind: KindHeader, Field: "magic", Found: fmt.Sprintf("%q", r.magic), Expected: fmt.Sprintf("%q", want)}
		switch {
		case r.magic == other:
			e.Expected += " in a " + name + " file (the file was renamed?)"
		case strings.HasPrefix(r.magic, want[:4]) || strings.HasPrefix(r.magic, other[:4]):
			e.Expected += " (the file was transferred as text?)"
		case strings.Trim(r.magic, "\x00") == "":
			e.Expected += " (an ANALYZE 7.5 file?)"
		}
		return e
	}
	if n := r.Datatype.Bytes(); n > 0 && r.bitpix != int64(8*n) {
		return &Error{Kind: KindDatatype, Field: "bitpix", Found: fmt.Sprint(r.bitpix), Expected: fmt.Sprintf("%d for %v", 8*n, r.Datatype)}
	}
	// In NIfTI-2 voxOffset is a copy of an int64: only its sign and its size
	// matter here, and both survive the rounding.
	off := r.voxOffset
	if !finite(off) || off < 0 || off != math.Trunc(off) || off > math.MaxInt64/2 {
		return &Error{Kind: KindHeader, Field: "vox_offset", Found: fmt.Sprint(off), Expected: "a whole number of bytes, not negative"}
	}
	if r.Version == 1 {
		r.VoxOffset = int64(off)
	}
	if !pair {
		// nifti1.h, "vox_offset": less than 352 means 352; so for NIfTI-2 and 544.
		r.VoxOffset = max(r.VoxOffset, r.minOffset())
	}
	return r.Header.check()
}

// check holds the fields against what the package can read and write. The
// order is that of a person's questions: what is it, how big, of what, where.
func (h *Header) check() *Error {
	bad := func(kind, field string, found any, expected string) *Error {
		return &Error{Kind: kind, Field: field, Found: fmt.Sprint(found), Expected: expected}
	}
	if h.Version != 1 && h.Version != 2 {
		return bad(KindHeader, "version", h.Version, "1 or 2")
	}
	n := h.Dim[0]
	if n < 1 || n > 7 {
		return bad(KindHeader, "dim[0]", n, "1 to 7 dimensions")
	}
	if n < 3 {
		return bad(KindSize, "dim[0]", fmt.Sprintf("%d dimensions", n), "3 or 4")
	}
	for i := int64(1); i <= n; i++ {
		switch v := h.Dim[i]; {
		case v < 1:
			return bad(KindSize, fmt.Sprintf("dim[%d]", i), v, "1 or more")
		case i > 4 && v != 1:
			return bad(KindSize, fmt.Sprintf("dim[%d]", i), v, "1: at most four dimensions can be used")
		}
	}
	if h.Datatype.Bytes() == 0 {
		return bad(KindDatatype, "datatype", fmt.Sprintf("%v (%d)", h.Datatype, int16(h.Datatype)), "integers of 8 to 64 bits, float32 or float64")
	}
	// Everything later counts voxels as int and float32 samples in bytes.
	total, limit := int64(max(h.Datatype.Bytes(), 4)), int64(math.MaxInt)-h.VoxOffset
	for i := 1; i <= int(min(n, 4)); i++ {
		if h.Dim[i] > limit/total {
			return bad(KindSize, "dim", fmt.Sprint(h.Dim[1:1+min(n, 4)]), "a size in bytes below 2^63")
		}
		total *= h.Dim[i]
	}
	if s := h.SclSlope; s != 0 && finite(s) && !finite(h.SclInter) {
		return bad(KindHeader, "scl_inter", h.SclInter, fmt.Sprintf("a finite number beside scl_slope %v", s))
	}
	if n >= 4 && !finite(h.Pixdim[4]) {
		return bad(KindHeader, "pixdim[4]", h.Pixdim[4], "a finite time from volume to volume")
	}
	return h.checkAffine()
}

// checkSize holds the bytes that the header declares against those that the
// file can hold: exactly for a plain file, by the best ratio of deflate for a
// compressed one. tail is asked, where bytes are left over, what they are.
func (h *Header) checkSize(file string, fileBytes int64, compressed bool, tail func(from int64) string) error {
	want := h.VoxOffset + h.dataBytes()
	e := &Error{Kind: KindSize, File: file, Field: "voxels", Expected: h.sizeWords()}
	switch {
	case compressed && (want-1)/maxDeflate >= fileBytes:
		e.Found = fmt.Sprintf("%d compressed bytes, which cannot hold more than %d", fileBytes, fileBytes*maxDeflate)
	case compressed || fileBytes == want:
		return nil
	case fileBytes < want:
		e.Found = fmt.Sprintf("a file of %d bytes: it is cut off", fileBytes)
	default:
		e.Found = fmt.Sprintf("a file of %d bytes: %s after the last voxel", fileBytes, tail(want))
	}
	return e
}

// sizeWords says how many bytes the image has, and why.
func (h *Header) sizeWords() string {
	nx, ny, nz, nt := h.Size()
	return fmt.Sprintf("%d bytes (%d before the voxels, %dx%dx%dx%d voxels of %v)", h.VoxOffset+h.dataBytes(), h.VoxOffset, nx, ny, nz, nt, h.Datatype)
}

func isGzip(b []byte) bool { return len(b) >= 2 && b[0] == 0x1f && b[1] == 0x8b }
