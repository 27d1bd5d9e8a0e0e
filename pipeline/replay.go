package pipeline

// Replay: runs computed again from their records, and held against what is there.

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"evenkeel/dataset"
	"evenkeel/nifti"
	"evenkeel/provenance"
)

// A Replay computes the runs that records in Out tell of once more, each from its
// record alone: the inputs and the settings it names, nothing that Out holds. What comes out is
// held against Out byte for byte.
type Replay struct {
	Out, Raw string
	Scratch  string // folder for what is computed, one run at a time taken away again; "": one of the system's own
	Jobs     int    // as in [Job], and so the next three
	Cores    int
	Memory   int64
	Observe  func(Event)
}

// Verdict says what came of a run that was to be computed again.
type Verdict int

const (
	NotComputed Verdict = iota
	Same
	NotSame
)

// Replayed counts the runs of a [Replay].
type Replayed struct {
	Runs  int // records that could be read
	Same  int // computed again, every file and the record's account the same
	Other int // computed again, something differs
}

// Missed is the number of runs that could not be computed again.
func (r Replayed) Missed() int { return r.Runs - r.Same - r.Other }

// Run replays every record. Findings are of the kinds [provenance.ReplayDiffers] and
// [provenance.NotReplayed], in the order of records. It fails where nothing can be started,
// where the scratch folder cannot be written, and with the error of ctx.
func (r Replay) Run(ctx context.Context) ([]provenance.Finding, Replayed, error) {
	var count Replayed
	var findings []provenance.Finding
	find := func(kind, record, file, found, expected string) {
		findings = append(findings, provenance.Finding{Kind: kind, Record: record, File: file, Found: found, Expected: expected})
	}
	ds, err := dataset.Open(r.Raw)
	if err != nil {
		return nil, count, err
	}
	scratch, err := os.MkdirTemp(r.Scratch, "evenkeel-replay-")
	if err != nil {
		return nil, count, creating(r.Scratch, err)
	}
	defer os.RemoveAll(scratch)

	groups, err := r.groups(&count, find)
	if err != nil {
		return nil, count, err
	}
	for _, g := range groups {
		if err := r.group(ctx, ds, scratch, g, &count, find); err != nil {
			return findings, count, err
		}
	}
	slices.SortStableFunc(findings, func(a, b provenance.Finding) int { return strings.Compare(a.Record, b.Record) })
	return findings, count, nil
}

// recorded is one record of OUT.
type recorded struct {
	path   string // relative to OUT
	record *provenance.Record
}

// replayGroup holds the records of one group of settings, which are planned together.
type replayGroup struct {
	settings Settings
	records  map[string]recorded // by path
	order    []string
}

type finder func(kind, record, file, found, expected string)

// groups sorts the records by their settings.
func (r Replay) groups(count *Replayed, find finder) (groups []*replayGroup, err error) {
	at := map[string]*replayGroup{}
	err = walkRecords(r.Out, func(rel string, rec *provenance.Record) {
		count.Runs++
		set := DefaultSettings()
		if err := set.ReadSettings(rel, rec.Settings); err != nil {
			find(provenance.NotReplayed, rel, rel, err.Error(), "settings that this version ("+Version+") knows")
			return
		}
		key, err := json.Marshal(set)
		if err != nil {
			panic("pipeline: settings cannot be written as JSON: " + err.Error())
		}
		g := at[string(key)]
		if g == nil {
			g = &replayGroup{settings: set, records: map[string]recorded{}}
			at[string(key)] = g
			groups = append(groups, g)
		}
		g.records[rel] = recorded{rel, rec}
		g.order = append(g.order, rel)
	})
	return groups, err
}

