package main

import (
	"bytes"
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"sync"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/santhosh-tekuri/jsonschema/v6"

	"evenkeel/pipeline"
	"evenkeel/provenance"
)

// records holds a record of every kind that the program writes, by what was asked for.
var records = sync.OnceValues(makeRecords)

func allRecords(t *testing.T) map[string][]byte {
	t.Helper()
	all, err := records()
	if err != nil {
		t.Fatal(err)
	}
	return all
}

// recordKinds are the runs whose records are looked at: between them they have every attribute
// that a record can have.
var recordKinds = []struct {
	name, stem string
	files      func() []map[string][]byte
	args       []string
}{
	{"default", theStem, crewFiles(func(*sailor) {}), nil},
	{"volume", theStem, crewFiles(func(s *sailor) { s.gzip = true }), []string{"--motion", "volume", "--time-origin", "0.5", "--store", "int16"}},
	{"untouched", theStem, crewFiles(func(*sailor) {}), []string{"--motion", "none", "--time", "none"}},
	{"skip and accept", theStem, func() []map[string][]byte {
		s := newSailor()
		s.header.Pixdim[4] = 2.5
		s.sidecar["MultibandAccelerationFactor"] = 2
		return []map[string][]byte{s.files(theRun), {theRun + "_events.tsv": []byte("onset\tduration\ttrial_type\n0\t1\tbell\n7.5\t1\tbell\n")}}
	}, []string{"--accept", "tr-mismatch", "--accept", "slice-axis-conflict", "--skip", "2", "--time", "sinc", "--sinc-reach", "3", "--order", "space-first",
		"--space", "cubic", "--reference", "1", "--motion", "volume", "--events"}},
	{"echo", theStem + "_echo-2", func() (all []map[string][]byte) {
		for e := 1; e <= 2; e++ {
			s := newSailor()
			s.sidecar["EchoTime"] = 0.012 * float64(e)
			all = append(all, s.files(fmt.Sprintf("%s_echo-%d", theRun, e)))
		}
		return all
	}, []string{"--echo", "2", "--motion", "volume"}},
	{"sbref", theStem, func() []map[string][]byte {
		return []map[string][]byte{newSailor().files(theRun), {theRun + "_sbref.nii": newSailor().volumes(1).image()}}
	}, []string{"--reference", "sbref"}},
	// The head is taken out of one volume, which is lost then.
	{"lost", theStem, crewFiles(func(s *sailor) {
		s.data = slices.Clone(s.data)
		nv := len(s.data) / crewVolumes
		clear(s.data[5*nv : 6*nv])
	}), nil},
	{"onsets", theStem, crewFiles(func(s *sailor) {
		delete(s.sidecar, "RepetitionTime")
		s.sidecar["VolumeTiming"] = []float64{0, 2, 5, 7, 9, 11, 14, 16}
		s.header.Pixdim[4] = 0
	}), []string{"--time", "none"}},
	{"three-dimensional", theStem, crewFiles(func(s *sailor) {
		s.sidecar["MRAcquisitionType"] = "3D"
		delete(s.sidecar, "SliceTiming")
		s.sidecar["PatientName"] = "Nemo"
	}), nil},
	// Values from files at every level, the lowest winning.
	{"inherited", theStem, inherited, nil},
}

func crewFiles(change func(*sailor)) func() []map[string][]byte {
	return func() []map[string][]byte {
		s := newSailor()
		change(s)
		return []map[string][]byte{s.files(theRun)}
	}
}

// inherited spreads the sidecar over the levels of the dataset (BIDS, "The Inheritance Principle").
func inherited() []map[string][]byte {
	s := newSailor()
	times, err := json.Marshal(s.sidecar["SliceTiming"])
	if err != nil {
		panic(err)
	}
	s.sidecar = map[string]any{"PhaseEncodingDirection": "j-", "EchoTime": 0.031}
	return []map[string][]byte{s.files(theRun), {
		"task-watch_bold.json":               []byte(`{"TaskName": "watch", "RepetitionTime": 2.5, "EchoTime": 0.5, "MRAcquisitionType": "2D", "Manufacturer": "Lantern & Keel", "OperatorsName": "Nemo"}`),
		"sub-01/sub-01_task-watch_bold.json": []byte(`{"RepetitionTime": 2.0, "SliceTiming": ` + string(times) + `}`),
	}}
}

