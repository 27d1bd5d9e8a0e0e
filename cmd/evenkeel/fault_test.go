package main

import (
	"bytes"
	"encoding/json"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"evenkeel/fault"
	"evenkeel/nifti"
)

// A shown fault is one that a dataset on disk has.
type shown struct {
	build func(dir string)
	args  []string // options that the fault needs
	// running faults show themselves only while the run is processed; survey cannot know them.
	running bool
	exempt  string // why no dataset can show it yet
}

// with builds the crew's one run with something changed.
func with(change func(*sailor)) func(string) {
	return func(dir string) {
		s := newSailor()
		change(s)
		writeDataset(dir, s.files(theRun))
	}
}

// key sets one sidecar field; nil takes it away.
func key(k string, v any) func(string) {
	return with(func(s *sailor) {
		if v == nil {
			delete(s.sidecar, k)
		} else {
			s.sidecar[k] = v
		}
	})
}

// raw replaces files after a sound run was written; nil removes one.
func raw(files map[string][]byte) func(string) {
	return func(dir string) {
		writeDataset(dir, newSailor().files(theRun), files)
		for name, data := range files {
			if data == nil {
				os.Remove(filepath.Join(dir, filepath.FromSlash(name)))
			}
		}
	}
}

// bytesAt changes bytes of the sound image's file.
func bytesAt(off int, b ...byte) func(string) {
	image := newSailor().image()
	copy(image[off:], b)
	return raw(map[string][]byte{theRun + "_bold.nii": image})
}

