package dataset

import (
	"cmp"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"

	"evenkeel/fault"
)

// Open walks sub-*/[ses-*/]func of the dataset. The only error is a *[NotFound],
// for the root itself; whatever is wrong below it is told in the Dataset. A
// dataset without runs is no error here.
func Open(root string) (*Dataset, error) {
	if root == "" {
		return nil, &NotFound{Root: root, Err: errors.New("no folder is named")}
	}
	root = filepath.Clean(root)
	info, err := os.Stat(root)
	if err != nil {
		return nil, &NotFound{Root: root, Err: pathless(err)}
	}
	if !info.IsDir() {
		return nil, &NotFound{Root: root, Err: errors.New("it is not a folder")}
	}
	t, err := newTree(root)
	if err != nil {
		return nil, &NotFound{Root: root, Err: pathless(err)}
	}
	entries, err := os.ReadDir(t.real)
	if err != nil {
		return nil, &NotFound{Root: root, Err: pathless(err)}
	}
	w := &walker{tree: t, d: &Dataset{Root: root}, used: map[string]bool{}}
	w.describe()
	w.readIgnore()
	w.root(entries)
	w.finish()
	return w.d, nil
}

// pathless takes the path out of a file system error, keeping its identity:
// NotFound names the root already.
func pathless(err error) error {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err
	}
	return err
}

type walker struct {
	tree
	d        *Dataset
	rules    ignoreRules
	sidecars []associate     // every valid *_bold.json met
	used     map[string]bool // those that apply to an image, kept or not
}

// place is the folder being read: its path ("" = root), and the subject and
// session it belongs to ("" = none).
type place struct {
	rel, subject, session string
}

func (p place) join(name string) string { return path.Join(p.rel, name) }

func (w *walker) notice(kind NoticeKind, rel, found, expected, remedy string) {
	w.d.Notices = append(w.d.Notices, Notice{Kind: kind, Path: rel, Found: found, Expected: expected, Remedy: remedy})
}

func (w *walker) root(entries []fs.DirEntry) {
	var here place
	levels := []level{w.level(here, entries)}
	for _, e := range entries {
		label, ok := strings.CutPrefix(e.Name(), "sub-")
		if ok && w.mayWalk("subject", "sub", label, here, e) {
			w.subject(place{rel: e.Name(), subject: label}, levels)
		}
	}
}

func (w *walker) subject(here place, levels []level) {
	entries, ok := w.read(here.rel)
	if !ok {
		return
	}
	levels = append(slices.Clip(levels), w.level(here, entries))
	for _, e := range entries {
		label, ok := strings.CutPrefix(e.Name(), "ses-")
		switch {
		case ok && w.mayWalk("session", "ses", label, here, e):
			w.session(place{rel: here.join(e.Name()), subject: here.subject, session: label}, levels)
		case e.Name() == "func" && w.mayWalk("", "", "", here, e):
			w.function(place{rel: here.join(e.Name()), subject: here.subject}, levels)
		}
	}
}

func (w *walker) session(here place, levels []level) {
	entries, ok := w.read(here.rel)
	if !ok {
		return
	}
	levels = append(slices.Clip(levels), w.level(here, entries))
	for _, e := range entries {
		if e.Name() == "func" && w.mayWalk("", "", "", here, e) {
			w.function(place{rel: here.join(e.Name()), subject: here.subject, session: here.session}, levels)
		}
	}
}

// read lists a folder in name order. One that cannot be read whole is not used
// at all: a sidecar or an image could be missing from the list.
func (w *walker) read(rel string) ([]fs.DirEntry, bool) {
	entries, err := os.ReadDir(w.path(rel))
	if err != nil {
		w.notice(NoticeUnreadable, rel, "a folder that cannot be read: "+reason(err), "a readable folder", "check its permissions and the disk")
		return nil, false
	}
	return entries, true
}

// mayWalk decides on a subject, session or (kind "") func folder, and leaves a
// notice where it is passed over. Files whose name begins like a subject's are
// sidecars and the like, and nothing is said of them here.
func (w *walker) mayWalk(kind, key, label string, here place, e fs.DirEntry) bool {
	rel := here.join(e.Name())
	isFolder, flaw := w.folder(rel, e)
	if kind != "" && (!isFolder || flaw != nil) && strings.Contains(e.Name(), ".") {
		return false // a file's name; a link to an unfetched file
	}
	switch {
	case w.rules.ignored(rel, true) && isFolder:
		w.notice(NoticeIgnored, rel, "a folder that .bidsignore excludes", "", "")
	case flaw != nil:
		w.notice(NoticeOutside, rel, flaw.found, flaw.expected, flaw.remedy)
	case !isFolder:
		w.notice(NoticeName, rel, "a file", "a folder", "")
	case kind != "" && checkLabel(key, label) != "":
		w.notice(NoticeName, rel, "a "+kind+" folder whose label "+checkLabel(key, label), key+"- and letters, digits or +",
			"rename it, or move it out of the dataset if it is not part of it")
	default:
		return true
	}
	return false
}

