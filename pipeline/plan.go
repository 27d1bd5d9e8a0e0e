package pipeline

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path"
	"runtime/debug"
	"slices"
	"strconv"
	"strings"

	"evenkeel/dataset"
	"evenkeel/fault"
	"evenkeel/internal/parallel"
	"evenkeel/nifti"
	"evenkeel/realign"
	"evenkeel/sidecar"
	"evenkeel/slicetime"
)

// Version is the program's version: with the inputs and the settings it decides
// the bytes of the output.
const Version = "0.1.0"

// maxSidecar bounds what is read of one JSON file; the largest sidecars of real
// datasets hold a few hundred kilobytes.
const maxSidecar = 16 << 20

// An Input is a file that a run is computed from.
type Input struct {
	Role string // "series", "pose-series", "sidecar", "reference-series", "events"
	Path string // relative to the dataset, slashes
	// sha256 and size of what was read when the plan was made; "" for images,
	// which are digested while they are decoded.
	sha256 string
	stamp  stamp
}

// An Output is a file that a run will have.
type Output struct {
	Role string
	Path string // relative to OUT, slashes
}

// Timing is what becomes of a run's time axis.
type Timing struct {
	TR           float64 // s; 0 with unequal volume onsets
	Temporal     bool    // slices are moved in time
	AtOneInstant bool    // every slice of an output volume refers to one instant
	Origin       float64 // s from a volume's start to the instant it refers to
	StartTime    float64 // s from the start of the file's first raw volume to the first output volume's instant
	Rows         []float64
	Onsets       []float64 // of the output volumes, from the start of the file's first raw volume; nil unless VolumeTiming was given
}

// A Plan is everything settled about one run before it starts.
type Plan struct {
	Dataset  *dataset.Dataset
	Run      dataset.Run
	Pose     dataset.Run // the run the pose is estimated on: the shortest echo, or Run itself
	Settings Settings

	Header   *nifti.Header        // nil when it could not be read
	Acq      *sidecar.Acquisition // nil when there is no header
	Schedule slicetime.Schedule   // Times nil when unknown
	Grid     realign.Grid
	Volumes  int // volumes written
	Timing   Timing

	Faults  []fault.Fault // with the levels that the settings leave them
	Err     error         // reading failed, nil otherwise
	Inputs  []Input       // series first
	Outputs []Output      // record last

	poseHeader *nifti.Header
	events     []byte // the raw events table, with --events
}

// Refusals returns the faults that keep the run from being processed.
func (p *Plan) Refusals() []fault.Fault {
	return slices.DeleteFunc(slices.Clone(p.Faults), func(f fault.Fault) bool { return f.Level != fault.Refuse })
}

// Runs reports whether the run will be processed.
func (p *Plan) Runs() bool { return p.Err == nil && len(p.Refusals()) == 0 }

// LacksEvents reports whether the run will be processed and its events were asked for,
// and it has none.
func (p *Plan) LacksEvents() bool {
	return p.Settings.Events && p.Runs() && p.Run.Events == "" && p.Run.EventsFault == nil
}

// Output returns the path of the output with that role, "" if there is none.
func (p *Plan) Output(role string) string {
	for _, o := range p.Outputs {
		if o.Role == role {
			return o.Path
		}
	}
	return ""
}

// unit is the name shared by all echoes of one acquisition.
func (p *Plan) unit() string { return path.Join(p.Run.Dir, p.Run.Group) }

// Request says which runs are wanted and how they are to be processed.
type Request struct {
	Filter   dataset.Filter
	Asked    string // the filter in words, for messages
	Settings Settings
	Shard    Shard
	Memory   int64 // bytes that runs may hold together; 0 = no limit known
	Workers  int   // for reading headers
}

