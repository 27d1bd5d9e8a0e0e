package nifti

import (
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"
)

// parts finds the files of an image. For a one-file image img is empty. Of a
// pair the half that was named is taken as named; for its partner the one with
// the same compression goes first.
func parts(path string) (hdr, img string, err error) {
	base, gz := strings.CutSuffix(path, ".gz")
	switch {
	case strings.HasSuffix(base, ".nii"):
		return path, "", nil
	case strings.HasSuffix(base, ".hdr"):
		return path, partner(strings.TrimSuffix(base, ".hdr")+".img", gz), nil
	case strings.HasSuffix(base, ".img"):
		return partner(strings.TrimSuffix(base, ".img")+".hdr", gz), path, nil
	}
	return "", "", &Error{Kind: KindHeader, File: path, Field: "file name", Found: "another ending", Expected: ".nii, .nii.gz, .hdr or .img"}
}

func partner(plain string, gz bool) string {
	names := [2]string{plain, plain + ".gz"}
	if gz {
		names[0], names[1] = names[1], names[0]
	}
	for _, name := range names {
		// A dangling link counts as there: it is the file that is missing.
		if _, err := os.Lstat(name); err == nil {
			return name
		}
	}
	return names[0]
}

// file is what an image is read from.
type file interface {
	io.Reader
	io.ReaderAt
	io.Closer
}

// stream gives the bytes of one file, decompressed where its name ends in .gz.
type stream struct {
	name       string
	fileBytes  int64
	compressed bool
	f          file
	src        *source
	r          io.Reader
	n          int64 // bytes given
}

// openStream opens a regular file. Errors of the file system are wrapped.
func openStream(path string, tap io.Writer, bufferBytes int) (*stream, error) {
	// Before opening: a named pipe would hold us until somebody writes.
	info, err := os.Stat(path)
	if err != nil {
		return nil, fmt.Errorf("nifti: %w", err)
	}
	if !info.Mode().IsRegular() {
		found := "a special file"
		switch {
		case info.IsDir():
			found = "a folder"
		case info.Mode()&fs.ModeNamedPipe != 0:
			found = "a named pipe"
		}
		return nil, &Error{Kind: KindHeader, File: path, Field: "file", Found: found, Expected: "a regular file"}
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("nifti: %w", err)
	}
	if info, err = f.Stat(); err != nil {
		f.Close()
		return nil, fmt.Errorf("nifti: %w", err)
	}
	return newStream(path, f, info.Size(), tap, bufferBytes), nil
}

func newStream(name string, f file, size int64, tap io.Writer, bufferBytes int) *stream {
	s := &stream{name: name, fileBytes: size, compressed: strings.HasSuffix(name, ".gz"), f: f, src: &source{r: f, tap: tap}}
	if s.compressed {
		s.r = newMembers(name, s.src, bufferBytes)
	} else {
		s.r = s.src
	}
	return s
}

// full fills p as far as the stream goes: n < len(p) without an error means
// that the stream ended, whole.
func (s *stream) full(p []byte) (n int, err error) {
	n, err = io.ReadFull(s.r, p)
	s.n += int64(n)
	return n, s.wrap(err)
}

// wrap hides the two ends of a stream, passes an *Error on and wraps the rest.
func (s *stream) wrap(err error) error {
	if err == nil || (s.src.err == nil && (err == io.EOF || err == io.ErrUnexpectedEOF)) {
		return nil
	}
	if e, ok := err.(*Error); ok && s.src.err == nil {
		return e
	}
	return fmt.Errorf("nifti: reading %s: %w", s.name, err)
}

// skip reads past n bytes; fewer are skipped, without an error, where the
// stream ends before.
func (s *stream) skip(n int64) error {
	k, err := io.CopyN(io.Discard, s.r, n)
	s.n += k
	return s.wrap(err)
}

// rest reads to the end of the stream and names what was left. A compressed
// stream can unfold to a thousand times its size: reading stops at 16 MiB.
func (s *stream) rest() (found string, any bool, err error) {
	const limit = 16 << 20
	var c countZeros
	n, err := io.CopyN(&c, s.r, limit)
	s.n += n
	if err = s.wrap(err); err != nil {
		return "", false, err
	}
	if n == limit {
		return "16 MiB or more", true, nil
	}
	return c.String(), n > 0, nil
}

// tail names the bytes of a plain file from an offset on, without moving the
// stream; of a long tail the first MiB tells whether it is zeros.
func (s *stream) tail(from int64) string {
	var c countZeros
	io.CopyN(&c, io.NewSectionReader(s.f, from, s.fileBytes-from), 1<<20)
	c.n = s.fileBytes - from
	return c.String()
}

// header reads and checks the header at the start of the stream.
func (s *stream) header(pair bool) (*Header, error) {
	var buf [headerBytes2]byte
	n, err := s.full(buf[:4])
	if err != nil {
		return nil, err
	}
	if n == 4 {
		if version, _, ok := sniff(buf[:]); ok {
			size := headerBytes1
			if version == 2 {
				size = headerBytes2
			}
			k, err := s.full(buf[4:size])
			if err != nil {
				return nil, err
			}
			n += k
		}
	}
	return parseHeader(s.name, buf[:n], pair)
}

// closeHeader reads what follows the header in the header file of a pair:
// nothing, or an extension flag and, if it says so, extensions.
func (s *stream) closeHeader() error {
	var flag [flagBytes]byte
	n, err := s.full(flag[:])
	if err != nil {
		return err
	}
	if n > 0 && n < flagBytes {
		return &Error{Kind: KindHeader, File: s.name, Field: "extension", Found: fmt.Sprintf("a flag of %d bytes", n), Expected: "4 bytes, or none"}
	}
	if n == flagBytes && flag[0] != 0 {
		k, err := io.Copy(io.Discard, s.r)
		s.n += k
		return s.wrap(err)
	}
	found, any, err := s.rest()
	if err != nil {
		return err
	}
	if any {
		return &Error{Kind: KindSize, File: s.name, Field: "header", Found: found + " after the header, whose extension flag is not set", Expected: "the file to end there"}
	}
	return nil
}

func (s *stream) Close() error { return s.f.Close() }