func shownFaults() map[string]shown {
	times := newSailor().sidecar["SliceTiming"].([]float64)
	scaled := func(f float64) []float64 {
		out := slices.Clone(times)
		for i := range out {
			out[i] *= f
		}
		return out
	}
	equal := make([]float64, len(times))
	onsets := func(step func(i int) float64) []float64 {
		out := make([]float64, crewVolumes)
		for i := 1; i < crewVolumes; i++ {
			out[i] = out[i-1] + step(i)
		}
		return out
	}
	volumeTiming := func(v []float64) func(string) {
		return with(func(s *sailor) {
			delete(s.sidecar, "RepetitionTime")
			s.sidecar["VolumeTiming"] = v
			s.header.Pixdim[4] = 0
		})
	}
	pack := func(s *sailor) []byte { s.gzip = true; return s.image() }
	return map[string]shown{
		"tr-missing":          {build: key("RepetitionTime", nil)},
		"tr-mismatch":         {build: key("RepetitionTime", 2.1)},
		"tr-unit":             {build: key("RepetitionTime", 2000)},
		"tr-range":            {build: key("RepetitionTime", -2)},
		"volume-spacing":      {build: volumeTiming(onsets(func(i int) float64 { return 2 + float64(i%2) }))},
		"timing-conflict":     {build: key("VolumeTiming", onsets(func(int) float64 { return 2 }))},
		"slice-times-missing": {build: key("SliceTiming", nil)},
		"slice-times-count":   {build: key("SliceTiming", times[1:])},
		"slice-times-unit":    {build: key("SliceTiming", scaled(1000))},
		"slice-times-range":   {build: key("SliceTiming", append([]float64{-0.1}, times[1:]...))},
		"slice-times-equal":   {build: key("SliceTiming", equal)},
		"slice-spacing":       {build: key("SliceTiming", scaled(0.01))},
		"multiband-mismatch":  {build: key("MultibandAccelerationFactor", 2)},
		"slice-axis-conflict": {build: with(func(s *sailor) {
			s.header.DimInfo = 1 | 3<<2 | 2<<4
			s.sidecar["SliceEncodingDirection"] = "k"
			s.sidecar["PhaseEncodingDirection"] = "j"
		})},
		"phase-axis": {build: key("PhaseEncodingDirection", "k")},
		"readout-mismatch": {build: with(func(s *sailor) {
			s.sidecar["TotalReadoutTime"], s.sidecar["EffectiveEchoSpacing"], s.sidecar["ReconMatrixPE"] = 0.05, 0.0005, 24
		})},
		"volumes-few":       {build: with(func(s *sailor) { s.volumes(3) })},
		"three-dimensional": {build: with(func(s *sailor) { s.sidecar["MRAcquisitionType"] = "3D"; delete(s.sidecar, "SliceTiming") })},
		"private-field":     {build: key("PatientName", "Ahab")},
		"sidecar-syntax":    {build: raw(map[string][]byte{theRun + "_bold.json": []byte("{\n \"RepetitionTime\": 2,\n}")})},
		"sidecar-ambiguous": {build: raw(map[string][]byte{
			"task-watch_bold.json": []byte(`{"EchoTime":0.03}`), "bold.json": []byte(`{"EchoTime":0.04}`)})},
		"image-header":   {build: bytesAt(0, 1, 2, 3, 4)},
		"image-size":     {build: raw(map[string][]byte{theRun + "_bold.nii": newSailor().image()[:5000]})},
		"image-datatype": {build: bytesAt(70, 32, 0, 64, 0)}, // complex
		"image-affine":   {build: bytesAt(280, make([]byte, 48)...)},
		"image-compressed": {build: raw(map[string][]byte{theRun + "_bold.nii": nil, theRun + "_bold.nii.gz": func() []byte {
			b := pack(newSailor())
			b[len(b)-6] ^= 0x55 // in the checksum
			return b
		}()}), running: true},
		"image-values": {build: bytesAt(352+4*1000, 0, 0, 0xc0, 0x7f), running: true}, // a NaN
		"image-absent": {build: func(dir string) {
			writeDataset(dir, newSailor().files(theRun))
			name := filepath.Join(dir, theRun+"_bold.nii")
			os.Remove(name)
			if err := os.Symlink("../../.git/annex/objects/none", name); err != nil {
				panic(err)
			}
		}},
		"image-twice":       {build: raw(map[string][]byte{theRun + "_bold.nii.gz": pack(newSailor())})},
		"input-changed":     {exempt: "needs a second party: TestInputChanged"},
		"memory-short":      {build: with(func(*sailor) {}), args: []string{"--memory", "1MB"}},
		"reference-missing": {build: with(func(*sailor) {}), args: []string{"--reference", "sbref"}},
		"motion-lost": {build: with(func(s *sailor) {
			s.data = make([]float32, len(s.data))
		}), running: true},
		"part-left-out": {build: func(dir string) {
			writeDataset(dir, newSailor().files(theRun), newSailor().files("sub-01/func/sub-01_task-watch_part-phase"))
		}},
		"not-raw": {build: raw(map[string][]byte{"dataset_description.json": []byte(
			`{"Name":"x","BIDSVersion":"1.11.1","DatasetType":"derivative","GeneratedBy":[{"Name":"by hand"}]}`)})},
	}
}

