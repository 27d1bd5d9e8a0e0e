package provenance

import (
	"bytes"
	"encoding/json"
	"fmt"
	"maps"
	"path"
	"slices"
	"strconv"
)

// The document is built as a tree whose keys keep their order, then printed:
// sections, records and attributes on lines of their own, a typed value on one.

type member struct {
	key   string
	value any // object, []any, literal or string
}

type object []member

func (o *object) add(key string, value any) { *o = append(*o, member{key, value}) }

// text adds a string unless it is empty.
func (o *object) text(key, s string) {
	if s != "" {
		o.add(key, s)
	}
}

// json adds embedded JSON unless it is absent.
func (o *object) json(key string, raw json.RawMessage) {
	if len(raw) > 0 {
		o.add(key, jsonLiteral(raw))
	}
}

// list adds the values unless there are none; one is written bare, as PROV-JSON
// does for an attribute with one value.
func (o *object) list(key string, values []any) {
	switch len(values) {
	case 0:
	case 1:
		o.add(key, values[0])
	default:
		o.add(key, values)
	}
}

// literal is a typed value; its text is a string whatever the type.
type literal struct{ text, typ string }

func qname(name string) literal                 { return literal{name, "xsd:QName"} }
func jsonLiteral(raw []byte) literal            { return literal{compact(raw), "rdf:JSON"} }
func integer(n int64, typ string) literal       { return literal{strconv.FormatInt(n, 10), typ} }
func sortedKeys[V any](m map[string]V) []string { return slices.Sorted(maps.Keys(m)) }

// Identifiers with one bearer. Those with many are numbered by [numbered].
const (
	idRun      = "run:run"
	idSettings = "run:settings"
	idSoftware = "run:software"
)

// numbered writes the identifier of the i-th of a class, i from 0. Four digits
// keep the order of a record also where a tool sorts its keys.
func numbered(class string, i int) string { return fmt.Sprintf("run:%s-%04d", class, i+1) }

// Marshal writes the record as PROV-JSON, indented, ended by a line feed. An
// [*Error] says what the record must not hold.
func (r *Record) Marshal() ([]byte, error) {
	if err := r.validate(); err != nil {
		return nil, err
	}
	var b bytes.Buffer
	p := printer{b: &b}
	p.value(r.document(), 0)
	b.WriteByte('\n')
	if b.Len() > MaxBytes {
		return nil, &Error{Record: r.Run, Found: fmt.Sprintf("%d bytes", b.Len()), Expected: fmt.Sprintf("at most %d", MaxBytes)}
	}
	return b.Bytes(), nil
}

func (r *Record) document() object {
	return object{
		{"prefix", object{
			{"evenkeel", nsEvenkeel},
			{"run", nsRun + r.ID() + "#"},
			{"rdf", nsRDF},
			{"dcterms", nsTerms},
		}},
		{"entity", r.entities()},
		{"activity", r.activities()},
		{"agent", r.agents()},
		{"used", r.used()},
		{"wasGeneratedBy", r.generated()},
		{"wasDerivedFrom", r.derived()},
		{"wasInformedBy", r.informed()},
		{"wasAssociatedWith", r.associated()},
	}
}

func (r *Record) entities() (o object) {
	files := func(class, typ string, list []File) {
		for i, f := range list {
			o.add(numbered(class, i), object{
				{"prov:type", qname(typ)},
				{"prov:label", path.Base(f.Path)},
				{"prov:location", f.Path},
				{"evenkeel:role", f.Role},
				{"evenkeel:sha256", f.SHA256},
				{"evenkeel:bytes", integer(f.Bytes, "xsd:long")},
			})
		}
	}
	files("input", "evenkeel:Input", r.Inputs)
	files("output", "evenkeel:Output", r.Outputs)
	settings := object{{"prov:type", qname("prov:Plan")}, {"prov:label", "settings"}}
	settings.json("evenkeel:settings", r.Settings)
	o.add(idSettings, settings)
	for i, v := range r.Values {
		o.add(numbered("value", i), object{
			{"prov:type", qname("evenkeel:Value")},
			{"evenkeel:key", v.Key},
			{"prov:value", jsonLiteral([]byte(v.JSON))},
			{"evenkeel:file", v.File},
		})
	}
	return o
}

func (r *Record) activities() (o object) {
	run := object{
		{"prov:type", qname("evenkeel:Run")},
		{"evenkeel:format", integer(format, "xsd:int")},
		{"evenkeel:stem", r.Run},
	}
	run.text("evenkeel:dataset", r.DatasetName)
	run.list("evenkeel:accepted", texts(r.Accepted))
	var faults []any
	for _, f := range r.Faults {
		faults = append(faults, jsonLiteral(f))
	}
	run.list("evenkeel:fault", faults)
	// From here on: the log part.
	if !r.Log.Started.IsZero() {
		run.add("prov:startTime", stamp(r.Log.Started))
	}
	if !r.Log.Ended.IsZero() {
		run.add("prov:endTime", stamp(r.Log.Ended))
	}
	run.text("evenkeel:architecture", r.Log.Architecture)
	run.list("evenkeel:cpuFeature", texts(r.Log.CPUFeatures))
	if len(r.Log.StageSeconds) > 0 {
		var b bytes.Buffer
		for i, name := range sortedKeys(r.Log.StageSeconds) {
			b.WriteByte("{,"[min(i, 1)])
			quote(&b, name)
			b.WriteByte(':')
			b.WriteString(strconv.FormatFloat(r.Log.StageSeconds[name], 'g', -1, 64))
		}
		b.WriteByte('}')
		run.add("evenkeel:stageSeconds", jsonLiteral(b.Bytes()))
	}
	o.add(idRun, run)
	for i, s := range r.Stages {
		stage := object{
			{"prov:type", qname("evenkeel:Stage")},
			{"evenkeel:name", s.Name},
			{"dcterms:isPartOf", qname(idRun)},
		}
		stage.json("evenkeel:parameters", s.Parameters)
		stage.json("evenkeel:outcome", s.Outcome)
		o.add(numbered("stage", i), stage)
	}
	return o
}

