package provenance

import (
	"encoding/json"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"
	"time"
)

// ReadFile reads and parses a record. Reading more than [MaxBytes] is refused.
// What is wrong with the content is an [*Error] whose Record is name; what the
// file system says is returned as it is.
func ReadFile(name string) (*Record, error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, MaxBytes+1))
	if err != nil {
		return nil, err
	}
	r, err := Parse(data)
	if e, ok := err.(*Error); ok {
		e.Record = name
	}
	if err != nil {
		return nil, err
	}
	return r, nil
}

// Parse reads what [Record.Marshal] writes, also after another program has
// written it anew with its keys in another order. Unknown sections, records and
// attributes are passed over; what is known is held to the rules in the package
// documentation. Every error is an [*Error].
func Parse(data []byte) (*Record, error) {
	p := &parser{r: &Record{}}
	err := p.parse(data)
	if err == nil {
		err = p.r.validate()
	}
	if err == nil {
		if want := nsRun + p.r.ID() + "#"; p.runNS != want {
			err = &Error{Field: "prefix.run", Found: show(p.runNS), Expected: want + ", which follows from the files it lists"}
		}
	}
	if err != nil {
		if err.Record == "" {
			err.Record = p.r.Run
		}
		return nil, err
	}
	return p.r, nil
}

type parser struct {
	r     *Record
	doc   *node
	runNS string
}

func (p *parser) parse(data []byte) *Error {
	doc, err := parseTree(data)
	if err != nil {
		return err
	}
	if doc.kind != isObject {
		return &Error{Found: doc.kind.String(), Expected: "an object"}
	}
	p.doc = doc
	for _, step := range []func() *Error{p.shape, p.prefixes, p.run, p.files, p.settings, p.values, p.stages, p.software, p.relations} {
		if err := step(); err != nil {
			return err
		}
	}
	return nil
}

// sections are the parts of the document that are looked into.
var sections = []string{"prefix", "entity", "activity", "agent", "used", "wasGeneratedBy", "wasDerivedFrom", "wasInformedBy", "wasAssociatedWith"}

// shape holds every known section to being an object of objects (of strings for
// the prefixes).
func (p *parser) shape() *Error {
	for _, name := range sections {
		s := p.doc.members[name]
		if s == nil {
			if name == "prefix" || name == "entity" || name == "activity" || name == "agent" {
				return &Error{Field: name, Found: "nothing", Expected: "an object"}
			}
			continue
		}
		if s.kind != isObject {
			return &Error{Field: name, Found: s.kind.String(), Expected: "an object"}
		}
		want := isObject
		if name == "prefix" {
			want = isString
		}
		for _, id := range s.keys {
			if k := s.members[id].kind; k != want {
				return &Error{Field: name + "." + id, Found: k.String(), Expected: want.String()}
			}
		}
	}
	return nil
}

func (p *parser) prefixes() *Error {
	prefix := p.doc.members["prefix"].members
	for _, want := range []member{{"evenkeel", nsEvenkeel}, {"rdf", nsRDF}, {"dcterms", nsTerms}} {
		got := "nothing"
		if n := prefix[want.key]; n != nil {
			got = n.text
		}
		if got != want.value && (want.key == "evenkeel" || prefix[want.key] != nil) {
			return &Error{Field: "prefix." + want.key, Found: show(got), Expected: want.value.(string)}
		}
	}
	if n := prefix["run"]; n != nil {
		p.runNS = n.text // held against the content at the end
	}
	return nil
}

// thing is one record of a section.
type thing struct {
	where string // section.identifier
	n     *node
}

func (p *parser) find(section, id string) (thing, *Error) {
	t := thing{section + "." + id, p.doc.members[section].members[id]}
	if t.n == nil {
		return t, &Error{Field: t.where, Found: "nothing", Expected: "an object"}
	}
	return t, nil
}

// class returns the records of a section that are numbered run:class-N, in the
// order of their numbers, which count from 1 without gaps.
func (p *parser) class(section, class string) ([]thing, *Error) {
	s := p.doc.members[section]
	byNumber := map[int]string{}
	var numbers []int
	for _, id := range s.keys {
		digits, ok := strings.CutPrefix(id, "run:"+class+"-")
		if !ok {
			continue
		}
		n, err := strconv.Atoi(digits)
		if err != nil || n < 1 || id != numbered(class, n-1) {
			return nil, &Error{Field: section + "." + id, Found: show(digits), Expected: "a number from 0001"}
		}
		byNumber[n] = id
		numbers = append(numbers, n)
	}
	slices.Sort(numbers)
	var list []thing
	for i, n := range numbers {
		if n != i+1 {
			return nil, &Error{Field: section + "." + numbered(class, i), Found: "nothing", Expected: "an object: the numbers have no gap"}
		}
		list = append(list, thing{section + "." + byNumber[n], s.members[byNumber[n]]})
	}
	return list, nil
}