// Every fault of the table, shown by a dataset through the command line: reported
// whole, refusing or not as the table says, accepted or dropped where the table allows it.
func TestEveryFault(t *testing.T) {
	cases := shownFaults()
	for _, k := range fault.Table {
		c, ok := cases[k.ID]
		if !ok {
			t.Errorf("%s: no dataset shows it", k.ID)
			continue
		}
		delete(cases, k.ID)
		t.Run(k.ID, func(t *testing.T) {
			if c.exempt != "" {
				t.Log(c.exempt)
				return
			}
			t.Parallel()
			dir := filepath.Join(t.TempDir(), "raw")
			out := filepath.Join(filepath.Dir(dir), "out")
			c.build(dir)
			want := 0
			if k.Level == fault.Refuse {
				want = 65
			}
			survey := append([]string{"survey", dir, "--json"}, c.args...)
			if !c.running {
				code, stdout, stderr := run(survey...)
				noTrace(t, stdout+stderr)
				if code != want || !hasFault(t, []byte(stdout), k.ID, k.Level) {
					t.Errorf("survey: want exit %d and the fault\n%s", want, dump(code, stdout, stderr))
				}
			}
			code, stdout, stderr := run(append([]string{"steady", dir, out}, c.args...)...)
			noTrace(t, stdout+stderr)
			if code != want || !strings.Contains(stderr, "evenkeel: "+k.ID+": ") {
				t.Errorf("steady: want exit %d and the fault\n%s", want, dump(code, stdout, stderr))
			}
			wrote := slices.ContainsFunc(outputs(out), func(f string) bool { return strings.HasSuffix(f, "_prov.json") })
			if wrote != (k.Level == fault.Warn) {
				t.Errorf("a record was written: %v", wrote)
			}
			if slices.ContainsFunc(outputs(out), func(f string) bool { return strings.HasPrefix(filepath.Base(f), ".sub") }) {
				t.Errorf("hidden files were left: %v", outputs(out))
			}
			if _, err := os.Stat(out); k.ID == "not-raw" && err == nil {
				t.Error("a derivative of a derivative was begun")
			}
			if k.ID == "three-dimensional" {
				// No slices to move, but a volume that takes as long as it takes is no instant.
				side := mustRead(t, filepath.Join(out, theRun+"_desc-steady_bold.json"))
				if !bytes.Contains(side, []byte(`"SlicesAtOneInstant": false`)) {
					t.Errorf("three-dimensional: %s", side)
				}
			}
			if strings.Contains(stdout+stderr, "Ahab") {
				t.Error("a private value was repeated")
			}
			if k.Acceptable {
				code, stdout, stderr := run(append(survey, "--accept", k.ID)...)
				if code != 0 || !hasFault(t, []byte(stdout), k.ID, fault.Warn) {
					t.Errorf("accepted: %s", dump(code, stdout, stderr))
				}
			}
			if k.TimingOnly {
				code, stdout, stderr := run(append(survey, "--time", "none")...)
				if code != 0 || hasFault(t, []byte(stdout), k.ID, fault.Refuse) {
					t.Errorf("with --time none: %s", dump(code, stdout, stderr))
				}
			}
		})
	}
	for _, id := range slices.Sorted(maps.Keys(cases)) {
		t.Errorf("%s: shown, and not in the table", id)
	}
}

// hasFault looks in a survey document for a whole fault of that identifier and level.
func hasFault(t *testing.T, doc []byte, id string, level fault.Level) bool {
	t.Helper()
	var d struct {
		Runs []struct{ Faults []fault.Fault }
		Left []fault.Fault `json:"left_out"`
	}
	if err := json.Unmarshal(doc, &d); err != nil {
		t.Errorf("the survey is not JSON: %v", err)
		return false
	}
	all := d.Left
	for _, r := range d.Runs {
		all = append(all, r.Faults...)
	}
	for _, f := range all {
		if f.ID == id && f.Level == level {
			if f.File == "" || f.Found == "" || f.Expected == "" || f.Remedy == "" || filepath.IsAbs(f.File) {
				t.Errorf("the fault does not say file, found, expected and remedy: %+v", f)
			}
			return true
		}
	}
	return false
}

// An accepted fault is recorded, and processing goes on with the sidecar's value.
func TestAcceptedFaultIsRecorded(t *testing.T) {
	dir, out := filepath.Join(t.TempDir(), "raw"), filepath.Join(t.TempDir(), "out")
	key("RepetitionTime", 2.1)(dir)
	if code, stdout, stderr := run("steady", dir, out, "--accept", "tr-mismatch"); code != 0 {
		t.Fatal(dump(code, stdout, stderr))
	}
	side := mustRead(t, filepath.Join(out, theRun+"_desc-steady_bold.json"))
	if !bytes.Contains(side, []byte(`"RepetitionTime": 2.1`)) {
		t.Errorf("the sidecar's value did not win: %s", side)
	}
	h, err := nifti.ReadHeader(filepath.Join(out, theRun+"_desc-steady_bold.nii.gz"))
	if err != nil {
		t.Fatal(err)
	}
	// float32 in the file
	if sec, _ := h.SecondsPerVolume(); sec != float64(float32(2.1)) {
		t.Errorf("the header says %g s, against its own sidecar", sec)
	}
	prov := mustRead(t, filepath.Join(out, theRun+"_desc-steady_prov.json"))
	if bytes.Count(prov, []byte("tr-mismatch")) < 2 { // in the settings, and as a fault of this run
		t.Error("the accepted fault is not in the record")
	}
}

