package main

import (
	"bytes"
	"compress/gzip"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"io"
	"maps"
	"math"
	"os"
	"path"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"

	"evenkeel/fault"
)

// Everything that the program writes is searched, byte by byte, for what it must not tell.
// Wherever an input has room for text, a mark of its own stands there: a word that occurs
// nowhere else. A mark may come out only where [mayCarry] says so, and must come out there,
// lest a field be thought to be carried that is not.

// marks makes words and remembers where each was put.
type marks map[string]string

// at returns a word for a place. Letters only: the word is itself in JSON, in a table and in a URI.
func (m marks) at(place string) string {
	n, b := len(m)+1, []byte("qzv")
	for range 4 {
		b = append(b, byte('a'+n%26))
		n /= 26
	}
	word := string(append(b, "xqj"...))
	m[word] = place
	return word
}

// identifying are fields of DICOM (PS3.6; PS3.15 Annex E for what identifies), of BIDS, and
// everyday ones. The names are the standards'; that the list is whole is not needed, since
// what is carried is on a list and not what is left behind.
var identifying = strings.Fields(`
	PatientName PatientID PatientBirthDate PatientBirthTime PatientSex PatientAge PatientAddress PatientComments PatientTelephoneNumbers
	PatientMotherBirthName PatientReligiousPreference OtherPatientIDs OtherPatientNames IssuerOfPatientID EthnicGroup Occupation AdditionalPatientHistory
	AcquisitionDateTime AcquisitionDate AcquisitionTime ContentDate ContentTime StudyDate StudyTime SeriesDate SeriesTime InstanceCreationDate
	PerformedProcedureStepStartDate PerformedProcedureStepStartTime InstitutionName InstitutionAddress InstitutionalDepartmentName StationName
	DeviceSerialNumber DeviceUID GantryID DetectorID OperatorsName ReferringPhysicianName PerformingPhysicianName RequestingPhysician
	PhysiciansOfRecord NameOfPhysiciansReadingStudy ProcedureStepDescription PerformedProcedureStepDescription RequestedProcedureDescription
	StudyDescription SeriesDescription ProtocolName ImageComments SeriesInstanceUID StudyInstanceUID SOPInstanceUID FrameOfReferenceUID
	AccessionNumber StudyID AdmissionID MedicalRecordLocator SoftwareVersions ReceiveCoilName BodyPart TaskDescription Instructions
	Experimenter ScannedBy Hospital Email Subject Notes Comment ConversionSoftware SequenceName PulseSequenceDetails WipMemBlock
	ShipsBoy BunkNumber name id date 00100010 00080080 (0010,0030)`)

// wordy are fields that are read or carried when they hold what they should: a word that is
// no code, no direction and no link must stay behind, and where it makes a fault must not be
// shown.
var wordy = strings.Fields(`CogAtlasID CogPOID ScanningSequence SequenceVariant PulseSequenceType EchoTrainLength NumberShots FlipAngle DwellTime InversionTime
	MagneticFieldStrength ReconMatrixPE AcquisitionMatrixPE ParallelReductionFactorInPlane PartialFourier NonlinearGradientCorrection`)

// fill puts marks into a sidecar: on every field, plainly and nested in objects and lists, and
// in keys that are no names. Fields that are there already stay as they are.
func (m marks) fill(where string, side map[string]any) {
	set := func(key string, v func() any) {
		if side[key] == nil {
			side[key] = v()
		}
	}
	for i, key := range identifying {
		place := where + ": " + key
		switch i % 4 {
		case 0, 1:
			set(key, func() any { return m.at(place) })
		case 2:
			set(key, func() any { return []any{m.at(place + "[0]"), map[string]any{"Alias": m.at(place + "[1].Alias")}} })
		case 3:
			set(key, func() any {
				return map[string]any{"vr": "PN", "Value": []any{map[string]any{"Alphabetic": m.at(place + ".Value")}}}
			})
		}
	}
	for _, key := range wordy {
		set(key, func() any { return m.at(where + ": " + key) })
	}
	set("Manufacturer", func() any { return m.at(where+": Manufacturer, of several lines") + "\nBunk 7" })
	set("ManufacturersModelName", func() any {
		return m.at(where+": ManufacturersModelName, too long") + strings.Repeat(" of the ship", 6)
	})
	side["Logbook of "+m.at(where+": a key")] = 1
	side["Patient "+m.at(where+": a key that begins like one that identifies")] = map[string]any{"Mr " + m.at(where+": a key inside"): 1}
}