// values returns the values of an attribute, none if it is absent: literals
// with their type, bare strings with none.
func (t thing) values(key string) ([]literal, *Error) {
	n := t.n.members[key]
	if n == nil {
		return nil, nil
	}
	items := []*node{n}
	if n.kind == isArray {
		items = n.items
	}
	var list []literal
	for _, n := range items {
		switch n.kind {
		case isString:
			list = append(list, literal{text: n.text})
		case isBool: // as some libraries write an xsd:boolean
			list = append(list, literal{n.text, "xsd:boolean"})
		case isObject:
			text, typ := n.members["$"], n.members["type"]
			// The submission wants a string; a number is what some libraries write.
			if text == nil || text.kind != isString && text.kind != isNumber || typ != nil && typ.kind != isString {
				return nil, t.bad(key, "an object without a text", `{"$": a string, "type": a string}`)
			}
			l := literal{text: text.text}
			if typ != nil {
				l.typ = typ.text
			}
			list = append(list, l)
		default:
			return nil, t.bad(key, n.kind.String(), "a string or a typed value")
		}
	}
	return list, nil
}

func (t thing) bad(key, found, expected string) *Error {
	return &Error{Field: t.where + "." + key, Found: found, Expected: expected}
}

// one returns the single value of an attribute whose type is one of types; the
// first of types may be "" for a bare string.
func (t thing) one(key string, must bool, types ...string) (string, *Error) {
	list, err := t.values(key)
	switch {
	case err != nil:
		return "", err
	case len(list) == 0 && !must:
		return "", nil
	case len(list) != 1:
		return "", t.bad(key, fmt.Sprintf("%d values", len(list)), "one value")
	case !slices.Contains(types, list[0].typ):
		return "", t.bad(key, "the type "+show(list[0].typ), "the type "+strings.Join(types, " or "))
	}
	return list[0].text, nil
}

func (t thing) text(key string, must bool) (string, *Error) {
	return t.one(key, must, "", "xsd:string")
}

func (t thing) texts(key string) ([]string, *Error) {
	list, err := t.values(key)
	var all []string
	for _, l := range list {
		if l.typ != "" && l.typ != "xsd:string" {
			return nil, t.bad(key, "the type "+show(l.typ), "strings")
		}
		all = append(all, l.text)
	}
	return all, err
}

func (t thing) integer(key string) (int64, *Error) {
	s, err := t.one(key, true, "xsd:long", "xsd:int", "xsd:integer", "xsd:nonNegativeInteger")
	if err != nil {
		return 0, err
	}
	n, perr := strconv.ParseInt(s, 10, 64)
	if perr != nil {
		return 0, t.bad(key, show(s), "a whole number")
	}
	return n, nil
}

// truth returns an xsd:boolean (XML Schema Part 2, 3.3.2), false if it is absent.
func (t thing) truth(key string) (bool, *Error) {
	s, err := t.one(key, false, "xsd:boolean")
	switch {
	case err != nil:
		return false, err
	case s == "true", s == "1":
		return true, nil
	case s == "", s == "false", s == "0":
		return false, nil
	}
	return false, t.bad(key, show(s), "true or false")
}

// json returns embedded JSON in its compact form.
func (t thing) json(key string, must bool) (json.RawMessage, *Error) {
	s, err := t.one(key, must, "rdf:JSON")
	if err != nil || s == "" && !must {
		return nil, err
	}
	return t.embedded(key, s)
}

func (t thing) embedded(key, s string) (json.RawMessage, *Error) {
	if _, err := parseTree([]byte(s)); err != nil {
		return nil, t.bad(key, err.Found, err.Expected)
	}
	return json.RawMessage(compact([]byte(s))), nil
}

