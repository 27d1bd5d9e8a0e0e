// Package nifti reads and writes images in the formats NIfTI-1 and NIfTI-2.
//
// Read: one-file images (.nii, .nii.gz) and pairs (.hdr with .img, either of
// them with .gz behind it), both byte orders, signed and unsigned integers of 8
// to 64 bits and floating point of 32 and 64 bits, of three or four dimensions.
// Written: one-file images, little-endian, plain or as one gzip member.
//
// The package knows voxels, headers and files, and nothing of BIDS.
//
// # Properties
//
//  1. Nothing that a file says is believed before it was checked: [ReadHeader]
//     and [Open] hold every header field that is used against its limits and
//     the declared size against the file's real size, before any memory is
//     allocated that depends on them.
//  2. A [Reader] holds a fixed amount of memory, whatever the header declares;
//     a [Stream] and a [VolumeWriter] that of a fixed number of volumes.
//  3. A complaint about the content of a file is an [*Error] with its kind, file and
//     field. A failure of the file system, of the tap or of the writer below
//     is returned as it came, wrapped, and never as an [*Error].
//  4. A file must end where its header says: bytes after the last voxel, after
//     the last gzip member, or too few of them, are errors.
//  5. Voxel values are finite, in what is read and in what is written.
//  6. What is written depends on header and voxels alone: not on the number of
//     cores, the time, the file name or how the calls were spread over time and
//     goroutines; and is the same from a [Writer] and a [VolumeWriter].
//  7. The fields that place a voxel in space are kept bit for bit by
//     [Header.Derived] and [NewWriter].
//
// # Layout
//
// Voxel (x, y, z) of volume t is Data[x+nx*(y+ny*(z+nz*t))], as in the file.
//
// # Incomplete
//
// Complex, RGB(A), 1-bit and 128-bit voxels are refused, as are images with
// more than four dimensions in use. Header extensions are read past and never
// carried on, and so are the free texts (descrip, aux_file, intent_name,
// db_name), since they can hold personal data.
//
// # Sources
//
// nifti1.h (R. W. Cox et al., NIfTI Data Format Working Group, 2003, with its
// later notes), nifti2.h (2014), and RFC 1951 and 1952 for the compression.
package nifti
