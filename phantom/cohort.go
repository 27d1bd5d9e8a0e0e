package phantom

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"

	"evenkeel/nifti"
)

// The cohort's one grid: small enough to be processed in seconds, and 135 mm
// high, so that the field cuts the top and bottom of the 150 mm head as real
// slabs do. The three runs differ in affine, schedule and motion.
var (
	cohortGrid  = [3]int{40, 48, 30}
	cohortVoxel = [3]float64{4, 4, 4.5} // mm
)

const (
	cohortVolumes = 60
	cohortNoise   = 9 // of a signal of 900: a temporal signal-to-noise of 100
	// cohortSlope is one stored unit: a power of two, so that scaling is exact,
	// far below the noise, and int16 reaches 2047 with it (the head's brightest
	// spot is about 1600).
	cohortSlope  = 1. / 16
	cohortTask   = "watch"
	cohortJerk   = 61.1 // s: half-way through volume 30 of 2 s
	degree       = math.Pi / 180
	toneShare    = 0.03
	lanternShare = 0.02
)

// TrueRun is what is exactly known about one run of the demo cohort.
type TrueRun struct {
	Stem string // raw file name without _bold.nii.gz
	Scan *Scan
	// Tone is the course of the sinusoidal regions, which reach every slice:
	// the blobs Scan.Blobs[:Tones]. Series standing at one instant show it with
	// the phase Tone.Phase in every slice; raw ones with Tone.PhaseAt(slice time).
	Tone  Tone
	Tones int
	// Events drive the one remaining blob through Response; its region and those
	// of the tone do not overlap. They stand in the run's events table.
	Events []Event
	// Jerks are the times (s) of sudden displacements: a volume that one falls
	// into has no one pose.
	Jerks []float64
}

// ToneWeight says how much of the tone a point of the head frame (mm) carries:
// the sum of the weights of its regions. The head frame is the scanner's at
// t = 0, where every run's motion is the identity.
func (r *TrueRun) ToneWeight(x [3]float64) float64 {
	var w float64
	for i := range r.Scan.Blobs[:r.Tones] {
		w += r.Scan.Blobs[i].Weight(x)
	}
	return w
}

// runPlan is one run of the cohort and what its files say of it.
type runPlan struct {
	TrueRun
	subject   string
	sliceCode int32 // NIfTI-1 slice_code
	shots     int
	own       []field // sidecar fields beside the image; those at the root are inherited
}

type field struct {
	key   string
	value any
}

// Cohort gives what [WriteCohort] writes, without writing it: three keepers of
// an invented lighthouse, one run each, in the order of their names.
//
//	sub-alder  interleaved, left-handed axial; a slow walk
//	sub-birch  multiband 3, TR 1 s, left-handed oblique; a walk and breathing
//	sub-cedar  last slice first (a negative SliceEncodingDirection), right-handed;
//	           a slow walk and a jerk in the middle of volume 30
func Cohort() []TrueRun {
	var runs []TrueRun
	for _, p := range cohort() {
		runs = append(runs, p.TrueRun)
	}
	return runs
}

