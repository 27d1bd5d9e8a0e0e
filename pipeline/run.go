package pipeline

// One unit: the echoes of one acquisition, from raw files to published ones.

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"path/filepath"
	"runtime"
	"runtime/debug"
	"slices"
	"time"

	"evenkeel/fault"
	"evenkeel/internal/parallel"
	"evenkeel/nifti"
	"evenkeel/provenance"
	"evenkeel/realign"
	"evenkeel/slicetime"
)

// Stages of a run, in the order of the work. Observers count them. The seconds of a
// stage are those that pass while it lasts, all that is done beside it included:
//
//   - estimate: reading the raw series, as often as is needed, and finding the reference and the poses
//   - read: reading the series once more into memory, as float32
//   - measure-raw, time, space, joint, measure-steady: each over the series in memory
//   - steady: in place of all those, where the run is streamed: reading, measuring, moving in time and
//     space and writing the series in one pass
//   - write: writing what is not written yet
var Stages = []string{"estimate", "read", "measure-raw", "time", "space", "joint", "measure-steady", "steady", "write"}

// A unit is worked on as a whole: its echoes share one pose.
type unit struct {
	plans []*Plan // those selected and not refused
}

// A worker does units one after another.
type worker struct {
	out     string
	folders *folders
	workers int               // goroutines inside a run
	route   func(*Plan) route // nil: that of the plan
	stage   func(p *Plan, stage string)
	share   func(p *Plan, stage string, share float64) // nil: nobody listens
}

// posed is what the pose series gave: shared by the echoes, not changed by them.
type posed struct {
	est       *realign.Estimate     // nil with motion none
	path      *realign.PathEstimate // nil with motion none; holds the volume poses where there is no path
	digest    *provenance.Digester  // of the pose series
	reference *provenance.Digester  // of the sbref, nil if none was used
}

// run does the plans of a unit; the result has one outcome a plan. It holds at most one
// series at a time, the pose series first. A run that
// panics fails alone: what its companions have published stands.
func (w *worker) run(ctx context.Context, u unit) []Outcome {
	out := make([]Outcome, len(u.plans))
	var shared *posed
	// The echo that the pose comes from goes first, if it is selected.
	order := make([]int, 0, len(u.plans))
	for i, p := range u.plans {
		if p.Run.File == p.Pose.File {
			order = append([]int{i}, order...)
		} else {
			order = append(order, i)
		}
	}
	for k, i := range order {
		if k > 0 {
			makeRoom() // for the next echo
		}
		out[i] = w.recovered(ctx, u.plans[i], &shared)
	}
	return out
}

// makeRoom gives back to the system the memory of a series, or of an estimate, that nothing refers to any
// more, before what comes next takes its own: the plan allows for the larger of both. What the
// collector alone would do is to keep it, in pieces that a longer array cannot use.
func makeRoom() { debug.FreeOSMemory() }

func (w *worker) recovered(ctx context.Context, p *Plan, shared **posed) (o Outcome) {
	defer func() {
		if v := recover(); v != nil {
			o = Outcome{Plan: p, State: Failed, Faults: p.Faults, Err: asBug(p.Run.Stem, v, debug.Stack())}
		}
	}()
	rec := &recorder{started: time.Now(), seconds: map[string]float64{}}
	figures, err := w.one(ctx, p, shared, rec)
	o = ended(p, figures, err)
	if o.State == Done {
		o.StageSeconds = rec.seconds
	}
	return o
}

// ended turns how a run ended into its outcome.
func ended(p *Plan, figures *Figures, err error) Outcome {
	o := Outcome{Plan: p, Faults: slices.Clone(p.Faults)}
	var refused *Refused
	switch {
	case err == nil:
		o.State, o.Figures = Done, figures
	case errors.As(err, &refused):
		o.State = RefusedRun
		o.Faults = append(o.Faults, refused.Faults...)
	case errors.Is(err, context.Canceled), errors.Is(err, context.DeadlineExceeded):
		o.State = Interrupted
	default:
		o.State, o.Err = Failed, err
	}
	return o
}

