package inflate

import (
	"bufio"
	"bytes"
	"compress/flate"
	"compress/gzip"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"math/bits"
	"math/rand/v2"
	"runtime"
	"strings"
	"sync"
	"testing"
	"testing/iotest"

	kflate "github.com/klauspost/compress/flate"
	kgzip "github.com/klauspost/compress/gzip"
)

// ours decodes all members, as compress/gzip does by itself.
func ours(src io.Reader, bufferBytes, readBytes int) ([]byte, error) {
	br := bufio.NewReaderSize(src, bufferBytes)
	r, err := NewReader(br)
	if err != nil {
		return nil, err
	}
	var all []byte
	p := make([]byte, readBytes)
	for {
		n, err := r.Read(p)
		all = append(all, p[:n]...)
		if err == io.EOF {
			if err = r.Reset(br); err == io.EOF {
				return all, nil
			}
		}
		if err != nil {
			return all, err
		}
	}
}

func theirs(b []byte) ([]byte, error) {
	r, err := gzip.NewReader(bytes.NewReader(b))
	if err != nil {
		return nil, err
	}
	return io.ReadAll(r)
}

// contents of many kinds.
func contents() map[string][]byte {
	rnd := rand.New(rand.NewPCG(3, 4))
	noise := func(n int, bits uint) []byte {
		b := make([]byte, n)
		for i := range b {
			b[i] = byte(rnd.Uint32() & (1<<bits - 1))
		}
		return b
	}
	image := func(n int) []byte { // int16 with noise
		b := make([]byte, 2*n)
		for i := range n {
			binary.LittleEndian.PutUint16(b[2*i:], uint16(900+9*rnd.NormFloat64()))
		}
		return b
	}
	skewed := make([]byte, 100000) // codes of all lengths
	for i := range skewed {
		v := 0
		for v < 200 && rnd.IntN(3) > 0 {
			v++
		}
		skewed[i] = byte(v * 37)
	}
	far := append(noise(32768, 8), noise(40000, 8)...) // the longest distances
	far = append(far, far[len(far)-32768:]...)
	return map[string][]byte{
		"nothing": nil, "one byte": {7}, "zeros": make([]byte, 150000), "text": bytes.Repeat([]byte("the watch is kept, the light is lit; "), 9000),
		"noise": noise(100000, 8), "half noise": noise(100000, 4), "bits": noise(100000, 1), "image": image(100000), "skewed": skewed, "far": far,
		"periods": append(bytes.Repeat([]byte("ab"), 3000), bytes.Repeat([]byte("abcdefg"), 3000)...), "short": []byte("ahoy ahoy ahoy"),
	}
}

// compressed gives gzip streams of several compressors and levels.
func compressed(b []byte) map[string][]byte {
	out := map[string][]byte{}
	for _, level := range []int{flate.HuffmanOnly, 0, 1, 6, 9} {
		var z, k, runs bytes.Buffer
		w, _ := gzip.NewWriterLevel(&z, level)
		w.Write(b)
		w.Close()
		out[fmt.Sprint("standard ", level)] = z.Bytes()
		kw, _ := kgzip.NewWriterLevel(&k, level)
		kw.Write(b)
		kw.Close()
		out[fmt.Sprint("other ", level)] = k.Bytes()
		// Many flushed runs, with stored blocks between them.
		w, _ = gzip.NewWriterLevel(&runs, level)
		for i := 0; i < len(b); i += 7001 {
			w.Write(b[i:min(len(b), i+7001)])
			w.Flush()
		}
		w.Close()
		out[fmt.Sprint("flushed ", level)] = runs.Bytes()
	}
	return out
}

// all is every content in every compression.
var all = sync.OnceValue(func() map[string]map[string][]byte {
	out := map[string]map[string][]byte{}
	for name, b := range contents() {
		out[name] = compressed(b)
	}
	return out
})

func TestDecodes(t *testing.T) {
	for name, want := range contents() {
		for how, z := range all()[name] {
			for _, c := range []struct{ buffer, read int }{{64 << 10, 256 << 10}, {4 << 10, 1000}, {16, 70001}} {
				got, err := ours(bytes.NewReader(z), c.buffer, c.read)
				if err != nil || !bytes.Equal(got, want) {
					t.Fatalf("%s, %s, buffer %d, read %d: %d bytes of %d, %v", name, how, c.buffer, c.read, len(got), len(want), err)
				}
			}
			// Members, one byte of input at a time, and of output.
			if len(want) < 100 {
				got, err := ours(iotest.OneByteReader(bytes.NewReader(append(bytes.Clone(z), z...))), 16, 1)
				if err != nil || !bytes.Equal(got, append(bytes.Clone(want), want...)) {
					t.Fatalf("%s, %s: %q, %v", name, how, got, err)
				}
			}
		}
	}
}