// image makes the image with text wherever the format has room for it: NIfTI-1 (nifti1.h) and
// NIfTI-2 (nifti2.h) name the places; RFC 1952 those of gzip.
func (m marks) image(where string, s *sailor, version int) []byte {
	zip := s.gzip
	s.gzip, s.header.Version = false, version
	sound := s.image()
	s.gzip = zip
	type room struct {
		name   string
		at, of int
	}
	rooms, header := []room{{"data_type", 4, 10}, {"db_name", 14, 18}, {"descrip", 148, 80}, {"aux_file", 228, 24}, {"intent_name", 328, 16}}, 348
	if version == 2 {
		rooms, header = []room{{"descrip", 240, 80}, {"aux_file", 320, 24}, {"intent_name", 508, 16}, {"unused_str", 525, 15}}, 540
	}
	b := slices.Clone(sound[:header])
	for _, r := range rooms {
		copy(b[r.at:r.at+r.of], m.at(where+": "+r.name))
	}
	// Extensions: a size (a multiple of 16), a code (2 DICOM, 6 a comment, 44 BIDS JSON), text.
	b = append(b, 1, 0, 0, 0)
	for _, code := range []uint32{2, 6, 44} {
		e := make([]byte, 64)
		binary.LittleEndian.PutUint32(e, uint32(len(e)))
		binary.LittleEndian.PutUint32(e[4:], code)
		copy(e[8:], fmt.Sprintf(`{"PatientName":"%s"}`, m.at(fmt.Sprintf("%s: extension %d", where, code))))
		b = append(b, e...)
	}
	if version == 2 {
		binary.LittleEndian.PutUint64(b[168:], uint64(len(b)))
	} else {
		binary.LittleEndian.PutUint32(b[108:], math.Float32bits(float32(len(b))))
	}
	b = append(b, sound[header+4:]...)
	if !zip {
		return b
	}
	var out bytes.Buffer
	w := gzip.NewWriter(&out)
	w.Name, w.Comment, w.Extra = m.at(where+": the name inside gzip"), m.at(where+": the comment inside gzip"), []byte(m.at(where+": the extra field of gzip"))
	w.Write(b)
	w.Close()
	return out.Bytes()
}

// What may come out, of which place, and in which files ("-" is a stream). Nothing else may.
var mayCarry = []struct{ place, in string }{
	{`task-watch_bold\.json: TaskName carried`, `_desc-steady_(bold|prov)\.json$`},
	{`task-watch_bold\.json: Manufacturer carried`, `_desc-steady_(bold|prov)\.json$`},
	{`task-watch_bold\.json: ManufacturersModelName carried`, `_desc-steady_(bold|prov)\.json$`},
	{`task-watch_bold\.json: CogAtlasID carried`, `_desc-steady_(bold|prov)\.json$`},
	{`^dataset_description\.json: Name$`, `^dataset_description\.json$|^README$|_prov\.json$`},
	{`^dataset_description\.json: DatasetDOI$`, `^dataset_description\.json$`},
	{`_events\.tsv`, `_desc-steady_events\.tsv$`}, // with --events only
}