// one does one run.
func (w *worker) one(ctx context.Context, p *Plan, shared **posed, rec *recorder) (*Figures, error) {
	stage := func(name string) func() {
		if err := ctx.Err(); err == nil && w.stage != nil {
			w.stage(p, name)
		}
		t := time.Now()
		return func() { rec.seconds[name] += time.Since(t).Seconds() }
	}
	if faults := p.changed(); len(faults) > 0 {
		return nil, &Refused{faults}
	}

	route := p.route()
	if w.route != nil {
		route = w.route(p)
	}
	raw := newReel(p, p.Run.File, route.keep)
	end := stage("estimate")
	if *shared == nil {
		// On the raw series of the shortest echo.
		of := raw
		if p.Pose.File != p.Run.File {
			of = newReel(p, p.Pose.File, route.keep)
		}
		po, err := w.estimate(ctx, p, of)
		if err != nil {
			return nil, err
		}
		if of != raw {
			of.drop()
		}
		*shared = po
	}
	po := *shared
	nt := p.Volumes
	var data []float32 // the series in memory, where it is not streamed
	series := realign.Series(raw)
	if !route.streamed {
		end()
		if p.storedBytes() > keptBytes {
			raw.drop()
		}
		makeRoom() // of the estimate too
		end = stage("read")
		var err error
		if data, err = raw.floats(ctx, w.workers); err != nil {
			return nil, err
		}
		raw.drop()
		series = realign.Floats(data, nt)
	}
	to, err := p.standard(ctx, po, series)
	if err != nil {
		return nil, err
	}
	end()
	m := &measures{mask: to.mask}
	m.measurePoses(po, p.rowPoses(po), nt)
	pub := &publisher{out: w.out}
	defer pub.discard()

	if route.streamed {
		makeRoom() // of the estimate
		end = stage("steady")
		if err := w.writeStream(ctx, p, po, raw, m, pub); err != nil {
			return nil, err
		}
		raw.drop()
		end()
	} else if err := w.inMemory(ctx, p, po, data, m, stage); err != nil {
		return nil, err
	}

	runtime.GC() // as in inMemory
	end = stage("write")
	inputs := p.inputFiles(raw, po)
	// The last look at the inputs: what was read is what the record names.
	if faults := p.changed(); len(faults) > 0 {
		return nil, &Refused{faults}
	}
	if err := p.writeData(ctx, w.workers, pub, data, to, m, po); err != nil {
		return nil, err
	}
	end()
	if err := p.writeRecord(pub, rec, inputs, m, po); err != nil {
		return nil, err
	}
	if err := ctx.Err(); err != nil {
		return nil, err // before the first rename, or not at all
	}
	old, _ := readRecord(filepath.Join(w.out, filepath.FromSlash(p.Output("record"))))
	if err := pub.publish(oldOutputs(p, old)); err != nil {
		return nil, err
	}
	figures, err := parseFigures(m.qualityFile(p))
	if err != nil {
		panic("pipeline: our own quality file cannot be read back: " + err.Error())
	}
	return figures, nil
}

// inMemory does what is between reading and writing on a series in memory, in place.
func (w *worker) inMemory(ctx context.Context, p *Plan, po *posed, data []float32, m *measures, stage func(name string) func()) error {
	nt := p.Volumes
	steps := []string{"measure-raw", "time", "space", "measure-steady"}
	switch p.Settings.Order {
	case "space-first":
		steps[1], steps[2] = "space", "time"
	case "joint":
		steps = []string{"measure-raw", "joint", "measure-steady"}
	}
	for _, step := range steps {
		runtime.GC() // what the step before has left makes room; next to no work, with so few arrays
		end := stage(step)
		var err error
		switch step {
		case "measure-raw":
			err = m.measureRaw(ctx, p, data, nt, w.workers)
		case "joint":
			err = w.joint(ctx, p, po, data, nt)
		case "time":
			err = w.correctTime(ctx, p, data, nt)
		case "space":
			err = w.resample(ctx, p, po, data, nt)
		default:
			err = m.measureSteady(ctx, data, nt, w.workers)
		}
		if err != nil {
			return err
		}
		end()
	}
	return ctx.Err()
}