// What follows a member is left alone, to the byte.
func TestLeavesTheRest(t *testing.T) {
	for name, want := range contents() {
		for how, z := range all()[name] {
			for n := range 20 {
				rest := bytes.Repeat([]byte{0xab}, n)
				br := bufio.NewReaderSize(bytes.NewReader(append(bytes.Clone(z), rest...)), 64)
				r, err := NewReader(br)
				if err != nil {
					t.Fatal(err)
				}
				if k, err := io.Copy(io.Discard, r); err != nil || k != int64(len(want)) {
					t.Fatalf("%s, %s: %d bytes, %v", name, how, k, err)
				}
				if left, err := io.ReadAll(br); err != nil || !bytes.Equal(left, rest) {
					t.Fatalf("%s, %s: %d bytes left of %d", name, how, len(left), n)
				}
				if len(want) > 1000 && n > 2 {
					break
				}
			}
		}
	}
}

// A stream cut off anywhere is said to be so; one with a changed byte gives what
// compress/gzip gives.
func TestCutAndDamaged(t *testing.T) {
	rnd := rand.New(rand.NewPCG(5, 6))
	for name, want := range contents() {
		want = want[:min(len(want), 3000)]
		for how, z := range compressed(want) {
			for n := 0; n < len(z); n += 1 + n/15 {
				got, err := ours(bytes.NewReader(z[:n]), 64, 5000)
				wantErr := io.ErrUnexpectedEOF
				if n == 0 {
					wantErr = io.EOF
				}
				if err != wantErr || !bytes.HasPrefix(want, got) {
					t.Fatalf("%s, %s, %d bytes of %d: %v", name, how, n, len(z), err)
				}
			}
			for range 20 {
				b := bytes.Clone(z)
				b[rnd.IntN(len(b))] ^= 1 << rnd.IntN(8)
				same(t, b)
			}
		}
	}
}

// same holds us to compress/gzip: the same bytes, or an error of the same kind.
func same(t *testing.T, b []byte) {
	t.Helper()
	want, wantErr := theirs(b)
	got, err := ours(bytes.NewReader(b), 32, 4096)
	if (err == nil) != (wantErr == nil) {
		t.Fatalf("% x: %v, compress/gzip says %v", b[:min(len(b), 100)], err, wantErr)
	}
	if wantErr == nil && !bytes.Equal(got, want) {
		t.Fatalf("% x: other bytes than compress/gzip", b[:min(len(b), 100)])
	}
	if err != nil {
		var c *CorruptError
		if !errors.As(err, &c) && err != ErrHeader && err != ErrChecksum && err != io.EOF && err != io.ErrUnexpectedEOF {
			t.Fatalf("%v is no error of ours", err)
		}
		if errors.Is(wantErr, gzip.ErrChecksum) != (err == ErrChecksum) || errors.Is(wantErr, gzip.ErrHeader) != (err == ErrHeader) {
			t.Fatalf("%v, compress/gzip says %v", err, wantErr)
		}
	}
}

// member wraps deflate data.
func member(flags byte, header, data, plain []byte) []byte {
	b := append([]byte{0x1f, 0x8b, 8, flags, 0, 0, 0, 0, 0, 255}, header...)
	b = append(b, data...)
	b = binary.LittleEndian.AppendUint32(b, crc32.ChecksumIEEE(plain))
	return binary.LittleEndian.AppendUint32(b, uint32(len(plain)))
}