// Survey reads headers and sidecars of the selected runs and returns one plan a
// run, in the order of the runs' file names, with the selected shard only.
//
// It fails with [*NothingSelected] when nothing matches, with [*UsageError] when
// settings contradict each other, and with the context's error. Faults of runs are in their plans.
func Survey(ctx context.Context, ds *dataset.Dataset, req Request) ([]*Plan, error) {
	if err := req.Settings.Check(); err != nil {
		return nil, err
	}
	if ds.Derivative && len(ds.Runs) == 0 {
		return nil, &Refused{Faults: []fault.Fault{notRaw("dataset_description.json")}}
	}
	runs := ds.Select(req.Filter)
	if len(runs) == 0 {
		return nil, &NothingSelected{Root: ds.Root, Runs: len(ds.Runs), LeftOut: len(ds.SelectLeftOut(req.Filter)), Asked: req.Asked}
	}
	// One source per file: echoes are looked at once, however many of them
	// were selected.
	var files []dataset.Run
	index := map[string]int{}
	for _, r := range runs {
		for _, c := range ds.Companions(r) {
			if _, ok := index[c.File]; !ok {
				index[c.File] = len(files)
				files = append(files, c)
			}
		}
	}
	sources := make([]*source, len(files))
	err := parallel.For(ctx, max(1, req.Workers), len(files), func(_, i int) error {
		sources[i] = look(ds, files[i])
		return nil
	})
	if err != nil {
		return nil, err
	}
	plans := make([]*Plan, len(runs))
	for i, r := range runs {
		var echoes []*source
		for _, c := range ds.Companions(r) {
			echoes = append(echoes, sources[index[c.File]])
		}
		p, err := settle(ds, sources[index[r.File]], echoes, req)
		if err != nil {
			return nil, err
		}
		plans[i] = p
	}
	return req.Shard.Pick(plans), nil
}

func notRaw(file string) fault.Fault {
	return fault.New("not-raw", file, "DatasetType", "derivative", "raw",
		"give the raw dataset that this one was made from")
}

// A source is one image file with its sidecars, as found, before any setting is
// looked at.
type source struct {
	run    dataset.Run
	header *nifti.Header
	acq    *sidecar.Acquisition
	faults []fault.Fault
	err    error
	inputs []Input // series, then sidecars root to leaf
	// echoTime is known also where the image cannot be read: which echo is the
	// shortest must not depend on which were fetched.
	echoTime float64
}

// look reads a run's header and sidecars.
func look(ds *dataset.Dataset, r dataset.Run) (s *source) {
	s = &source{run: r, faults: slices.Clone(r.Faults)}
	defer func() {
		if v := recover(); v != nil {
			s.err = asBug(r.Stem, v, debug.Stack())
		}
	}()
	in := Input{Role: "series", Path: r.File}
	in.stamp, _ = stampOf(ds.Path(r.File)) // whether it can be read, ReadHeader tells better
	s.inputs = append(s.inputs, in)
	if !has(s.faults, "image-absent") {
		h, err := nifti.ReadHeader(ds.Path(r.File))
		switch f, isFault := imageFault(r.File, err); {
		case isFault:
			s.faults = append(s.faults, f)
		case err != nil:
			s.err = &IOError{Path: r.File, Step: "reading the header", Err: err}
		default:
			s.header = h
		}
	}
	var docs []sidecar.Source
	unread := false // whether a sidecar is there that could not be read
	for _, name := range r.Sidecars {
		in := Input{Role: "sidecar", Path: name}
		data, err := readSmall(ds.Path(name), &in.stamp)
		switch {
		case errors.Is(err, fs.ErrNotExist):
			s.faults = append(s.faults, fault.New("image-absent", name, "", "a link to a file that is not there",
				"the sidecar itself", "fetch it (an annexed file that has not been fetched)"))
		case errors.Is(err, errTooLarge):
			s.faults = append(s.faults, fault.New("sidecar-syntax", name, "", "more than 16 MiB",
				"a JSON object of acquisition fields", "replace it by the sidecar that belongs to the image"))
		case err != nil:
			unread = true
			if s.err == nil {
				s.err = &IOError{Path: name, Step: "reading", Err: err}
			}
		default:
			sum := sha256.Sum256(data)
			in.sha256 = hex.EncodeToString(sum[:])
			s.inputs = append(s.inputs, in)
			docs = append(docs, sidecar.Source{Name: name, Data: data})
		}
	}
	doc, faults := sidecar.Merge(docs)
	s.faults = append(s.faults, faults...)
	if s.header == nil {
		a, _ := doc.Acquisition(sidecar.Geometry{File: r.File})
		s.echoTime = a.EchoTime
		return s
	}
	g := sidecar.Geometry{File: r.File, SliceDim: s.header.SliceDim()}
	g.Size[0], g.Size[1], g.Size[2], g.Size[3] = s.header.Size()
	g.TRSec, _ = s.header.SecondsPerVolume()
	s.acq, faults = doc.Acquisition(g)
	s.echoTime = s.acq.EchoTime
	if unread {
		return s // what seems to be missing may stand there
	}
	for i := range faults {
		if faults[i].ID == "slice-times-missing" {
			faults[i].Remedy += s.headerSchedule()
		}
	}
	s.faults = append(s.faults, faults...)
	return s
}