func cohort() []runPlan {
	n := cohortGrid[2]
	plan := func(subject string, seed uint64, tr float64, times []float64, tilt [3]float64, mirror bool, tone Tone, events []Event, motion Motion) runPlan {
		blobs := toneRegions(tone, tilt)
		blobs = append(blobs, Blob{Centre: [3]float64{0, -58, -4}, SD: 8, Amplitude: lanternShare, Course: Response(events)})
		return runPlan{subject: subject, TrueRun: TrueRun{
			Stem: "sub-" + subject + "_task-" + cohortTask,
			Scan: &Scan{Head: NewHead(seed), N: cohortGrid, NT: cohortVolumes, Affine: cohortAffine(tilt, mirror), TR: tr, SliceAxis: 2,
				SliceTimes: times, Motion: motion, Blobs: blobs, NoiseSD: cohortNoise, Seed: seed},
			Tone: tone, Tones: len(blobs) - 1, Events: events,
		}}
	}
	flashes := func(total float64) (e []Event) {
		for on := 9.0; on+12 <= total; on += 30 {
			e = append(e, Event{on, 12})
		}
		return e
	}
	neck := [3]float64{0, -20, -60} // about where a lying head turns

	a := plan("alder", 1, 2, Interleaved(n, 2), [3]float64{}, true, Tone{0.043, 0.6}, flashes(120),
		Walk(11, 0.6, 0.6*degree, 0.05, neck))
	a.sliceCode, a.shots = 3, n

	b := plan("birch", 2, 1, Multiband(n, 3, 1), [3]float64{-18 * degree, 4 * degree, 3 * degree}, true, Tone{0.071, -1.1}, flashes(60),
		Compose(Walk(12, 0.5, 0.5*degree, 0.05, neck), Breathing(0.3, [3]float64{0, 0.05, 0.12}, [3]float64{0.1 * degree, 0, 0}, neck)))
	b.shots = n / 3
	b.own = []field{{"RepetitionTime", 1.0}, {"MultibandAccelerationFactor", 3}, {"SliceTiming", b.Scan.SliceTimes}}

	// Times by slice index fall from the last slice to the first; the sidecar
	// lists them rising and says "k-".
	c := plan("cedar", 3, 2, Reversed(Sequential(n, 2)), [3]float64{}, false, Tone{0.037, 2.2}, flashes(120),
		Jerk(Walk(13, 0.4, 0.4*degree, 0.04, neck), cohortJerk, [3]float64{1.5, -2, 1}, [3]float64{2 * degree, -1.5 * degree, 2.5 * degree}, neck))
	c.sliceCode, c.shots = 2, n
	c.Jerks = []float64{cohortJerk}
	c.own = []field{{"SliceEncodingDirection", "k-"}, {"SliceTiming", Sequential(n, 2)}}
	return []runPlan{a, b, c}
}

// toneRegions places sinusoidal activation left and right by turns, bottom to
// top of the field turned by tilt, so that every slice meets one.
func toneRegions(tone Tone, tilt [3]float64) []Blob {
	turn := Rigid([3]float64{}, tilt, [3]float64{})
	var blobs []Blob
	for i, z := range [7]float64{-54, -36, -18, 0, 18, 36, 54} {
		x := 26.0
		if math.Abs(z) > 50 {
			x = 14 // the head is narrow there
		}
		if i%2 == 1 {
			x = -x
		}
		blobs = append(blobs, Blob{Centre: Apply(turn, [3]float64{x, 8, z}), SD: 11, Amplitude: toneShare, Course: tone.At})
	}
	return blobs
}

// cohortAffine is the grid turned by tilt about the origin, on which it is
// centred; mirror makes it left-handed (first axis to the left). Its entries are
// float32 numbers, so that the file's sform is exactly what was simulated.
func cohortAffine(tilt [3]float64, mirror bool) [16]float64 {
	r := Rigid([3]float64{}, tilt, [3]float64{})
	a := Identity()
	for i := range 3 {
		var offset float64
		for k := range 3 {
			d := cohortVoxel[k]
			if k == 0 && mirror {
				d = -d
			}
			a[4*i+k] = float64(float32(r[4*i+k] * d))
			offset -= float64(a[4*i+k]*float64(cohortGrid[k]-1)) / 2
		}
		a[4*i+3] = float64(float32(offset))
	}
	return a
}