// estimate finds the poses of the pose series, on the raw data.
func (w *worker) estimate(ctx context.Context, p *Plan, s *reel) (*posed, error) {
	po := &posed{}
	if p.Settings.Motion == "none" {
		return po, nil
	}
	opt := realign.Options{SliceAxis: p.Schedule.Axis, Workers: w.workers}
	switch r := p.Settings.Reference; r.Word {
	case "mean":
		opt.Reference = realign.Mean
	case "first":
		opt.Reference = realign.First
	case "middle":
		opt.Reference = realign.Middle
	case "sbref":
		ref, d, err := readOne(ctx, p, p.Pose.SBRef)
		if err != nil {
			return nil, err
		}
		po.reference = d
		opt.Reference, opt.External = realign.External, ref
	default:
		opt.Reference, opt.Index = realign.Index, r.Index
	}
	g := p.Grid
	if p.poseHeader != nil {
		g.Affine = p.poseHeader.Affine()
	}
	volumes := 1.0
	if p.followed() {
		volumes = volumesShare
	}
	opt.Progress = w.within(p, "estimate", 0, volumes)
	est, err := realign.EstimateVolumes(ctx, g, s, opt)
	var few *realign.TooFewAligned
	if errors.As(err, &few) {
		return nil, &Refused{[]fault.Fault{fault.New("motion-lost", p.Pose.File, "",
			fmt.Sprintf("of %d volumes %d aligned and %d doubtful", few.Volumes, few.Aligned, few.Doubtful), "at least 2 with a pose and, for --reference mean, 1 that is aligned",
			"look at the images; another --reference, or --motion none, may still give something")}}
	}
	if err != nil {
		return nil, err
	}
	po.est = est
	if err := w.estimatePath(ctx, p, g, s, po); err != nil {
		return nil, err
	}
	po.digest = s.digest
	return po, nil
}

// volumesShare is roughly what part of the time of an estimate with a path goes into the
// volume poses it starts from.
const volumesShare = 0.26

// within gives a callback for work that takes a stage from one share to another.
func (w *worker) within(p *Plan, stage string, from, to float64) func(share float64) {
	if w.share == nil {
		return nil
	}
	return func(share float64) { w.share(p, stage, from+float64(share*(to-from))) }
}

// A standard is what the volumes of a run are brought to.
type standard struct {
	reference []float32
	mask      []bool     // the head in it
	centre    [3]float64 // of the head, world mm
}

// standard gives that of the run; s is the raw series, of which the reference is a part where no
// poses were estimated.
func (p *Plan) standard(ctx context.Context, po *posed, s realign.Series) (to standard, err error) {
	if po.est != nil {
		to = standard{po.est.Reference, po.est.Mask, po.est.Centre} // a copy of its own, never part of the series
		if p.Settings.Reference.Word == "mean" {
			to.reference = po.path.Reference // sharper, along a path
		} else if k := po.est.Scale; k != 1 {
			to.reference = slices.Clone(to.reference)
			for i := range to.reference {
				to.reference[i] /= k // a power of two: what was given comes back bit for bit
			}
		}
		return to, nil
	}
	switch r := p.Settings.Reference; r.Word {
	case "first":
		to.reference, err = volumeOf(ctx, s, 0)
	case "middle":
		to.reference, err = volumeOf(ctx, s, s.Len()/2)
	case "":
		to.reference, err = volumeOf(ctx, s, r.Index)
	default:
		to.reference, err = meanVolume(ctx, s)
	}
	if err != nil {
		return standard{}, err
	}
	to.mask = realign.HeadMask(p.Grid, to.reference)
	to.centre = realign.Centroid(p.Grid, to.mask)
	return to, nil
}

// volumeOf returns volume t of a series.
func volumeOf(ctx context.Context, s realign.Series, t int) (vol []float32, err error) {
	err = s.Each(ctx, 1, func(u int) bool { return u == t }, func(_, _ int, v []float32) error {
		vol = append([]float32{}, v...)
		return nil
	})
	return vol, err
}

// meanVolume averages volumes in their order.
func meanVolume(ctx context.Context, s realign.Series) ([]float32, error) {
	var sum []float64
	err := s.Each(ctx, 1, nil, func(_, _ int, vol []float32) error {
		if sum == nil {
			sum = make([]float64, len(vol))
		}
		for i, v := range vol {
			sum[i] += float64(v)
		}
		return nil
	})
	out := make([]float32, len(sum))
	for i, v := range sum {
		out[i] = float32(v / float64(s.Len()))
	}
	return out, err
}

// correctTime moves every slice to the run's instant, in place.
func (w *worker) correctTime(ctx context.Context, p *Plan, data []float32, nt int) error {
	if !p.Timing.Temporal {
		return ctx.Err()
	}
	n := p.Grid.N
	return slicetime.Correct(ctx, data, n[0], n[1], n[2], nt, p.Schedule, p.Timing.Origin, p.Settings.kernel(), w.workers)
}