// is holds the attribute prov:type to naming the class.
func (t thing) is(class string) *Error {
	list, err := t.values("prov:type")
	if err != nil {
		return err
	}
	for _, l := range list {
		if l.text == class && (l.typ == "xsd:QName" || l.typ == "prov:QUALIFIED_NAME") {
			return nil
		}
	}
	return t.bad("prov:type", fmt.Sprintf("%d values, none of them that", len(list)), class)
}

func (p *parser) run() (err *Error) {
	t, err := p.find("activity", idRun)
	if err != nil {
		return err
	}
	if err := t.is("evenkeel:Run"); err != nil {
		return err
	}
	n, err := t.integer("evenkeel:format")
	if err != nil {
		return err
	}
	if n < 1 || n > format {
		return t.bad("evenkeel:format", fmt.Sprint(n), fmt.Sprintf("1 to %d: a later version may read it", format))
	}
	r := p.r
	if r.Run, err = t.text("evenkeel:stem", true); err != nil {
		return err
	}
	if r.DatasetName, err = t.text("evenkeel:dataset", false); err != nil {
		return err
	}
	if r.Accepted, err = t.texts("evenkeel:accepted"); err != nil {
		return err
	}
	faults, err := t.values("evenkeel:fault")
	if err != nil {
		return err
	}
	for _, f := range faults {
		if f.typ != "rdf:JSON" {
			return t.bad("evenkeel:fault", "the type "+show(f.typ), "the type rdf:JSON")
		}
		raw, err := t.embedded("evenkeel:fault", f.text)
		if err != nil {
			return err
		}
		r.Faults = append(r.Faults, raw)
	}

	if r.Log.Started, err = t.time("prov:startTime"); err != nil {
		return err
	}
	if r.Log.Ended, err = t.time("prov:endTime"); err != nil {
		return err
	}
	if r.Log.Architecture, err = t.text("evenkeel:architecture", false); err != nil {
		return err
	}
	if r.Log.CPUFeatures, err = t.texts("evenkeel:cpuFeature"); err != nil {
		return err
	}
	const key = "evenkeel:stageSeconds"
	raw, err := t.json(key, false)
	if err != nil || raw == nil {
		return err
	}
	seconds, err := parseTree(raw)
	if err != nil {
		return t.bad(key, err.Found, err.Expected)
	}
	if seconds.kind != isObject {
		return t.bad(key, seconds.kind.String(), "an object")
	}
	for _, name := range seconds.keys {
		v, perr := strconv.ParseFloat(seconds.members[name].text, 64)
		if seconds.members[name].kind != isNumber || perr != nil || math.IsInf(v, 0) {
			return t.bad(key, show(name)+": "+seconds.members[name].kind.String(), "a number of seconds")
		}
		if r.Log.StageSeconds == nil {
			r.Log.StageSeconds = map[string]float64{}
		}
		r.Log.StageSeconds[name] = v
	}
	return nil
}

func (t thing) time(key string) (time.Time, *Error) {
	s, err := t.one(key, false, "", "xsd:dateTime")
	if err != nil || s == "" {
		return time.Time{}, err
	}
	at, perr := time.Parse(time.RFC3339Nano, s)
	if perr != nil {
		return time.Time{}, t.bad(key, show(s), "an xsd:dateTime with its zone")
	}
	return at.UTC(), nil
}

func (p *parser) files() *Error {
	for _, c := range []struct {
		class, typ string
		list       *[]File
	}{{"input", "evenkeel:Input", &p.r.Inputs}, {"output", "evenkeel:Output", &p.r.Outputs}} {
		things, err := p.class("entity", c.class)
		if err != nil {
			return err
		}
		for _, t := range things {
			var f File
			if err := t.is(c.typ); err != nil {
				return err
			}
			if f.Path, err = t.text("prov:location", true); err != nil {
				return err
			}
			if f.Role, err = t.text("evenkeel:role", true); err != nil {
				return err
			}
			if f.SHA256, err = t.text("evenkeel:sha256", true); err != nil {
				return err
			}
			if f.Bytes, err = t.integer("evenkeel:bytes"); err != nil {
				return err
			}
			*c.list = append(*c.list, f)
		}
	}
	return nil
}

func (p *parser) settings() *Error {
	t, err := p.find("entity", idSettings)
	if err != nil {
		return err
	}
	if err := t.is("prov:Plan"); err != nil {
		return err
	}
	p.r.Settings, err = t.json("evenkeel:settings", false)
	return err
}

