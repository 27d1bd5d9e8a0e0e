package pipeline

// One unit: the echoes of one acquisition, from raw files to published ones.

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
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

// Stages of a run, in the order of the work. Observers count them.
var Stages = []string{"read", "estimate", "measure-raw", "time", "space", "joint", "measure-steady", "write"}

// A unit is worked on as a whole: its echoes share one pose.
type unit struct {
	plans []*Plan // those selected and not refused
}

// A worker does units one after another.
type worker struct {
	out     string
	folders *folders
	workers int // goroutines inside a run
	stage   func(p *Plan, stage string)
	share   func(p *Plan, stage string, share float64) // nil: nobody listens
}

// loaded is a series in memory with the digest of the bytes it was decoded from.
type loaded struct {
	data   []float32
	nt     int
	digest *provenance.Digester
}

// load reads a series; errors are faults (*Refused), IOError, or that of ctx.
func load(ctx context.Context, p *Plan, rel string, skip int) (*loaded, error) {
	d := &provenance.Digester{}
	_, s, err := nifti.ReadSeries(p.Dataset.Path(rel), tap{ctx, d}, skip)
	if ctx.Err() != nil {
		return nil, ctx.Err()
	}
	// A file that changed under us explains whatever else is wrong with it.
	if faults := p.changed(); len(faults) > 0 {
		return nil, &Refused{faults}
	}
	if f, isFault := imageFault(rel, err); isFault {
		return nil, &Refused{[]fault.Fault{f}}
	}
	if err != nil {
		return nil, &IOError{Path: rel, Step: "reading", Err: err}
	}
	return &loaded{s.Data, s.NT, d}, nil
}

// A tap digests what is read, and ends the reading when ctx ends.
type tap struct {
	ctx context.Context
	d   *provenance.Digester
}

func (t tap) Write(b []byte) (int, error) {
	if err := t.ctx.Err(); err != nil {
		return 0, err
	}
	return t.d.Write(b)
}

// posed is what the pose series gave: shared by the echoes, not changed by them.
type posed struct {
	est       *realign.Estimate     // nil with motion none
	path      *realign.PathEstimate // nil with motion none; holds the volume poses where there is no path
	digest    *provenance.Digester  // of the pose series
	reference *provenance.Digester  // of the sbref, nil if none was used
}

// run does the plans of a unit; the result has one outcome a plan. It holds at most one
// series at a time, the pose series first, so that no file is read twice. A run that
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

// makeRoom gives back the memory of a series that nothing refers to any more,
// before the next is read: the plan allows for one.
func makeRoom() { runtime.GC() }