// header describes the run's image; qform and sform say the same to the
// accuracy of their float32 fields.
func (p *runPlan) header() *nifti.Header {
	s := p.Scan
	h := &nifti.Header{
		Version: 1, Datatype: nifti.Int16,
		Dim:      [8]int64{4, int64(s.N[0]), int64(s.N[1]), int64(s.N[2]), int64(s.NT), 1, 1, 1},
		Pixdim:   [8]float64{1, cohortVoxel[0], cohortVoxel[1], cohortVoxel[2], s.TR},
		DimInfo:  1 | 2<<2 | 3<<4, // frequency i, phase j, slice k
		SliceEnd: int64(s.N[2] - 1), SliceCode: p.sliceCode,
		SclSlope: cohortSlope, XYZTUnits: 2 | 8, // mm, s
		QformCode: 1, SformCode: 1, // scanner
	}
	if p.sliceCode != 0 { // no code can express multiband
		h.SliceDuration = float64(float32(s.TR / float64(p.shots)))
	}
	var r [9]float64
	for i := range 3 {
		for k := range 3 {
			h.Srow[i][k] = s.Affine[4*i+k]
			r[3*i+k] = s.Affine[4*i+k] / cohortVoxel[k]
		}
		h.Srow[i][3] = s.Affine[4*i+3]
		h.Qoffset[i] = s.Affine[4*i+3]
	}
	if det3(s.Affine) < 0 { // nifti1.h: a left-handed grid turns its third column
		h.Pixdim[0] = -1
		r[2], r[5], r[8] = -r[2], -r[5], -r[8]
	}
	for i, q := range quaternion(r) {
		h.Quatern[i] = float64(float32(q))
	}
	return h
}

// quaternion gives b, c, d of a rotation (row-major 3x3) with a >= 0: nifti1.h,
// "METHOD 2", from the largest of the four so that no small number divides.
func quaternion(r [9]float64) [3]float64 {
	a2, b2, c2, d2 := 1+r[0]+r[4]+r[8], 1+r[0]-r[4]-r[8], 1-r[0]+r[4]-r[8], 1-r[0]-r[4]+r[8] // 4a^2 ...
	var a, b, c, d float64
	switch {
	case a2 >= max(b2, c2, d2):
		f := 2 * math.Sqrt(a2)
		a, b, c, d = f/4, (r[7]-r[5])/f, (r[2]-r[6])/f, (r[3]-r[1])/f
	case b2 >= max(c2, d2):
		f := 2 * math.Sqrt(b2)
		a, b, c, d = (r[7]-r[5])/f, f/4, (r[1]+r[3])/f, (r[2]+r[6])/f
	case c2 >= d2:
		f := 2 * math.Sqrt(c2)
		a, b, c, d = (r[2]-r[6])/f, (r[1]+r[3])/f, f/4, (r[5]+r[7])/f
	default:
		f := 2 * math.Sqrt(d2)
		a, b, c, d = (r[3]-r[1])/f, (r[2]+r[6])/f, (r[5]+r[7])/f, f/4
	}
	if a < 0 {
		b, c, d = -b, -c, -d
	}
	return [3]float64{b, c, d}
}

const cohortReadme = `The Ebb Light: three keepers on watch
=====================================

An invented dataset. No person was scanned: a formula for a head was moved and
sampled slice by slice, each slice at its own time and pose, and noise was added.

Three keepers of a lighthouse that does not exist watch a dark sea. Now and then
the lantern flashes (events tables). Other regions rise and fall as slow sine
waves of one frequency in each run, so that the time of every slice can be read
from its phase.

  sub-alder   interleaved slices, repetition time 2 s; a slow drift of the head
  sub-birch   three slices at once, repetition time 1 s, tilted slab; drift and breathing
  sub-cedar   slices listed from the top ("k-"), repetition time 2 s; drift, and a
              jerk of about 3 mm and 4 degrees 61.1 s into the run

task-watch_bold.json at the root holds for every run; files deeper down add to it
and replace what differs.
`

