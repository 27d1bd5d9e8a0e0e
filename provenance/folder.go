package provenance

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"syscall"
)

// A folder is where the files of records are looked for: the output folder,
// whose links must stay inside it, or the raw dataset, whose links may lead
// anywhere, as those of annexed datasets do.
type folder struct {
	stat  func(path string) (fs.FileInfo, error) // following links
	lstat func(path string) (fs.FileInfo, error)
	open  func(path string) (io.ReadCloser, error)
}

func outFolder(root *os.Root) folder {
	return folder{
		stat:  root.Stat,
		lstat: root.Lstat,
		open:  func(path string) (io.ReadCloser, error) { return root.Open(path) },
	}
}

func rawFolder(dir string) folder {
	at := func(path string) string { return filepath.Join(dir, filepath.FromSlash(path)) }
	return folder{
		stat:  func(path string) (fs.FileInfo, error) { return os.Stat(at(path)) },
		lstat: func(path string) (fs.FileInfo, error) { return os.Lstat(at(path)) },
		open:  func(path string) (io.ReadCloser, error) { return os.Open(at(path)) },
	}
}

// sight is what was seen of a file.
type sight struct {
	missing string // what stands there instead, if nothing does
	fault   string // why it cannot be read
	size    int64
	sum     string // "" unless asked for
}

// look sees whether a file is there, and its size.
func (d folder) look(path string) sight {
	info, err := d.stat(path)
	switch {
	case gone(err):
		if l, lerr := d.lstat(path); lerr == nil && l.Mode()&fs.ModeSymlink != 0 {
			return sight{missing: "a link to nothing"}
		}
		return sight{missing: "nothing"}
	case err != nil:
		return sight{fault: reason(err)}
	case !info.Mode().IsRegular():
		return sight{fault: kindOf(info.Mode())}
	}
	return sight{size: info.Size()}
}

// digest sees what look does and takes the digest. The error is that of ctx.
func (d folder) digest(ctx context.Context, path string) (sight, error) {
	s := d.look(path)
	if s.missing != "" || s.fault != "" {
		return s, nil
	}
	f, err := d.open(path)
	if err != nil {
		return sight{fault: reason(err)}, nil
	}
	defer f.Close()
	s.sum, s.size, err = digest(ctx, f)
	if err != nil {
		if ctx.Err() != nil {
			return sight{}, ctx.Err()
		}
		return sight{fault: reason(err)}, nil
	}
	return s, nil
}

// against compares what was seen with what a record says. The kind is "" if
// they agree; a digest that was not taken agrees.
func (s sight) against(f File) (kind, found, expected string) {
	switch {
	case s.missing != "":
		return Missing, s.missing, bytesOf(f.Bytes)
	case s.fault != "":
		return Unreadable, s.fault, "a file of " + bytesOf(f.Bytes)
	case s.size != f.Bytes:
		return Changed, bytesOf(s.size), bytesOf(f.Bytes)
	case s.sum != "" && s.sum != f.SHA256:
		return Changed, "SHA-256 " + s.sum, "SHA-256 " + f.SHA256
	}
	return "", "", ""
}

func bytesOf(n int64) string {
	if n == 1 {
		return "1 byte"
	}
	return fmt.Sprintf("%d bytes", n)
}

// gone tells whether nothing stands at a path: a name that is not there, or one
// below something that is not a folder.
func gone(err error) bool {
	return errors.Is(err, fs.ErrNotExist) || errors.Is(err, syscall.ENOTDIR)
}

// reason gives what the system said, without the path, which the finding has.
func reason(err error) string {
	if e := (*fs.PathError)(nil); errors.As(err, &e) {
		return e.Err.Error()
	}
	return err.Error()
}
