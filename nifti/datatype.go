package nifti

import "fmt"

// Datatype is the NIfTI code of a voxel type (nifti1.h, NIFTI_TYPE_*).
type Datatype int16

// The voxel types that are read and written.
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

// Bytes returns the size of a voxel, or 0 for a type that is not supported.
func (d Datatype) Bytes() int {
	switch d {
	case Uint8, Int8:
		return 1
	case Int16, Uint16:
		return 2
	case Int32, Uint32, Float32:
		return 4
	case Int64, Uint64, Float64:
		return 8
	}
	return 0
}

// limits gives the smallest and the largest value of an integer type; integer
// is false for the others. The float64 nearest to the largest value of a
// 64-bit type lies one above it.
func (d Datatype) limits() (lo, hi float64, integer bool) {
	switch d {
	case Uint8:
		return 0, 1<<8 - 1, true
	case Int8:
		return -1 << 7, 1<<7 - 1, true
	case Uint16:
		return 0, 1<<16 - 1, true
	case Int16:
		return -1 << 15, 1<<15 - 1, true
	case Uint32:
		return 0, 1<<32 - 1, true
	case Int32:
		return -1 << 31, 1<<31 - 1, true
	case Uint64:
		return 0, 1 << 64, true
	case Int64:
		return -1 << 63, 1 << 63, true
	}
	return 0, 0, false
}

// typeNames covers every code of nifti1.h, so that a refusal can say what the
// image holds.
var typeNames = map[Datatype]string{
	0: "unknown", 1: "binary (1 bit)",
	Uint8: "uint8", Int16: "int16", Int32: "int32", Float32: "float32", Float64: "float64",
	Int8: "int8", Uint16: "uint16", Uint32: "uint32", Int64: "int64", Uint64: "uint64",
	32: "complex64", 128: "rgb24", 1536: "float128", 1792: "complex128", 2048: "complex256", 2304: "rgba32",
}

// String returns the name of the type, also of those that are not supported.
func (d Datatype) String() string {
	if s, ok := typeNames[d]; ok {
		return s
	}
	return fmt.Sprintf("datatype %d", int16(d))
}