// RFC 1952, 2.3: header fields in their order, and their checksum.
func TestHeaders(t *testing.T) {
	var z bytes.Buffer
	w, _ := gzip.NewWriterLevel(&z, 6)
	w.Header = gzip.Header{Name: "run.nii", Comment: "a comment", Extra: []byte("extra")}
	w.Write([]byte("ahoy"))
	w.Close()
	if got, err := ours(&z, 64, 10); err != nil || string(got) != "ahoy" {
		t.Errorf("%q, %v", got, err)
	}
	data := []byte{1, 4, 0, 0xfb, 0xff, 'a', 'h', 'o', 'y'} // a stored block
	sum := func(flags byte, header string) []byte {
		c := crc32.ChecksumIEEE(append([]byte{0x1f, 0x8b, 8, flags, 0, 0, 0, 0, 0, 255}, header...))
		return binary.LittleEndian.AppendUint16([]byte(header), uint16(c))
	}
	long := string(bytes.Repeat([]byte("n"), 511))
	for name, c := range map[string]struct {
		flags  byte
		header []byte
		want   error
	}{
		"none": {0, nil, nil}, "text flag": {1, nil, nil},
		"checksum": {2, sum(2, ""), nil}, "checksum wrong": {2, []byte{1, 2}, ErrHeader},
		"all":          {31, sum(31, "\x03\x00abcname\x00comment\x00"), nil},
		"longest name": {8, []byte(long + "\x00"), nil}, "name too long": {8, []byte(long + "n\x00"), ErrHeader},
	} {
		b := member(c.flags, c.header, data, []byte("ahoy"))
		if got, err := ours(bytes.NewReader(b), 16, 10); err != c.want || (err == nil && string(got) != "ahoy") {
			t.Errorf("%s: %q, %v", name, got, err)
		}
		same(t, b)
		for n := 1; n < len(b); n++ {
			if _, err := ours(bytes.NewReader(b[:n]), 16, 10); err != io.ErrUnexpectedEOF && err != ErrHeader {
				t.Errorf("%s cut to %d bytes: %v", name, n, err)
			}
		}
	}
	for _, i := range []int{0, 1, 2} {
		b := member(0, nil, data, []byte("ahoy"))
		b[i]++
		if _, err := ours(bytes.NewReader(b), 16, 10); err != ErrHeader {
			t.Errorf("byte %d: %v", i, err)
		}
	}
}

// Data that no compressor makes.
func TestRefuses(t *testing.T) {
	for name, data := range map[string][]byte{
		"block of type 3":            {7},
		"stored lengths disagree":    {1, 4, 0, 0, 0, 'a', 'h', 'o', 'y'},
		"distance before the start":  {0x4b, 0x04, 0xa2, 0x00},
		"no code lengths":            {5, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0},
		"nothing but ones":           bytes.Repeat([]byte{0xff}, 40),
		"dynamic, nothing but ones":  append([]byte{0xed}, bytes.Repeat([]byte{0xff}, 40)...),
		"fixed, nothing but ones":    append([]byte{0xfb}, bytes.Repeat([]byte{0xff}, 40)...),
		"dynamic, too many literals": append([]byte{0xfd}, bytes.Repeat([]byte{0x55}, 40)...),
	} {
		b := member(0, nil, data, nil)
		if _, err := ours(bytes.NewReader(b), 64, 100); err == nil {
			t.Errorf("%s: accepted", name)
		}
		same(t, b)
	}
	for _, at := range []int{-1, -5} {
		b := member(0, nil, []byte{1, 1, 0, 0xfe, 0xff, 'a'}, []byte("a"))
		b[len(b)+at] ^= 1
		if _, err := ours(bytes.NewReader(b), 64, 100); err != ErrChecksum {
			t.Errorf("trailer byte %d: %v", at, err)
		}
	}
}

// Which lengths make a code; and each entry of those that do leads back to its symbol.
func TestBuild(t *testing.T) {
	for name, c := range map[string]struct {
		lengths []uint8
		want    bool
	}{
		"none":             {make([]uint8, 30), true},
		"one of one bit":   {[]uint8{0, 0, 1}, true},
		"one of two bits":  {[]uint8{0, 2, 0}, false},
		"two of one bit":   {[]uint8{1, 1}, true},
		"three of one bit": {[]uint8{1, 1, 1}, false},
		"incomplete":       {[]uint8{1, 3, 3}, false},
		"incomplete, long": {[]uint8{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15}, false},
		"complete, long":   {[]uint8{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15, 15}, true},
		"too many, long":   {[]uint8{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 14, 15}, false},
	} {
		var table [litSize]uint32
		for i := range table {
			table[i] = 0xffffffff
		}
		if got := build(table[:], litBits, c.lengths, litEntry); got != c.want {
			t.Errorf("%s: %v", name, got)
			continue
		}
		if !c.want {
			continue
		}
		code := map[int]int{} // RFC 1951, 3.2.2, the plain way
		next := 0
		for l := 1; l <= maxLen; l++ {
			next <<= 1
			for sym, k := range c.lengths {
				if int(k) == l {
					code[sym] = next
					next++
				}
			}
		}
		for sym, l := range c.lengths {
			if l == 0 {
				continue
			}
			at := int(bits.Reverse16(uint16(code[sym])) >> (16 - l))
			e := table[at&(1<<litBits-1)]
			if e&isLiteral == 0 && e&whatMask == isSecond {
				e = table[int(e>>16)+at>>litBits&(1<<(e>>8&15)-1)]
			}
			if e != uint32(sym)<<16|1<<5|isLiteral|uint32(l) {
				t.Errorf("%s: symbol %d has entry %08x", name, sym, e)
			}
		}
		if name == "one of one bit" && table[1] != 0 || name == "none" && table[77] != 0 {
			t.Errorf("%s: a code that does not exist has an entry", name)
		}
	}
	// More symbols than there are.
	for _, b := range [][]byte{{5 | 30<<3&0xff, 0, 0}, {5, 30, 0}} {
		_, err := ours(bytes.NewReader(member(0, nil, b, nil)), 64, 100)
		var c *CorruptError
		if !errors.As(err, &c) || !strings.Contains(c.What, "literals and lengths and") {
			t.Errorf("% x: %v", b, err)
		}
	}
}

