package nifti

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"hash/crc32"
	"io"
	"runtime"

	"github.com/klauspost/compress/flate"
)

// blockBytes is how much is compressed at a time, on its own: the place of the
// cuts depends on the data alone, so that the bytes are the same for any number
// of cores. A multiple of 16, as are the two lengths of header and flag, so
// that no voxel is cut.
const blockBytes = 1 << 20

// deflater writes one gzip member (RFC 1952) without name and time. Blocks are
// compressed side by side and written in order: each is a run of deflate blocks
// that refers to nothing before it and ends at a whole byte (an empty stored
// block, RFC 1951, 3.2.4), so that together they are one plain deflate stream.
//
// No goroutine outlives its block: a deflater that is dropped leaves nothing
// behind.
type deflater struct {
	w      io.Writer
	level  int
	atOnce int
	busy   []*block // in the order of the stream
	free   []*block
	crc    uint32
	size   uint32 // modulo 2^32, as the trailer wants it
	begun  bool
}

type block struct {
	in   []byte
	out  bytes.Buffer
	fw   *flate.Writer
	done chan any // what the compressor panicked with, or nil
	err  error
}

func newDeflater(w io.Writer, level int) *deflater {
	// More than eight blocks under way would only hold memory: one core
	// takes care of the rest of a run.
	return &deflater{w: w, level: level, atOnce: min(runtime.GOMAXPROCS(0), 8)}
}

// compress hands p over as the next block and returns a buffer of the same
// capacity, empty, for the one after it. last ends the stream.
func (d *deflater) compress(p []byte, last bool) ([]byte, error) {
	if !d.begun {
		// ID1 ID2 CM FLG MTIME XFL OS: deflate, nothing optional, no
		// time, unknown system.
		if _, err := d.w.Write([]byte{0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 255}); err != nil {
			return nil, err
		}
		d.begun = true
	}
	d.crc = crc32.Update(d.crc, crc32.IEEETable, p)
	d.size += uint32(len(p))
	if len(d.busy) == d.atOnce {
		if err := d.writeOldest(); err != nil {
			return nil, err
		}
	}
	b, err := d.spare(cap(p))
	if err != nil {
		return nil, err
	}
	next := b.in[:0]
	b.in = p
	d.busy = append(d.busy, b)
	go b.run(last)
	if !last {
		return next, nil
	}
	for len(d.busy) > 0 {
		if err := d.writeOldest(); err != nil {
			return nil, err
		}
	}
	var trailer [8]byte
	binary.LittleEndian.PutUint32(trailer[:], d.crc)
	binary.LittleEndian.PutUint32(trailer[4:], d.size)
	_, err = d.w.Write(trailer[:])
	return next, err
}

func (d *deflater) spare(size int) (*block, error) {
	if n := len(d.free); n > 0 {
		b := d.free[n-1]
		d.free = d.free[:n-1]
		return b, nil
	}
	fw, err := flate.NewWriter(io.Discard, d.level)
	if err != nil {
		return nil, fmt.Errorf("nifti: %w", err)
	}
	return &block{in: make([]byte, 0, size), fw: fw, done: make(chan any, 1)}, nil
}

func (d *deflater) writeOldest() error {
	b := d.busy[0]
	if bug := <-b.done; bug != nil {
		panic(bug)
	}
	d.busy = append(d.busy[:0], d.busy[1:]...)
	d.free = append(d.free, b)
	if b.err != nil {
		return b.err
	}
	_, err := d.w.Write(b.out.Bytes())
	return err
}

// run compresses the block. A panic goes to the goroutine that owns the
// stream, where it can be recovered.
func (b *block) run(last bool) {
	defer func() { b.done <- recover() }()
	b.out.Reset()
	b.fw.Reset(&b.out)
	if _, b.err = b.fw.Write(b.in); b.err != nil {
		return
	}
	if last {
		b.err = b.fw.Close()
	} else {
		b.err = b.fw.Flush()
	}
}
