package nifti

import "io"

// Datatype is the NIfTI code of a voxel type.
type Datatype int16

const (
	Uint8   Datatype = 2
	Int16   Datatype = 4
	Int32   Datatype = 8
	Float32 Datatype = 16
	Float64 Datatype = 64
	Int8    Datatype = 256
	Uint16  Datatype = 512
	Uint32  Datatype = 768
	Int64   Datatype = 1024
	Uint64  Datatype = 1280
)

// Header holds the fields of either version, widened; float32 fields of NIfTI-1 widen exactly, so writing them back gives the same bits.
type Header struct {
	Version              int  // 1 or 2
	BigEndian            bool // as read; we always write little-endian
	Dim                  [8]int64
	Pixdim               [8]float64
	Datatype             Datatype
	DimInfo              uint8
	SliceCode            int32
	SliceStart, SliceEnd int64
	SliceDuration        float64
	SclSlope, SclInter   float64
	XYZTUnits            int32
	Toffset              float64
	IntentCode           int32
	IntentP              [3]float64
	QformCode, SformCode int32
	Quatern, Qoffset     [3]float64
	Srow                 [3][4]float64
	VoxOffset            int64
}

// Size returns nx, ny, nz, nt (nt = 1 for 3-D).
func (h *Header) Size() (nx, ny, nz, nt int) { panic("todo") }

// Affine maps voxel index (i,j,k,1) to world mm (RAS+), row-major 4x4: sform if coded, else qform, else pixdim.
func (h *Header) Affine() [16]float64 { panic("todo") }

// SecondsPerVolume gives pixdim[4] in seconds by xyzt_units (unknown units read as seconds); known is false when the units do not say.
func (h *Header) SecondsPerVolume() (sec float64, known bool) { panic("todo") }

// SliceDim returns the slice axis of dim_info: 0 none, 1..3 = i,j,k.
func (h *Header) SliceDim() int { panic("todo") }

// Derived returns a header for output of nt volumes (nt = 1 with threeD: a 3-D image) with the same geometry bit for bit, intent code and
// parameters kept, free text, extensions and scaling dropped; clearSlices zeroes slice_code/start/end/duration; toffset in seconds is stored in the header's time unit.
func (h *Header) Derived(nt int, threeD bool, dt Datatype, clearSlices bool, toffsetSec float64) *Header {
	panic("todo")
}

// Error is what every complaint about an image becomes. Kind is one of the fault identifiers image-header, image-size, image-datatype,
// image-affine, image-compressed, image-values, image-absent.
type Error struct {
	Kind, File, Field, Found, Expected string
	Err                                error // cause, may be nil; I/O failures (not bad data) are returned as they are, not as *Error
}

func (e *Error) Error() string { panic("todo") }
func (e *Error) Unwrap() error { return e.Err }

// ReadHeader reads and checks the header alone (path: .nii, .nii.gz, .hdr or .img) and holds the declared size against the file's size
// as far as that can be told without reading the data (exactly for uncompressed files; a bound for gzip).
func ReadHeader(path string) (*Header, error) { panic("todo") }

// Reader gives the volumes of an image one after another.
type Reader struct{}

// Open opens an image. Every byte read from the file(s) goes to tap too, if tap is not nil, so that the caller can digest exactly what
// was decoded (a pair: header file first, then image file); by the time ReadVolume returned io.EOF the whole file went through tap.
func Open(path string, tap io.Writer) (*Reader, error) { panic("todo") }

func (r *Reader) Header() *Header { panic("todo") }

// ReadVolume decodes and scales the next volume into dst (len nx*ny*nz; anything else panics). io.EOF after the last, when the rest of the file was checked
// (trailing bytes, gzip checksum). Values that are not finite after scaling give an image-values Error naming voxel and volume.
func (r *Reader) ReadVolume(dst []float32) error { panic("todo") }
func (r *Reader) Close() error                   { panic("todo") }

// Series is a 4-D image: Data[x+NX*(y+NY*(z+NZ*t))].
type Series struct {
	NX, NY, NZ, NT int
	Data           []float32
}

// Volume returns the samples of volume t, aliasing Data.
func (s *Series) Volume(t int) []float32 { panic("todo") }

// ReadSeries reads a whole image, leaving out the first skip volumes.
func ReadSeries(path string, tap io.Writer, skip int) (*Header, *Series, error) { panic("todo") }

// Writer writes one-file images, little-endian, gzip when compress is set (no name, no time stamp; bytes depend on the data alone).
type Writer struct{}

// NewWriter writes the header h (VoxOffset set by us; SclSlope/SclInter as in h) and an empty extension flag.
func NewWriter(w io.Writer, h *Header, compress bool) (*Writer, error) { panic("todo") }

// WriteVolume stores one volume: Float32 as it is, integer types as round-half-to-even((v-inter)/slope), clipped to the type's range.
func (w *Writer) WriteVolume(v []float32) error { panic("todo") }

// Close checks that all volumes declared were written and ends the stream; it does not close the underlying writer.
func (w *Writer) Close() error { panic("todo") }

// Int16Scaling returns slope and inter such that [lo, hi] fills the range of int16 best (slope 1 for a constant).
func Int16Scaling(lo, hi float32) (slope, inter float64) { panic("todo") }
