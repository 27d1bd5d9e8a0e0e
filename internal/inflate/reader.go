package inflate

import (
	"bufio"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
)

// What can be wrong with a member, beside io.ErrUnexpectedEOF for one that is cut
// off.
var (
	ErrHeader   = errors.New("inflate: not a gzip header")
	ErrChecksum = errors.New("inflate: contents that differ from their checksum or length")
)

// A CorruptError says what is wrong with deflate data.
type CorruptError struct{ What string }

func (e *CorruptError) Error() string { return "inflate: damaged data: " + e.What }

func corrupt(format string, a ...any) error { return &CorruptError{fmt.Sprintf(format, a...)} }

const (
	window = 32 << 10 // how far back a distance reaches
	// The output buffer: the window and what is decoded at a time, which stays in
	// the second-level cache. It begins small, for those who want a header only.
	smallFresh = 32 << 10
	fresh      = 128 << 10
	// slack is what a turn of the loop may write beyond its limit: four pairs
	// of literals and the longest copy, rounded up to whole words.
	slack = 8 + 258 + 16
	// margin is what a turn of the loop may read: two words, overlapping.
	margin = 16
)

// A Reader decodes one gzip member. It belongs to one goroutine.
type Reader struct {
	br  *bufio.Reader
	in  []byte // what br holds
	pos int    // of it, what is in hand or used
	eof bool   // br has no more than in
	bad error  // of the source below br

	hand uint64 // bits in hand, the next one lowest
	n    uint   // how many; those above are zero or the bits to come

	out      []byte
	from, to int // of out: decoded and not read yet
	crc      uint32
	size     uint32

	state  func(*Reader, int) error
	last   bool // the block under way is the last
	stored int  // bytes left of a stored block
	t      *tables
	own    tables
	err    error
	head   [10]byte
}

// NewReader reads the header of the member that begins in br; errors are those of
// Reset.
func NewReader(br *bufio.Reader) (*Reader, error) {
	r := &Reader{}
	return r, r.Reset(br)
}

// Reset begins with the member that begins in br. It returns io.EOF if nothing is
// there, ErrHeader, io.ErrUnexpectedEOF, or the error of the source below br.
func (r *Reader) Reset(br *bufio.Reader) error {
	if r.out == nil {
		r.out = make([]byte, window+smallFresh+slack)
	}
	*r = Reader{br: br, out: r.out, own: r.own, state: (*Reader).block}
	r.err = r.header()
	return r.err
}

// header reads the member's header: RFC 1952, 2.3.
func (r *Reader) header() error {
	var crc uint32
	b := &r.head
	if _, err := io.ReadFull(r.br, b[:]); err != nil {
		return err
	}
	crc = crc32.ChecksumIEEE(b[:])
	if b[0] != 0x1f || b[1] != 0x8b || b[2] != 8 {
		return ErrHeader
	}
	next := func(n int) ([]byte, error) {
		if _, err := io.ReadFull(r.br, b[:n]); err != nil {
			if err == io.EOF {
				err = io.ErrUnexpectedEOF
			}
			return nil, err
		}
		crc = crc32.Update(crc, crc32.IEEETable, b[:n])
		return b[:n], nil
	}
	flags := b[3]
	if flags&4 != 0 { // FEXTRA
		p, err := next(2)
		if err != nil {
			return err
		}
		for n := binary.LittleEndian.Uint16(p); n > 0; n-- {
			if _, err := next(1); err != nil {
				return err
			}
		}
	}
	for _, flag := range [2]byte{8, 16} { // FNAME, FCOMMENT
		if flags&flag == 0 {
			continue
		}
		for n := 0; ; n++ {
			if n == 512 { // as compress/gzip has it
				return ErrHeader
			}
			p, err := next(1)
			if err != nil {
				return err
			}
			if p[0] == 0 {
				break
			}
		}
	}
	if flags&2 != 0 { // FHCRC
		want := uint16(crc)
		p, err := next(2)
		if err != nil {
			return err
		}
		if binary.LittleEndian.Uint16(p) != want {
			return ErrHeader
		}
	}
	return nil
}