// level collects the metadata files of a folder above func, and tells of BOLD
// images that lie there and should not.
func (w *walker) level(here place, entries []fs.DirEntry) level {
	var l level
	for _, e := range entries {
		if w.metadata(here, e, &l) || !looksLikeBold(e.Name()) {
			continue
		}
		rel := here.join(e.Name())
		if isDir, _ := w.folder(rel, e); isDir {
			continue
		}
		if w.rules.ignored(rel, false) {
			w.notice(NoticeIgnored, rel, "an image that .bidsignore excludes", "", "")
			continue
		}
		w.notice(NoticeMisplaced, rel, "a BOLD image outside a func folder", "sub-<label>/[ses-<label>/]func/", "move it there")
	}
	return l
}

// metadata takes up a sidecar or events table, and reports whether the entry
// was one, usable or not.
func (w *walker) metadata(here place, e fs.DirEntry, l *level) bool {
	base := e.Name()
	isSidecar, isEvents := hasSuffix(base, "bold.json"), hasSuffix(base, "events.tsv")
	if base[0] == '.' || !isSidecar && !isEvents {
		return false
	}
	rel := here.join(base)
	if w.rules.ignored(rel, false) {
		w.notice(NoticeIgnored, rel, "a metadata file that .bidsignore excludes", "", "")
		return true
	}
	name, err := ParseName(base)
	if err == nil && name.Suffix != "bold" && name.Suffix != "events" {
		err = &NameError{Name: base, Reason: "its suffix is " + quoted(name.Suffix)}
	}
	if err != nil {
		w.notice(NoticeName, rel, "a metadata file that applies to nothing: "+nameReason(err), "a valid BIDS name", "rename it")
		return true
	}
	sub, hasSub := name.Entities.Get("sub")
	ses, hasSes := name.Entities.Get("ses")
	if hasSub && here.subject != "" && sub != here.subject || hasSes && here.session != "" && ses != here.session {
		// Rule 3 of the inheritance principle.
		w.notice(NoticeMisplaced, rel, "a metadata file in the folder of another subject or session, where it applies to nothing",
			"the folder that its name says, or one above it", "move or rename it")
		return true
	}
	a := associate{rel: rel, name: name, flaw: w.file(rel, e)}
	if isSidecar {
		l.sidecars = append(l.sidecars, a)
		w.sidecars = append(w.sidecars, a)
	} else {
		l.events = append(l.events, a)
	}
	return true
}

// hasSuffix reports whether base is the BIDS suffix and extension s alone or
// ends with them after an underscore.
func hasSuffix(base, s string) bool {
	rest, ok := strings.CutSuffix(base, s)
	return ok && (rest == "" || strings.HasSuffix(rest, "_"))
}

// imageExts are the extensions that a raw BOLD image may have.
var imageExts = []string{".nii", ".nii.gz"}

// looksLikeBold reports whether someone may have meant the file to be a BOLD
// image, whatever the standard says of its name.
func looksLikeBold(base string) bool {
	s := strings.ToLower(base)
	if s[0] == '.' || !strings.Contains(s, "bold") {
		return false
	}
	for _, ext := range []string{".nii", ".nii.gz", ".img", ".img.gz", ".nii.bz2", ".nii.xz", ".nii.zst"} {
		if strings.HasSuffix(s, ext) {
			n, err := ParseName(base)
			return err != nil || strings.EqualFold(n.Suffix, "bold")
		}
	}
	return false
}