func (w *worker) recovered(ctx context.Context, p *Plan, shared **posed) (o Outcome) {
	defer func() {
		if v := recover(); v != nil {
			o = Outcome{Plan: p, State: Failed, Faults: p.Faults, Err: asBug(p.Run.Stem, v, debug.Stack())}
		}
	}()
	figures, err := w.one(ctx, p, shared)
	return ended(p, figures, err)
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
func (w *worker) one(ctx context.Context, p *Plan, shared **posed) (*Figures, error) {
	rec := &recorder{started: time.Now(), seconds: map[string]float64{}}
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

	// Read, and estimate on the raw series of the shortest echo.
	var s *loaded
	if *shared == nil {
		end := stage("read")
		first, err := load(ctx, p, p.Pose.File, p.Settings.Skip)
		if err != nil {
			return nil, err
		}
		end()
		end = stage("estimate")
		po, err := w.estimate(ctx, p, first)
		if err != nil {
			return nil, err
		}
		end()
		*shared = po
		if p.Pose.File == p.Run.File {
			s = first
		} else {
			first.data = nil
			makeRoom()
		}
	}
	if s == nil {
		end := stage("read")
		var err error
		if s, err = load(ctx, p, p.Run.File, p.Settings.Skip); err != nil {
			return nil, err
		}
		end()
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	nt := s.nt
	po := *shared

	reference, mask, centre := p.standard(po, s)
	m := &measures{mask: mask}
	m.measurePoses(po, p.rowPoses(po), nt)

	end := stage("measure-raw")
	if err := m.measureRaw(ctx, p, s.data, nt, w.workers); err != nil {
		return nil, err
	}
	end()
	steps := []string{"time", "space"}
	switch p.Settings.Order {
	case "space-first":
		steps = []string{"space", "time"}
	case "joint":
		steps = []string{"joint"}
	}
	for _, step := range steps {
		end := stage(step)
		var err error
		switch step {
		case "joint":
			err = w.joint(ctx, p, po, s.data, nt)
		case "time":
			err = w.correctTime(ctx, p, s.data, nt)
		default:
			err = w.resample(ctx, p, po, s.data, nt)
		}
		if err != nil {
			return nil, err
		}
		end()
	}
	end = stage("measure-steady")
	if err := m.measureSteady(ctx, s.data, nt, w.workers); err != nil {
		return nil, err
	}
	end()

	end = stage("write")
	inputs, err := p.inputFiles(s, po)
	if err != nil {
		return nil, err
	}
	// The last look at the inputs: what was read is what the record names.
	if faults := p.changed(); len(faults) > 0 {
		return nil, &Refused{faults}
	}
	pub := &publisher{out: w.out}
	defer pub.discard()
	if err := p.writeData(ctx, w.workers, pub, s.data, nt, reference, mask, centre, m, po); err != nil {
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

// estimate finds the poses of the pose series, on the raw data.
func (w *worker) estimate(ctx context.Context, p *Plan, s *loaded) (*posed, error) {
	po := &posed{digest: s.digest}
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
		d := &provenance.Digester{}
		_, ref, err := nifti.ReadSeries(p.Dataset.Path(p.Pose.SBRef), tap{ctx, d}, 0)
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
		if f, isFault := imageFault(p.Pose.SBRef, err); isFault {
			return nil, &Refused{[]fault.Fault{f}}
		}
		if err != nil {
			return nil, &IOError{Path: p.Pose.SBRef, Step: "reading", Err: err}
		}
		po.reference = d
		opt.Reference, opt.External = realign.External, ref.Volume(0) // the only one, as planned
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
	est, err := realign.EstimateVolumes(ctx, g, realign.Floats(s.data, s.nt), opt)
	var few *realign.TooFewAligned
	if errors.As(err, &few) {
		return nil, &Refused{[]fault.Fault{fault.New("motion-lost", p.Pose.File, "",
			fmt.Sprintf("%d of %d volumes that could be aligned", few.Aligned, few.Volumes), "at least 2",
			"look at the images; another --reference, or --motion none, may still give something")}}
	}
	if err != nil {
		return nil, err
	}
	po.est = est
	return po, w.estimatePath(ctx, p, g, s, po)
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

// standard gives the reference volume, the head mask and its centroid.
func (p *Plan) standard(po *posed, s *loaded) (ref []float32, mask []bool, centre [3]float64) {
	if po.est != nil {
		if p.Settings.Reference.Word == "mean" {
			return po.path.Reference, po.est.Mask, po.est.Centre // sharper, along a path
		}
		ref = po.est.Reference // a copy of its own, never part of the series
		if k := po.est.Scale; k != 1 {
			ref = append([]float32{}, ref...)
			for i := range ref {
				ref[i] /= k // a power of two: what was given comes back bit for bit
			}
		}
		return ref, po.est.Mask, po.est.Centre
	}
	nv := len(s.data) / s.nt
	pick := func(t int) []float32 { return append([]float32{}, s.data[t*nv:(t+1)*nv]...) }
	switch r := p.Settings.Reference; r.Word {
	case "first":
		ref = pick(0)
	case "middle":
		ref = pick(s.nt / 2)
	case "":
		ref = pick(r.Index)
	default:
		ref = meanVolume(s.data, nv, s.nt)
	}
	mask = realign.HeadMask(p.Grid, ref)
	return ref, mask, realign.Centroid(p.Grid, mask)
}

// meanVolume averages volumes in their order.
func meanVolume(data []float32, nv, nt int) []float32 {
	out := make([]float32, nv)
	for v := range out {
		sum := 0.0
		for t := range nt {
			sum += float64(data[t*nv+v])
		}
		out[v] = float32(sum / float64(nt))
	}
	return out
}

// correctTime moves every slice to the run's instant, in place.
func (w *worker) correctTime(ctx context.Context, p *Plan, data []float32, nt int) error {
	if !p.Timing.Temporal {
		return ctx.Err()
	}
	n := p.Grid.N
	return slicetime.Correct(ctx, data, n[0], n[1], n[2], nt, p.Schedule, p.Timing.Origin, p.Settings.kernel(), w.workers)
}

// resample brings every volume to the reference, in place, each volume once. A
// volume that stands there already is left as it is, bit for bit.
func (w *worker) resample(ctx context.Context, p *Plan, po *posed, data []float32, nt int) error {
	if po.est == nil {
		return ctx.Err()
	}
	poses := p.rowPoses(po)
	nv := len(data) / nt
	rs := make([]*realign.Resampler, max(1, w.workers))
	return parallel.For(ctx, w.workers, nt, func(worker, t int) error {
		bySlice := po.path.Used && p.Settings.Order == "space-first"
		if poses[t] == realign.Identity && !bySlice {
			return nil
		}
		if rs[worker] == nil {
			rs[worker] = realign.NewResampler(p.Grid.N, p.Settings.degree())
		}
		from := realign.PoseMap(p.Grid, poses[t])
		if bySlice {
			// Slices that have not been moved in time yet stand at poses of their own.
			from = realign.SlotMap(p.Grid, p.Schedule.Axis, func(k int) realign.Pose { return po.path.Slot(t, k) })
		}
		vol := data[t*nv : (t+1)*nv]
		rs[worker].Load(vol)
		rs[worker].Eval(vol, from)
		return nil
	})
}

// inputFiles describes what the run was computed from, for its record.
func (p *Plan) inputFiles(s *loaded, po *posed) ([]provenance.File, error) {
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
	return out, nil
}

// writeData writes every file of the run but its record, under hidden names.
func (p *Plan) writeData(ctx context.Context, workers int, pub *publisher, data []float32, nt int, ref []float32, mask []bool, centre [3]float64, m *measures, po *posed) error {
	t := p.Timing
	nv := len(ref)
	dt := nifti.Float32
	if p.Settings.Store == "int16" {
		dt = nifti.Int16
	}
	series := p.Header.Derived(nt, false, dt, t.AtOneInstant && p.Settings.Time != "none", t.StartTime)
	p.correctVolumeTime(series)
	if dt == nifti.Int16 {
		series.SclSlope, series.SclInter = nifti.Int16Scaling(extent(data))
	}
	single := func(dt nifti.Datatype) *nifti.Header { return p.Header.Derived(1, true, dt, true, 0) }
	inside := make([]float32, nv)
	for i, in := range mask {
		if in {
			inside[i] = 1
		}
	}
	image := func(h *nifti.Header, data []float32) func(io.Writer) error {
		return func(w io.Writer) error {
			return nifti.WriteVolumes(ctx, w, h, true, workers, func(_, n int, dst []float32) error {
				copy(dst, data[n*nv:(n+1)*nv])
				return nil
			})
		}
	}
	text := func(b []byte) func(io.Writer) error {
		return func(w io.Writer) error { _, err := w.Write(b); return err }
	}
	for _, o := range p.Outputs {
		var fill func(io.Writer) error
		switch o.Role {
		case "steady-series":
			fill = image(series, data)
		case "steady-sidecar":
			fill = text(p.steadySidecar(po))
		case "reference":
			fill = image(single(nifti.Float32), ref)
		case "reference-sidecar":
			fill = text(p.referenceSidecar(po))
		case "mask":
			fill = image(single(nifti.Uint8), inside)
		case "mask-sidecar":
			fill = text(p.maskSidecar())
		case "pose-table":
			fill = text(poseTable(p, m))
		case "pose-description":
			fill = text(poseDescription(p, po, centre))
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

// oldOutputs names the files of an earlier record of this very run that no
// longer belong to it, as far as they lie beside it.
func oldOutputs(p *Plan, old *provenance.Record) []string {
	if old == nil {
		return nil
	}
	var out []string
	for _, f := range old.Outputs {
		if isOwn(p, f.Path) {
			out = append(out, f.Path)
		}
	}
	return out
}

func readRecord(name string) (*provenance.Record, error) {
	data, err := os.ReadFile(name)
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