// headerSchedule says what the header's slice fields would mean, for a run whose
// sidecar gives no slice times; "" if they mean nothing. They are never used: no
// code can express slices taken together, and many files carry one nobody checked.
func (s *source) headerSchedule() string {
	h := s.header
	var size [3]int
	size[0], size[1], size[2], _ = h.Size()
	times, err := slicetime.FromSliceCode(int(h.SliceCode), size[s.acq.SliceAxis], int(h.SliceStart), int(h.SliceEnd), h.SecondsPerSlice())
	if err != nil {
		return ""
	}
	words := slicetime.Schedule{Times: times, Axis: s.acq.SliceAxis, TR: s.acq.RepetitionTime}.Words()
	return fmt.Sprintf("; the header's slice_code %d would mean: %s (not used; many files carry a code nobody checked)", h.SliceCode, words)
}

var errTooLarge = errors.New("too large")

func readSmall(name string, st *stamp) ([]byte, error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return nil, err
	}
	*st = stampFrom(info)
	data, err := io.ReadAll(io.LimitReader(f, maxSidecar+1))
	if err == nil && len(data) > maxSidecar {
		err = errTooLarge
	}
	return data, err
}

func has(fs []fault.Fault, id string) bool {
	return slices.ContainsFunc(fs, func(f fault.Fault) bool { return f.ID == id })
}

// imageRemedies says what the user can do about each kind of image fault.
var imageRemedies = map[string]string{
	"image-header":     "convert the image again from the scanner's files",
	"image-size":       "copy or convert the image again; it is not whole, or not what its header says",
	"image-datatype":   "convert the image to one of the datatypes read: integers of 8 to 64 bits, float32, float64",
	"image-affine":     "convert the image again so that its sform or qform describes a grid",
	"image-compressed": "copy or compress the image again",
	"image-values":     "find out where those values come from; a magnitude image holds finite numbers only",
	"image-absent":     "fetch the file (an annexed file that has not been fetched)",
}

// imageFault turns a complaint about an image into the fault it is.
func imageFault(file string, err error) (fault.Fault, bool) {
	var e *nifti.Error
	if !errors.As(err, &e) {
		return fault.Fault{}, false
	}
	kind := e.Kind
	if _, ok := fault.Lookup(kind); !ok {
		kind = "image-header"
	}
	return fault.New(kind, file, e.Field, e.Found, e.Expected, imageRemedies[kind]), true
}

// weigh gives faults the level that the settings leave them: those about slice
// timing fall away when no slice is moved, an accepted one becomes a warning.
func (s Settings) weigh(faults []fault.Fault) []fault.Fault {
	var out []fault.Fault
	for _, f := range faults {
		k, _ := fault.Lookup(f.ID)
		if k.TimingOnly && s.Time == "none" {
			continue
		}
		if k.Acceptable && s.hasAccepted(f.ID) && f.Level == fault.Refuse {
			f.Level = fault.Warn
		}
		if !slices.Contains(out, f) {
			out = append(out, f)
		}
	}
	return out
}