// function reads a func folder.
func (w *walker) function(here place, levels []level) {
	entries, ok := w.read(here.rel)
	if !ok {
		return
	}
	var own level
	images := map[string][]associate{} // by stem
	refs := map[string][]associate{}   // single-band references by stem
	var stems []string
	for _, e := range entries {
		if w.metadata(here, e, &own) {
			continue
		}
		rel := here.join(e.Name())
		name, err := ParseName(e.Name())
		isImage := err == nil && slices.Contains(imageExts, name.Ext)
		switch {
		case isImage && name.Suffix == "sbref":
			if !w.rules.ignored(rel, false) && name.checkRaw(here.subject, here.session) == nil {
				refs[name.Stem()] = append(refs[name.Stem()], associate{rel, name, w.file(rel, e)})
			}
		case isImage && name.Suffix == "bold":
			if err := name.checkRaw(here.subject, here.session); err != nil {
				w.refuseName(rel, err.Error())
				continue
			}
			if longest := len(name.Stem()) + longestOutput; longest > MaxName {
				w.refuseName(rel, fmt.Sprintf("the names of its outputs would be %d bytes long, and %d are allowed", longest, MaxName))
				continue
			}
			if len(images[name.Stem()]) == 0 {
				stems = append(stems, name.Stem())
			}
			images[name.Stem()] = append(images[name.Stem()], associate{rel, name, w.file(rel, e)})
		case looksLikeBold(e.Name()):
			why := ""
			switch {
			case err != nil:
				why = nameReason(err)
			case name.Suffix != "bold":
				why = "the suffix is bold, in small letters"
			default:
				why = "a BOLD image ends in .nii or .nii.gz"
			}
			w.refuseName(rel, why)
		case e.IsDir() && e.Name()[0] != '.':
			w.notice(NoticeMisplaced, rel, "a folder inside func, which is not walked", "image files only", "move its images into func")
		}
	}
	levels = append(slices.Clip(levels), own)
	lower := map[string]string{} // names are unique whatever their case
	for _, stem := range stems {
		w.run(here, images[stem], levels, refs)
		key := strings.ToLower(stem)
		if first, ok := lower[key]; ok {
			w.notice(NoticeName, here.join(stem+"_bold"), "a name that differs from "+first+"_bold only by case", "names unique whatever their case",
				"rename one of them")
			continue
		}
		lower[key] = stem
	}
}

// refuseName tells of an image that looks like a BOLD run and is none.
func (w *walker) refuseName(rel, why string) {
	if w.rules.ignored(rel, false) {
		w.notice(NoticeIgnored, rel, "an image that .bidsignore excludes", "", "")
		return
	}
	w.notice(NoticeName, rel, "an image that is not processed: "+why,
		"sub-<label>[_ses-<label>]_task-<label>[_acq-<label>][_ce-<label>][_rec-<label>][_dir-<label>][_run-<index>][_echo-<index>][_part-<label>][_chunk-<index>]_bold.nii[.gz]",
		"rename it with its sidecar, or list it in .bidsignore")
}

func nameReason(err error) string {
	var n *NameError
	if errors.As(err, &n) {
		return n.Reason
	}
	return err.Error()
}

// run takes up one image; files holds its one or more spellings (.nii, .nii.gz).
func (w *walker) run(here place, files []associate, levels []level, refs map[string][]associate) {
	kept := slices.DeleteFunc(slices.Clone(files), func(f associate) bool { return w.rules.ignored(f.rel, false) })
	for _, f := range files {
		if w.rules.ignored(f.rel, false) {
			w.notice(NoticeIgnored, f.rel, "an image that .bidsignore excludes", "", "")
		}
	}
	first := files[0]
	if len(kept) > 0 {
		first = kept[0]
	}
	e := first.name.Entities
	r := Run{
		Stem: first.name.Stem(), File: first.rel, Dir: here.rel, Entities: e, Group: e.Without("echo").String(),
	}
	for _, f := range kept {
		if f.flaw != nil {
			r.Faults = append(r.Faults, f.flaw.fault(f.rel))
		}
	}
	if len(kept) > 1 {
		r.Faults = append(r.Faults, twice(kept))
	}
	inheritSidecars(&r, levels, w.used)
	if len(kept) == 0 {
		return
	}
	if part, ok := e.Get("part"); ok && part != "mag" {
		for _, f := range kept {
			w.d.LeftOut = append(w.d.LeftOut, fault.New("part-left-out", f.rel, "part", "part-"+part,
				"a magnitude image (part-mag, or no part)", "nothing, if the magnitude image is there beside it: only that is processed"))
		}
		return
	}
	inheritEvents(&r, levels)
	findSBRef(&r, refs)
	w.d.Runs = append(w.d.Runs, r)
}

// finish tells of sidecars that no image uses, and sorts.
func (w *walker) finish() {
	d := w.d
	// Below a folder that was not seen there may be an image for them.
	if !slices.ContainsFunc(d.Notices, Notice.Hides) {
		for _, s := range w.sidecars {
			if !w.used[s.rel] {
				w.notice(NoticeUnused, s.rel, "a sidecar that applies to no image", "",
					"compare its entities with the image's, label by label (run-1 is not run-01)")
			}
		}
	}
	slices.SortFunc(d.Runs, func(a, b Run) int { return cmp.Compare(a.File, b.File) })
	slices.SortFunc(d.LeftOut, func(a, b fault.Fault) int { return cmp.Compare(a.File, b.File) })
	sortNotices(d.Notices)
}
