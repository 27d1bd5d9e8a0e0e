package nifti

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/klauspost/compress/gzip"

	"evenkeel/internal/inflate"
)

// The decoder is our own, which is faster, unless the environment variable
// EVENKEEL_INFLATE asks for the one of klauspost/compress ("klauspost"): should
// they ever differ about a file, that tells whose mistake it is.
var otherInflate = os.Getenv("EVENKEEL_INFLATE") == "klauspost"

// unzipper decodes one gzip member.
type unzipper interface {
	io.Reader
	Reset(*bufio.Reader) error
}

// klauspost is the decoder of that name as an unzipper.
type klauspost struct{ gzip.Reader }

func (k *klauspost) Reset(in *bufio.Reader) error {
	if err := k.Reader.Reset(in); err != nil {
		return err
	}
	k.Multistream(false)
	return nil
}

func newUnzipper() unzipper {
	if otherInflate {
		return &klauspost{}
	}
	return &inflate.Reader{}
}

// source is a file as its decoder sees it. It hands every byte to tap and
// keeps the first error that came from the file or from tap, so that a
// decoder's complaint can be told from a failure below it.
type source struct {
	r   io.Reader
	tap io.Writer // may be nil
	err error
}

func (s *source) Read(p []byte) (int, error) {
	if s.err != nil {
		return 0, s.err
	}
	n, err := s.r.Read(p)
	if err != nil && err != io.EOF {
		s.err = err
	}
	if n > 0 && s.tap != nil {
		if _, e := s.tap.Write(p[:n]); e != nil {
			s.err, err = e, e
		}
	}
	return n, err
}

// members decodes a file that is a series of gzip members and nothing else
// (RFC 1952, 2.2). It takes the members one by one so that what follows the
// last one gets its own name.
type members struct {
	file string
	src  *source
	in   *bufio.Reader
	zr   unzipper
	n    int  // members begun
	open bool // inside a member
	err  error
}

func newMembers(file string, src *source, bufferBytes int) *members {
	return &members{file: file, src: src, in: bufio.NewReaderSize(src, bufferBytes)}
}

// Read returns io.EOF only after the checksum of the last member was right and
// the file ended with it.
func (m *members) Read(p []byte) (int, error) {
	for m.err == nil {
		if !m.open {
			m.err = m.next()
			continue
		}
		n, err := m.zr.Read(p)
		if err == io.EOF {
			m.open = false
			if n == 0 {
				continue
			}
			return n, nil
		}
		if err != nil {
			m.err = m.classify(err)
		}
		if n > 0 || err == nil {
			return n, nil
		}
	}
	return 0, m.err
}

// next begins the next member, or says why there is none.
func (m *members) next() error {
	head, err := m.in.Peek(2)
	if m.src.err != nil {
		return m.src.err
	}
	if len(head) == 0 && err == io.EOF && m.n > 0 {
		return io.EOF
	}
	if !isGzip(head) {
		e := &Error{Kind: KindCompressed, File: m.file, Field: "gzip header", Expected: "a gzip stream (bytes 1f 8b)"}
		switch {
		case m.n > 0:
			found, err := m.leftover()
			if err != nil {
				return err
			}
			e.Field, e.Found, e.Expected = "gzip stream", found+" after its end", "the file to end there"
		case len(head) == 0:
			e.Found = "an empty file"
		default:
			e.Found = fmt.Sprintf("bytes % x", head)
		}
		return e
	}
	m.n++
	if m.zr == nil {
		m.zr = newUnzipper()
	}
	if err := m.zr.Reset(m.in); err != nil {
		return m.classify(err)
	}
	m.open = true
	return nil
}

// leftover reads the rest of the file and names it.
func (m *members) leftover() (string, error) {
	var c countZeros
	if _, err := io.Copy(&c, m.in); err != nil {
		return "", err
	}
	return c.String(), nil
}

// classify turns a complaint of the decoder into an Error, unless the file
// could not be read.
func (m *members) classify(err error) error {
	if m.src.err != nil {
		return m.src.err
	}
	e := &Error{Kind: KindCompressed, File: m.file, Err: err}
	if m.n > 1 {
		e.Expected = fmt.Sprintf(" in member %d", m.n)
	}
	switch {
	case errors.Is(err, io.EOF), errors.Is(err, io.ErrUnexpectedEOF):
		e.Field, e.Found, e.Expected = "gzip stream", "a stream that is cut off", "a whole gzip stream"+e.Expected
	case errors.Is(err, gzip.ErrChecksum), errors.Is(err, inflate.ErrChecksum):
		e.Field, e.Found, e.Expected = "gzip checksum", "contents that differ from their checksum or length", "the contents that were compressed"+e.Expected
	case errors.Is(err, gzip.ErrHeader), errors.Is(err, inflate.ErrHeader):
		e.Field, e.Found, e.Expected = "gzip header", "a damaged header", "a gzip header as RFC 1952 has it"+e.Expected
	default:
		e.Field, e.Found, e.Expected = "gzip data", "damaged data", "a deflate stream as RFC 1951 has it"+e.Expected
	}
	return e
}

// countZeros names bytes that should not be there: a padding of zeros is a
// different mishap from other bytes.
type countZeros struct {
	n     int64
	other bool
}

func (c *countZeros) Write(p []byte) (int, error) {
	c.n += int64(len(p))
	if !c.other {
		for _, b := range p {
			if b != 0 {
				c.other = true
				break
			}
		}
	}
	return len(p), nil
}

func (c *countZeros) String() string {
	s := "s"
	if c.n == 1 {
		s = ""
	}
	if c.other {
		return fmt.Sprintf("%d byte%s", c.n, s)
	}
	return fmt.Sprintf("%d zero byte%s (padding)", c.n, s)
}