func makeRecords() (map[string][]byte, error) {
	dir, err := os.MkdirTemp("", "evenkeel-records-")
	if err != nil {
		return nil, err
	}
	defer os.RemoveAll(dir)
	all := map[string][]byte{}
	for i, k := range recordKinds {
		raw, out := filepath.Join(dir, fmt.Sprint("raw", i)), filepath.Join(dir, fmt.Sprint("out", i))
		writeDataset(raw, k.files()...)
		if code, stdout, stderr := run(append([]string{"steady", raw, out}, k.args...)...); code != 0 {
			return nil, fmt.Errorf("%s: %s", k.name, dump(code, stdout, stderr))
		}
		data, err := os.ReadFile(filepath.Join(out, "sub-01", "func", k.stem+provenance.RecordSuffix))
		if err != nil {
			return nil, err
		}
		all[k.name] = data
	}
	return all, nil
}

const docs = "../../docs/"

// recordSchema is the published schema, compiled so that it also looks into the JSON inside texts.
var recordSchema = sync.OnceValues(func() (*jsonschema.Schema, error) {
	c := jsonschema.NewCompiler()
	c.AssertContent()
	c.AssertFormat()
	// The draft that $schema names is the one it is held to; its own meta-schema comes with the library.
	return c.Compile(docs + "record.schema.json")
})

func fits(t *testing.T, data []byte) error {
	t.Helper()
	schema, err := recordSchema()
	if err != nil {
		t.Fatal(err)
	}
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(data))
	if err != nil {
		t.Fatal(err)
	}
	return schema.Validate(doc)
}

// Every record of the program fits the schema that is published, and so does the example.
func TestRecordsFitTheSchema(t *testing.T) {
	for name, data := range allRecords(t) {
		if err := fits(t, data); err != nil {
			t.Errorf("%s: %#v", name, err)
		}
	}
	if err := fits(t, mustRead(t, docs+"record.example.json")); err != nil {
		t.Errorf("the example: %#v", err)
	}
}

