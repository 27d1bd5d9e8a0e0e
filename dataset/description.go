package dataset

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"

	"github.com/tidwall/gjson"
)

// maxSmallFile bounds what is read of dataset_description.json and .bidsignore.
const maxSmallFile = 4 << 20

// readSmall reads a regular file of the dataset's root.
func (w *walker) readSmall(name string) ([]byte, error) {
	info, err := os.Lstat(w.path(name))
	if err != nil {
		return nil, err
	}
	if flaw := w.file(name, fs.FileInfoToDirEntry(info)); flaw != nil {
		return nil, errors.New(flaw.found)
	}
	f, err := os.Open(w.path(name))
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxSmallFile+1))
	if err != nil {
		return nil, err
	}
	if len(data) > maxSmallFile {
		return nil, fmt.Errorf("it is larger than %d MiB", maxSmallFile>>20)
	}
	return data, nil
}

// describe reads dataset_description.json. The dataset is walked whatever is
// wrong with it: nothing in it is needed to process a run.
func (w *walker) describe() {
	const name = "dataset_description.json"
	const wanted, remedy = "a JSON object with Name and BIDSVersion", "see the standard, section Dataset description"
	data, err := w.readSmall(name)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		w.notice(NoticeDescription, name, "no such file: the folder may not be a BIDS dataset", wanted, remedy)
		return
	case err != nil:
		w.notice(NoticeDescription, name, "a file that cannot be read: "+reason(err), wanted, remedy)
		return
	}
	o, ok := parseObject(data)
	if !ok {
		w.notice(NoticeDescription, name, "no JSON object", wanted, remedy)
		return
	}
	w.d.Described = true
	w.d.Name = text(o, "Name")
	w.d.BIDSVersion = text(o, "BIDSVersion")
	w.d.DOI = doiURI(text(o, "DatasetDOI"))
	w.d.Derivative = text(o, "DatasetType") == "derivative"
	for _, key := range []string{"Name", "BIDSVersion"} {
		if text(o, key) == "" {
			w.notice(NoticeDescription, name, "no "+key, "a text", "add it: the standard requires it")
		}
	}
}

// parseObject reads a JSON object, with or without a byte order mark.
func parseObject(data []byte) (gjson.Result, bool) {
	data = bytes.TrimPrefix(data, []byte("\ufeff"))
	// The parser recurses, and running out of stack could not be recovered from.
	if nesting(data) > maxNesting || !gjson.ValidBytes(data) {
		return gjson.Result{}, false
	}
	o := gjson.ParseBytes(data)
	return o, o.IsObject()
}

const maxNesting = 1000

// nesting returns how deep brackets and braces outside texts are opened at most.
func nesting(data []byte) int {
	depth, deepest, quoted := 0, 0, false
	for i := 0; i < len(data); i++ {
		switch c := data[i]; {
		case quoted && c == '\\':
			i++
		case c == '"':
			quoted = !quoted
		case quoted:
		case c == '[' || c == '{':
			depth++
			deepest = max(deepest, depth)
		case c == ']' || c == '}':
			depth--
		}
	}
	return deepest
}

func text(o gjson.Result, key string) string {
	if v := o.Get(key); v.Type == gjson.String {
		return strings.ToValidUTF8(v.Str, "\ufffd")
	}
	return ""
}

// doiURI gives a DOI as a URI, as the standard wants it; a bare one
// (deprecated) gets its scheme. Anything else is not used.
func doiURI(s string) string {
	switch {
	case strings.HasPrefix(s, "doi:10."), strings.HasPrefix(s, "https://doi.org/10."):
		return s
	case strings.HasPrefix(s, "10."):
		return "doi:" + s
	}
	return ""
}

func (w *walker) readIgnore() {
	const name = ".bidsignore"
	data, err := w.readSmall(name)
	if errors.Is(err, fs.ErrNotExist) {
		return
	}
	if err != nil {
		w.notice(NoticePattern, name, "a file that cannot be read: "+reason(err)+"; nothing is excluded", "a text file", "")
		return
	}
	rules, bad := parseIgnore(string(data))
	w.rules = rules
	for _, line := range bad {
		w.notice(NoticePattern, name, "a line that is not a pattern and excludes nothing: "+quoted(line), "a pattern as in .gitignore", "correct it")
	}
}
