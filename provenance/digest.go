package provenance

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"os"
)

// Digester takes the SHA-256 and the number of the bytes written to it. Put it
// beside a file in an io.MultiWriter, or behind a reader in an io.TeeReader,
// and the file need not be read again. Write never fails. The zero value is
// ready; a Digester belongs to one goroutine.
type Digester struct {
	h hash.Hash
	n int64
}

var _ io.Writer = (*Digester)(nil)

func (d *Digester) Write(p []byte) (int, error) {
	if d.h == nil {
		d.h = sha256.New()
	}
	d.n += int64(len(p))
	return d.h.Write(p)
}

// Sum returns the digest of what was written so far, as 64 lower-case
// hexadecimal digits. Writing may go on afterwards.
func (d *Digester) Sum() string {
	if d.h == nil {
		d.h = sha256.New()
	}
	return hex.EncodeToString(d.h.Sum(nil))
}

// Bytes returns how many bytes were written so far.
func (d *Digester) Bytes() int64 { return d.n }

// File describes a file of which d has seen all bytes.
func (d *Digester) File(role, path string) File {
	return File{Role: role, Path: path, SHA256: d.Sum(), Bytes: d.Bytes()}
}

// DigestFile returns the SHA-256 and the size of a file. Anything but a regular
// file (after links are followed) is an error; so is whatever reading meets, and
// the end of ctx.
func DigestFile(ctx context.Context, path string) (sum string, bytes int64, err error) {
	info, err := os.Stat(path)
	if err != nil {
		return "", 0, err
	}
	if !info.Mode().IsRegular() {
		return "", 0, fmt.Errorf("%s: found %s, expected a regular file", path, kindOf(info.Mode()))
	}
	f, err := os.Open(path)
	if err != nil {
		return "", 0, err
	}
	defer f.Close()
	return digest(ctx, f)
}

// digest reads r to its end, unless ctx is cancelled before.
func digest(ctx context.Context, r io.Reader) (string, int64, error) {
	var d Digester
	buf := make([]byte, 1<<18)
	for {
		if err := ctx.Err(); err != nil {
			return "", 0, err
		}
		n, err := r.Read(buf)
		d.Write(buf[:n])
		switch err {
		case nil:
		case io.EOF:
			return d.Sum(), d.Bytes(), nil
		default:
			return "", 0, err
		}
	}
}

// kindOf names what is not a regular file.
func kindOf(m fs.FileMode) string {
	switch {
	case m.IsDir():
		return "a folder"
	case m&fs.ModeNamedPipe != 0:
		return "a pipe"
	case m&fs.ModeSocket != 0:
		return "a socket"
	case m&fs.ModeDevice != 0:
		return "a device"
	}
	return "something that is not a file"
}