// Read gives decoded bytes, and io.EOF once checksum and length were right. Its
// errors are a *CorruptError, ErrChecksum, io.ErrUnexpectedEOF, or the error of
// the source.
func (r *Reader) Read(p []byte) (int, error) {
	if len(p) == 0 {
		return 0, nil
	}
	for r.from == r.to {
		if r.err != nil {
			return 0, r.err
		}
		r.fill(len(p))
	}
	n := copy(p, r.out[r.from:r.to])
	r.from += n
	return n, nil
}

// fill decodes about want bytes, or as many as there is room for. What came before
// an error can still be read.
func (r *Reader) fill(want int) {
	room := len(r.out) - slack
	if r.to > room-smallFresh/2 { // makes room for smallFresh/2 at least
		if len(r.out) < window+fresh+slack {
			out := make([]byte, window+fresh+slack)
			copy(out, r.out[:r.to])
			r.out = out
		} else {
			copy(r.out, r.out[r.to-window:r.to])
			r.to = window
		}
		room = len(r.out) - slack
	}
	r.from = r.to
	limit := min(room, r.to+want)
	for r.err == nil && r.to < limit {
		r.err = r.state(r, limit)
	}
	if r.err == nil || r.from < r.to {
		r.crc = crc32.Update(r.crc, crc32.IEEETable, r.out[r.from:r.to])
		r.size += uint32(r.to - r.from)
	}
}

// more gets at least margin bytes behind pos, or all that are left.
func (r *Reader) more() {
	// Whole bytes in hand go back: the member may end in them.
	r.pos -= int(r.n >> 3)
	r.n &= 7
	r.hand &= 1<<r.n - 1
	if _, err := r.br.Discard(r.pos); err != nil {
		panic("inflate: " + err.Error())
	}
	r.pos = 0
	_, err := r.br.Peek(margin)
	r.in, _ = r.br.Peek(r.br.Buffered())
	if err != nil {
		r.eof = true
		if err != io.EOF {
			r.bad = err
		}
	}
}

// need gets n bits in hand, 48 at most.
func (r *Reader) need(n uint) error {
	for r.n < n {
		if r.pos == len(r.in) {
			if !r.eof {
				r.more()
				continue
			}
			if r.bad != nil {
				return r.bad
			}
			return io.ErrUnexpectedEOF
		}
		r.hand = r.hand&(1<<r.n-1) | uint64(r.in[r.pos])<<r.n
		r.pos++
		r.n += 8
	}
	return nil
}

func (r *Reader) take(n uint) uint32 {
	v := uint32(r.hand & (1<<n - 1))
	r.hand >>= n
	r.n -= n
	return v
}

// align drops the bits up to the next whole byte.
func (r *Reader) align() { r.take(r.n & 7) }

// block begins a block, or ends the member: RFC 1951, 3.2.3.
func (r *Reader) block(int) error {
	if r.last {
		return r.trailer()
	}
	if err := r.need(3); err != nil {
		return err
	}
	r.last = r.take(1) == 1
	switch kind := r.take(2); kind {
	case 0:
		r.align()
		if err := r.need(32); err != nil {
			return err
		}
		n := r.take(16)
		if r.take(16) != n^0xffff {
			return corrupt("a stored block whose two lengths disagree")
		}
		r.stored = int(n)
		r.state = (*Reader).copyStored
	case 1:
		r.t = fixed
		r.state = (*Reader).codes
	case 2:
		if err := r.dynamic(); err != nil {
			return err
		}
		r.t = &r.own
		r.state = (*Reader).codes
	default:
		return corrupt("a block of type %d", kind)
	}
	return nil
}