// group replays the records of one group.
func (r Replay) group(ctx context.Context, ds *dataset.Dataset, scratch string, g *replayGroup, count *Replayed, find finder) error {
	all, err := Survey(ctx, ds, Request{Settings: g.settings, Memory: r.Memory, Workers: r.cores()})
	var none *NothingSelected
	if err != nil && !errors.As(err, &none) {
		return err
	}
	var plans []*Plan
	planned := map[string]bool{}
	for _, p := range all {
		rel := p.Output("record")
		if _, ok := g.records[rel]; !ok {
			continue
		}
		planned[rel] = true
		if !p.Runs() {
			found := "the run fails before it starts"
			if f := p.Refusals(); len(f) > 0 {
				found = "refused: " + f[0].ID
			}
			find(provenance.NotReplayed, rel, p.Run.File, found, "a run that can be done")
			continue
		}
		plans = append(plans, p)
	}
	for _, rel := range g.order {
		if !planned[rel] {
			find(provenance.NotReplayed, rel, seriesOf(g.records[rel].record), "not in the dataset", "the series that the record names")
		}
	}
	if len(plans) == 0 {
		return ctx.Err()
	}
	var failed error
	_, err = Steady(ctx, ds, plans, Job{
		Out: scratch, Jobs: r.Jobs, Cores: r.Cores, Memory: r.Memory,
		Observe: func(e Event) { // one at a time
			if e.Kind != RunEnded || failed != nil {
				if r.Observe != nil {
					r.Observe(e)
				}
				return
			}
			rec := g.records[e.Plan.Output("record")]
			e.Verdict = NotComputed
			defer func() {
				if r.Observe != nil {
					r.Observe(e)
				}
			}()
			switch e.Outcome.State {
			case Done:
				same := true
				check := func(kind, record, file, found, expected string) {
					same = false
					find(kind, record, file, found, expected)
				}
				if failed = r.hold(rec, scratch, e.Plan, check); failed != nil {
					return
				}
				if same {
					count.Same++
					e.Verdict = Same
				} else {
					count.Other++
					e.Verdict = NotSame
				}
			case RefusedRun:
				found := "refused"
				if len(e.Outcome.Faults) > 0 {
					found = "refused: " + e.Outcome.Faults[len(e.Outcome.Faults)-1].ID
				}
				find(provenance.NotReplayed, rec.path, e.Plan.Run.File, found, "a run that can be done")
			case Failed:
				var io *IOError
				if errors.As(e.Outcome.Err, &io) {
					failed = e.Outcome.Err
					return
				}
				find(provenance.NotReplayed, rec.path, e.Plan.Run.File, fmt.Sprint(e.Outcome.Err), "a run that can be done")
			}
		},
	})
	if ctx.Err() != nil {
		return ctx.Err()
	}
	if failed != nil {
		return failed
	}
	return err
}

func (r Replay) cores() int {
	if r.Cores > 0 {
		return r.Cores
	}
	return Cores()
}

// seriesOf names the raw series that a record is about.
func seriesOf(r *provenance.Record) string {
	for _, f := range r.Inputs {
		if f.Role == "series" {
			return f.Path
		}
	}
	return r.Run
}

// hold compares what was computed for a run with what is there, and takes it away.
func (r Replay) hold(rec recorded, scratch string, p *Plan, find finder) error {
	name := func(root, rel string) string { return filepath.Join(root, filepath.FromSlash(rel)) }
	fresh := name(scratch, p.Output("record"))
	again, err := readRecord(fresh)
	if err != nil {
		return &IOError{Path: fresh, Step: "reading back", Err: err}
	}
	by := ""
	if a, b := buildOf(rec.record.Software), buildOf(again.Software); a != b {
		by = fmt.Sprintf("; written by %s, computed again by %s", a, b)
	}
	made := map[string]bool{}
	for _, f := range again.Outputs {
		made[f.Path] = true
	}
	for _, f := range rec.record.Outputs {
		if !made[f.Path] {
			find(provenance.ReplayDiffers, rec.path, f.Path, "not written"+by, "written, as recorded")
			continue
		}
		delete(made, f.Path)
		how, err := difference(name(r.Out, f.Path), name(scratch, f.Path))
		if errors.Is(err, fs.ErrNotExist) {
			continue // missing: the audit itself says so
		}
		if err != nil {
			return &IOError{Path: f.Path, Step: "comparing", Err: err}
		}
		if how != "" {
			find(provenance.ReplayDiffers, rec.path, f.Path, how+by, "the same bytes")
		}
	}
	for _, f := range again.Outputs {
		if made[f.Path] {
			find(provenance.ReplayDiffers, rec.path, f.Path, "written"+by, "not written, as recorded")
		}
	}
	for _, part := range accountsDiffer(rec.record, again) {
		find(provenance.ReplayDiffers, rec.path, rec.path, "another account of "+part+by, "the same")
	}
	for _, f := range again.Outputs {
		if err := os.Remove(name(scratch, f.Path)); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return &IOError{Path: f.Path, Step: "removing", Err: err}
		}
	}
	return os.Remove(fresh)
}

// buildOf names a build of the program.
func buildOf(s provenance.Software) string {
	name := "version " + s.Version
	if s.Revision != "" {
		name += ", revision " + s.Revision[:min(12, len(s.Revision))]
	}
	if s.Modified {
		name += " with changes"
	}
	return name
}

// CheckScratch refuses a folder for a replay that lies in OUT or in the raw dataset.
func CheckScratch(out, raw, scratch string) error {
	if scratch == "" {
		return nil
	}
	for _, in := range [2]struct{ what, root string }{{"OUT", out}, {"the raw dataset", raw}} {
		a, b, err := realPaths(in.root, scratch)
		if err != nil {
			return err
		}
		if rel, err := filepath.Rel(a, b); err == nil && (rel == "." || filepath.IsLocal(rel)) {
			return &UsageError{Where: "--scratch", Message: scratch + " lies on or inside " + in.what + "; give a folder outside it"}
		}
	}
	return nil
}

