package dataset

import (
	"errors"
	"fmt"
	"strings"
)

// MaxName is the longest file name that the standard allows, in bytes
// (Common principles, "Filenames").
const MaxName = 255

// Name is a file name taken apart: entities, suffix and extension.
type Name struct {
	Entities Entities
	Suffix   string // "bold"
	Ext      string // with its dot: ".nii.gz"
}

// String puts the name together again; for what [ParseName] accepted it gives
// back exactly the same bytes.
func (n Name) String() string {
	if len(n.Entities) == 0 {
		return n.Suffix + n.Ext
	}
	return n.Entities.String() + "_" + n.Suffix + n.Ext
}

// Stem is the part before the suffix: "sub-01_task-rest".
func (n Name) Stem() string { return n.Entities.String() }

// Source returns the entities of the raw file that a derivative name of ours
// comes from: those of n without desc.
func (n Name) Source() Entities { return n.Entities.Without("desc") }

// NameError says why a file name is not a valid BIDS name.
type NameError struct {
	Name   string
	Reason string
}

func (e *NameError) Error() string { return "file name " + quoted(e.Name) + ": " + e.Reason }

// ParseName reads a file name without its folder, raw or derivative:
// [key-label_]...suffix.ext. Keys must be entities of the standard, each at
// most once and in the standard's order; whether that combination is allowed
// for that suffix is not judged. The extension begins at the first dot after
// the suffix. Any error is a [*NameError].
func ParseName(base string) (Name, error) {
	bad := func(reason string) (Name, error) { return Name{}, &NameError{Name: base, Reason: reason} }
	switch {
	case base == "":
		return bad("it is empty")
	case base[0] == '.':
		return bad("it begins with a dot")
	case len(base) > MaxName:
		return bad(fmt.Sprintf("it is %d bytes long, at most %d are allowed", len(base), MaxName))
	}
	dot := strings.IndexByte(base, '.')
	if dot < 0 {
		return bad("it has no extension")
	}
	body, ext := base[:dot], base[dot:]
	for _, part := range strings.Split(ext[1:], ".") {
		if !alphanumeric(part) {
			return bad("its extension " + quoted(ext) + " is not of letters and digits")
		}
	}
	stem, suffix := "", body
	if i := strings.LastIndexByte(body, '_'); i >= 0 {
		if stem, suffix = body[:i], body[i+1:]; stem == "" {
			return bad("it begins with an underscore")
		}
	}
	if strings.Contains(suffix, "-") {
		return bad("it has no suffix: " + quoted(suffix) + " is an entity")
	}
	if !alphanumeric(suffix) {
		return bad("its suffix " + quoted(suffix) + " is not of letters and digits")
	}
	entities, err := ParseEntities(stem)
	if err != nil {
		return bad(err.Error())
	}
	return Name{Entities: entities, Suffix: suffix, Ext: ext}, nil
}

func alphanumeric(s string) bool {
	for i := 0; i < len(s); i++ {
		if c := s[i]; !alphabetic(c) && (c < '0' || c > '9') {
			return false
		}
	}
	return s != ""
}

// boldKeys are the entities that a raw BOLD or sbref name may carry
// (schema rules/files/raw/func); sub and task must be there.
var boldKeys = map[string]bool{
	"sub": true, "ses": true, "task": true, "acq": true, "ce": true, "rec": true, "dir": true, "run": true, "echo": true,
	"part": true, "chunk": true,
}

// checkRaw returns why the name cannot be that of a raw BOLD or sbref image in
// a folder of the given subject and session (session "" = none), or nil.
func (n Name) checkRaw(subject, session string) error {
	for _, e := range n.Entities {
		if !boldKeys[e.Key] {
			return fmt.Errorf("entity %s does not belong in the name of a raw %s image; is it a derivative?", e.Key, n.Suffix)
		}
	}
	sub, ok := n.Entities.Get("sub")
	switch {
	case !ok:
		return errors.New("entity sub is missing")
	case sub != subject:
		return fmt.Errorf("it says sub-%s, but its folder is of sub-%s", sub, subject)
	}
	ses, ok := n.Entities.Get("ses")
	switch {
	case ok && session == "":
		return fmt.Errorf("it says ses-%s, but its folder is of no session", ses)
	case !ok && session != "":
		return fmt.Errorf("entity ses is missing, and its folder is of ses-%s", session)
	case ses != session:
		return fmt.Errorf("it says ses-%s, but its folder is of ses-%s", ses, session)
	}
	if _, ok := n.Entities.Get("task"); !ok {
		return errors.New("entity task is missing")
	}
	return nil
}
