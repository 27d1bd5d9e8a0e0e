package dataset

import (
	"bytes"
	"errors"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"evenkeel/fault"
)

// Annexed datasets keep a file as a symbolic link to its content, which lies
// under .git/annex/objects once it has been fetched. The rules for links:
//
//  1. A link to a file of the dataset, or to an object of the dataset's own
//     annex (even where .git or the store is itself a link to somewhere else),
//     is followed.
//  2. A link whose target is not there stands for an unfetched file.
//  3. Any other link leads out of the dataset and is not followed: what would
//     be read there is not part of what the user pointed at, and could not be
//     named in a record by a path relative to the dataset.
//
// Real paths are compared, so that the dataset's root may itself be a link.
// A pointer file, the small text that stands for the content of an unlocked or
// externally stored file, counts as an unfetched file too.

// tree answers what a path of the dataset really is.
type tree struct {
	real   string   // real, absolute path of the root
	stores []string // real paths of the dataset's own annex stores outside it
}

func newTree(root string) (tree, error) {
	abs, err := filepath.Abs(root)
	if err != nil {
		return tree{}, err
	}
	real, err := filepath.EvalSymlinks(abs)
	if err != nil {
		return tree{}, err
	}
	t := tree{real: real}
	if store, err := filepath.EvalSymlinks(filepath.Join(real, ".git", "annex", "objects")); err == nil {
		// The name is asked for so that a link planted as .git cannot open the whole disk.
		if strings.HasSuffix(filepath.ToSlash(store), "/annex/objects") && !inside(real, store) {
			t.stores = append(t.stores, store)
		}
	}
	return t, nil
}

// inside reports whether the real path p is dir or lies below it.
func inside(dir, p string) bool {
	rel, err := filepath.Rel(dir, p)
	return err == nil && (rel == "." || filepath.IsLocal(rel))
}

func (t tree) owns(real string) bool {
	if inside(t.real, real) {
		return true
	}
	for _, s := range t.stores {
		if inside(s, real) {
			return true
		}
	}
	return false
}

func (t tree) path(rel string) string { return filepath.Join(t.real, filepath.FromSlash(rel)) }

// flaw is why a path cannot be used; outside marks a link that leads out.
type flaw struct {
	found, expected, remedy string
	outside                 bool
}

func (f *flaw) fault(rel string) fault.Fault {
	return fault.New("image-absent", rel, "", f.found, f.expected, f.remedy)
}

const (
	wantFile   = "a file inside the dataset or in its own .git/annex/objects"
	wantFolder = "a folder inside the dataset"
)

// file returns what keeps the entry e at path rel from being read as a file, or nil.
func (t tree) file(rel string, e fs.DirEntry) *flaw {
	full := t.path(rel)
	if e.Type()&fs.ModeSymlink != 0 {
		real, f := t.follow(rel, wantFile)
		if f != nil {
			return f
		}
		full = real
	}
	info, err := os.Lstat(full)
	switch {
	case err != nil:
		return &flaw{found: "a file that cannot be reached: " + reason(err), expected: "a readable file",
			remedy: "check the file's and its folder's permissions"}
	case info.IsDir():
		return &flaw{found: "a folder", expected: "a file", remedy: "rename the folder, or put the file in its place"}
	case !info.Mode().IsRegular():
		// A pipe would block whoever opens it.
		return &flaw{found: "neither a file nor a link to one", expected: "a file", remedy: "put the file in its place"}
	case info.Size() <= maxPointer && isPointer(full):
		return &flaw{found: "a pointer to content that has not been fetched", expected: "the content itself", remedy: fetch(rel)}
	}
	return nil
}

// folder returns what keeps the entry e at path rel from being walked, or nil.
// An entry that is neither a folder nor a link to one gives isFolder false.
func (t tree) folder(rel string, e fs.DirEntry) (isFolder bool, f *flaw) {
	if e.Type()&fs.ModeSymlink == 0 {
		return e.IsDir(), nil
	}
	real, f := t.follow(rel, wantFolder)
	if f != nil {
		return true, f
	}
	info, err := os.Stat(real)
	return err == nil && info.IsDir(), nil
}

// follow resolves a link.
func (t tree) follow(rel, expected string) (real string, f *flaw) {
	full := t.path(rel)
	real, err := filepath.EvalSymlinks(full)
	switch {
	case err == nil && t.owns(real):
		return real, nil
	case err == nil:
		return "", &flaw{outside: true, found: "a link to something outside the dataset, which is not followed, whether or not a file is there", expected: expected,
			remedy: "replace the link by a copy, or give the dataset that the file belongs to"}
	case !errors.Is(err, fs.ErrNotExist):
		// A circle of links, or a folder on the way that may not be entered.
		return "", &flaw{found: "a link that cannot be followed: " + reason(err), expected: expected, remedy: "repair the link"}
	}
	target, err := os.Readlink(full)
	switch {
	case err == nil && strings.Contains("/"+filepath.ToSlash(target), "/.git/annex/"):
		return "", &flaw{found: "a link to annexed content that has not been fetched", expected: expected, remedy: fetch(rel)}
	default:
		return "", &flaw{found: "a link whose target is not there", expected: expected, remedy: fetch(rel) + ", or repair the link"}
	}
}

func fetch(rel string) string {
	return "fetch the content (for example: git annex get " + plain(rel) + ")"
}

// Pointer files of git-annex are at most 32 KiB long and begin with the path
// of an object (git-annex, "internals: pointer files"); those of Git LFS are
// below 1 KiB and begin with a fixed line (its specification). From memory.
const maxPointer = 32 << 10

var pointerMarks = [][]byte{[]byte("/annex/objects/"), []byte("version https://git-lfs.github.com/spec/")}

func isPointer(full string) bool {
	f, err := os.Open(full)
	if err != nil {
		return false // whoever reads the file reports that
	}
	defer f.Close()
	head := make([]byte, 64)
	n, _ := io.ReadFull(f, head)
	for _, m := range pointerMarks {
		if bytes.HasPrefix(head[:n], m) {
			return true
		}
	}
	return false
}

// reason gives an error of the file system without the absolute path in it.
func reason(err error) string {
	var p *fs.PathError
	if errors.As(err, &p) {
		return p.Err.Error()
	}
	// EvalSymlinks names no file in its own errors ("too many links").
	return err.Error()
}