// resample brings every volume to the reference, in place, each volume once.
func (w *worker) resample(ctx context.Context, p *Plan, po *posed, data []float32, nt int) error {
	if po.est == nil {
		return ctx.Err()
	}
	nv := len(data) / nt
	r := p.resampling(po, w.workers)
	return parallel.For(ctx, w.workers, nt, func(worker, t int) error {
		vol := data[t*nv : (t+1)*nv]
		r.volume(worker, t, vol, vol)
		return nil
	})
}

// A resampling brings the volumes of a run to the reference.
type resampling struct {
	p       *Plan
	path    *realign.PathEstimate // nil: one pose a volume
	poses   []realign.Pose        // nil: none
	near    bool                  // every volume is resampled one axis after the other
	scratch []*realign.Resampler  // by worker
}

// resampling prepares for so many workers.
func (p *Plan) resampling(po *posed, workers int) *resampling {
	r := &resampling{p: p, poses: p.rowPoses(po), scratch: make([]*realign.Resampler, max(1, workers))}
	if r.poses != nil && po.path.Used && p.Settings.Order == "space-first" {
		r.path = po.path
	}
	r.near = r.path == nil && allNear(p.Grid, r.poses)
	return r
}

// allNear reports whether all volumes of a run can be resampled one axis after the other: they are
// in the same way, or the noise would tell them apart.
func allNear(g realign.Grid, poses []realign.Pose) bool {
	return !slices.ContainsFunc(poses, func(p realign.Pose) bool {
		return p != realign.Identity && !realign.NearIdentity(realign.PoseMap(g, p))
	})
}

// volume writes volume t to dst, from src, which may be the same. A volume that stands at the
// reference already stays as it is, bit for bit.
func (r *resampling) volume(worker, t int, dst, src []float32) {
	if r.poses == nil || r.poses[t] == realign.Identity && r.path == nil {
		if &dst[0] != &src[0] {
			copy(dst, src)
		}
		return
	}
	s := r.scratch[worker]
	if s == nil {
		s = realign.NewResampler(r.p.Grid.N, r.p.Settings.degree())
		r.scratch[worker] = s
	}
	from := realign.PoseMap(r.p.Grid, r.poses[t])
	if r.path != nil {
		// Slices that have not been moved in time yet stand at poses of their own.
		from = realign.SlotMap(r.p.Grid, r.p.Schedule.Axis, func(k int) realign.Pose { return r.path.Slot(t, k) })
	}
	if r.near {
		s.Near(dst, src, from)
		return
	}
	s.Load(src)
	s.Eval(dst, from)
}

// inputFiles describes what the run was computed from, for its record.
func (p *Plan) inputFiles(s *reel, po *posed) []provenance.File {
	var out []provenance.File
	for _, in := range p.Inputs {
		switch in.Role {
		case "series":
			out = append(out, s.digest.File(in.Role, in.Path))
		case "pose-series":
			out = append(out, po.digest.File(in.Role, in.Path))
		case "reference-series":
			out = append(out, po.reference.File(in.Role, in.Path))
		default:
			out = append(out, provenance.File{Role: in.Role, Path: in.Path, SHA256: in.sha256, Bytes: in.stamp.size})
		}
	}
	return out
}

// steadyHeader is the header of the corrected series; data is needed for int16 alone.
func (p *Plan) steadyHeader(data []float32) *nifti.Header {
	dt := nifti.Float32
	if p.Settings.Store == "int16" {
		dt = nifti.Int16
	}
	h := p.Header.Derived(p.Volumes, false, dt, p.Timing.AtOneInstant && p.Settings.Time != "none", p.Timing.StartTime)
	p.correctVolumeTime(h)
	if dt == nifti.Int16 {
		h.SclSlope, h.SclInter = nifti.Int16Scaling(extent(data))
	}
	return h
}

// writeStream streams the series to its file, under a hidden name.
func (w *worker) writeStream(ctx context.Context, p *Plan, po *posed, raw *reel, m *measures, pub *publisher) error {
	var other error // what went wrong in anything but writing
	err := pub.write("steady-series", p.Output("steady-series"), func(out io.Writer) error {
		wrote := &listener{w: out}
		err := w.stream(ctx, p, po, raw, m, p.steadyHeader(nil), wrote)
		if wrote.err == nil {
			other = err
		}
		return err
	})
	if other != nil {
		return other
	}
	return err
}

// A listener remembers what went wrong in writing.
type listener struct {
	w   io.Writer
	err error
}