func texts(list []string) (values []any) {
	for _, s := range list {
		values = append(values, s)
	}
	return values
}

func (r *Record) agents() object {
	s := r.Software
	software := object{
		{"prov:type", qname("prov:SoftwareAgent")},
		{"prov:label", s.Name},
		{"evenkeel:version", s.Version},
	}
	software.text("evenkeel:revision", s.Revision)
	if s.Modified {
		software.add("evenkeel:modified", literal{"true", "xsd:boolean"})
	}
	software.text("evenkeel:goVersion", s.GoVersion)
	var modules []any
	for _, m := range s.Modules {
		modules = append(modules, m.Path+"@"+m.Version)
	}
	software.list("evenkeel:module", modules)
	return object{{idSoftware, software}}
}

// relate adds a relation under an anonymous identifier of its own.
func (o *object) relate(class string, fields object) {
	o.add(fmt.Sprintf("_:%s-%04d", class, len(*o)+1), fields)
}

func (r *Record) used() (o object) {
	for i, f := range r.Inputs {
		o.relate("used", object{{"prov:activity", idRun}, {"prov:entity", numbered("input", i)}, {"prov:role", f.Role}})
	}
	for i := range r.Values {
		o.relate("used", object{{"prov:activity", idRun}, {"prov:entity", numbered("value", i)}})
	}
	return o
}

func (r *Record) generated() (o object) {
	for i, f := range r.Outputs {
		o.relate("generated", object{{"prov:entity", numbered("output", i)}, {"prov:activity", idRun}, {"prov:role", f.Role}})
	}
	return o
}

func (r *Record) derived() (o object) {
	input := map[string]string{}
	for i, f := range r.Inputs {
		input[f.Path] = numbered("input", i)
		for k := range r.Outputs {
			o.relate("derived", object{{"prov:generatedEntity", numbered("output", k)}, {"prov:usedEntity", numbered("input", i)}, {"prov:activity", idRun}})
		}
	}
	for i, v := range r.Values {
		if id, ok := input[v.File]; ok {
			o.relate("derived", object{{"prov:generatedEntity", numbered("value", i)}, {"prov:usedEntity", id}})
		}
	}
	return o
}

func (r *Record) informed() (o object) {
	for i := 1; i < len(r.Stages); i++ {
		o.relate("informed", object{{"prov:informed", numbered("stage", i)}, {"prov:informant", numbered("stage", i-1)}})
	}
	return o
}

func (r *Record) associated() (o object) {
	add := func(activity string) {
		o.relate("associated", object{{"prov:activity", activity}, {"prov:agent", idSoftware}, {"prov:plan", idSettings}})
	}
	add(idRun)
	for i := range r.Stages {
		add(numbered("stage", i))
	}
	return o
}

// printer writes the tree.
type printer struct{ b *bytes.Buffer }

func (p printer) line(level int) {
	p.b.WriteByte('\n')
	for range level {
		p.b.WriteString("  ")
	}
}

func (p printer) value(v any, level int) {
	switch v := v.(type) {
	case string:
		quote(p.b, v)
	case literal:
		p.b.WriteString(`{"$": `)
		quote(p.b, v.text)
		p.b.WriteString(`, "type": `)
		quote(p.b, v.typ)
		p.b.WriteByte('}')
	case []any:
		p.b.WriteByte('[')
		for i, item := range v {
			if i > 0 {
				p.b.WriteByte(',')
			}
			p.line(level + 1)
			p.value(item, level+1)
		}
		p.line(level)
		p.b.WriteByte(']')
	case object:
		p.b.WriteByte('{')
		for i, m := range v {
			if i > 0 {
				p.b.WriteByte(',')
			}
			p.line(level + 1)
			quote(p.b, m.key)
			p.b.WriteString(": ")
			p.value(m.value, level+1)
		}
		if len(v) > 0 {
			p.line(level)
		}
		p.b.WriteByte('}')
	default:
		panic(fmt.Sprintf("provenance: printer: %T", v))
	}
}

// quote writes a JSON string, < > & as they are.
func quote(b *bytes.Buffer, s string) {
	e := json.NewEncoder(b)
	e.SetEscapeHTML(false)
	if err := e.Encode(s); err != nil {
		panic("provenance: quote: " + err.Error())
	}
	b.Truncate(b.Len() - 1) // Encode ends with a line feed
}