// A file that changes between the plan and the reading: another process holds
// the run, so that steady waits with its plan made; then the image changes; then the run is free.
func TestInputChanged(t *testing.T) {
	for _, name := range []string{"_bold.nii", "_bold.json"} {
		dir, out := filepath.Join(t.TempDir(), "raw"), filepath.Join(t.TempDir(), "out")
		with(func(*sailor) {})(dir)
		claim(t, out)
		if err := os.MkdirAll(filepath.Join(out, "sub-01/func"), 0o755); err != nil {
			t.Fatal(err)
		}
		lock, err := os.OpenFile(filepath.Join(out, "sub-01/func/."+theStem+".lock"), os.O_CREATE|os.O_RDWR, 0o644)
		if err != nil {
			t.Fatal(err)
		}
		if err := unix.Flock(int(lock.Fd()), unix.LOCK_EX); err != nil {
			t.Fatal(err)
		}
		waiting := &watch{sign: "waiting for it", seen: make(chan struct{})}
		var stdout bytes.Buffer
		done := make(chan int)
		go func() {
			done <- Run([]string{"evenkeel", "steady", dir, out}, strings.NewReader(""), &stdout, waiting)
		}()
		select {
		case <-waiting.seen:
		case code := <-done:
			t.Fatalf("a run held by another was not waited for: %s", dump(code, stdout.String(), waiting.String()))
		case <-time.After(20 * time.Second):
			t.Fatal("nothing was said of waiting")
		}
		full := filepath.Join(dir, theRun+name)
		data := mustRead(t, full)
		data[len(data)-3] ^= 1
		if err := os.WriteFile(full, data, 0o644); err != nil {
			t.Fatal(err)
		}
		lock.Close()
		if code := <-done; code != 65 || !strings.Contains(waiting.String(), "evenkeel: input-changed: "+theRun+name) {
			t.Error(dump(code, stdout.String(), waiting.String()))
		}
		if got := outputs(filepath.Join(out, "sub-01")); len(got) > 0 {
			t.Errorf("left behind: %v", got)
		}
	}
}