// accountsDiffer names the parts of two records that differ though they are about one
// run: all but the software and the log.
func accountsDiffer(a, b *provenance.Record) (parts []string) {
	as := func(v any) string {
		data, err := json.Marshal(v)
		if err != nil {
			panic("pipeline: a part of a record cannot be written as JSON: " + err.Error())
		}
		return string(data)
	}
	for _, part := range []struct {
		name string
		a, b any
	}{
		{"the inputs", a.Inputs, b.Inputs}, {"the settings", a.Settings, b.Settings}, {"the faults", a.Faults, b.Faults},
		{"the faults accepted", a.Accepted, b.Accepted}, {"the sidecar values", a.Values, b.Values},
	} {
		if as(part.a) != as(part.b) {
			parts = append(parts, part.name)
		}
	}
	names := func(s []provenance.Stage) (n []string) {
		for _, x := range s {
			n = append(n, x.Name)
		}
		return n
	}
	if !slices.Equal(names(a.Stages), names(b.Stages)) {
		return append(parts, "what was done: "+strings.Join(names(a.Stages), ", "))
	}
	for i := range a.Stages {
		if as(a.Stages[i]) != as(b.Stages[i]) {
			parts = append(parts, "stage "+a.Stages[i].Name)
		}
	}
	return parts
}

// difference says how two files differ, "" if they do not: where an image differs first and
// by how much, which line of a text is the first that differs. The error is that of reading the
// first, or one of fs.ErrNotExist.
func difference(was, now string) (string, error) {
	same, err := sameBytes(was, now)
	if same || err != nil {
		return "", err
	}
	switch {
	case strings.HasSuffix(was, ".nii"), strings.HasSuffix(was, ".nii.gz"):
		return imageDifference(was, now), nil
	default:
		return lineDifference(was, now)
	}
}

func sameBytes(was, now string) (bool, error) {
	a, err := os.Open(was)
	if err != nil {
		return false, err
	}
	defer a.Close()
	b, err := os.Open(now)
	if err != nil {
		return false, err
	}
	defer b.Close()
	const block = 1 << 16
	x, y := make([]byte, block), make([]byte, block)
	for {
		n, errA := io.ReadFull(a, x)
		m, errB := io.ReadFull(b, y)
		if !bytes.Equal(x[:n], y[:m]) {
			return false, nil
		}
		end := func(err error) bool { return err == io.EOF || err == io.ErrUnexpectedEOF }
		switch {
		case errA != nil && !end(errA):
			return false, errA
		case errB != nil && !end(errB):
			return false, errB
		case errA != nil && errB != nil:
			return true, nil
		case errA != nil || errB != nil:
			return false, nil
		}
	}
}

// imageDifference compares volume by volume.
func imageDifference(was, now string) string {
	a, err := nifti.OpenStream(was, nil, 0, 1)
	if err != nil {
		return "no image that can be read"
	}
	defer a.Close()
	b, err := nifti.OpenStream(now, nil, 0, 1)
	if err != nil {
		return "nothing to compare it with"
	}
	defer b.Close()
	sizeOf := func(h *nifti.Header) [4]int {
		x, y, z, t := h.Size()
		return [4]int{x, y, z, t}
	}
	if sizeOf(a.Header()) != sizeOf(b.Header()) {
		return fmt.Sprintf("an image of %v", sizeOf(a.Header()))
	}
	n := sizeOf(a.Header())
	nv := n[0] * n[1] * n[2]
	x, y := make([]float32, nv), make([]float32, nv)
	first, voxels, most := -1, 0, 0.0
	for t := range a.Volumes() {
		u, errA := a.Next()
		if errA != nil {
			return fmt.Sprintf("volume %d cannot be read", t)
		}
		v, errB := b.Next()
		if errB != nil {
			return fmt.Sprintf("volume %d has nothing to compare it with", t)
		}
		u.Widen(x, 0)
		v.Widen(y, 0)
		u.Release()
		v.Release()
		for i := range x {
			if math.Float32bits(x[i]) != math.Float32bits(y[i]) {
				if first < 0 {
					first = t
				}
				voxels++
				most = max(most, math.Abs(float64(x[i])-float64(y[i])))
			}
		}
	}
	if first < 0 {
		return "the same voxels, but other bytes: the header, or how they are compressed"
	}
	s := "s that differ"
	if voxels == 1 {
		s = " that differs"
	}
	return fmt.Sprintf("%d voxel%s, by %s at most, the first in volume %d", voxels, s, strconv.FormatFloat(most, 'g', 4, 64), first)
}

// lineDifference names the first line that differs.
func lineDifference(was, now string) (string, error) {
	a, err := os.Open(was)
	if err != nil {
		return "", err
	}
	defer a.Close()
	b, err := os.Open(now)
	if err != nil {
		return "", err
	}
	defer b.Close()
	x, y := bufio.NewReader(a), bufio.NewReader(b)
	for line := 1; ; line++ {
		u, errA := x.ReadString('\n')
		v, errB := y.ReadString('\n')
		switch {
		case u != v:
			return fmt.Sprintf("line %d to be the first that differs", line), nil
		case errA != nil && errA != io.EOF:
			return "", errA
		case errA != nil || errB != nil:
			return fmt.Sprintf("line %d to be the first that differs", line), nil
		}
	}
}