func (p *parser) values() *Error {
	things, err := p.class("entity", "value")
	if err != nil {
		return err
	}
	for _, t := range things {
		var v Value
		if err := t.is("evenkeel:Value"); err != nil {
			return err
		}
		if v.Key, err = t.text("evenkeel:key", true); err != nil {
			return err
		}
		raw, err := t.json("prov:value", true)
		if err != nil {
			return err
		}
		v.JSON = string(raw)
		if v.File, err = t.text("evenkeel:file", true); err != nil {
			return err
		}
		p.r.Values = append(p.r.Values, v)
	}
	return nil
}

func (p *parser) stages() *Error {
	things, err := p.class("activity", "stage")
	if err != nil {
		return err
	}
	for _, t := range things {
		var s Stage
		if err := t.is("evenkeel:Stage"); err != nil {
			return err
		}
		if s.Name, err = t.text("evenkeel:name", true); err != nil {
			return err
		}
		if s.Parameters, err = t.json("evenkeel:parameters", false); err != nil {
			return err
		}
		if s.Outcome, err = t.json("evenkeel:outcome", false); err != nil {
			return err
		}
		p.r.Stages = append(p.r.Stages, s)
	}
	return nil
}

func (p *parser) software() *Error {
	t, err := p.find("agent", idSoftware)
	if err != nil {
		return err
	}
	if err := t.is("prov:SoftwareAgent"); err != nil {
		return err
	}
	s := &p.r.Software
	if s.Name, err = t.text("prov:label", true); err != nil {
		return err
	}
	if s.Version, err = t.text("evenkeel:version", true); err != nil {
		return err
	}
	if s.Revision, err = t.text("evenkeel:revision", false); err != nil {
		return err
	}
	if s.Modified, err = t.truth("evenkeel:modified"); err != nil {
		return err
	}
	if s.GoVersion, err = t.text("evenkeel:goVersion", false); err != nil {
		return err
	}
	modules, err := t.texts("evenkeel:module")
	if err != nil {
		return err
	}
	for _, m := range modules {
		at := strings.LastIndexByte(m, '@')
		if at < 0 {
			return t.bad("evenkeel:module", show(m), "path@version")
		}
		s.Modules = append(s.Modules, Module{m[:at], m[at+1:]})
	}
	return nil
}

// ends says which section each end of a relation points into.
var ends = map[string]string{
	"prov:entity": "entity", "prov:generatedEntity": "entity", "prov:usedEntity": "entity", "prov:plan": "entity",
	"prov:activity": "activity", "prov:informed": "activity", "prov:informant": "activity",
	"prov:agent": "agent",
}

// relations holds the relations to PROV-CONSTRAINTS as far as a record goes:
// both ends are declared, every output is generated once, by the run, and every
// input is used by it.
func (p *parser) relations() *Error {
	generated, used := map[string]int{}, map[string]bool{}
	for _, name := range sections[4:] {
		s := p.doc.members[name]
		if s == nil {
			continue
		}
		for _, id := range s.keys {
			t := thing{name + "." + id, s.members[id]}
			for _, key := range t.n.keys {
				section, known := ends[key]
				if !known {
					continue
				}
				to, err := t.one(key, true, "", "xsd:string", "xsd:QName", "prov:QUALIFIED_NAME")
				if err != nil {
					return err
				}
				if p.doc.members[section].members[to] == nil {
					return t.bad(key, show(to), "the name of a declared "+section)
				}
			}
			end := func(key string) string {
				s, _ := t.one(key, false, "", "xsd:string", "xsd:QName", "prov:QUALIFIED_NAME")
				return s
			}
			switch name {
			case "wasGeneratedBy":
				if generated[end("prov:entity")]++; end("prov:activity") != idRun && strings.HasPrefix(end("prov:entity"), "run:output-") {
					return t.bad("prov:activity", show(end("prov:activity")), idRun)
				}
			case "used":
				if end("prov:activity") == idRun {
					used[end("prov:entity")] = true
				}
			}
		}
	}
	for i := range p.r.Outputs {
		if id := numbered("output", i); generated[id] != 1 {
			return &Error{Field: "wasGeneratedBy", Found: fmt.Sprintf("%s %d times", id, generated[id]), Expected: "every output once"}
		}
	}
	for i := range p.r.Inputs {
		if id := numbered("input", i); !used[id] {
			return &Error{Field: "used", Found: "no use of " + id, Expected: "every input used by " + idRun}
		}
	}
	return nil
}
