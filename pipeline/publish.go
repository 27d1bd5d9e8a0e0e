package pipeline

// How files come to stand under their final names:
//
//  1. Everything a run writes goes to hidden files in the folder of the final
//     ones (a rename across file systems would not be atomic), created 0666 less
//     the user's umask, folders 0777.
//  2. Each is synced to the disk before it is closed.
//  3. When all are whole, an older record is removed, then all are renamed, the
//     new record last. Whatever happens in between, a record that exists names
//     files that belong to it.
//  4. Hidden files left by a process that died are removed by the next one that
//     holds the lock of the run, or that of the files common to all runs. So are
//     files of an earlier time that have no place in the new record, also where the
//     record that named them is gone already.

import (
	"bufio"
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"evenkeel/dataset"
	"evenkeel/provenance"
)

// hiddenDigits is how many digits a hidden name has after the final one. With the
// dot in front that is the room that package dataset leaves when it judges
// whether a stem is too long.
const hiddenDigits = 10

// hiddenName is a name that no other process picks, on this machine or another that
// sees the same folder: process numbers repeat from machine to machine.
func hiddenName(final string) string {
	dir, base := filepath.Split(final)
	return filepath.Join(dir, fmt.Sprintf(".%s%0*d", base, hiddenDigits, rand.Int64N(1e10)))
}

// isHidden reports whether name is a hidden name of base.
func isHidden(name, base string) bool {
	digits, ok := strings.CutPrefix(name, "."+base)
	return ok && len(digits) == hiddenDigits && strings.Trim(digits, "0123456789") == ""
}

// A publisher holds the files of one run until all are whole.
type publisher struct {
	out     string
	pending []*pendingFile
}

type pendingFile struct {
	role   string
	rel    string // relative to OUT, slashes
	final  string
	hidden string
	f      *os.File
	buf    *bufio.Writer
	sum    hash.Hash
	n      int64
}

func (p *publisher) path(rel string) string { return filepath.Join(p.out, filepath.FromSlash(rel)) }

// write makes one hidden file and lets fill write it.
func (p *publisher) write(role, rel string, fill func(io.Writer) error) error {
	final := p.path(rel)
	pf := &pendingFile{role: role, rel: rel, final: final, hidden: hiddenName(final), sum: sha256.New()}
	f, err := os.OpenFile(pf.hidden, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o666)
	if err != nil {
		return creating(rel, err)
	}
	pf.f = f
	pf.buf = bufio.NewWriterSize(pf, 1<<18)
	p.pending = append(p.pending, pf)
	err = fill(pf.buf)
	if err == nil {
		err = pf.buf.Flush()
	}
	if err == nil {
		err = f.Sync()
	}
	if cerr := f.Close(); err == nil {
		err = cerr
	}
	if err != nil {
		return &IOError{Path: rel, Step: "writing", Err: err}
	}
	return nil
}

func (p *publisher) writeBytes(role, rel string, data []byte) error {
	return p.write(role, rel, func(w io.Writer) error {
		_, err := w.Write(data)
		return err
	})
}

// Write counts and digests what reaches the file.
func (f *pendingFile) Write(b []byte) (int, error) {
	n, err := f.f.Write(b)
	f.sum.Write(b[:n])
	f.n += int64(n)
	return n, err
}

// files describes what has been written so far, for the record.
func (p *publisher) files() []provenance.File {
	var out []provenance.File
	for _, f := range p.pending {
		out = append(out, provenance.File{Role: f.role, Path: f.rel, SHA256: hex.EncodeToString(f.sum.Sum(nil)), Bytes: f.n})
	}
	return out
}