// settle makes the plan of one run out of what was found and what was asked.
func settle(ds *dataset.Dataset, s *source, echoes []*source, req Request) (*Plan, error) {
	set := req.Settings
	p := &Plan{
		Dataset: ds, Run: s.run, Pose: s.run, Settings: set,
		Header: s.header, Acq: s.acq, Err: s.err,
		Inputs: slices.Clone(s.inputs),
	}
	found := slices.Clone(s.faults)
	pose := s
	if set.Motion != "none" && len(echoes) > 1 {
		pose = shortest(echoes)
	}
	p.Pose, p.poseHeader = pose.run, pose.header
	if pose != s {
		found = append(found, p.holdAgainstPose(pose)...)
		for _, in := range pose.inputs {
			if in.Role == "series" {
				in.Role = "pose-series"
			}
			if !slices.ContainsFunc(p.Inputs, func(have Input) bool { return have.Path == in.Path }) {
				p.Inputs = append(p.Inputs, in)
			}
		}
		if p.Err == nil {
			p.Err = pose.err
		}
	}
	if p.Header != nil {
		nx, ny, nz, nt := p.Header.Size()
		p.Grid = realign.Grid{N: [3]int{nx, ny, nz}, Affine: p.Header.Affine()}
		p.Volumes = max(0, nt-set.Skip)
		found = append(found, p.settleTiming(nt)...)
		found = append(found, p.fewVolumes(nt)...)
		found = append(found, p.findReference()...)
		if need := p.Memory(1); req.Memory > 0 && need > req.Memory {
			found = append(found, fault.New("memory-short", p.Run.File, "", bytesUp(need)+" needed",
				"at most "+Bytes(req.Memory), "give --memory a larger size, or run it on a machine with more memory"))
		}
	}
	switch {
	case !set.Events || p.Header == nil:
	case p.Run.EventsFault != nil:
		found = append(found, *p.Run.EventsFault)
	case p.Run.Events != "":
		found = append(found, p.readEvents()...)
	}
	if ds.Derivative {
		found = []fault.Fault{notRaw("dataset_description.json")}
	}
	p.Faults = set.weigh(found)
	p.Outputs = outputsOf(p)
	return p, nil
}

// shortest returns the echo that the pose is estimated on: the one with the
// shortest known EchoTime, else the one with the lowest echo index. Signal, and
// the share of the head that still has some, is greatest there.
func shortest(echoes []*source) *source {
	index := func(s *source) int {
		label, _ := s.run.Entities.Get("echo")
		n, err := strconv.Atoi(label)
		if err != nil {
			return 1 << 30
		}
		return n
	}
	known := true
	for _, e := range echoes {
		known = known && e.echoTime > 0
	}
	best := echoes[0]
	for _, e := range echoes[1:] {
		switch {
		case known && e.echoTime != best.echoTime:
			if e.echoTime < best.echoTime {
				best = e
			}
		case index(e) < index(best):
			best = e
		}
	}
	return best
}

// holdAgainstPose returns the faults of the series that the pose is to come
// from, as far as they keep this run from being processed.
func (p *Plan) holdAgainstPose(pose *source) []fault.Fault {
	var out []fault.Fault
	for _, f := range pose.faults {
		if strings.HasPrefix(f.ID, "image-") {
			out = append(out, f)
		}
	}
	if p.Header != nil && pose.header != nil {
		ax, ay, az, at := p.Header.Size()
		bx, by, bz, bt := pose.header.Size()
		if a, b := [4]int{ax, ay, az, at}, [4]int{bx, by, bz, bt}; a != b {
			out = append(out, fault.New("image-size", p.Run.File, "dim", fmt.Sprint(a),
				fmt.Sprintf("%v, as in the shortest echo %s", b, pose.run.File),
				"convert the echoes again; all echoes of one run have one size"))
		} else if !sameAffine(p.Header.Affine(), pose.header.Affine(), [3]int{ax, ay, az}) {
			out = append(out, fault.New("image-affine", p.Run.File, "sform or qform", "another grid in the world",
				"that of the shortest echo "+pose.run.File,
				"convert the echoes again; all echoes of one run stand on one grid"))
		}
	}
	return out
}