// copyStored copies out of a stored block.
func (r *Reader) copyStored(limit int) error {
	for r.stored > 0 && r.to < limit {
		if r.n > 0 { // whole bytes in hand
			r.out[r.to] = byte(r.take(8))
			r.to++
			r.stored--
			continue
		}
		// Bits above those in hand are bits to come: we step over them.
		r.hand = 0
		if r.pos == len(r.in) {
			if r.eof {
				return r.need(8)
			}
			r.more()
			continue
		}
		n := copy(r.out[r.to:limit], r.in[r.pos:min(len(r.in), r.pos+r.stored)])
		r.pos += n
		r.to += n
		r.stored -= n
	}
	if r.stored == 0 {
		r.state = (*Reader).block
	}
	return nil
}

// lengthOrder is the order of the code lengths of code lengths: RFC 1951, 3.2.7.
var lengthOrder = [19]uint8{16, 17, 18, 0, 8, 7, 9, 6, 10, 5, 11, 4, 12, 3, 13, 2, 14, 1, 15}

// dynamic reads the codes of a block: RFC 1951, 3.2.7.
func (r *Reader) dynamic() error {
	if err := r.need(14); err != nil {
		return err
	}
	nlit, ndist, nlen := int(r.take(5))+257, int(r.take(5))+1, int(r.take(4))+4
	if nlit > maxLit || ndist > maxDist {
		return corrupt("%d literals and lengths and %d distances", nlit, ndist)
	}
	var small [19]uint8
	for _, sym := range lengthOrder[:nlen] {
		if err := r.need(3); err != nil {
			return err
		}
		small[sym] = uint8(r.take(3))
	}
	var table [1 << 7]uint32
	if !build(table[:], 7, small[:], codeEntry) {
		return corrupt("lengths of code lengths that make no code")
	}
	var lengths [maxLit + maxDist]uint8
	for i := 0; i < nlit+ndist; {
		sym, err := r.symbol(&table)
		if err != nil {
			return err
		}
		if sym < 16 {
			lengths[i] = uint8(sym)
			i++
			continue
		}
		var what uint8
		var times int
		switch sym {
		case 16:
			if i == 0 {
				return corrupt("a length repeated before the first")
			}
			if err := r.need(2); err != nil {
				return err
			}
			what, times = lengths[i-1], 3+int(r.take(2))
		case 17:
			if err := r.need(3); err != nil {
				return err
			}
			times = 3 + int(r.take(3))
		default:
			if err := r.need(7); err != nil {
				return err
			}
			times = 11 + int(r.take(7))
		}
		if i+times > nlit+ndist {
			return corrupt("more code lengths than symbols")
		}
		for range times {
			lengths[i] = what
			i++
		}
	}
	if !build(r.own.lit[:], litBits, lengths[:nlit], litEntry) || !build(r.own.dist[:], distBits, lengths[nlit:nlit+ndist], distEntry) {
		return corrupt("code lengths that make no code")
	}
	pair(&r.own.lit)
	return nil
}

// symbol reads a symbol of at most 7 bits; the last bits of the input may be fewer.
func (r *Reader) symbol(table *[1 << 7]uint32) (int, error) {
	short := r.need(7)
	e := table[r.hand&r.inHand()&(1<<7-1)]
	l := uint(e & 31)
	if e == 0 {
		if short != nil {
			return 0, short
		}
		return 0, corrupt("a code length that no code means")
	}
	if l > r.n {
		return 0, short
	}
	r.take(l)
	return int(e >> 16), nil
}

// inHand is a mask of the bits in hand.
func (r *Reader) inHand() uint64 {
	if r.n > 63 {
		return ^uint64(0)
	}
	return 1<<r.n - 1
}

// codes decodes until limit, or the end of the block.
func (r *Reader) codes(limit int) error {
	for r.to < limit {
		if r.pos+margin > len(r.in) && !r.eof {
			r.more()
		}
		ended, err := r.fast(limit)
		if err != nil {
			return err
		}
		if !ended && r.to < limit && r.eof {
			ended, err = r.slow()
			if err != nil {
				return err
			}
		}
		if ended {
			r.state = (*Reader).block
			return nil
		}
	}
	return nil
}