// cohortFiles are the texts of the dataset, by path from its root.
func cohortFiles(plans []runPlan) []field {
	files := []field{
		{"dataset_description.json", object([]field{
			{"Name", "The Ebb Light: three keepers on watch (invented)"}, {"BIDSVersion", "1.11.1"}, {"DatasetType", "raw"}, {"License", "CC0"}})},
		{"README", cohortReadme},
		{"participants.tsv", "participant_id\tpost\nsub-alder\tkeeper\nsub-birch\tmate\nsub-cedar\tstoker\n"},
		{"participants.json", object([]field{{"post", map[string]string{"Description": "post at the lighthouse (invented)"}}})},
		{"task-watch_bold.json", object([]field{
			{"TaskName", cohortTask}, {"TaskDescription", "watching a dark sea; a lantern flashes now and then"},
			{"MagneticFieldStrength", 3}, {"MRAcquisitionType", "2D"}, {"EchoTime", 0.03}, {"FlipAngle", 70},
			{"RepetitionTime", 2}, {"PhaseEncodingDirection", "j-"}, {"EffectiveEchoSpacing", 0.0005}, {"ReconMatrixPE", cohortGrid[1]},
			{"TotalReadoutTime", 0.0235}, // 0.0005 (48 - 1)
			{"SliceTiming", Interleaved(cohortGrid[2], 2)}})},
		{"task-watch_events.json", object([]field{{"trial_type", map[string]any{"Description": "what happened",
			"Levels": map[string]string{"flash": "the lantern is lit"}}}})},
	}
	for _, p := range plans {
		base := "sub-" + p.subject + "/func/" + p.Stem
		if p.own != nil {
			files = append(files, field{base + "_bold.json", object(p.own)})
		}
		var b strings.Builder
		b.WriteString("onset\tduration\ttrial_type\n")
		for _, e := range p.Events {
			fmt.Fprintf(&b, "%g\t%g\tflash\n", e.Onset, e.Duration)
		}
		files = append(files, field{base + "_events.tsv", b.String()})
	}
	return files
}

// object writes a JSON object, one key a line in the order given; numbers in the
// shortest form that reads back as the same float64.
func object(fields []field) string {
	var b strings.Builder
	b.WriteString("{\n")
	for i, f := range fields {
		v, err := json.Marshal(f.value)
		if err != nil {
			panic("phantom: " + err.Error()) // constants of this file
		}
		end := ",\n"
		if i == len(fields)-1 {
			end = "\n"
		}
		fmt.Fprintf(&b, "  %q: %s%s", f.key, bytes.ReplaceAll(v, []byte(`,`), []byte(`, `)), end)
	}
	b.WriteString("}\n")
	return b.String()
}

// WriteCohort writes the invented demo cohort (see [Cohort]) as a raw BIDS
// dataset into dir, which must not exist or be empty, and returns what is true of
// it, in the order of the runs' names. Every file has the same bytes on every run
// and machine, for any number of workers. Whatever was written before an error or
// the end of ctx stays there.
func WriteCohort(ctx context.Context, dir string, workers int) ([]TrueRun, error) {
	switch entries, err := os.ReadDir(dir); {
	case err == nil && len(entries) > 0:
		return nil, fmt.Errorf("phantom: %s: the folder is not empty (found %s); name a new one", dir, entries[0].Name())
	case err != nil && !errors.Is(err, fs.ErrNotExist):
		return nil, fmt.Errorf("phantom: %w", err)
	}
	plans := cohort()
	for _, f := range cohortFiles(plans) {
		path := filepath.Join(dir, filepath.FromSlash(f.key))
		if err := os.MkdirAll(filepath.Dir(path), 0o777); err != nil {
			return nil, fmt.Errorf("phantom: %w", err)
		}
		if err := os.WriteFile(path, []byte(f.value.(string)), 0o666); err != nil {
			return nil, fmt.Errorf("phantom: %w", err)
		}
	}
	var runs []TrueRun
	for i := range plans {
		p := &plans[i]
		data, err := p.Scan.Simulate(ctx, workers)
		if err != nil {
			return nil, err
		}
		path := filepath.Join(dir, "sub-"+p.subject, "func", p.Stem+"_bold.nii.gz")
		if err := writeImage(path, p.header(), data); err != nil {
			return nil, fmt.Errorf("phantom: %w", err)
		}
		runs = append(runs, p.TrueRun)
	}
	return runs, nil
}

// writeImage writes the volumes of data one after another.
func writeImage(path string, h *nifti.Header, data []float32) (err error) {
	f, err := os.Create(path)
	if err != nil {
		return err
	}
	defer func() {
		if e := f.Close(); err == nil {
			err = e
		}
	}()
	w, err := nifti.NewWriter(f, h, true)
	if err != nil {
		return err
	}
	for size := int(h.Dim[1] * h.Dim[2] * h.Dim[3]); len(data) > 0; data = data[size:] {
		if err := w.WriteVolume(data[:size]); err != nil {
			return err
		}
	}
	return w.Close()
}
