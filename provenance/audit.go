package provenance

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path"
	"slices"
	"strings"
	"sync"

	"evenkeel/internal/parallel"
)

// Checked is what an audit looked at. A file that several records name counts
// once for each.
type Checked struct {
	Records      int `json:"records"`       // files named as a record, understood or not
	Outputs      int `json:"outputs"`       // outputs held against their record
	Inputs       int `json:"inputs"`        // inputs held against their record
	InputsUnseen int `json:"inputs_unseen"` // inputs not looked for, the raw dataset not being given
	Unlisted     int `json:"unlisted"`      // files beside records that none of them lists
}

// Auditor checks an output folder.
type Auditor struct {
	Out     string // the output folder
	Raw     string // the raw dataset, or "" if it is not at hand
	Version string // other versions in records are noted; "" notes none
	Workers int    // files read at once; less than 1 counts as 1
	// Done is called after each file read, never concurrently, with how many of
	// how many are done; nil is not called. The order of files is not fixed.
	Done func(done, of int)
}

// Audit finds every *_prov.json below Out, reads it, and compares each file it
// names in size and digest. It looks for files beside a record that no
// record lists, whatever their name, and for corrected series without a
// record. Files and folders whose name begins with a dot are passed over, and
// no link that leads out of Out is followed, nor any to a folder. A file of the wrong size is not
// read, and a raw file that many records name is read once.
//
// Findings are sorted and the same for any number of workers; there are none if
// all is well. The error is non-nil if the audit could not be made: Out or Raw
// is not a readable folder, or ctx was cancelled.
func (a Auditor) Audit(ctx context.Context) ([]Finding, Checked, error) {
	root, err := os.OpenRoot(a.Out)
	if err != nil {
		return nil, Checked{}, err
	}
	defer root.Close()
	out := outFolder(root)
	var raw folder
	if a.Raw != "" {
		// Opened to learn whether it can be read; links below it may lead out.
		dir, err := os.OpenRoot(a.Raw)
		if err != nil {
			return nil, Checked{}, err
		}
		dir.Close()
		raw = rawFolder(a.Raw)
	}

	w := auditWork{Auditor: a, out: out, listed: map[string]string{}}
	if err := w.walk(ctx, root.FS()); err != nil {
		return nil, Checked{}, err
	}
	if err := w.read(ctx); err != nil {
		return nil, Checked{}, err
	}
	w.strangers()
	if err := w.compare(ctx, out, raw); err != nil {
		return nil, Checked{}, err
	}
	sortFindings(w.findings)
	return w.findings, w.checked, nil
}

type auditWork struct {
	Auditor
	out      folder
	folders  []auditFolder
	listed   map[string]string // output path -> first record that lists it
	findings []Finding
	checked  Checked
}

// auditFolder is a folder of the output and the files in it, sorted.
type auditFolder struct {
	dir     string
	files   []string // names
	records []auditRecord
}

type auditRecord struct {
	path string
	stem string  // as its name says
	rec  *Record // nil if it could not be understood
}

func (w *auditWork) find(kind, record, file, found, expected string) {
	w.findings = append(w.findings, Finding{kind, record, file, found, expected})
}

// walk lists the files of the output, folder by folder.
func (w *auditWork) walk(ctx context.Context, fsys fs.FS) error {
	index := map[string]int{}
	return fs.WalkDir(fsys, ".", func(p string, d fs.DirEntry, err error) error {
		switch {
		case ctx.Err() != nil:
			return ctx.Err()
		case err != nil && p == ".":
			return err
		case err != nil:
			w.find(Unreadable, "", p, reason(err), "a folder that can be read")
			return nil
		case p != "." && strings.HasPrefix(d.Name(), "."):
			if d.IsDir() {
				return fs.SkipDir
			}
		case d.IsDir():
			index[p] = len(w.folders)
			w.folders = append(w.folders, auditFolder{dir: p})
		default:
			f := &w.folders[index[path.Dir(p)]]
			f.files = append(f.files, d.Name())
			if d.Type()&fs.ModeSymlink != 0 && bidsFolder(d.Name()) {
				// Not gone into; say so, lest its runs seem to be in order.
				if s := w.out.look(p); s.fault != "" {
					w.find(Unreadable, "", p, "a link ("+s.fault+")", "a folder: links to folders are not followed")
				}
			}
		}
		return nil
	})
}

// bidsFolder tells whether a name is one of the folders that lead to runs.
func bidsFolder(name string) bool {
	return name == "func" || (strings.HasPrefix(name, "sub-") || strings.HasPrefix(name, "ses-")) && !strings.Contains(name, "_")
}

// read reads the records. The error is that of ctx.
func (w *auditWork) read(ctx context.Context) error {
	for i := range w.folders {
		f := &w.folders[i]
		for _, name := range f.files {
			if !strings.HasSuffix(name, "_prov.json") {
				continue
			}
			if err := ctx.Err(); err != nil {
				return err
			}
			w.checked.Records++
			r := auditRecord{path: path.Join(f.dir, name), stem: strings.TrimSuffix(name, "_prov.json")}
			r.stem = strings.TrimSuffix(r.stem, strings.TrimSuffix(RecordSuffix, "_prov.json"))
			r.rec = w.readRecord(r.path)
			f.records = append(f.records, r)
			if r.rec == nil {
				continue
			}
			if v := r.rec.Software.Version; w.Version != "" && v != w.Version {
				w.find(OtherVersion, r.path, r.path, v, w.Version)
			}
			for _, o := range r.rec.Outputs {
				if first, twice := w.listed[o.Path]; twice {
					w.find(ListedTwice, r.path, o.Path, "it in "+first+" too", "every file in one record")
				} else {
					w.listed[o.Path] = r.path
				}
			}
		}
	}
	return nil
}

