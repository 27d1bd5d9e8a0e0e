package nifti

import "strings"

// Kinds of [Error], which are fault identifiers of the program.
const (
	KindHeader     = "image-header"     // not NIfTI, or a header field outside its limits
	KindSize       = "image-size"       // dimensions that cannot be used, voxels missing or bytes left over
	KindDatatype   = "image-datatype"   // a voxel type that is unknown, not supported or contradicted by bitpix
	KindAffine     = "image-affine"     // the map from voxels to space is singular or not finite
	KindCompressed = "image-compressed" // a gzip stream that is damaged, cut off or followed by something else
	KindValues     = "image-values"     // a voxel value that is not finite
	KindAbsent     = "image-absent"     // for callers: a link to a file that was not fetched; never made here
)

// Error is what every complaint about the content of an image becomes.
// Failures of the file system are returned as they are, never as an Error.
type Error struct {
	Kind     string // one of the Kind constants
	File     string // the path, as given or derived from the one given
	Field    string // header field by its name in nifti1.h, or the part of the file
	Found    string
	Expected string
	Err      error // cause, may be nil
}

// Error gives the complaint as one line that begins with its kind.
func (e *Error) Error() string {
	var b strings.Builder
	b.WriteString(e.Kind)
	for _, s := range []string{e.File, e.Field} {
		if s != "" {
			b.WriteString(": ")
			b.WriteString(s)
		}
	}
	if e.Found != "" {
		b.WriteString(": found ")
		b.WriteString(e.Found)
	}
	if e.Expected != "" {
		b.WriteString(", expected ")
		b.WriteString(e.Expected)
	}
	if e.Err != nil {
		b.WriteString(" (")
		b.WriteString(e.Err.Error())
		b.WriteString(")")
	}
	return b.String()
}

// Unwrap returns the cause, which may be nil.
func (e *Error) Unwrap() error { return e.Err }
