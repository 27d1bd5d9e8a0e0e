package nifti

import "math"

// Header holds the fields of either version, widened: the float32 fields of
// NIfTI-1 widen exactly, so that writing them back gives the same bits. Free
// texts and display limits (cal_min, cal_max) are left out.
type Header struct {
	Version   int  // 1 or 2
	BigEndian bool // as read; we always write little-endian

	Dim      [8]int64   // Dim[0] dimensions in use, then voxels along i, j, k and volumes
	Pixdim   [8]float64 // [0] qfac, [1..3] voxel size, [4] time from volume to volume, in XYZTUnits
	Datatype Datatype

	DimInfo              uint8 // freq_dim | phase_dim<<2 | slice_dim<<4; see SliceDim
	SliceCode            int32
	SliceStart, SliceEnd int64
	SliceDuration        float64 // time unit of XYZTUnits

	SclSlope, SclInter float64 // as stored; see Scaling
	XYZTUnits          int32
	Toffset            float64 // time of the first volume, time unit of XYZTUnits

	IntentCode int32
	IntentP    [3]float64

	QformCode, SformCode int32
	Quatern, Qoffset     [3]float64
	Srow                 [3][4]float64

	VoxOffset int64 // bytes before the first voxel in the file that holds the voxels
}

// Time units of xyzt_units (nifti1.h, NIFTI_UNITS_*).
const (
	timeUnitMask = 0x38
	unitSecond   = 8
	unitMilli    = 16
	unitMicro    = 24
)

// Size returns nx, ny, nz, nt (nt = 1 for 3-D).
func (h *Header) Size() (nx, ny, nz, nt int) {
	nt = 1
	if h.Dim[0] >= 4 {
		nt = int(h.Dim[4])
	}
	return int(h.Dim[1]), int(h.Dim[2]), int(h.Dim[3]), nt
}

// Scaling returns the line true = slope*stored + inter that applies to every
// voxel. scaled is false, with slope 1 and inter 0, when the stored values are
// the true ones: a slope of zero (nifti1.h, "DATA SCALING"), or one that is not
// finite (common practice, as nibabel reads and writes it).
func (h *Header) Scaling() (slope, inter float64, scaled bool) {
	s, i := h.SclSlope, h.SclInter
	if s == 0 || !finite(s) || (s == 1 && i == 0) {
		return 1, 0, false
	}
	return s, i, true
}

// perSecond returns how many time units of the header make a second. known is
// false when the header names none that measures time; seconds are then meant.
func (h *Header) perSecond() (n float64, known bool) {
	switch h.XYZTUnits & timeUnitMask {
	case unitSecond:
		return 1, true
	case unitMilli:
		return 1e3, true
	case unitMicro:
		return 1e6, true
	}
	return 1, false
}

// SecondsPerVolume gives pixdim[4] in seconds. Where xyzt_units names no unit
// of time it is read as seconds and known is false; known is also false for
// 3-D images, where the field has no meaning. The value is not judged: it may
// be zero or negative.
func (h *Header) SecondsPerVolume() (sec float64, known bool) {
	n, known := h.perSecond()
	return h.Pixdim[4] / n, known && h.Dim[0] >= 4
}

// SetSecondsPerVolume stores sec in pixdim[4], in the header's unit of time
// (seconds where it names none, as [Header.SecondsPerVolume] reads it).
func (h *Header) SetSecondsPerVolume(sec float64) {
	n, _ := h.perSecond()
	h.Pixdim[4] = sec * n
}

// SecondsPerSlice gives slice_duration in seconds, the unit as for
// SecondsPerVolume. The value is not judged.
func (h *Header) SecondsPerSlice() float64 {
	n, _ := h.perSecond()
	return h.SliceDuration / n
}

// SliceDim returns the slice axis of dim_info: 0 none, 1..3 = i, j, k.
func (h *Header) SliceDim() int { return int(h.DimInfo>>4) & 3 }

// Derived returns a header for an output of nt volumes with the same geometry,
// bit for bit, of voxel type dt. With threeD, nt must be 1 and the image has
// three dimensions and no time step. Kept: version, qform, sform, pixdim,
// units, dim_info, intent code and parameters. Dropped: scaling (slope 1,
// intercept 0), free texts, extensions. clearSlices zeroes slice_code,
// slice_start, slice_end and slice_duration, for slices that stand at one
// instant. toffsetSec is stored in the header's time unit, as seconds where
// the header names none.
func (h *Header) Derived(nt int, threeD bool, dt Datatype, clearSlices bool, toffsetSec float64) *Header {
	if nt < 1 || (threeD && nt != 1) {
		panic("nifti: Derived with a number of volumes that cannot be")
	}
	d := *h
	d.BigEndian = false
	d.Datatype = dt
	d.SclSlope, d.SclInter = 1, 0
	d.Dim[0], d.Dim[4] = 4, int64(nt)
	if threeD {
		d.Dim[0] = 3
		d.Pixdim[4] = 0
	}
	for i := 5; i < 8; i++ {
		d.Dim[i] = 1
	}
	if clearSlices {
		d.SliceCode, d.SliceStart, d.SliceEnd, d.SliceDuration = 0, 0, 0, 0
	}
	n, _ := h.perSecond()
	d.Toffset = toffsetSec * n
	d.VoxOffset = d.minOffset()
	return &d
}

// minOffset is where the voxels of a one-file image without extensions begin.
func (h *Header) minOffset() int64 {
	if h.Version == 2 {
		return minOffset2
	}
	return minOffset1
}

// voxels returns the voxels of one volume; dataBytes those of the whole image,
// in bytes. Both need a header that passed check.
func (h *Header) voxels() int {
	nx, ny, nz, _ := h.Size()
	return nx * ny * nz
}

func (h *Header) dataBytes() int64 {
	_, _, _, nt := h.Size()
	return int64(h.voxels()) * int64(nt) * int64(h.Datatype.Bytes())
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
