package pipeline

// How the volumes of a run travel: nothing here changes a byte of the output.

// A route says what of a series is in memory when.
//
// The poses are estimated on the raw series. Volume poses need it a few times over, and
// its file is read anew for each; a pose path needs it dozens of times, so there it is kept as it
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