// The schema refuses what is no record of ours, one break at a time.
func TestSchemaRefuses(t *testing.T) {
	good := string(allRecords(t)["skip and accept"])
	path := string(allRecords(t)["default"])
	flat := string(allRecords(t)["onsets"])
	if i := strings.Index(good, `"evenkeel:sha256": "`); i < 0 {
		t.Fatal("no digest")
	}
	digest := regexp.MustCompile(`"evenkeel:sha256": "([0-9a-f]{64})"`).FindStringSubmatch(good)[1]
	for _, c := range []struct{ what, in, old, new string }{
		{"a digest that is missing", good, `"evenkeel:sha256": "` + digest + `",`, ""},
		{"a digest in capitals", good, digest, strings.ToUpper(digest)},
		{"a digest that is short", good, digest, digest[1:]},
		{"an absolute path", good, `"prov:location": "sub-01/`, `"prov:location": "/home/nemo/sub-01/`},
		{"a path that leads out", good, `"prov:location": "sub-01/`, `"prov:location": "../sub-01/`},
		{"a path through a folder above", good, `"prov:location": "sub-01/`, `"prov:location": "sub-01/../`},
		{"a path of another system", good, `"prov:location": "sub-01/`, `"prov:location": "C:/sub-01/`},
		{"a path with backslashes", good, `"prov:location": "sub-01/`, `"prov:location": "sub-01\\`},
		{"a path with an empty part", good, `"prov:location": "sub-01/`, `"prov:location": "sub-01//`},
		{"an origin that is absolute", good, `"evenkeel:file": "sub-01/`, `"evenkeel:file": "/sub-01/`},
		{"an unknown section", good, `"entity": {`, `"wasAttributedTo": {}, "entity": {`},
		{"an unknown thing", good, `"entity": {`, `"entity": {"run:chart": {},`},
		{"an unknown key", good, `"evenkeel:stem":`, `"evenkeel:host": "pequod", "evenkeel:stem":`},
		{"an unknown key of a file", good, `"evenkeel:role": "series",`, `"evenkeel:role": "series", "evenkeel:owner": "nemo",`},
		{"an unknown setting", good, `{\"time\":`, `{\"tide\":1,\"time\":`},
		{"a setting that is missing", good, `,\"store\":\"float32\"`, ``},
		{"a setting of another word", good, `\"order\":\"space-first\"`, `\"order\":\"space-last\"`},
		{"settings that are no JSON", good, `"{\"time\":`, `"{time:`},
		{"a number that is bare", good, `{"$": "246112", "type": "xsd:long"}`, `246112`},
		{"a number as number", good, `{"$": "246112", "type": "xsd:long"}`, `{"$": 246112, "type": "xsd:long"}`},
		{"a number of another type", good, `{"$": "246112", "type": "xsd:long"}`, `{"$": "246112", "type": "xsd:float"}`},
		{"a number below zero", good, `{"$": "246112", "type": "xsd:long"}`, `{"$": "-1", "type": "xsd:long"}`},
		{"another version of the layout", good, `"evenkeel:format": {"$": "1"`, `"evenkeel:format": {"$": "2"`},
		{"another class", good, `"$": "evenkeel:Input"`, `"$": "evenkeel:Guess"`},
		{"another role", good, `"evenkeel:role": "series"`, `"evenkeel:role": "serial"`},
		{"a value that is no JSON", good, `"prov:value": {"$": "0.03"`, `"prov:value": {"$": ".03"`},
		{"a fault without remedy", good, `,\"remedy\":\"`, `,\"relief\":\"`},
		{"a fault that is an error", good, `\"level\":\"warning\"`, `\"level\":\"error\"`},
		{"a list of one", good, `"evenkeel:accepted": "tr-mismatch"`, `"evenkeel:accepted": ["tr-mismatch"]`},
		{"a time without its zone", good, regexp.MustCompile(`"prov:startTime": "[^"]*`).FindString(good), `"prov:startTime": "2026-03-02T09:15:00`},
		{"a day that is not", good, regexp.MustCompile(`"prov:startTime": "[^"]*`).FindString(good), `"prov:startTime": "2026-02-30T09:15:00Z`},
		{"seconds of an unknown part", good, `{\"estimate\":`, `{\"guess\":`},
		{"an unknown stage", good, `"evenkeel:name": "space"`, `"evenkeel:name": "spice"`},
		{"the parameters of another stage", good, `"evenkeel:name": "space"`, `"evenkeel:name": "time"`},
		{"an unknown parameter", good, `{\"spline\":`, `{\"knots\":7,\"spline\":`},
		{"a parameter of another type", good, `\"coarse_gaussian_mm\":8`, `\"coarse_gaussian_mm\":\"8\"`},
		{"a state of another word", good, `\"state\":\"aligned\"`, `\"state\":\"adrift\"`},
		{"a path without its noise", path, `\"noise\":`, `\"nose\":`},
		{"a path that is used for a reason", path, `{\"used\":true,`, `{\"used\":true,\"reason\":\"x\",`},
		{"a path that is not used for no reason", flat, `\"used\":false,\"reason\":`, `\"used\":false,\"because\":`},
		{"a parameter of a path left out", path, `\"pull_scale\":1.2,`, ``},
		{"no version", good, `"evenkeel:version"`, `"evenkeel:diversion"`},
		{"a relation to nothing of ours", good, `"prov:entity": "run:output-0001"`, `"prov:entity": "run:settings"`},
		{"a relation by another activity", good, `"prov:activity": "run:run"`, `"prov:activity": "run:ran"`},
		{"a run without its name space", good, `"run": "https://evenkeel.example/run/`, `"run": "https://example.org/run/`},
	} {
		bad := strings.Replace(c.in, c.old, c.new, 1)
		if bad == c.in {
			t.Errorf("%s: %q is not in the record", c.what, c.old)
			continue
		}
		if fits(t, []byte(bad)) == nil {
			t.Errorf("the schema takes a record with %s", c.what)
		}
	}
	// Layout 1 says the same in the schema and in the program: settings, parts of the work.
	var schema struct {
		Defs map[string]struct{ Properties map[string]any } `json:"$defs"`
	}
	if err := json.Unmarshal(mustRead(t, docs+"record.schema.json"), &schema); err != nil {
		t.Fatal(err)
	}
	var settings []string
	for _, c := range pipeline.Choices {
		settings = append(settings, c.Key)
	}
	for _, c := range []struct {
		def  string
		want []string
	}{{"settings", settings}, {"stageSeconds", pipeline.Stages}} {
		want, got := slices.Sorted(slices.Values(c.want)), slices.Sorted(maps.Keys(schema.Defs[c.def].Properties))
		if !slices.Equal(want, got) {
			t.Errorf("%s of the schema: %v, of the program: %v", c.def, got, want)
		}
	}
}

// A documented key: of a table in docs/record.md.
type documented struct {
	optional bool
	seen     int
}