// voyage writes the dataset: one run whose files are sound and full of marks in each layout.
func (m marks) voyage(t *testing.T, dir string) {
	t.Helper()
	js := func(v any) []byte {
		b, err := json.MarshalIndent(v, "", " ")
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	files := map[string][]byte{}
	d := map[string]any{"Name": "The crew of " + m.at("dataset_description.json: Name"), "BIDSVersion": "1.11.1", "DatasetType": "raw",
		"DatasetDOI": "doi:10.1234/" + m.at("dataset_description.json: DatasetDOI")}
	for _, key := range strings.Fields("Authors Acknowledgements HowToAcknowledge Funding EthicsApprovals ReferencesAndLinks License Keywords GeneratedBy SourceDatasets HEDVersion Bursar") {
		d[key] = []any{m.at("dataset_description.json: " + key), map[string]any{"Name": m.at("dataset_description.json: " + key + ".Name")}}
	}
	files["dataset_description.json"] = js(d)
	for _, name := range strings.Fields("README CHANGES LICENSE participants.tsv participants.json sub-01/sub-01_scans.tsv task-watch_events.json " + theRun + "_physio.json") {
		if files[name] = []byte(m.at(name) + "\n"); path.Ext(name) == ".json" {
			files[name] = js(map[string]any{"Description": strings.TrimSpace(string(files[name]))})
		}
	}

	// Inherited: the dataset's own sidecar, the subject's, the run's. The lowest holds what is carried.
	for _, name := range []string{"task-watch_bold.json", "sub-01/sub-01_task-watch_bold.json"} {
		side := map[string]any{"RepetitionTime": crewTR}
		m.fill(name, side)
		files[name] = js(side)
	}
	add := func(base string, version int, zip bool, change func(*sailor)) {
		s := newSailor()
		s.gzip = zip
		change(s)
		m.fill(base, s.sidecar)
		for name, data := range s.files(base) {
			if path.Ext(name) == ".json" {
				files[name] = data
			} else {
				files[name] = m.image(name, s, version)
			}
		}
	}
	carried := func(base string) func(*sailor) {
		return func(s *sailor) {
			at := func(key string) string { return m.at(base + "_task-watch_bold.json: " + key + " carried") }
			s.sidecar["TaskName"] = "watch " + at("TaskName")
			s.sidecar["Manufacturer"], s.sidecar["ManufacturersModelName"] = at("Manufacturer"), at("ManufacturersModelName")
			s.sidecar["CogAtlasID"] = "https://www.cognitiveatlas.org/task/id/" + at("CogAtlasID") + "/"
		}
	}
	events := func(base string) {
		files[base+"_events.tsv"] = []byte("onset\tduration\ttrial_type\n0\t1\t" + m.at(base+"_events.tsv") + "\n7.5\t1\tbell\n")
	}
	add(theRun, 1, false, carried("sub-01"))
	events(theRun)
	add("sub-02/func/sub-02_task-watch", 2, true, carried("sub-02"))
	events("sub-02/func/sub-02_task-watch")
	one := newSailor().volumes(1)
	files["sub-02/func/sub-02_task-watch_sbref.nii"] = m.image("sub-02 sbref", one, 1)
	side := map[string]any{}
	m.fill("sub-02 sbref.json", side)
	files["sub-02/func/sub-02_task-watch_sbref.json"] = js(side)
	for e := 1; e <= 2; e++ {
		add(fmt.Sprintf("sub-03/func/sub-03_task-watch_echo-%d", e), 1, true, func(s *sailor) { s.sidecar["EchoTime"] = 0.012 * float64(e) })
	}
	writeDataset(dir, files)
}

// wrecks writes runs that are refused, each for another fault, with a mark where the fault is.
func (m marks) wrecks(dir string) (runs int) {
	writeDataset(dir, newSailor().volumes(4).files("sub-50/func/sub-50_task-watch")) // sound, so that something is written
	text := func(key string) any { return m.at("wreck: " + key) }
	for _, w := range []func(s *sailor) []byte{
		func(s *sailor) []byte { s.sidecar["RepetitionTime"] = text("RepetitionTime"); return nil },
		func(s *sailor) []byte {
			s.sidecar["RepetitionTime"] = map[string]any{"is": text("RepetitionTime.is")}
			return nil
		},
		func(s *sailor) []byte { s.sidecar["SliceTiming"] = text("SliceTiming"); return nil },
		func(s *sailor) []byte { s.sidecar["SliceTiming"] = []any{0, text("SliceTiming[1]"), 1}; return nil },
		func(s *sailor) []byte {
			s.sidecar["PhaseEncodingDirection"] = text("PhaseEncodingDirection")
			return nil
		},
		func(s *sailor) []byte {
			s.sidecar["SliceEncodingDirection"] = text("SliceEncodingDirection")
			return nil
		},
		func(s *sailor) []byte { s.sidecar["MRAcquisitionType"] = text("MRAcquisitionType"); return nil },
		func(s *sailor) []byte { s.sidecar["EchoTime"] = text("EchoTime"); return nil },
		func(s *sailor) []byte { s.sidecar["EchoTime"] = []any{text("EchoTime[0]")}; return nil },
		func(s *sailor) []byte { s.sidecar["TaskName"] = []any{text("TaskName[0]")}; return nil },
		func(s *sailor) []byte { s.sidecar["VolumeTiming"] = []any{text("VolumeTiming[0]")}; return nil },
		func(s *sailor) []byte { s.sidecar["TotalReadoutTime"] = text("TotalReadoutTime"); return nil },
		func(s *sailor) []byte {
			s.sidecar["MultibandAccelerationFactor"] = text("MultibandAccelerationFactor")
			return nil
		},
		func(s *sailor) []byte { s.sidecar["DelayTime"] = text("DelayTime"); return nil },
		// Syntax: a cut text, a key twice, words outside quotes, text after the end.
		func(s *sailor) []byte { return []byte(`{"PatientName": "` + m.at("wreck: a text that does not end")) },
		func(s *sailor) []byte {
			k := "Mr " + m.at("wreck: a key twice")
			return []byte(`{"` + k + `": 1, "` + k + `": 2}`)
		},
		func(s *sailor) []byte { return []byte(`{"PatientName": ` + m.at("wreck: a bare word") + `}`) },
		func(s *sailor) []byte { return []byte(`{} ` + m.at("wreck: after the end")) },
		func(s *sailor) []byte { return []byte(m.at("wreck: no JSON")) },
		func(s *sailor) []byte { return []byte(`["` + m.at("wreck: a list") + `"]`) },
	} {
		runs++
		s := newSailor().volumes(4)
		side := w(s)
		base := fmt.Sprintf("sub-%d/func/sub-%d_task-watch", 50+runs, 50+runs)
		files := s.files(base)
		if side != nil {
			files[base+"_bold.json"] = side
		}
		writeDataset(dir, files)
	}
	// Images: a header that is no header, and one that is cut, both with text in them.
	for i, cut := range []int{200, 40000} {
		runs++
		base := fmt.Sprintf("sub-%d/func/sub-%d_task-watch", 80+i, 80+i)
		s := newSailor().volumes(4)
		files := s.files(base)
		files[base+"_bold.nii"] = m.image(fmt.Sprintf("wreck: image cut at %d", cut), s, 1)[:cut]
		writeDataset(dir, files)
	}
	// Events that are no table, with text in place of an onset.
	runs++
	base := "sub-90/func/sub-90_task-watch"
	writeDataset(dir, newSailor().volumes(4).files(base),
		map[string][]byte{base + "_events.tsv": []byte("onset\tduration\n" + m.at("wreck: an onset") + "\t1\n")})
	return runs
}

// searched is something that came out: a file of OUT by its path, or a stream.
type searched struct {
	name string
	data []byte
}

// everything reads all files below a folder, hidden ones too, compressed ones both ways.
func everything(t *testing.T, dir string) (all []searched) {
	t.Helper()
	for _, name := range outputs(dir) {
		data := mustRead(t, filepath.Join(dir, filepath.FromSlash(name)))
		all = append(all, searched{name, data})
		if z, err := gzip.NewReader(bytes.NewReader(data)); err == nil {
			plain, err := io.ReadAll(z)
			if err != nil {
				t.Errorf("%s: %v", name, err)
			}
			all = append(all, searched{name, plain}, searched{name, []byte(z.Name + z.Comment + string(z.Extra))})
		}
	}
	return all
}

var markWord = regexp.MustCompile(`qzv[a-z]{4}xqj`)

// tell reports every mark that should not be there, and notes those that came out.
func (m marks) tell(t *testing.T, what string, all []searched, seen map[string]bool) {
	t.Helper()
	for _, s := range all {
		for _, word := range markWord.FindAll(s.data, -1) {
			place := m[string(word)]
			ok := false
			for _, c := range mayCarry {
				if regexp.MustCompile(c.place).MatchString(place) && regexp.MustCompile(c.in).MatchString(s.name) {
					ok, seen[c.place+" in "+path.Base(s.name)] = true, true
				}
			}
			if !ok {
				t.Errorf("%s: %s tells %q, the mark of %s", what, s.name, word, place)
			}
		}
	}
}

// Nothing that a dataset says about people and places comes out, whatever is asked for, but
// the few fields that the contract carries; and nothing tells whose machine it was.
func TestNothingPrivateInAnyOutput(t *testing.T) {
	m := marks{}
	base := t.TempDir()
	// The dataset lies in a home folder, as datasets do, and OUT elsewhere and beside it.
	home := filepath.Join(base, "home", "skipper-qhomeq")
	raw, deck := filepath.Join(home, "study-qdirq", "raw"), filepath.Join(base, "scratch", "deck-qoutq")
	lab := filepath.Join(base, "lab") // where people's folders stand side by side, as in a home folder
	for _, dir := range []string{raw, deck, lab} {
		if err := os.MkdirAll(dir, 0o755); err != nil {
			t.Fatal(err)
		}
	}
	trueHome, _ := os.UserHomeDir()
	t.Setenv("HOME", home)
	t.Setenv("USER", "skipper-quserq")
	t.Setenv("LOGNAME", "skipper-quserq")
	m.voyage(t, raw)

	// The search itself: every mark is found in the dataset.
	found := map[string]bool{}
	for _, s := range everything(t, raw) {
		for _, word := range markWord.FindAll(s.data, -1) {
			found[string(word)] = true
		}
	}
	for _, word := range slices.Sorted(maps.Keys(m)) {
		if !found[word] {
			t.Errorf("the search does not find %s in the dataset (%s)", word, m[word])
		}
	}
	if len(m) < 500 {
		t.Errorf("only %d marks", len(m))
	}

	machine := []string{"qhomeq", "qdirq", "qoutq", "quserq", base}
	if len(trueHome) > 1 {
		machine = append(machine, trueHome+"/")
	}
	host, _ := os.Hostname()
	nameless := func(what string, all []searched) {
		t.Helper()
		for _, s := range all {
			for _, word := range machine {
				if i := bytes.Index(s.data, []byte(word)); i >= 0 {
					t.Errorf("%s: %s tells %q: %.100q", what, s.name, word, s.data[max(0, i-30):])
				}
			}
			if len(host) > 3 && regexp.MustCompile(`\b`+regexp.QuoteMeta(host)+`\b`).Match(s.data) {
				t.Errorf("%s: %s tells the name of the machine, %q", what, s.name, host)
			}
		}
	}
	seen := map[string]bool{}
	streams := func(what string, wantCode int, args ...string) (stdout, stderr string) {
		t.Helper()
		code, stdout, stderr := run(args...)
		if code != wantCode {
			t.Errorf("%s: %s", what, dump(code, stdout, stderr))
		}
		m.tell(t, what, []searched{{"-", []byte(stdout)}, {"-", []byte(stderr)}}, seen)
		return stdout, stderr
	}

	// Paths are given as they are from the folder of the dataset, so that an absolute one in a
	// stream would be of the program's own making.
	t.Chdir(filepath.Dir(raw))
	quiet := func(what string, wantCode int, args ...string) (stdout, stderr string) {
		t.Helper()
		stdout, stderr = streams(what, wantCode, args...)
		nameless(what, []searched{{"-", []byte(stdout)}, {"-", []byte(stderr)}})
		return stdout, stderr
	}
	quiet("survey", 0, "survey", "raw")
	quiet("survey --json", 0, "survey", "raw", "--json")
	quiet("plan", 0, "steady", "raw", "out", "--plan")
	for _, c := range []struct {
		what, out string
		args      []string
	}{
		{"default", "raw/derivatives/steady", []string{"--subject", "01", "--log", "json"}},
		{"volume", "volume", []string{"--subject", "02", "--motion", "volume", "--store", "int16", "--events", "--skip", "1"}},
		{"sbref", "sbref", []string{"--subject", "02", "--motion", "volume", "--reference", "sbref", "--time", "none"}},
		{"echo", "echo", []string{"--subject", "03", "--echo", "2", "--motion", "volume"}},
		{"untouched", "untouched", []string{"--motion", "none", "--time", "none", "--subject", "01", "--subject", "02", "--events", "--log", "json"}},
		// Given in full, from a folder that is nobody's: what is written still names neither.
		{"far away", filepath.Join(deck, "out"), []string{"--motion", "none", "--subject", "01", "--log", "json"}},
		{"two people's", filepath.Join(lab, "deck-qoutq", "out"), []string{"--motion", "none", "--subject", "01"}},
	} {
		in, ask := "raw", quiet
		if filepath.IsAbs(c.out) {
			in, ask = raw, streams
		}
		if strings.HasPrefix(c.out, lab) {
			in = filepath.Join(lab, "study-qdirq", "raw")
			if err := os.CopyFS(in, os.DirFS(raw)); err != nil {
				t.Fatal(err)
			}
		}
		ask(c.what, 0, append([]string{"steady", in, c.out}, c.args...)...)
		all := everything(t, c.out)
		if len(all) < 15 {
			t.Errorf("%s: only %d things to search", c.what, len(all))
		}
		m.tell(t, c.what, all, seen)
		nameless(c.what, all)
	}
	for _, args := range [][]string{{"audit", "raw/derivatives/steady", "--replay"}, {"audit", "raw/derivatives/steady", "--json"}, {"version", "--json"}} {
		quiet(strings.Join(args, " "), 0, args...)
	}
	for _, c := range mayCarry {
		if !slices.ContainsFunc(slices.Collect(maps.Keys(seen)), func(s string) bool { return strings.HasPrefix(s, c.place+" in ") }) {
			t.Errorf("%s is not carried into %s: then it is not to be told that it may be", c.place, c.in)
		}
	}

	// What is refused is refused without a word of it.
	wrecked := filepath.Join(filepath.Dir(raw), "wrecked")
	runs := m.wrecks(wrecked)
	stdout, _ := quiet("survey of wrecks", 3, "survey", "wrecked", "--json", "--events")
	var doc struct {
		Runs []struct {
			Run    string
			Faults []fault.Fault
		}
	}
	if err := json.Unmarshal([]byte(stdout), &doc); err != nil {
		t.Fatal(err)
	}
	if len(doc.Runs) != runs+1 {
		t.Errorf("%d runs, want %d and one that is sound", len(doc.Runs), runs)
	}
	for _, r := range doc.Runs {
		if len(r.Faults) == 0 && r.Run != "sub-50_task-watch" {
			t.Errorf("%s has no fault", r.Run)
		}
	}
	quiet("survey of wrecks, in words", 3, "survey", "wrecked", "--events")
	quiet("steady of wrecks", 3, "steady", "wrecked", "hulk", "--events", "--motion", "none", "--log", "json")
	quiet("steady of wrecks, in words", 3, "steady", "wrecked", "hulk", "--events", "--motion", "none")
	all := everything(t, "hulk")
	m.tell(t, "wrecks", all, seen)
	nameless("wrecks", all)
	hold := everything(t, wrecked)
	for word, place := range m {
		if strings.HasPrefix(place, "wreck: ") && !strings.Contains(place, "image cut") && !slices.ContainsFunc(hold, func(s searched) bool { return bytes.Contains(s.data, []byte(word)) }) {
			t.Errorf("%s is not in the wrecked dataset (%s)", word, place)
		}
	}
	// What cannot even be started.
	quiet("no dataset", 66, "survey", "nowhere")
	if err := os.WriteFile("reef", nil, 0o644); err != nil {
		t.Fatal(err)
	}
	quiet("no output", 73, "steady", "raw", "reef/out", "--subject", "01")
	for _, name := range []string{"volume/.runs.tsv.lock", "volume/sub-02/func/.sub-02_task-watch.lock", "hulk2/sub-50/func/sub-50_task-watch_desc-steady_bold.nii.gz/x"} {
		if err := os.MkdirAll(name, 0o755); err != nil { // where a file would have to stand
			t.Fatal(err)
		}
	}
	quiet("no lock", 73, "steady", "raw", "volume", "--subject", "02", "--redo", "--motion", "none")
	quiet("a folder in the way", 64, "steady", "wrecked", "hulk2", "--subject", "50", "--motion", "none")
	quiet("an output inside", 64, "steady", "raw", "raw/sub-01/out")
	quiet("no record", 66, "audit", "wrecked")
}
