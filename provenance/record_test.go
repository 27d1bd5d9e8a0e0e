package provenance

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// The whole document as it stands in a file. EVENKEEL_UPDATE_GOLDEN=1 writes it
// anew; read the difference before committing it.
func TestGolden(t *testing.T) {
	got, err := sample().Marshal()
	if err != nil {
		t.Fatal(err)
	}
	const name = "testdata/record_prov.json"
	if os.Getenv("EVENKEEL_UPDATE_GOLDEN") != "" {
		if err := os.WriteFile(name, got, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(string(want), string(got)); d != "" {
		t.Errorf("-want +got\n%s", d)
	}
	r, err := ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(sample(), r); d != "" {
		t.Errorf("read back: -want +got\n%s", d)
	}
}

// The rules of PROV-JSON (W3C Member Submission, 24 April 2013), held against
// the document as any JSON reader sees it.
func TestIsProvJSON(t *testing.T) {
	data, err := sample().Marshal()
	if err != nil {
		t.Fatal(err)
	}
	var doc map[string]map[string]any
	if err := json.Unmarshal(data, &doc); err != nil {
		t.Fatal(err)
	}
	prefix := doc["prefix"]
	prefix["prov"], prefix["xsd"] = "predeclared", "predeclared"
	qualified := func(where, name string) {
		p, _, ok := strings.Cut(name, ":")
		if !ok || prefix[p] == nil {
			t.Errorf("%s: %q has no declared prefix", where, name)
		}
	}
	declared := map[string]bool{}
	for _, section := range []string{"entity", "activity", "agent"} {
		for id := range doc[section] {
			qualified(section, id)
			declared[id] = true
		}
	}
	typed := 0
	for section, things := range doc {
		if section == "prefix" {
			continue
		}
		for id, attributes := range things {
			for key, value := range attributes.(map[string]any) {
				qualified(id, key)
				many, ok := value.([]any)
				if !ok {
					many = []any{value}
				} else if len(many) < 2 {
					t.Errorf("%s %s: an array of %d", id, key, len(many))
				}
				for _, v := range many {
					switch v := v.(type) {
					case string:
						if ends[key] != "" && !declared[v] {
							t.Errorf("%s %s: %s is not declared", id, key, v)
						}
					case map[string]any:
						typed++
						if _, ok := v["$"].(string); !ok || len(v) != 2 {
							t.Errorf("%s %s: $ is not a string in %v", id, key, v)
						}
						qualified(id, v["type"].(string))
						if v["type"] == "xsd:QName" {
							qualified(id, v["$"].(string))
						}
					default:
						t.Errorf("%s %s: %T", id, key, v)
					}
				}
			}
		}
	}
	if typed < 20 {
		t.Errorf("only %d typed values seen", typed)
	}
	for _, section := range []string{"used", "wasGeneratedBy", "wasDerivedFrom", "wasAssociatedWith", "wasInformedBy"} {
		if len(doc[section]) == 0 {
			t.Errorf("no %s", section)
		}
	}
}

// Another implementation of the model reads the document, writes it, and what
// it wrote is still our record. Lists of attributes are sets to it.
func TestAnotherReader(t *testing.T) {
	python := ""
	for _, p := range []string{"python3", "/usr/bin/python3"} {
		if exec.Command(p, "-c", "import prov.model").Run() == nil {
			python = p
			break
		}
	}
	if python == "" {
		t.Skip("python3 with the prov library (Debian: python3-prov) is not here")
	}
	data, err := sample().Marshal()
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(python, "testdata/readprov.py")
	cmd.Stdin = bytes.NewReader(data)
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("%v\n%s", err, stderr.String())
	}
	// 9 entities, 3 activities, 1 agent, 6 used, 2 generated, 6+3 derived, 1
	// informed, 3 associated.
	if got := strings.TrimSpace(stderr.String()); got != "records 34" {
		t.Errorf("the other reader found: %s", got)
	}
	r, err := Parse(out)
	if err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	sets := func(r *Record) *Record {
		slices.SortFunc(r.Faults, func(a, b json.RawMessage) int { return bytes.Compare(a, b) })
		slices.SortFunc(r.Software.Modules, func(a, b Module) int { return strings.Compare(a.Path, b.Path) })
		slices.Sort(r.Accepted)
		slices.Sort(r.Log.CPUFeatures)
		return r
	}
	if d := cmp.Diff(sets(sample()), sets(r)); d != "" {
		t.Errorf("-want +got\n%s", d)
	}
}

// What differs between two computations of the same work is the log part, and
// the log part is what the package documentation says it is.
func TestLogPart(t *testing.T) {
	a, b := sample(), sample()
	b.Log = Log{Started: a.Log.Started.Add(time.Hour), Ended: a.Log.Ended.Add(2 * time.Hour),
		Architecture: "arm64", CPUFeatures: []string{"asimd"}, StageSeconds: map[string]float64{"estimate": 3}}
	da, err := a.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	db, err := b.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	if bytes.Equal(da, db) {
		t.Fatal("the log is not written")
	}
	var trees [2]map[string]map[string]map[string]any
	for i, data := range [][]byte{da, db} {
		var doc map[string]json.RawMessage
		if err := json.Unmarshal(data, &doc); err != nil {
			t.Fatal(err)
		}
		delete(doc, "prefix")
		rest, _ := json.Marshal(doc)
		if err := json.Unmarshal(rest, &trees[i]); err != nil {
			t.Fatal(err)
		}
		for _, key := range []string{"prov:startTime", "prov:endTime", "evenkeel:architecture", "evenkeel:cpuFeature", "evenkeel:stageSeconds"} {
			if trees[i]["activity"]["run:run"][key] == nil {
				t.Errorf("%s is not in the log part", key)
			}
			delete(trees[i]["activity"]["run:run"], key)
		}
	}
	if d := cmp.Diff(trees[0], trees[1]); d != "" {
		t.Errorf("beside the log part:\n%s", d)
	}
	if a.ID() != b.ID() {
		t.Error("the log is in the identifier")
	}
	wa, err := withoutLog(a).Marshal()
	if err != nil {
		t.Fatal(err)
	}
	wb, err := withoutLog(b).Marshal()
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(wa, wb) {
		t.Error("records differ beside their log")
	}
}

func withoutLog(r *Record) *Record {
	c := *r
	c.Log = Log{}
	return &c
}

// Every file, and the order of files, is in the identifier.
func TestID(t *testing.T) {
	ids := map[string]string{sample().ID(): "the sample"}
	for name, change := range map[string]func(*Record){
		"run":    func(r *Record) { r.Run += "x" },
		"digest": func(r *Record) { r.Inputs[0].SHA256 = strings.Repeat("d", 64) },
		"size":   func(r *Record) { r.Outputs[0].Bytes++ },
		"path":   func(r *Record) { r.Outputs[1].Path += "x" },
		"order":  func(r *Record) { r.Inputs[0], r.Inputs[1] = r.Inputs[1], r.Inputs[0] },
		"side":   func(r *Record) { r.Outputs = append([]File{r.Inputs[2]}, r.Outputs...); r.Inputs = r.Inputs[:2] },
	} {
		r := sample()
		change(r)
		if other, twice := ids[r.ID()]; twice {
			t.Errorf("%s has the identifier of %s", name, other)
		}
		ids[r.ID()] = name
	}
}

func genRecord(t *rapid.T) *Record {
	word := rapid.StringMatching(`[a-zA-Z][a-zA-Z0-9-]{0,12}`)
	free := rapid.String().Filter(func(s string) bool { return isName(s) })
	any := rapid.OneOf(rapid.SampledFrom([]string{"", "<&>\u2028\"\\"}), rapid.String())
	path := rapid.StringMatching(`[a-zé0-9_.]{1,3}[a-z](/[a-z0-9 :@#-]{1,5}){0,3}`)
	object := rapid.Custom(func(t *rapid.T) json.RawMessage {
		m := rapid.MapOfN(rapid.String(), rapid.OneOf(rapid.Map(rapid.Float64Range(-1e9, 1e9), func(f float64) string { return fmt.Sprint(f) }),
			rapid.SampledFrom([]string{"null", "true", "[]", `{"a":[1,{"b":"\u00e9\ud83d\ude00"}]}`, `"<>&"`})), 0, 4).Draw(t, "object")
		var b bytes.Buffer
		b.WriteByte('{')
		for i, k := range sortedKeys(m) {
			if i > 0 {
				b.WriteByte(',')
			}
			quote(&b, k)
			b.WriteString(":" + m[k])
		}
		b.WriteByte('}')
		return b.Bytes()
	})
	maybe := rapid.OneOf(rapid.Just(json.RawMessage(nil)), object)
	digest := rapid.StringMatching(`[0-9a-f]{64}`)
	files := func(name string) []File {
		return rapid.SliceOfNDistinct(rapid.Custom(func(t *rapid.T) File {
			return File{free.Draw(t, "role"), path.Draw(t, "path"), digest.Draw(t, "sha256"), rapid.Int64Min(0).Draw(t, "bytes")}
		}), 0, 12, func(f File) string { return f.Path }).Draw(t, name)
	}
	when := rapid.Custom(func(t *rapid.T) time.Time {
		if rapid.Bool().Draw(t, "zero") {
			return time.Time{}
		}
		return time.Unix(rapid.Int64Range(0, 4e9).Draw(t, "s"), rapid.Int64Range(0, 999999999).Draw(t, "ns")).UTC()
	})
	start, end := when.Draw(t, "start"), when.Draw(t, "end")
	if !start.IsZero() && !end.IsZero() && end.Before(start) {
		start, end = end, start
	}
	r := &Record{
		Run: word.Draw(t, "run"), DatasetName: any.Draw(t, "dataset"),
		Inputs: files("inputs"), Outputs: files("outputs"), Settings: maybe.Draw(t, "settings"),
		Accepted: rapid.SliceOfDistinct(word, func(s string) string { return s }).Draw(t, "accepted"),
		Faults:   rapid.SliceOfN(object, 0, 3).Draw(t, "faults"),
		Values: rapid.SliceOfNDistinct(rapid.Custom(func(t *rapid.T) Value {
			return Value{free.Draw(t, "key"), string(object.Draw(t, "json")), path.Draw(t, "file")}
		}), 0, 4, func(v Value) string { return v.File + "\n" + v.Key }).Draw(t, "values"),
		Stages: rapid.SliceOfNDistinct(rapid.Custom(func(t *rapid.T) Stage {
			return Stage{free.Draw(t, "name"), maybe.Draw(t, "parameters"), maybe.Draw(t, "outcome")}
		}), 0, 4, func(s Stage) string { return s.Name }).Draw(t, "stages"),
		Software: Software{free.Draw(t, "name"), free.Draw(t, "version"), any.Draw(t, "revision"), any.Draw(t, "go"), rapid.Bool().Draw(t, "modified"),
			rapid.SliceOfN(rapid.Custom(func(t *rapid.T) Module {
				return Module{free.Draw(t, "path"), rapid.StringMatching(`(v[0-9.]{1,5})?`).Draw(t, "version")}
			}), 0, 3).Draw(t, "modules")},
		Log: Log{start, end, any.Draw(t, "architecture"), rapid.SliceOfN(free, 0, 3).Draw(t, "features"),
			rapid.MapOfN(rapid.String(), rapid.Float64Range(0, math.MaxFloat64), 0, 3).Draw(t, "seconds")},
	}
	return r
}

// normal is the form that a record comes back in.
func normal(r *Record) *Record {
	c := *r
	if len(c.Inputs) == 0 {
		c.Inputs = nil
	}
	if len(c.Outputs) == 0 {
		c.Outputs = nil
	}
	if len(c.Accepted) == 0 {
		c.Accepted = nil
	}
	if len(c.Faults) == 0 {
		c.Faults = nil
	}
	if len(c.Values) == 0 {
		c.Values = nil
	}
	if len(c.Stages) == 0 {
		c.Stages = nil
	}
	if len(c.Software.Modules) == 0 {
		c.Software.Modules = nil
	}
	if len(c.Log.CPUFeatures) == 0 {
		c.Log.CPUFeatures = nil
	}
	if len(c.Log.StageSeconds) == 0 {
		c.Log.StageSeconds = nil
	}
	return &c
}

func TestRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := genRecord(t)
		data, err := r.Marshal()
		if err != nil {
			t.Fatal(err)
		}
		back, err := Parse(data)
		if err != nil {
			t.Fatalf("%v\n%s", err, data)
		}
		if d := cmp.Diff(normal(r), back); d != "" {
			t.Fatalf("-written +read\n%s", d)
		}
		again, err := back.Marshal()
		if err != nil || !bytes.Equal(data, again) {
			t.Fatalf("written again it is not the same: %v", err)
		}
	})
}