// recordTables reads the tables of docs/record.md: heading, key.
func recordTables(t *testing.T) map[string]map[string]*documented {
	t.Helper()
	tables := map[string]map[string]*documented{}
	heading := ""
	row := regexp.MustCompile("^\\| `([^`]+)` \\|(.*)\\|$")
	for _, line := range strings.Split(string(mustRead(t, docs+"record.md")), "\n") {
		switch m := row.FindStringSubmatch(line); {
		case strings.HasPrefix(line, "#"):
			heading = strings.ReplaceAll(strings.TrimLeft(line, "# "), "`", "")
		case strings.HasPrefix(line, "Each of `volumes`"):
			heading = "volumes"
		case m != nil:
			if tables[heading] == nil {
				tables[heading] = map[string]*documented{}
			}
			if tables[heading][m[1]] != nil {
				t.Errorf("%s: %s twice", heading, m[1])
			}
			cells := strings.Split(m[2], " | ")
			optional := slices.ContainsFunc(cells, func(s string) bool { return strings.TrimSpace(s) == "optional" })
			if !optional && heading != "Layout" && !slices.ContainsFunc(cells, func(s string) bool { return strings.TrimSpace(s) == "always" }) {
				t.Errorf("%s: %s is neither always there nor optional", heading, m[1])
			}
			tables[heading][m[1]] = &documented{optional: optional}
		}
	}
	return tables
}

// Every key of every record is in docs/record.md, under the heading of what it belongs to; and
// every key there is in some record, in all of its kind if it is said to be there always.
func TestRecordIsDocumented(t *testing.T) {
	tables := recordTables(t)
	instances := map[string]int{}
	look := func(name, heading string, keys []string) {
		instances[heading]++
		for _, k := range keys {
			if d := tables[heading][k]; d != nil {
				d.seen++
			} else {
				t.Errorf("%s: docs/record.md has no %s under %q", name, k, heading)
			}
		}
	}
	keys := func(m map[string]any) []string { return slices.Sorted(maps.Keys(m)) }
	embedded := func(v any) map[string]any {
		var o map[string]any
		if err := json.Unmarshal([]byte(v.(map[string]any)["$"].(string)), &o); err != nil {
			t.Fatal(err)
		}
		return o
	}
	number := regexp.MustCompile(`-[0-9]{4}$`)
	for name, data := range allRecords(t) {
		var doc map[string]map[string]any
		if err := json.Unmarshal(data, &doc); err != nil {
			t.Fatal(err)
		}
		var sections []string
		for s := range doc {
			sections = append(sections, s)
		}
		look(name, "Layout", sections)
		look(name, "Prefixes", keys(doc["prefix"]))
		for section, things := range doc {
			if section == "prefix" {
				continue
			}
			for id, thing := range things {
				o, heading := thing.(map[string]any), number.ReplaceAllString(id, "-NNNN")
				if strings.HasPrefix(id, "_:") {
					heading = section
				}
				look(name, heading, keys(o))
				for key, v := range o {
					switch key {
					case "evenkeel:settings":
						look(name, "Settings", keys(embedded(v)))
					case "evenkeel:stageSeconds":
						look(name, "Seconds", keys(embedded(v)))
					case "evenkeel:fault":
						list, ok := v.([]any)
						if !ok {
							list = []any{v}
						}
						for _, f := range list {
							look(name, "Faults", keys(embedded(f)))
						}
					case "evenkeel:parameters", "evenkeel:outcome":
						in := embedded(v)
						look(name, fmt.Sprintf("Stage %s: %s", o["evenkeel:name"], strings.TrimPrefix(key, "evenkeel:")), keys(in))
						if vols, ok := in["volumes"].([]any); ok {
							for _, v := range vols {
								look(name, "volumes", keys(v.(map[string]any)))
							}
						}
					}
				}
			}
		}
	}
	// A test's binary need not be built from a revision that Go knows of, nor run where there are features to name.
	chance := []string{"evenkeel:revision", "evenkeel:modified", "evenkeel:cpuFeature"}
	for heading, table := range tables {
		if instances[heading] == 0 {
			t.Errorf("docs/record.md: nothing in any record belongs to %q", heading)
		}
		for key, d := range table {
			switch {
			case d.optional && d.seen == 0 && !slices.Contains(chance, key):
				t.Errorf("docs/record.md, %s: %s is in no record", heading, key)
			case !d.optional && d.seen != instances[heading]:
				t.Errorf("docs/record.md, %s: %s is in %d of %d, and said to be there always", heading, key, d.seen, instances[heading])
			}
		}
	}
}