// settleTiming fills in the schedule and the time axis of the output. It raises
// timing-conflict for an instant asked for that lies in no volume of this run; others may have longer ones.
func (p *Plan) settleTiming(nt int) (faults []fault.Fault) {
	a, set := p.Acq, p.Settings
	t := &p.Timing
	t.TR = a.RepetitionTime
	p.Schedule = slicetime.Schedule{Times: a.SliceTimes, Axis: a.SliceAxis, TR: a.RepetitionTime}
	onset := func(raw int) float64 {
		if len(a.VolumeOnsets) == nt {
			return a.VolumeOnsets[raw] - a.VolumeOnsets[0]
		}
		return float64(float64(raw) * a.RepetitionTime) // not to be fused with what is added
	}
	times := a.SliceTimes
	equal := len(times) > 0 && slices.Max(times) == slices.Min(times)
	usable := len(times) > 0 && len(times) == p.Grid.N[a.SliceAxis]
	middle := (a.RepetitionTime - a.DelayTime) / 2 // of a volume whose slices have no times
	switch {
	case len(times) > 0:
		middle = p.Schedule.Middle()
	case a.FrameDuration > 0:
		middle = a.FrameDuration / 2
	}
	t.Temporal = set.Time != "none" && usable && !equal && !a.ThreeDimensional
	// An acquisition in three dimensions takes as long as its volume does: it
	// has no slices to move, but no one instant either.
	t.AtOneInstant = t.Temporal || (equal && !a.ThreeDimensional)
	switch {
	case set.Time == "none":
	case equal && !a.ThreeDimensional:
		t.Origin = times[0] // nothing is moved, so this is where they stand
	case !t.Temporal:
	case set.TimeOrigin.Word == "middle":
		t.Origin = middle
	case set.TimeOrigin.Word == "start":
		t.Origin = 0
	default:
		t.Origin = set.TimeOrigin.Seconds
		if a.RepetitionTime > 0 && t.Origin > a.RepetitionTime {
			faults = append(faults, fault.New("timing-conflict", p.Run.File, "--time-origin", fmt.Sprintf("%g s", t.Origin),
				fmt.Sprintf("an instant within a volume, from 0 to its repetition time of %g s", a.RepetitionTime),
				"give --time-origin middle or an earlier instant, or leave this run out"))
		}
	}
	if p.Volumes == 0 {
		return faults
	}
	t.StartTime = onset(set.Skip) + t.Origin
	// The instant a row of the pose table stands for.
	at := middle
	if t.Temporal {
		at = t.Origin
	}
	t.Rows = make([]float64, p.Volumes)
	for n := range t.Rows {
		t.Rows[n] = onset(set.Skip+n) + at
	}
	if len(a.VolumeOnsets) == nt {
		t.Onsets = make([]float64, p.Volumes)
		for n := range t.Onsets {
			t.Onsets[n] = onset(set.Skip + n)
		}
	}
	return faults
}