// 40 malformed inputs: each gives 65, a fault, and no trace of Go.
func TestMalformedInputs(t *testing.T) {
	good := newSailor().image()
	packed := newSailor()
	packed.gzip = true
	gz := packed.image()
	at := func(off int, b ...byte) []byte {
		out := slices.Clone(good)
		copy(out[off:], b)
		return out
	}
	image := func(b []byte) func(string) { return raw(map[string][]byte{theRun + "_bold.nii": b}) }
	zip := func(b []byte) func(string) {
		return raw(map[string][]byte{theRun + "_bold.nii": nil, theRun + "_bold.nii.gz": b})
	}
	side := func(text string) func(string) { return raw(map[string][]byte{theRun + "_bold.json": []byte(text)}) }
	damaged := func(i int) []byte {
		out := slices.Clone(gz)
		out[i] ^= 0xff
		return out
	}
	// Offsets: nifti1.h.
	cases := map[string]func(string){
		"empty image":              image([]byte{}),
		"one byte":                 image([]byte{0}),
		"half a header":            image(good[:174]),
		"header only":              image(good[:348]),
		"header and flag only":     image(good[:352]),
		"one byte short":           image(good[:len(good)-1]),
		"one byte long":            image(append(slices.Clone(good), 0)),
		"text instead of image":    image([]byte(strings.Repeat("ahoy ", 200))),
		"sizeof_hdr wrong":         image(at(0, 0xff)),
		"magic missing":            image(at(344, 0, 0, 0, 0)),
		"pair magic in one file":   image(at(344, 'n', 'i', '1', 0)),
		"dim[0] is 0":              image(at(40, 0, 0)),
		"dim[0] is 9":              image(at(40, 9, 0)),
		"dim[1] is 0":              image(at(42, 0, 0)),
		"dim[2] negative":          image(at(44, 0xff, 0xff)),
		"dims of a petabyte":       image(at(42, 0xff, 0x7f, 0xff, 0x7f, 0xff, 0x7f, 0xff, 0x7f)),
		"five dimensions":          image(at(40, 5, 0, 20, 0, 24, 0, 16, 0, 4, 0, 2, 0)),
		"datatype 0":               image(at(70, 0, 0)),
		"datatype complex":         image(at(70, 32, 0, 64, 0)),
		"datatype RGB":             image(at(70, 128, 0, 24, 0)),
		"bitpix disagrees":         image(at(72, 16, 0)),
		"vox_offset 352.5":         image(at(108, 0, 0x40, 0xb0, 0x43)),
		"vox_offset NaN":           image(at(108, 0, 0, 0xc0, 0x7f)),
		"vox_offset past the end":  image(at(108, 0, 0, 0, 0x7f)),
		"slope finite, inter NaN":  image(at(112, 0, 0, 0, 0x40, 0, 0, 0xc0, 0x7f)),
		"affine singular":          image(at(280, make([]byte, 48)...)),
		"affine not finite":        image(at(280, 0, 0, 0xc0, 0x7f)),
		"values not finite":        image(at(len(good)-4, 0, 0, 0x80, 0x7f)),
		"gzip of nothing":          zip([]byte{}),
		"gzip cut short":           zip(gz[:len(gz)/2]),
		"gzip without its trailer": zip(gz[:len(gz)-8]),
		"gzip header damaged":      zip(damaged(0)),
		"gzip body damaged":        zip(damaged(len(gz) / 3)),
		"gzip checksum damaged":    zip(damaged(len(gz) - 6)),
		"plain bytes named .gz":    zip(good),
		"sidecar empty":            side(""),
		"sidecar not JSON":         side("RepetitionTime = 2"),
		"sidecar cut short":        side(`{"RepetitionTime": 2, "SliceTi`),
		"sidecar an array":         side(`[1, 2]`),
		"sidecar key twice":        side(`{"RepetitionTime": 2, "RepetitionTime": 2}`),
		"sidecar wrong type":       side(`{"RepetitionTime": "2", "SliceTiming": [0]}`),
		"sidecar deep":             side(strings.Repeat(`{"a":`, 100000)),
		"sidecar huge number":      side(`{"RepetitionTime": 1e400}`),
		"sidecar not UTF-8":        side("{\"RepetitionTime\": 2, \"TaskName\": \"\xff\xfe\"}"),
		"slice times of words":     side(`{"RepetitionTime": 2, "SliceTiming": ["a"]}`),
	}
	if len(cases) < 40 {
		t.Errorf("%d cases", len(cases))
	}
	for _, name := range slices.Sorted(maps.Keys(cases)) {
		build := cases[name]
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			dir := filepath.Join(t.TempDir(), "raw")
			out := filepath.Join(filepath.Dir(dir), "out")
			build(dir)
			code, stdout, stderr := run("steady", dir, out)
			noTrace(t, stdout+stderr)
			if code != 65 {
				t.Error(dump(code, stdout, stderr))
			}
			named := false
			for line := range strings.Lines(stderr) {
				id, _, _ := strings.Cut(strings.TrimPrefix(line, "evenkeel: "), ":")
				k, ok := fault.Lookup(id)
				named = named || ok && k.Level == fault.Refuse
			}
			if !named {
				t.Errorf("no message begins with a fault: %s", stderr)
			}
			if got := outputs(filepath.Join(out, "sub-01")); len(got) > 0 {
				t.Errorf("left behind: %v", got)
			}
		})
	}
}

// watch is a writer that tells when a sign has been written.
type watch struct {
	bytes.Buffer
	sign string
	seen chan struct{}
	told bool
}

func (w *watch) Write(b []byte) (int, error) {
	n, err := w.Buffer.Write(b)
	if !w.told && strings.Contains(w.Buffer.String(), w.sign) {
		w.told = true
		close(w.seen)
	}
	return n, err
}