// bare takes from a record what depends on the machine, the build and the numbers computed.
func bare(t *testing.T, data []byte) *provenance.Record {
	t.Helper()
	r, err := provenance.Parse(data)
	if err != nil {
		t.Fatal(err)
	}
	r.Log, r.Software = provenance.Log{}, provenance.Software{Name: r.Software.Name}
	for _, list := range [][]provenance.File{r.Inputs, r.Outputs} {
		for i := range list {
			list[i].SHA256, list[i].Bytes = "", 0
		}
	}
	for i := range r.Stages {
		var o map[string]any
		if err := json.Unmarshal(r.Stages[i].Outcome, &o); err != nil {
			t.Fatal(err)
		}
		r.Stages[i].Outcome = []byte(strings.Join(slices.Sorted(maps.Keys(o)), " "))
		if r.Stages[i].Name == "measure" {
			r.Stages[i].Parameters = nil
		}
	}
	return r
}

// The example is a record of the program, and the page quotes it. EVENKEEL_UPDATE_GOLDEN=1
// writes the example anew.
func TestRecordExample(t *testing.T) {
	const name = docs + "record.example.json"
	fresh := allRecords(t)["inherited"]
	if os.Getenv("EVENKEEL_UPDATE_GOLDEN") != "" {
		if err := os.WriteFile(name, fresh, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	example := mustRead(t, name)
	if d := cmp.Diff(bare(t, example), bare(t, fresh)); d != "" {
		t.Errorf("-example +program\n%s", d)
	}
	blocks := codeBlocks(string(mustRead(t, docs+"record.md")))
	if len(blocks["json"]) < 3 {
		t.Errorf("%d excerpts", len(blocks["json"]))
	}
	for _, b := range blocks["json"] {
		if !strings.Contains(string(example), b) {
			t.Errorf("not in the example:\n%s", b)
		}
	}
}

// codeBlocks gives the fenced blocks of a page by their language.
func codeBlocks(page string) map[string][]string {
	blocks := map[string][]string{}
	parts := strings.Split(page, "\n```")
	for i := 1; i+1 < len(parts); i += 2 {
		language, text, _ := strings.Cut(parts[i], "\n")
		blocks[language] = append(blocks[language], text+"\n")
	}
	return blocks
}

// python finds a Python that has a module.
func python(t *testing.T, module string) string {
	t.Helper()
	for _, p := range []string{"python3", "/usr/bin/python3"} {
		if exec.Command(p, "-c", "import "+module).Run() == nil {
			return p
		}
	}
	t.Skip("no python3 with the module " + module + " (Debian: python3-" + module + ")")
	return ""
}

// What the page says for reading a record can be done as it stands.
func TestReadingARecordAsDocumented(t *testing.T) {
	blocks := codeBlocks(string(mustRead(t, docs+"record.md")))
	var example *provenance.Record
	example, err := provenance.Parse(mustRead(t, docs+"record.example.json"))
	if err != nil {
		t.Fatal(err)
	}
	in := func(name string, args ...string) string {
		t.Helper()
		cmd := exec.Command(name, args...)
		cmd.Dir = docs
		out, err := cmd.CombinedOutput()
		if err != nil {
			t.Errorf("%s %q: %v\n%s", name, args, err, out)
		}
		return string(out)
	}
	prov := python(t, "prov")
	if len(blocks["python"]) != 2 {
		t.Fatalf("%d programs", len(blocks["python"]))
	}
	got := in(prov, "-c", blocks["python"][0])
	if !slices.Contains(blocks[""], got) {
		t.Errorf("the page does not say that this is printed:\n%s", got)
	}
	f := expected(example)
	if got, want := strings.TrimSpace(in(prov, "-c", blocks["python"][1])), fmt.Sprint(f.total()); got != want {
		t.Errorf("%s records, want %s", got, want)
	}
	if _, err := exec.LookPath("jq"); err != nil {
		t.Log("no jq: its commands were not run")
		return
	}
	lines := strings.Split(strings.TrimSpace(in("sh", "-e", "-c", strings.Split(blocks["sh"][0], "\n")[0])), "\n")
	if len(lines) != len(example.Outputs) || lines[1] != example.Outputs[1].SHA256+"  "+example.Outputs[1].Path {
		t.Errorf("jq prints %q", lines)
	}
	if got := in("sh", "-e", "-c", strings.Split(blocks["sh"][0], "\n")[1]); !json.Valid([]byte(got)) || !strings.Contains(got, "time_origin") {
		t.Errorf("jq prints %q", got)
	}
}

// modelCounts is how many of each a document of the model holds.
type modelCounts struct {
	Entity, Activity, Agent, Used, Generated, Derived, Informed, Associated int
}

func (c modelCounts) total() int {
	return c.Entity + c.Activity + c.Agent + c.Used + c.Generated + c.Derived + c.Informed + c.Associated
}

// expected counts what a record stands for in the model, from what our reader found in it.
func expected(r *provenance.Record) modelCounts {
	in, out, val, st := len(r.Inputs), len(r.Outputs), len(r.Values), len(r.Stages)
	return modelCounts{Entity: in + out + 1 + val, Activity: 1 + st, Agent: 1, Used: in + val, Generated: out,
		Derived: in*out + val, Informed: st - 1, Associated: 1 + st}
}

// Another implementation of the model (Debian's python3-prov) loads records of every kind and
// finds the same in them as we do: so many of each class and relation, each stage with its
// parameters as a part of the run, each value with the file that it derives from.
func TestAnotherReaderOfRecords(t *testing.T) {
	prov := python(t, "prov")
	all := allRecords(t)
	names := slices.Sorted(maps.Keys(all))
	dir := t.TempDir()
	args := []string{"testdata/read_records.py"}
	for i, name := range names {
		file := filepath.Join(dir, fmt.Sprint(i))
		if err := os.WriteFile(file, all[name], 0o644); err != nil {
			t.Fatal(err)
		}
		args = append(args, file)
	}
	cmd := exec.Command(prov, args...)
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	text, err := cmd.Output()
	if err != nil {
		t.Fatalf("%v\n%s", err, stderr.String())
	}
	type found struct {
		Counts modelCounts
		Stages [][]string // name, parameters, outcome
		Values [][]string // key, value, file, path of the input it derives from
	}
	var theirs []found
	if err := json.Unmarshal(text, &theirs); err != nil || len(theirs) != len(names) {
		t.Fatalf("%v\n%s", err, text)
	}
	for i, name := range names {
		r, err := provenance.Parse(all[name])
		if err != nil {
			t.Fatal(err)
		}
		ours := found{Counts: expected(r)}
		for _, s := range r.Stages {
			ours.Stages = append(ours.Stages, []string{s.Name, string(s.Parameters), string(s.Outcome)})
		}
		for _, v := range r.Values {
			ours.Values = append(ours.Values, []string{v.Key, v.JSON, v.File, v.File})
		}
		if d := cmp.Diff(ours, theirs[i]); d != "" {
			t.Errorf("%s: -ours +theirs\n%s", name, d)
		}
	}
}

// Each value comes from the file that won, and is as that file has it (BIDS, "The Inheritance
// Principle": the lower file overrides the higher).
func TestOriginsOfInheritedValues(t *testing.T) {
	r, err := provenance.Parse(allRecords(t)["inherited"])
	if err != nil {
		t.Fatal(err)
	}
	times := regexp.MustCompile(`"SliceTiming": (\[[^]]*\])`).FindSubmatch(inherited()[1]["sub-01/sub-01_task-watch_bold.json"])[1]
	top, middle, leaf := "task-watch_bold.json", "sub-01/sub-01_task-watch_bold.json", theRun+"_bold.json"
	want := []provenance.Value{
		{Key: "EchoTime", JSON: "0.031", File: leaf},
		{Key: "MRAcquisitionType", JSON: `"2D"`, File: top},
		{Key: "Manufacturer", JSON: `"Lantern & Keel"`, File: top}, // carried on, and not used
		{Key: "PhaseEncodingDirection", JSON: `"j-"`, File: leaf},
		{Key: "RepetitionTime", JSON: "2.0", File: middle},
		{Key: "SliceTiming", JSON: string(times), File: middle},
		{Key: "TaskName", JSON: `"watch"`, File: top},
	}
	if d := cmp.Diff(want, r.Values); d != "" {
		t.Errorf("-want +got\n%s", d)
	}
	for _, name := range []string{top, middle, leaf} {
		if !slices.ContainsFunc(r.Inputs, func(f provenance.File) bool { return f.Path == name && f.Role == "sidecar" }) {
			t.Errorf("%s is no input", name)
		}
	}
	if strings.Contains(string(allRecords(t)["inherited"]), "Nemo") {
		t.Error("the operator's name is in the record")
	}
}