// fewVolumes raises volumes-few for what was asked of the run.
func (p *Plan) fewVolumes(nt int) []fault.Fault {
	set := p.Settings
	need, what, remedy := 1, "one volume after those skipped", "give a smaller --skip"
	if set.Motion != "none" && need < 2 {
		need, what, remedy = 2, "at least 2 to estimate motion", "leave this run out, or give --motion none"
	}
	// Slice times that are missing or wrong are faults of their own; here
	// only what a sound run would need counts.
	moved := p.Timing.Temporal || (set.Time != "none" && len(p.Acq.SliceTimes) == 0 && !p.Acq.ThreeDimensional)
	if moved && need < slicetime.MinVolumes {
		need, what, remedy = slicetime.MinVolumes, fmt.Sprintf("at least %d to interpolate in time", slicetime.MinVolumes), "leave this run out, or give --time none"
	}
	if i := set.Reference.Index; set.Reference.Word == "" && i+1 > need {
		need, what, remedy = i+1, fmt.Sprintf("at least %d for --reference %d", i+1, i), "give the index of a volume that the run has, counted after those skipped"
	}
	if p.Volumes >= need {
		return nil
	}
	have := fmt.Sprintf("%d", nt)
	if set.Skip > 0 {
		have += fmt.Sprintf(", %d after those skipped", p.Volumes)
	}
	return []fault.Fault{fault.New("volumes-few", p.Run.File, "dim[4]", have, what, remedy)}
}

// findReference looks for the single-band reference when it is asked for.
func (p *Plan) findReference() []fault.Fault {
	if p.Settings.Reference.Word != "sbref" {
		return nil
	}
	const remedy = "give another --reference, or leave this run out"
	ref := p.Pose.SBRef
	if f := p.Pose.SBRefFault; f != nil {
		return []fault.Fault{*f}
	}
	if ref == "" {
		return []fault.Fault{fault.New("reference-missing", p.Pose.File, "", "no sbref of this run",
			"an image named as the run is, with the suffix sbref", remedy)}
	}
	full := p.Dataset.Path(ref)
	in := Input{Role: "reference-series", Path: ref}
	in.stamp, _ = stampOf(full)
	p.Inputs = append(p.Inputs, in)
	h, err := nifti.ReadHeader(full)
	if f, isFault := imageFault(ref, err); isFault {
		return []fault.Fault{f}
	}
	if err != nil {
		if p.Err == nil {
			p.Err = &IOError{Path: ref, Step: "reading the header", Err: err}
		}
		return nil
	}
	nx, ny, nz, nt := h.Size()
	if nt > 1 {
		return []fault.Fault{fault.New("image-size", ref, "dim[4]", fmt.Sprintf("%d volumes", nt), "one volume, to be the reference", remedy)}
	}
	want := p.Grid
	if p.poseHeader != nil {
		want.Affine = p.poseHeader.Affine()
	}
	if (realign.Grid{N: [3]int{nx, ny, nz}}).N != want.N || !sameAffine(h.Affine(), want.Affine, want.N) {
		return []fault.Fault{fault.New("reference-missing", ref, "", "an sbref on another grid",
			"the size and affine of "+p.Pose.File, remedy)}
	}
	return nil
}

// gridTolerance is how far apart, in mm, two affines may put a corner of the
// grid and still count as one: the rounding of float32 quaternions reaches
// 0.018 mm at 90 mm (computed, see the NIfTI notes in nifti/doc.go).
const gridTolerance = 0.05

func sameAffine(a, b [16]float64, n [3]int) bool {
	for corner := range 8 {
		var d [3]float64
		for axis := range 3 {
			c := [4]float64{0, 0, 0, 1}
			for i := range 3 {
				if corner>>i&1 == 1 {
					c[i] = float64(n[i] - 1)
				}
			}
			for i := range 4 {
				d[axis] += float64((a[4*axis+i] - b[4*axis+i]) * c[i])
			}
		}
		if float64(d[0]*d[0])+float64(d[1]*d[1])+float64(d[2]*d[2]) > gridTolerance*gridTolerance {
			return false
		}
	}
	return true
}

