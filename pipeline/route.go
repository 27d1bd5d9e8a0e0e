package pipeline

import (
	"evenkeel/slicetime"
)

// How the volumes of a run travel: nothing here changes a byte of the output.

// A route says what of a series is in memory when.
//
// The poses are estimated on the raw series. Volume poses need it a few times over, and
// its file is read anew for each; a pose path needs it many times, so there it is kept as it
// is stored. A series of at most keptBytes is kept in any case: as much is needed for the
// program itself, and then no file is read twice.
//
// What follows is done in one more pass, volume after volume (streamed), where each
// output volume needs only a few raw ones: the sinc kernel, or nothing moved in time. Otherwise
// (the Fourier kernel, the joint interpolation, int16, whose scale depends on every voxel) the
// series is in memory as float32 and changed in place; before that, what was kept
// is let go unless it is small.
type route struct {
	keep     bool // by the estimate, as stored
	streamed bool
}

// keptBytes is the size up to which a series is kept as it is stored in any case.
const keptBytes = 32 << 20

// storedBytes is what the series takes as it is stored.
func (p *Plan) storedBytes() int64 { return p.Header.StoredBytes() * int64(p.Volumes) }

// route decides by header and settings alone.
func (p *Plan) route() route {
	set := p.Settings
	r := route{streamed: set.Store == "float32" && (!p.Timing.Temporal || set.Time == "sinc")}
	switch {
	case set.Motion == "none": // time only, whatever the order
	case set.Order == "joint":
		r.streamed = false
	case set.Order == "space-first":
		// In this order each slice stands at a pose of its own before it is moved.
		r.streamed = r.streamed && !p.Timing.Temporal && !p.followed()
	}
	r.keep = set.Motion != "none" && (p.followed() || !r.streamed) || p.storedBytes() <= keptBytes
	return r
}

// What is held beside the series, in bytes per voxel of a volume, with a margin of about a
// half: measured as resident memory by stages, on 64x64x36x200 with 1, 2 and 4 workers. Much of
// an estimate's is for the head alone, and a head may fill the field of view.
const (
	// Of an estimate: references, their derivatives and masks; and a worker's filters and volumes.
	// Measured: 75 and 57; as much for a reference that is built anew.
	estimateFixed, estimateWorker = 200, 90
	// What an estimate leaves, and the maps.
	outcomeFixed = 40
	// Of correction in memory: sums and masks; and a worker's coefficients and compressed volumes.
	correctFixed, correctWorker = 60, 30
	// A resampler's padded coefficients and rows, and a compressor's volumes.
	resampleWorker = 12
	// The sums of tSNR, before and after, and the maps made of them.
	looksFixed = 2 * (4 + 8 + 8 + 4)
	// bytesPerSlot is what a pose path keeps for each excitation: its poses, what the
	// images say of it (twice), and the rows of the banded equations (three times).
	bytesPerSlot = 3500
	// runOverhead stands for the program (9 MiB), tables, files' buffers and compressors.
	runOverhead = 20 << 20
)

// Memory estimates, from the header, the bytes that the run holds at most when
// it is worked on by that many workers: the larger of what the estimate takes and what follows.
func (p *Plan) Memory(workers int) int64 {
	if p.Header == nil || p.Volumes < 1 {
		return 0
	}
	workers = max(1, workers)
	nx, ny, nz, _ := p.Header.Size()
	nv, w, nt := int64(nx)*int64(ny)*int64(nz), int64(workers), int64(p.Volumes)
	stored, route := p.Header.StoredBytes(), p.route()
	scratch := nv * (estimateFixed + estimateWorker*w)

	estimate := stored * (w + 2) // decoded ahead
	if route.keep {
		estimate = stored * (nt + 1)
	}
	if p.Settings.Motion != "none" {
		estimate += scratch
		if p.Settings.Reference.Word == "sbref" {
			estimate += nv * 4
		}
		if p.followed() {
			estimate += bytesPerSlot * nt * int64(len(p.Schedule.Shots()))
		}
	}

	after := nv * outcomeFixed
	switch {
	case route.streamed:
		after += nv*looksFixed + p.streamBytes(workers)
		if route.keep {
			after += stored * nt
		} else {
			after += stored * (batchVolumes + 2)
		}
	default:
		after += 4*nv*nt + stored*(w+2)
		if p.storedBytes() <= keptBytes {
			after += stored * nt
		}
		work := nv * (correctFixed + correctWorker*w)
		if p.Timing.Temporal {
			work = max(work, slicetime.WorkBytes(nx, ny, nz, p.Volumes, p.Schedule.Axis, workers, p.Settings.kernel()))
		}
		if p.Settings.Order == "joint" && (!p.followed() || p.Pose.File != p.Run.File) {
			work = max(work, scratch)
		}
		after += work
	}
	most := max(estimate, after)
	return most + most*heapGrowth/100 + runOverhead
}

// streamBytes is what a pass over the run holds beside what it reads and measures.
func (p *Plan) streamBytes(workers int) int64 {
	nx, ny, nz, _ := p.Header.Size()
	nv, opt := int64(nx)*int64(ny)*int64(nz), p.Settings.kernel()
	window, err := p.window()
	if err != nil {
		return 0 // such a run is refused
	}
	_, ring := p.batches(window)
	bytes := 4 * nv * int64(ring+batchVolumes+1)
	if window != nil {
		bytes += slicetime.WindowBytes(nx, ny, nz, p.Volumes, p.Schedule, p.Timing.Origin, opt, workers)
	}
	// Compressed volumes wait for their turn.
	return bytes + nv*resampleWorker*int64(workers) + 4*nv*int64(2*workers+1)
}