// readRecord returns nil after a finding if the record cannot be understood.
func (w *auditWork) readRecord(p string) *Record {
	s := w.out.look(p)
	switch {
	case s.missing != "":
		w.find(Unreadable, p, p, s.missing, "a record")
		return nil
	case s.fault != "":
		w.find(Unreadable, p, p, s.fault, "a record")
		return nil
	case s.size > MaxBytes:
		w.find(RecordInvalid, p, p, bytesOf(s.size), fmt.Sprintf("at most %d", MaxBytes))
		return nil
	}
	f, err := w.out.open(p)
	if err != nil {
		w.find(Unreadable, p, p, reason(err), "a record")
		return nil
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, MaxBytes+1))
	if err != nil {
		w.find(Unreadable, p, p, reason(err), "a record")
		return nil
	}
	r, err := Parse(data)
	if e := (*Error)(nil); errors.As(err, &e) {
		found := e.Found
		if e.Field != "" {
			found = e.Field + ": " + e.Found
		}
		w.find(RecordInvalid, p, p, found, e.Expected)
		return nil
	}
	if want := r.Run + RecordSuffix; path.Base(p) != want {
		w.find(RecordInvalid, p, p, "the name "+path.Base(p), "the name "+want)
		return nil
	}
	return r
}

// strangers finds series without a record, and files beside records that none of
// them lists.
func (w *auditWork) strangers() {
	for _, f := range w.folders {
		// Whether the record of a stem says what belongs to it. What a broken or
		// absent record would have listed nobody knows, and one finding for the
		// record is enough.
		known := map[string]*auditRecord{}
		for i, r := range f.records {
			known[r.stem] = &f.records[i]
		}
		for _, name := range f.files {
			stem, ok := seriesStem(name)
			if p := path.Join(f.dir, name); ok && known[stem] == nil && w.listed[p] == "" {
				record := path.Join(f.dir, stem+RecordSuffix)
				w.find(NoRecord, record, p, "no record", path.Base(record))
				known[stem] = &auditRecord{}
			}
		}
		stems := sortedKeys(known)
		for _, name := range f.files {
			p := path.Join(f.dir, name)
			if w.listed[p] != "" || strings.HasSuffix(name, "_prov.json") {
				continue
			}
			// One stem may begin another: the longest that fits is meant.
			longest := ""
			for _, stem := range stems {
				if len(stem) > len(longest) && strings.HasPrefix(name, stem+"_") {
					longest = stem
				}
			}
			switch r := known[longest]; {
			case r != nil && r.rec != nil:
				w.find(Unlisted, r.path, p, "a file that the record does not list", "only files of the record under this run's name")
			case longest == "" && len(f.records) > 0 && f.dir != ".": // files of the dataset are no run's
				w.find(Unlisted, "", p, "a file that no record lists", "only files of runs, beside their records")
			default:
				continue
			}
			w.checked.Unlisted++
		}
	}
}

// seriesStem takes the stem from the name of a corrected series.
func seriesStem(name string) (string, bool) {
	for _, ext := range []string{".nii.gz", ".nii"} {
		if stem, ok := strings.CutSuffix(name, SeriesSuffix+ext); ok && stem != "" {
			return stem, true
		}
	}
	return "", false
}

// compare holds the files against the records.
func (w *auditWork) compare(ctx context.Context, out, raw folder) error {
	type claim struct {
		record string
		file   File
	}
	type task struct {
		from   *folder
		path   string
		claims []claim
		seen   sight
	}
	var tasks []*task
	at := map[string]*task{} // by path; outputs and inputs apart
	add := func(from *folder, record string, f File) {
		key := "out/" + f.Path
		if from == &raw {
			key = "raw/" + f.Path
		}
		t := at[key]
		if t == nil {
			t = &task{from: from, path: f.Path}
			at[key] = t
			tasks = append(tasks, t)
		}
		t.claims = append(t.claims, claim{record, f})
	}
	for _, f := range w.folders {
		for _, r := range f.records {
			if r.rec == nil {
				continue
			}
			for _, o := range r.rec.Outputs {
				add(&out, r.path, o)
				w.checked.Outputs++
			}
			if w.Raw == "" {
				w.checked.InputsUnseen += len(r.rec.Inputs)
				continue
			}
			for _, in := range r.rec.Inputs {
				add(&raw, r.path, in)
				w.checked.Inputs++
			}
		}
	}
	var (
		mu   sync.Mutex
		done int
	)
	err := parallel.For(ctx, w.Workers, len(tasks), func(_, i int) (err error) {
		t := tasks[i]
		t.seen = t.from.look(t.path)
		if slices.ContainsFunc(t.claims, func(c claim) bool { return t.seen.missing == "" && t.seen.fault == "" && c.file.Bytes == t.seen.size }) {
			t.seen, err = t.from.digest(ctx, t.path)
		}
		if w.Done != nil {
			mu.Lock()
			defer mu.Unlock()
			done++
			w.Done(done, len(tasks))
		}
		return err
	})
	if err != nil {
		return err
	}
	for _, t := range tasks {
		for _, c := range t.claims {
			kind, found, expected := t.seen.against(c.file)
			if kind == "" {
				continue
			}
			if t.from == &raw {
				kind = map[string]string{Missing: InputMissing, Changed: InputChanged, Unreadable: InputUnreadable}[kind]
			}
			w.find(kind, c.record, t.path, found, expected)
		}
	}
	return nil
}