// readEvents takes in the events table; it is small, and what is wrong with it
// is better known before the run starts.
func (p *Plan) readEvents() []fault.Fault {
	in := Input{Role: "events", Path: p.Run.Events}
	data, err := readSmall(p.Dataset.Path(in.Path), &in.stamp)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return []fault.Fault{fault.New("image-absent", in.Path, "", "a link to a file that is not there", "the events table itself",
			"fetch it (an annexed file that has not been fetched), or leave --events out")}
	case errors.Is(err, errTooLarge):
		return []fault.Fault{fault.New("sidecar-syntax", in.Path, "", "more than 16 MiB", "a table of events", "mend the table, or leave --events out")}
	case err != nil:
		if p.Err == nil {
			p.Err = &IOError{Path: in.Path, Err: err}
		}
		return nil
	}
	sum := sha256.Sum256(data)
	in.sha256 = hex.EncodeToString(sum[:])
	p.Inputs = append(p.Inputs, in)
	p.events = data
	_, faults := moveEvents(in.Path, data, p.Timing.StartTime)
	return faults
}

// outputsOf names the files of a run, the record last.
func outputsOf(p *Plan) []Output {
	o := func(role, desc, suffix, ext string) Output {
		return Output{Role: role, Path: dataset.OutputPath(p.Run, desc, suffix, ext)}
	}
	out := []Output{
		o("steady-series", "steady", "bold", ".nii.gz"),
		o("steady-sidecar", "steady", "bold", ".json"),
		o("reference", "steady", "reference", ".nii.gz"),
		o("reference-sidecar", "steady", "reference", ".json"),
		o("mask", "head", "mask", ".nii.gz"),
		o("mask-sidecar", "head", "mask", ".json"),
		o("pose-table", "steady", "pose", ".tsv"),
		o("pose-description", "steady", "pose", ".json"),
	}
	if p.Settings.Motion == "path" {
		out = append(out, o("shots-table", "shots", "pose", ".tsv"), o("shots-description", "shots", "pose", ".json"))
	}
	out = append(out,
		o("quality", "steady", "quality", ".json"),
		o("raw-tsnr", "raw", "tsnr", ".nii.gz"),
		o("steady-tsnr", "steady", "tsnr", ".nii.gz"),
	)
	if p.Settings.Events && p.Run.Events != "" {
		out = append(out, o("events", "steady", "events", ".tsv"))
	}
	return append(out, o("record", "steady", "prov", ".json"))
}

// What says in a few words what steady does to the run: a plan, made before it starts.
func (p *Plan) What() string {
	if p.Err != nil {
		return "cannot be read"
	}
	if ids := p.Refusals(); len(ids) > 0 {
		var names []string
		for _, f := range ids {
			if !slices.Contains(names, f.ID) {
				names = append(names, f.ID)
			}
		}
		return "refused: " + strings.Join(names, ", ")
	}
	poses := "a pose a volume"
	if p.Settings.Motion == "path" {
		poses = "a pose an excitation"
	}
	return p.steps(poses)
}

// did says what steady has done to the run, once it is known whether the poses are those
// of a path.
func (p *Plan) did(po *posed) string {
	switch {
	case po.est == nil || p.Settings.Motion != "path":
		return p.What()
	case !po.path.Used:
		return p.steps("one pose a volume (a pose an excitation was asked for, but: " + po.path.Reason + ")")
	case !po.path.Settled:
		return p.steps("a pose an excitation (not settled)")
	}
	return p.steps("a pose an excitation")
}

// steps joins the steps of the run, poses being what was estimated.
func (p *Plan) steps(poses string) string {
	var parts []string
	if p.Timing.Temporal {
		parts = append(parts, fmt.Sprintf("%s to %.4g s", p.Settings.Time, p.Timing.Origin))
	} else {
		parts = append(parts, "no slice timing")
	}
	if p.Settings.Motion == "none" {
		parts = append(parts, "no motion correction")
	} else {
		m := poses + " against " + p.Settings.Reference.String()
		if p.Pose.File != p.Run.File {
			m += " on echo " + func() string { l, _ := p.Pose.Entities.Get("echo"); return l }()
		}
		parts = append(parts, m, p.Settings.Space, p.Settings.Order)
	}
	return strings.Join(parts, ", ")
}

// String gives the reference as an option value.
func (r Standard) String() string {
	if r.Word != "" {
		return r.Word
	}
	return strconv.Itoa(r.Index)
}