// An error of the source comes through as it is.
func TestSourceFails(t *testing.T) {
	aground := errors.New("aground")
	for _, want := range contents() {
		for _, z := range compressed(want[:min(len(want), 5000)]) {
			for _, n := range []int{0, 5, 11, len(z) / 2, len(z) - 1} {
				src := io.MultiReader(bytes.NewReader(z[:n]), iotest.ErrReader(aground))
				if _, err := ours(src, 64, 1000); err != aground {
					t.Fatalf("after %d of %d bytes: %v", n, len(z), err)
				}
			}
		}
	}
}

// Random code lengths give tables exactly when compress/flate takes them; this goes
// through whole blocks made by hand.
func TestCodes(t *testing.T) {
	rnd := rand.New(rand.NewPCG(8, 9))
	for range 5000 {
		b := make([]byte, 20+rnd.IntN(60))
		for i := range b {
			b[i] = byte(rnd.Uint32())
		}
		b[0] = b[0]&^7 | 5 // last, dynamic
		b[1] &^= 0x1f >> rnd.IntN(6)
		same(t, member(0, nil, b, nil))
	}
}

func TestAllocatesNothing(t *testing.T) {
	z := compressed(contents()["image"])["standard 6"]
	src := bytes.NewReader(z)
	br := bufio.NewReaderSize(src, 64<<10)
	r, err := NewReader(br)
	if err != nil {
		t.Fatal(err)
	}
	p := make([]byte, 50000)
	once := func() {
		for {
			if _, err := r.Read(p); err == io.EOF {
				break
			} else if err != nil {
				t.Fatal(err)
			}
		}
		src.Reset(z)
		br.Reset(src)
		if err := r.Reset(br); err != nil {
			t.Fatal(err)
		}
	}
	if n := testing.AllocsPerRun(5, once); n > 0 {
		t.Errorf("%v allocations", n)
	}
	runtime.KeepAlive(r)
}

// FuzzMember: any bytes give what compress/gzip gives of them.
func FuzzMember(f *testing.F) {
	for _, c := range contents() {
		for _, z := range compressed(c[:min(len(c), 600)]) {
			f.Add(z)
			f.Add(append(bytes.Clone(z), z...))
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) { same(t, b) })
}

// FuzzDeflate: any bytes inside a member whose checksum cannot be right.
func FuzzDeflate(f *testing.F) {
	for _, c := range contents() {
		for _, level := range []int{kflate.HuffmanOnly, 0, 1, 6, 9} {
			var z bytes.Buffer
			w, _ := flate.NewWriter(&z, level)
			w.Write(c[:min(len(c), 600)])
			w.Close()
			f.Add(z.Bytes())
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		plain, err := io.ReadAll(flate.NewReader(bytes.NewReader(b)))
		if len(plain) > 16<<20 {
			return
		}
		z := member(0, nil, b, plain)
		if err == nil {
			// The data may end before the end of b: then what follows is no trailer.
			in := bytes.NewReader(b)
			fr := flate.NewReader(in)
			io.Copy(io.Discard, fr)
			z = member(0, nil, b[:len(b)-in.Len()], plain)
		}
		same(t, z)
	})
}

func BenchmarkImage(b *testing.B) {
	plain := contents()["image"][:200000]
	for _, level := range []string{"standard 1", "standard 6", "other -2"} {
		z := compressed(plain)[level]
		br := bufio.NewReaderSize(nil, 64<<10)
		p := make([]byte, 128<<10)
		b.Run("ours/"+level, func(b *testing.B) {
			b.SetBytes(int64(len(plain)))
			r := &Reader{}
			for b.Loop() {
				br.Reset(bytes.NewReader(z))
				if err := r.Reset(br); err != nil {
					b.Fatal(err)
				}
				if _, err := io.CopyBuffer(struct{ io.Writer }{io.Discard}, r, p); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run("klauspost/"+level, func(b *testing.B) {
			b.SetBytes(int64(len(plain)))
			var r kgzip.Reader
			for b.Loop() {
				br.Reset(bytes.NewReader(z))
				if err := r.Reset(br); err != nil {
					b.Fatal(err)
				}
				if _, err := io.CopyBuffer(struct{ io.Writer }{io.Discard}, struct{ io.Reader }{&r}, p); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