// White space in embedded JSON goes, nothing else.
func TestCompact(t *testing.T) {
	r := sample()
	r.Settings = json.RawMessage("{\n \"a b\" : [ 1.50 , \"x  y\" ]\n}")
	r.Values[0].JSON = " 2.0\n"
	data, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	back, err := Parse(data)
	if err != nil {
		t.Fatal(err)
	}
	if got := string(back.Settings); got != `{"a b":[1.50,"x  y"]}` {
		t.Errorf("settings %s", got)
	}
	if got := back.Values[0].JSON; got != "2.0" {
		t.Errorf("value %q", got)
	}
}

// Every rule on what a record may hold, broken one at a time.
func TestMarshalRefuses(t *testing.T) {
	deepJSON := strings.Repeat("[", MaxDepth+1) + strings.Repeat("]", MaxDepth+1)
	for _, c := range []struct {
		field  string
		change func(*Record)
	}{
		{"Run", func(r *Record) { r.Run = "" }},
		{"Run", func(r *Record) { r.Run = "a/b" }},
		{"Run", func(r *Record) { r.Run = ".." }},
		{"DatasetName", func(r *Record) { r.DatasetName = "\xff" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "/data/x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "../x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "a/../../x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "a/../x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "./x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "a//x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "a/" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "." }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = `a\x.nii` }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "C:/x.nii" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "a\nb" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "\xff" }},
		{"Inputs[0].Path", func(r *Record) { r.Inputs[0].Path = "" }},
		{"Inputs[1].Path", func(r *Record) { r.Inputs[1].Path = r.Inputs[0].Path }},
		{"Inputs[1].Role", func(r *Record) { r.Inputs[1].Role = "" }},
		{"Outputs[1].Path", func(r *Record) { r.Outputs[1].Path = r.Outputs[0].Path }},
		{"Outputs[0].SHA256", func(r *Record) { r.Outputs[0].SHA256 = strings.Repeat("A", 64) }},
		{"Outputs[0].SHA256", func(r *Record) { r.Outputs[0].SHA256 = strings.Repeat("a", 63) }},
		{"Outputs[0].SHA256", func(r *Record) { r.Outputs[0].SHA256 = strings.Repeat("g", 64) }},
		{"Outputs[0].Bytes", func(r *Record) { r.Outputs[0].Bytes = -1 }},
		{"Settings", func(r *Record) { r.Settings = json.RawMessage("[1]") }},
		{"Settings", func(r *Record) { r.Settings = json.RawMessage("{") }},
		{"Settings", func(r *Record) { r.Settings = json.RawMessage(`{"a":1,"a":2}`) }},
		{"Settings", func(r *Record) { r.Settings = json.RawMessage(`{} {}`) }},
		{"Settings", func(r *Record) { r.Settings = json.RawMessage(`{"a":` + deepJSON + `}`) }},
		{"Accepted[1]", func(r *Record) { r.Accepted = []string{"a", "a"} }},
		{"Accepted[0]", func(r *Record) { r.Accepted = []string{""} }},
		{"Faults[0]", func(r *Record) { r.Faults[0] = nil }},
		{"Faults[1]", func(r *Record) { r.Faults[1] = json.RawMessage(`"x"`) }},
		{"Values[0].Key", func(r *Record) { r.Values[0].Key = "" }},
		{"Values[0].JSON", func(r *Record) { r.Values[0].JSON = "" }},
		{"Values[0].JSON", func(r *Record) { r.Values[0].JSON = "NaN" }},
		{"Values[0].JSON", func(r *Record) { r.Values[0].JSON = "\"\xff\"" }},
		{"Values[0].File", func(r *Record) { r.Values[0].File = "/etc/x.json" }},
		{"Values[2]", func(r *Record) { r.Values[2].Key = r.Values[1].Key }},
		{"Stages[1].Name", func(r *Record) { r.Stages[1].Name = r.Stages[0].Name }},
		{"Stages[0].Parameters", func(r *Record) { r.Stages[0].Parameters = json.RawMessage("1") }},
		{"Stages[0].Outcome", func(r *Record) { r.Stages[0].Outcome = json.RawMessage("null") }},
		{"Software.Name", func(r *Record) { r.Software.Name = "" }},
		{"Software.Version", func(r *Record) { r.Software.Version = "" }},
		{"Software", func(r *Record) { r.Software.Revision = "\xff" }},
		{"Software.Modules[0]", func(r *Record) { r.Software.Modules[0].Version = "v1@2" }},
		{"Software.Modules[1]", func(r *Record) { r.Software.Modules[1].Path = "" }},
		{"Log.Ended", func(r *Record) { r.Log.Ended = r.Log.Started.Add(-1) }},
		{"Log.Started", func(r *Record) { r.Log.Started = time.Date(10000, 1, 1, 0, 0, 0, 0, time.UTC) }},
		{"Log.Architecture", func(r *Record) { r.Log.Architecture = "\xff" }},
		{"Log.CPUFeatures[0]", func(r *Record) { r.Log.CPUFeatures[0] = "" }},
		{"Log.StageSeconds", func(r *Record) { r.Log.StageSeconds["estimate"] = math.NaN() }},
		{"Log.StageSeconds", func(r *Record) { r.Log.StageSeconds["estimate"] = math.Inf(1) }},
		{"Log.StageSeconds", func(r *Record) { r.Log.StageSeconds["estimate"] = -1 }},
		{"", func(r *Record) {
			r.Settings = json.RawMessage(`{"a":"` + strings.Repeat("x", MaxBytes-20) + `"}`)
		}},
	} {
		r := sample()
		c.change(r)
		data, err := r.Marshal()
		var e *Error
		if !errors.As(err, &e) || data != nil {
			t.Errorf("%s: written, or not our error: %v", c.field, err)
			continue
		}
		if e.Field != c.field || e.Found == "" && !strings.HasPrefix(c.field, "Faults") || e.Expected == "" {
			t.Errorf("expected a fault of %s, got %#v", c.field, e)
		}
		if len(e.Error()) > 400 {
			t.Errorf("%s: a message of %d bytes", c.field, len(e.Error()))
		}
	}
}

// A good document, broken one place at a time.
func TestParseRefuses(t *testing.T) {
	data, err := sample().Marshal()
	if err != nil {
		t.Fatal(err)
	}
	good := string(data)
	for _, c := range []struct{ field, old, new string }{
		{"", good, ""},
		{"", good, "null"},
		{"", good, "[]"},
		{"", good, good + "{}"},
		{"", "\"prefix\"", "\"prefix\" \"x\""},
		{"", `"evenkeel:format": {`, `"evenkeel:format": {"$": "1", `}, // a key twice
		{"", `"agent": {`, "\"agent\xff\": {"},
		{"", `"agent": {`, `"x": ` + strings.Repeat("[", MaxDepth) + strings.Repeat("]", MaxDepth) + `, "agent": {`},
		{"prefix", `"prefix": {`, `"prefixed": {`},
		{"prefix.evenkeel", nsEvenkeel, nsEvenkeel + "x"},
		{"prefix.evenkeel", `"evenkeel": "`, `"evenkeel2": "`},
		{"prefix.rdf", nsRDF, nsRDF + "x"},
		{"prefix.run", sample().ID(), strings.Repeat("0", 32)},
		{"prefix.run", `"run": "`, `"runs": "`},
		{"prefix.run", `"$": "73400320"`, `"$": "73400321"`}, // an edit
		{"entity", `"entity": {`, `"entity": [], "was": {`},
		{"entity.run:input-0000", `"run:input-0001": {`, `"run:input-0000": {`},
		{"entity.run:input-0002", `"run:input-0002": {`, `"run:input-0004": {`},
		{"entity.run:input-02", `"run:input-0002": {`, `"run:input-02": {`},
		{"entity.run:input-0001.prov:type", `"$": "evenkeel:Input"`, `"$": "evenkeel:Imput"`},
		{"entity.run:input-0001.prov:location", `"prov:location": "sub-01/func/sub-01_task-harbour_bold.nii.gz"`, `"prov:location": 4`},
		{"entity.run:input-0001.prov:location", `"prov:location": "sub-01/func/sub-01_task-harbour_bold.nii.gz"`, `"prov:place": ""`},
		{"Inputs[0].Path", `"prov:location": "sub-01/func/sub-01_task-harbour_bold.nii.gz"`, `"prov:location": "/sub-01/func/x"`},
		{"Inputs[0].SHA256", strings.Repeat("a", 64), strings.Repeat("a", 62)},
		{"entity.run:input-0001.evenkeel:role", `"evenkeel:role": "series"`, `"evenkeel:role": ["a", "b"]`},
		{"entity.run:input-0001.evenkeel:bytes", `{"$": "41943392", "type": "xsd:long"}`, `{"$": true, "type": "xsd:long"}`},
		{"entity.run:input-0001.evenkeel:bytes", `{"$": "41943392", "type": "xsd:long"}`, `"41943392"`},
		{"entity.run:input-0001.evenkeel:bytes", `{"$": "41943392", "type": "xsd:long"}`, `41943392`},
		{"entity.run:input-0001.evenkeel:bytes", `"41943392"`, `"4e7"`},
		{"entity.run:input-0001.evenkeel:bytes", `"41943392"`, `"99999999999999999999"`},
		{"Inputs[0].Bytes", `"41943392"`, `"-1"`},
		{"entity.run:settings", `"run:settings": {`, `"run:setting": {`},
		{"entity.run:settings.evenkeel:settings", `"{\"time\"`, `"{time`},
		{"Settings", `"{\"time\":\"fourier\",\"origin\":\"middle\",\"reach\":8}"`, `"[]"`},
		{"entity.run:value-0001.prov:value", `{"$": "2.0", "type": "rdf:JSON"}`, `{"$": "two", "type": "rdf:JSON"}`},
		{"entity.run:value-0001.prov:value", `{"$": "2.0", "type": "rdf:JSON"}`, `"2.0"`},
		{"activity.run:run", `"run:run": {`, `"run:ran": {`},
		{"activity.run:run.evenkeel:format", `"evenkeel:format": {"$": "1"`, `"evenkeel:format": {"$": "2"`},
		{"activity.run:run.evenkeel:stem", `"evenkeel:stem"`, `"evenkeel:stern"`},
		{"activity.run:run.prov:startTime", "2026-03-02T09:15:00Z", "2026-03-02 09:15"},
		{"Log.Ended", "2026-03-02T09:17:41.5Z", "2026-03-02T09:14:41.5Z"},
		{"activity.run:run.evenkeel:stageSeconds", `\"resample\":61.25`, `\"resample\":\"61.25\"`},
		{"activity.run:run.evenkeel:stageSeconds", `\"resample\":61.25`, `\"resample\":1e999`},
		{"activity.run:run.evenkeel:fault", `{"$": "{\"id\":\"tr-mismatch\",\"level\":\"error\"}", "type": "rdf:JSON"}`, `"{}"`},
		{"agent.run:software", `"run:software": {`, `"run:hardware": {`},
		{"agent.run:software.evenkeel:module", "example.org/hull@v1.2.3", "example.org/hull"},
		{"agent.run:software.evenkeel:modified", `{"$": "true", "type": "xsd:boolean"}`, `{"$": "perhaps", "type": "xsd:boolean"}`},
		{"agent.run:software.evenkeel:modified", `{"$": "true", "type": "xsd:boolean"}`, `"true"`},
		{"agent.run:software.evenkeel:version", `"evenkeel:version": "0.1.0"`, `"evenkeel:version": true`},
		{"used._:used-0001.prov:entity", `"prov:entity": "run:input-0001"`, `"prov:entity": "run:input-0009"`},
		{"used", `"prov:entity": "run:input-0001"`, `"prov:entity": "run:input-0002"`},
		{"wasGeneratedBy", `"prov:entity": "run:output-0001"`, `"prov:entity": "run:output-0002"`},
		{"wasGeneratedBy._:generated-0001.prov:activity", "\"prov:entity\": \"run:output-0001\",\n      \"prov:activity\": \"run:run\"", `"prov:entity": "run:output-0001", "prov:activity": "run:stage-0001"`},
		{"wasAssociatedWith._:associated-0001.prov:plan", `"prov:plan": "run:settings"`, `"prov:plan": "run:software"`},
		{"wasDerivedFrom._:derived-0001", `"_:derived-0001": {`, `"_:derived-0001": "x", "_:d": {`},
	} {
		i := strings.Index(good, c.old)
		if i < 0 {
			t.Errorf("%s: %s is not in the document", c.field, c.old)
			continue
		}
		r, err := Parse([]byte(good[:i] + c.new + good[i+len(c.old):]))
		var e *Error
		if !errors.As(err, &e) || r != nil {
			t.Errorf("%s with %.60s: read, or not our error: %v", c.field, c.new, err)
			continue
		}
		if e.Field != c.field || e.Found == "" || e.Expected == "" {
			t.Errorf("%.60s: expected a fault of %q, got %#v", c.new, c.field, e)
		}
	}
	if _, err := Parse(make([]byte, MaxBytes+1)); err == nil {
		t.Error("too large, but read")
	}
}

// Sizes and depths stand on both sides of the limit.
func TestLimits(t *testing.T) {
	r := sample()
	for depth, fits := range map[int]bool{MaxDepth: true, MaxDepth + 1: false} {
		r.Values[0].JSON = strings.Repeat("[", depth) + strings.Repeat("]", depth)
		if _, err := r.Marshal(); (err == nil) != fits {
			t.Errorf("depth %d: %v", depth, err)
		}
	}
	// Brackets inside a string are not levels, whatever is escaped there.
	brackets := strings.Repeat("[", MaxDepth+1)
	for _, v := range []string{`"` + brackets + `"`, `"\"` + brackets + `"`, `["\\",1]`} {
		r.Values[0].JSON = v
		if _, err := r.Marshal(); err != nil {
			t.Errorf("%s: %v", v, err)
		}
	}
	r = sample()
	data, err := r.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	// A dataset name fills the document to the limit; one letter more does not fit.
	pad := MaxBytes - len(data)
	r.DatasetName += strings.Repeat("x", pad)
	if data, err = r.Marshal(); err != nil || len(data) != MaxBytes {
		t.Errorf("at the limit: %d bytes, %v", len(data), err)
	}
	if _, err := Parse(data); err != nil {
		t.Errorf("at the limit: %v", err)
	}
	r.DatasetName += "x"
	if _, err := r.Marshal(); err == nil {
		t.Error("over the limit, but written")
	}
	if _, err := Parse(append(data, ' ')); err == nil {
		t.Error("over the limit, but read")
	}
}

// What a reader does not know it passes over; the order of keys does not matter.
func TestParseTolerates(t *testing.T) {
	data, err := sample().Marshal()
	if err != nil {
		t.Fatal(err)
	}
	s := string(data)
	for _, c := range [][2]string{
		{`"entity": {`, `"entity": {"run:chart": {"prov:type": {"$": "evenkeel:Chart", "type": "xsd:QName"}, "evenkeel:depth": [1, null]},`},
		{`"evenkeel:role": "series",`, `"evenkeel:role": "series", "evenkeel:tide": {"$": "high", "lang": "en"},`},
		{`"used": {`, `"wasAttributedTo": [1, 2], "hadMember": {"_:m": 3}, "used": {`},
		{`"evenkeel:format": {"$": "1", "type": "xsd:int"}`, `"evenkeel:format": {"$": "1", "type": "xsd:integer", "extra": 1}`},
		{`{"$": "41943392", "type": "xsd:long"}`, `{"$": 41943392, "type": "xsd:int"}`},
		{`"prov:role": "series"`, `"prov:role": "series", "prov:time": "2026-03-02T09:15:00Z"`},
		{`"prov:type": {"$": "prov:Plan", "type": "xsd:QName"}`, `"prov:type": [{"$": "prov:Plan", "type": "prov:QUALIFIED_NAME"}, {"$": "prov:Collection", "type": "xsd:QName"}]`},
		{`"evenkeel:accepted": "tr-mismatch"`, `"evenkeel:accepted": ["tr-mismatch"]`},
		{"2026-03-02T09:15:00Z", "2026-03-02T10:15:00+01:00"},
		{`{"$": "true", "type": "xsd:boolean"}`, "true"},
	} {
		if !strings.Contains(s, c[0]) {
			t.Fatalf("%s is not in the document", c[0])
		}
		s = strings.Replace(s, c[0], c[1], 1)
	}
	var sorted any
	if err := json.Unmarshal([]byte(s), &sorted); err != nil {
		t.Fatal(err)
	}
	flat, err := json.Marshal(sorted) // keys in the order of the alphabet, on one line
	if err != nil {
		t.Fatal(err)
	}
	for _, doc := range [][]byte{[]byte(s), flat} {
		r, err := Parse(doc)
		if err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(sample(), r); d != "" {
			t.Errorf("-want +got\n%s", d)
		}
		if r.Log.Started.Location() != time.UTC {
			t.Errorf("the zone is %v", r.Log.Started.Location())
		}
	}
}

func TestParseNamesThePlace(t *testing.T) {
	_, err := Parse([]byte("{\n  \"prefix\": {},\n  \"entity\" {}\n}"))
	if err == nil || !strings.Contains(err.Error(), "line 3, column 12") {
		t.Errorf("%v", err)
	}
	dir := t.TempDir()
	name := filepath.Join(dir, "x_prov.json")
	if err := os.WriteFile(name, []byte("{}"), 0o644); err != nil {
		t.Fatal(err)
	}
	_, err = ReadFile(name)
	if e := (*Error)(nil); !errors.As(err, &e) || e.Record != name || e.Field != "prefix" {
		t.Errorf("%#v", err)
	}
	if _, err := ReadFile(filepath.Join(dir, "none")); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%v", err)
	}
	// The run is named as soon as it is known.
	data, _ := sample().Marshal()
	_, err = Parse(bytes.Replace(data, []byte("example.org/hull@"), []byte("example.org/hull"), 1))
	if e := (*Error)(nil); !errors.As(err, &e) || e.Record != "sub-01_task-harbour" {
		t.Errorf("%v", err)
	}
}

// Law: accepted bytes give a record that is written and read back as the same;
// refused bytes give our error and nothing else.
func FuzzParse(f *testing.F) {
	data, err := sample().Marshal()
	if err != nil {
		f.Fatal(err)
	}
	f.Add(data)
	bare, err := (&Record{Run: "a", Software: Software{Name: "b", Version: "c"}}).Marshal()
	if err != nil {
		f.Fatal(err)
	}
	f.Add(bare)
	f.Add(regexp.MustCompile(`\n *`).ReplaceAll(bare, nil))
	f.Add([]byte(`{"prefix":{"evenkeel":"https://evenkeel.example/ns#"},"entity":{},"activity":{},"agent":{}}`))
	f.Add([]byte(`{"a":"\ud800","a":[[[]]]}`))
	f.Fuzz(func(t *testing.T, data []byte) {
		r, err := Parse(data)
		if err != nil {
			if e := (*Error)(nil); !errors.As(err, &e) || r != nil {
				t.Fatalf("refused with %v, %T", r, err)
			}
			_ = err.Error()
			return
		}
		again, err := r.Marshal()
		if err != nil {
			t.Fatalf("read, but not written: %v", err)
		}
		back, err := Parse(again)
		if err != nil {
			t.Fatalf("written, but not read: %v", err)
		}
		if d := cmp.Diff(r, back); d != "" {
			t.Fatal(d)
		}
	})
}

func ExampleRecord_Marshal() {
	var hull Digester
	hull.Write([]byte("abc"))
	r := &Record{
		Run:      "sub-01_task-harbour",
		Outputs:  []File{hull.File("pose-table", "sub-01/func/sub-01_task-harbour_desc-steady_pose.tsv")},
		Settings: json.RawMessage(`{"time":"fourier"}`),
		Software: Software{Name: "evenkeel", Version: "0.1.0"},
	}
	data, err := r.Marshal()
	if err != nil {
		fmt.Println(err)
		return
	}
	back, err := Parse(data)
	fmt.Println(back.Outputs[0].SHA256[:16], back.Outputs[0].Bytes, err)

	r.Outputs[0].Path = "/home/captain/pose.tsv"
	_, err = r.Marshal()
	fmt.Println(err)
	// Output:
	// ba7816bf8f01cfea 3 <nil>
	// record sub-01_task-harbour: Outputs[0].Path: found "/home/captain/pose.tsv", expected a path relative to its dataset
}