// publish renames everything, in the order of writing; old names files of an
// earlier record, that record included, which make way.
func (p *publisher) publish(old []string) error {
	ours := map[string]bool{}
	for _, f := range p.pending {
		ours[f.rel] = true
	}
	record := p.pending[len(p.pending)-1]
	// Without its record, a run is not complete: so this comes first.
	if err := os.Remove(record.final); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return creating(record.rel, err)
	}
	for _, rel := range old {
		if !ours[rel] {
			if err := os.Remove(p.path(rel)); err != nil && !errors.Is(err, fs.ErrNotExist) {
				return &IOError{Path: rel, Step: "removing a file of the earlier record", Err: err}
			}
		}
	}
	dirs := []string{}
	seen := map[string]bool{}
	for _, f := range p.pending {
		if dir := filepath.Dir(f.final); !seen[dir] {
			seen[dir] = true
			dirs = append(dirs, dir)
		}
		if f == record { // the others must be on the disk before the record can be
			syncDirs(dirs)
		}
		if err := os.Rename(f.hidden, f.final); err != nil {
			return &IOError{Path: f.rel, Step: "renaming", Err: err}
		}
	}
	// The folders may be new themselves.
	for _, dir := range dirs {
		for up := filepath.Dir(dir); len(up) >= len(p.out) && up != dir && !seen[up]; up = filepath.Dir(up) {
			seen[up] = true
			dirs = append(dirs, up)
		}
	}
	syncDirs(dirs)
	p.pending = nil
	return nil
}

// syncDirs makes renames durable. Some file systems refuse to sync a folder;
// the files themselves are synced already, so that is let pass.
func syncDirs(dirs []string) {
	for _, d := range dirs {
		if f, err := os.Open(d); err == nil {
			f.Sync()
			f.Close()
		}
	}
}

// discard removes whatever has not been published.
func (p *publisher) discard() {
	for _, f := range p.pending {
		os.Remove(f.hidden)
	}
	p.pending = nil
}

// possible lists every file that a run can have in OUT, whatever the settings: those
// of a process that died may have been others than those of today.
func possible(r dataset.Run) (paths []string) {
	for _, o := range dataset.Outputs {
		for _, ext := range o.Exts {
			paths = append(paths, dataset.OutputPath(r, o.Desc, o.Suffix, ext))
		}
	}
	return paths
}

// sweep removes hidden files that a dead process left of these files of OUT. The
// caller holds their lock, so no live process can own one.
func sweep(out string, paths []string) {
	for _, name := range leftovers(out, paths) {
		os.Remove(name)
	}
}

// leftovers lists the hidden files of these files of OUT.
func leftovers(out string, paths []string) (names []string) {
	byDir := map[string][]string{}
	for _, p := range paths {
		dir, base := filepath.Split(filepath.Join(out, filepath.FromSlash(p)))
		byDir[dir] = append(byDir[dir], base)
	}
	for dir, bases := range byDir {
		entries, err := os.ReadDir(dir)
		if err != nil {
			continue // nothing there yet
		}
		for _, e := range entries {
			if slices.ContainsFunc(bases, func(base string) bool { return isHidden(e.Name(), base) }) {
				names = append(names, filepath.Join(dir, e.Name()))
			}
		}
	}
	return names
}

// readOwn reads a file of OUT. Whatever is no file, a pipe that nobody writes to,
// say, is an error instead of being waited for.
func readOwn(name string) ([]byte, error) {
	info, err := os.Stat(name)
	if err != nil {
		return nil, err
	}
	if !info.Mode().IsRegular() {
		return nil, &fs.PathError{Op: "read", Path: name, Err: errors.New("it is not a file")}
	}
	return os.ReadFile(name)
}

// replaceFile writes one file of the dataset as a whole, atomically, if its content
// is not there already. rel is for messages.
func replaceFile(name, rel string, data []byte) error {
	if have, err := readOwn(name); err == nil && bytes.Equal(have, data) {
		return nil
	}
	hidden := hiddenName(name)
	f, err := os.OpenFile(hidden, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o666)
	if err != nil {
		return creating(rel, err)
	}
	_, err = f.Write(data)
	if err == nil {
		err = f.Sync()
	}
	if cerr := f.Close(); err == nil {
		err = cerr
	}
	if err == nil {
		err = os.Rename(hidden, name)
	}
	if err != nil {
		os.Remove(hidden)
		return &IOError{Path: rel, Step: "writing", Err: err}
	}
	syncDirs([]string{filepath.Dir(name)})
	return nil
}