// fast decodes as long as margin bytes of input are there.
func (r *Reader) fast(limit int) (ended bool, err error) {
	in, pos := r.in, r.pos
	out, o := r.out, r.to
	hand, n := r.hand, r.n
	lit, dist := &r.t.lit, &r.t.dist
	inLimit := len(in) - margin
	if limit+slack > len(out) {
		panic("inflate: no room")
	}
	for o < limit && pos <= inLimit {
		// At least 56 bits in hand.
		hand |= binary.LittleEndian.Uint64(in[pos:]) << (n & 63)
		pos += int((63 - n) >> 3)
		n |= 56
		e := lit[hand&(1<<litBits-1)]
		if e&isLiteral != 0 {
			binary.LittleEndian.PutUint16(out[o:], uint16(e>>16))
			o += int(e>>5) & 3
			hand >>= e & 31
			n -= uint(e & 31)
			e = lit[hand&(1<<litBits-1)]
			if e&isLiteral != 0 {
				binary.LittleEndian.PutUint16(out[o:], uint16(e>>16))
				o += int(e>>5) & 3
				hand >>= e & 31
				n -= uint(e & 31)
				e = lit[hand&(1<<litBits-1)]
				if e&isLiteral != 0 {
					binary.LittleEndian.PutUint16(out[o:], uint16(e>>16))
					o += int(e>>5) & 3
					hand >>= e & 31
					n -= uint(e & 31)
					e = lit[hand&(1<<litBits-1)]
					if e&isLiteral != 0 {
						binary.LittleEndian.PutUint16(out[o:], uint16(e>>16))
						o += int(e>>5) & 3
						hand >>= e & 31
						n -= uint(e & 31)
						continue
					}
				}
			}
		}
		// 56 - 3*litBits bits or more are in hand: a whole code.
		if e&whatMask == isSecond {
			e = lit[int(e>>16)+int(hand>>litBits&(1<<(e>>8&15)-1))]
			if e&isLiteral != 0 {
				out[o] = byte(e >> 16)
				o++
				hand >>= e & 31
				n -= uint(e & 31)
				continue
			}
		}
		hand >>= e & 31
		n -= uint(e & 31)
		if e&whatMask != isCopy {
			if e&whatMask == isEnd {
				ended = true
			} else {
				err = corrupt("a code for no literal or length")
			}
			break
		}
		hand |= binary.LittleEndian.Uint64(in[pos:]) << (n & 63)
		pos += int((63 - n) >> 3)
		n |= 56
		more := e >> 8 & 15
		length := int(e>>16) + int(hand&(1<<more-1))
		hand >>= more
		n -= uint(more)
		d := dist[hand&(1<<distBits-1)]
		if d&whatMask == isSecond {
			d = dist[int(d>>16)+int(hand>>distBits&(1<<(d>>8&15)-1))]
		}
		if d == 0 {
			err = corrupt("a code for no distance")
			break
		}
		hand >>= d & 31
		more = d >> 8 & 15
		back := int(d>>16) + int(hand&(1<<more-1))
		hand >>= more
		n -= uint(d&31) + uint(more)
		if back > o {
			err = corrupt("a distance of %d, beyond the beginning", back)
			break
		}
		if back < 8 || length > 16 {
			repeat(out, o, back, length)
			o += length
			continue
		}
		src, dst := out[o-back:o-back+16], out[o:o+16]
		binary.LittleEndian.PutUint64(dst, binary.LittleEndian.Uint64(src))
		binary.LittleEndian.PutUint64(dst[8:], binary.LittleEndian.Uint64(src[8:]))
		o += length
	}
	r.pos, r.to, r.hand, r.n = pos, o, hand, n
	return ended, err
}

