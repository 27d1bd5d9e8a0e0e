package nifti

// How the voxels of an image become one gzip member (RFC 1952) whose bytes do
// not depend on who compressed what when:
//
//  1. Header and flag are a run of their own. The voxels of each volume are cut
//     every blockBytes, and where the volume ends: the cuts depend on the header
//     alone.
//  2. Each piece is a run of deflate blocks that refers to nothing before it and
//     ends at a whole byte (an empty stored block, RFC 1951, 3.2.4), so that
//     the runs in their order are one plain deflate stream.
//  3. The stream ends with an empty block that says it is the last, and the
//     checksums of the pieces are joined.

import (
	"encoding/binary"
	"fmt"
	"hash/crc32"
	"io"
	"runtime"

	"github.com/klauspost/compress/flate"
)

// blockBytes is how much of a volume is compressed on its own at most. A
// multiple of every voxel size.
const blockBytes = 1 << 20

// endOfDeflate is an empty block with fixed codes that is the last one (RFC
// 1951, 3.2.3: the bits 1, 01 and the code 0000000).
var endOfDeflate = [2]byte{3, 0}

// A sink takes pieces in the order of the file and writes them, as plain bytes
// or as a gzip member without name and time. It belongs to one goroutine at a
// time.
type sink struct {
	w     io.Writer
	gz    bool
	sum   joiner
	size  uint32 // modulo 2^32, as the trailer wants it
	begun bool
}

// add writes a piece of n bytes with checksum crc that has become out.
func (s *sink) add(out []byte, crc uint32, n int) error {
	if s.gz && !s.begun {
		// ID1 ID2 CM FLG MTIME XFL OS: deflate, nothing optional, no
		// time, unknown system.
		if _, err := s.w.Write([]byte{0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 255}); err != nil {
			return err
		}
	}
	s.begun = true
	if s.gz {
		s.sum.add(crc, n)
		s.size += uint32(n)
	}
	_, err := s.w.Write(out)
	return err
}

// end closes the member.
func (s *sink) end() error {
	if !s.gz {
		return nil
	}
	b := append(make([]byte, 0, 10), endOfDeflate[:]...)
	b = binary.LittleEndian.AppendUint32(b, s.sum.crc)
	b = binary.LittleEndian.AppendUint32(b, s.size)
	_, err := s.w.Write(b)
	return err
}

// output collects bytes; what it has allocated it keeps.
type output struct{ b []byte }

func (o *output) Write(p []byte) (int, error) {
	o.b = append(o.b, p...)
	return len(p), nil
}

// A squeezer compresses pieces, one after another.
type squeezer struct{ fw *flate.Writer }

func newSqueezer(level int) (*squeezer, error) {
	fw, err := flate.NewWriter(io.Discard, level)
	if err != nil {
		return nil, fmt.Errorf("nifti: %w", err)
	}
	return &squeezer{fw}, nil
}

func (s *squeezer) begin(o *output)      { s.fw.Reset(o) }
func (s *squeezer) write(p []byte) error { _, err := s.fw.Write(p); return err }
func (s *squeezer) end() error           { return s.fw.Flush() }
func (s *squeezer) all(o *output, p []byte) error {
	s.begin(o)
	if err := s.write(p); err != nil {
		return err
	}
	return s.end()
}

// A deflater compresses pieces that come in order side by side.
//
// No goroutine outlives its piece: a deflater that is dropped leaves nothing
// behind.
type deflater struct {
	s      sink
	level  int
	atOnce int
	busy   []*block // in the order of the stream
	free   []*block
}

type block struct {
	in   []byte
	out  output
	crc  uint32
	sq   *squeezer // nil: as it is
	done chan any  // what the compressor panicked with, or nil
	err  error
}

func newDeflater(w io.Writer, compress bool, level int) *deflater {
	// More than eight blocks under way would only hold memory: one core
	// takes care of the rest of a run.
	return &deflater{s: sink{w: w, gz: compress}, level: level, atOnce: min(runtime.GOMAXPROCS(0), 8)}
}

// next hands p over as the next piece and returns another buffer, empty, of the
// same capacity at least.
func (d *deflater) next(p []byte) ([]byte, error) {
	if !d.s.gz {
		return p[:0], d.s.add(p, 0, len(p))
	}
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
	go b.run()
	return next, nil
}

// end writes what is under way and closes the member.
func (d *deflater) end() error {
	for len(d.busy) > 0 {
		if err := d.writeOldest(); err != nil {
			return err
		}
	}
	return d.s.end()
}

func (d *deflater) spare(size int) (*block, error) {
	if n := len(d.free); n > 0 {
		b := d.free[n-1]
		d.free = d.free[:n-1]
		return b, nil
	}
	sq, err := newSqueezer(d.level)
	if err != nil {
		return nil, err
	}
	return &block{in: make([]byte, 0, size), sq: sq, done: make(chan any, 1)}, nil
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
	return d.s.add(b.out.b, b.crc, len(b.in))
}

// run compresses the piece. A panic goes to the goroutine that owns the
// stream, where it can be recovered.
func (b *block) run() {
	defer func() { b.done <- recover() }()
	b.out.b = b.out.b[:0]
	b.crc = crc32.ChecksumIEEE(b.in)
	b.err = b.sq.all(&b.out, b.in)
}