func (l *listener) Write(b []byte) (int, error) {
	n, err := l.w.Write(b)
	if err != nil {
		l.err = err
	}
	return n, err
}

// writeData writes every file of the run but its record, under hidden names; the series
// only if data is not nil.
func (p *Plan) writeData(ctx context.Context, workers int, pub *publisher, data []float32, to standard, m *measures, po *posed) error {
	t := p.Timing
	single := func(dt nifti.Datatype) *nifti.Header { return p.Header.Derived(1, true, dt, true, 0) }
	inside := make([]float32, len(to.mask))
	for i, in := range to.mask {
		if in {
			inside[i] = 1
		}
	}
	image := func(h *nifti.Header, data []float32) func(io.Writer) error {
		return func(w io.Writer) error {
			return nifti.WriteSeries(ctx, w, h, true, workers, data)
		}
	}
	text := func(b []byte) func(io.Writer) error {
		return func(w io.Writer) error { _, err := w.Write(b); return err }
	}
	for _, o := range p.Outputs {
		var fill func(io.Writer) error
		switch o.Role {
		case "steady-series":
			if data == nil {
				continue // streamed
			}
			fill = image(p.steadyHeader(data), data)
		case "steady-sidecar":
			fill = text(p.steadySidecar(po))
		case "reference":
			fill = image(single(nifti.Float32), to.reference)
		case "reference-sidecar":
			fill = text(p.referenceSidecar(po))
		case "mask":
			fill = image(single(nifti.Uint8), inside)
		case "mask-sidecar":
			fill = text(p.maskSidecar())
		case "pose-table":
			fill = text(poseTable(p, m))
		case "pose-description":
			fill = text(poseDescription(p, po, to.centre))
		case "shots-table":
			fill = text(shotsTable(p, po))
		case "shots-description":
			fill = text(shotsDescription(p, po))
		case "quality":
			fill = text(m.qualityFile(p))
		case "raw-tsnr":
			fill = image(single(nifti.Float32), m.tsnrRaw)
		case "steady-tsnr":
			fill = image(single(nifti.Float32), m.tsnrSteady)
		case "events":
			moved, faults := moveEvents(p.Run.Events, p.events, t.StartTime)
			if len(faults) > 0 {
				return &Refused{faults}
			}
			fill = text(moved)
		case "record":
			continue
		default:
			panic("pipeline: output " + o.Role + " is declared but never written")
		}
		if err := pub.write(o.Role, o.Path, fill); err != nil {
			return err
		}
	}
	return nil
}

// extent is the range of the values; a value that is not finite is a mistake of
// ours, since the reader lets none in.
func extent(data []float32) (lo, hi float32) {
	lo, hi = data[0], data[0]
	for _, v := range data {
		if d := float64(v); math.IsNaN(d) || math.IsInf(d, 0) {
			panic("pipeline: a voxel value of the output is not finite")
		}
		lo, hi = min(lo, v), max(hi, v)
	}
	return lo, hi
}

// volumeTimeTolerance is the one of the standard for RepetitionTime against pixdim[4] (1 ms).
const volumeTimeTolerance = 1e-3

// correctVolumeTime puts the repetition time used into the header where the
// raw header says otherwise (an accepted tr-mismatch, or no time at all), so that the
// output does not contradict itself. Nothing else of the geometry is touched.
func (p *Plan) correctVolumeTime(h *nifti.Header) {
	sec, _ := p.Header.SecondsPerVolume()
	if p.Timing.TR <= 0 || math.Abs(sec-p.Timing.TR) <= volumeTimeTolerance {
		return
	}
	h.SetSecondsPerVolume(p.Timing.TR)
}

// oldOutputs names the files of an earlier time of this very run: every file that a
// run can have, for a process that died may have taken the record away before the
// files, and those that a record names, as far as they lie beside it.
func oldOutputs(p *Plan, old *provenance.Record) []string {
	out := possible(p.Run)
	if old == nil {
		return out
	}
	for _, f := range old.Outputs {
		if isOwn(p, f.Path) {
			out = append(out, f.Path)
		}
	}
	return out
}

func readRecord(name string) (*provenance.Record, error) {
	data, err := readOwn(name)
	if err != nil {
		return nil, err
	}
	return provenance.Parse(data)
}

func rawJSON(v any) json.RawMessage {
	b, err := json.Marshal(v)
	if err != nil {
		panic("pipeline: a part of the record cannot be written as JSON: " + err.Error())
	}
	return b
}