// repeat copies length bytes that stand back bytes before o to o, one after another
// in effect; up to 7 bytes behind them are overwritten too.
func repeat(out []byte, o, back, length int) {
	switch {
	case back >= 8:
		src := out[o-back : o-back+length+7]
		dst := out[o : o+length+7]
		for i := 0; i < length; i += 8 {
			binary.LittleEndian.PutUint64(dst[i:], binary.LittleEndian.Uint64(src[i:]))
		}
	case back == 1:
		word := uint64(out[o-1]) * 0x0101010101010101
		dst := out[o : o+length+7]
		for i := 0; i < length; i += 8 {
			binary.LittleEndian.PutUint64(dst[i:], word)
		}
	default:
		src, dst := out[o-back:o-back+length], out[o:o+length]
		for i := range dst {
			dst[i] = src[i]
		}
	}
}

// slow decodes one code near the end of the input, where whole words cannot be
// loaded. A member that is whole has eight bytes behind its last code, so that
// codes that need more bits than there are betray one that is cut off.
func (r *Reader) slow() (ended bool, err error) {
	short := r.need(48)
	if short != nil && short != io.ErrUnexpectedEOF {
		return false, short
	}
	hand := r.hand & r.inHand()
	used := uint(0)
	cut := func() bool { return used > r.n }
	e := r.t.lit[hand&(1<<litBits-1)]
	if e&whatMask == isSecond && e&isLiteral == 0 {
		e = r.t.lit[int(e>>16)+int(hand>>litBits&(1<<(e>>8&15)-1))]
	}
	used = uint(e & 31)
	switch {
	case cut():
		return false, short
	case e&isLiteral != 0:
		binary.LittleEndian.PutUint16(r.out[r.to:], uint16(e>>16))
		r.to += int(e>>5) & 3
		r.take(used)
		return false, nil
	case e&whatMask == isEnd:
		r.take(used)
		return true, nil
	case e == 0:
		if short != nil && r.n < maxLen {
			return false, short
		}
		return false, corrupt("a code for no literal or length")
	}
	more := uint(e >> 8 & 15)
	length := int(e>>16) + int(hand>>used&(1<<more-1))
	used += more
	d := r.t.dist[hand>>used&(1<<distBits-1)]
	if d&whatMask == isSecond {
		d = r.t.dist[int(d>>16)+int(hand>>(used+distBits)&(1<<(d>>8&15)-1))]
	}
	if d == 0 {
		if short != nil && r.n < used+maxLen {
			return false, short
		}
		return false, corrupt("a code for no distance")
	}
	used += uint(d & 31)
	more = uint(d >> 8 & 15)
	back := int(d>>16) + int(hand>>used&(1<<more-1))
	used += more
	if cut() {
		return false, short
	}
	if back > r.to {
		return false, corrupt("a distance of %d, beyond the beginning", back)
	}
	r.take(used)
	repeat(r.out, r.to, back, length)
	r.to += length
	return false, nil
}

// trailer checks checksum and length, and gives back what is behind them: RFC 1952,
// 2.3.1.
func (r *Reader) trailer() error {
	if r.from < r.to {
		// Not summed up yet: that is fill's, whose loop must end first.
		r.crc = crc32.Update(r.crc, crc32.IEEETable, r.out[r.from:r.to])
		r.size += uint32(r.to - r.from)
	}
	r.align()
	var v [2]uint32
	for i := range v {
		if err := r.need(32); err != nil {
			return err
		}
		v[i] = r.take(32)
	}
	// Of the 56 bits at most that were in hand nothing is left: the trailer has
	// 64, and need takes bytes one by one.
	r.hand = 0
	if _, err := r.br.Discard(r.pos); err != nil {
		panic("inflate: " + err.Error())
	}
	r.in, r.pos = nil, 0
	if v[0] != r.crc || v[1] != r.size {
		return ErrChecksum
	}
	return io.EOF
}
