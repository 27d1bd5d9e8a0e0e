package inflate

import "math/bits"

// Tables by the first bits of the input. An entry holds
//
//	bits 0-4    how many bits it takes, of the code (or two), without extra ones
//	bits 5-6    literals: how many, 1 or 2
//	bit  7      literals
//	bits 8-11   extra bits of a length or distance
//	bits 12-14  what it is, if not literals
//	bits 16-31  the literals (the first one lower), the length or distance without
//	            its extra bits, or where the second table is
//
// A code longer than the first table's index leads to a second table, whose size
// is in bits 8-11. Entry 0 is a code that does not exist.
const (
	litBits, litSize   = 11, 1<<11 + 1024
	distBits, distSize = 9, 1<<9 + 512

	isLiteral = 1 << 7
	isCopy    = 1 << 12 // a length, or a distance
	isEnd     = 2 << 12
	isSecond  = 3 << 12
	isCode    = 4 << 12
	whatMask  = 7 << 12

	maxLit, maxDist = 286, 30 // symbols that a block may use
	maxLen          = 15
)

// tables are those of one block.
type tables struct {
	lit  [litSize]uint32
	dist [distSize]uint32
}

// RFC 1951, 3.2.5: base and extra bits of lengths (symbols 257 to 285) and distances.
var (
	lengthBase = [29]uint16{3, 4, 5, 6, 7, 8, 9, 10, 11, 13, 15, 17, 19, 23, 27, 31, 35, 43, 51, 59, 67, 83, 99, 115, 131, 163, 195, 227, 258}
	lengthMore = [29]uint8{0, 0, 0, 0, 0, 0, 0, 0, 1, 1, 1, 1, 2, 2, 2, 2, 3, 3, 3, 3, 4, 4, 4, 4, 5, 5, 5, 5, 0}
	distBase   = [30]uint16{1, 2, 3, 4, 5, 7, 9, 13, 17, 25, 33, 49, 65, 97, 129, 193, 257, 385, 513, 769, 1025, 1537, 2049, 3073, 4097, 6145, 8193, 12289, 16385, 24577}
	distMore   = [30]uint8{0, 0, 0, 0, 1, 1, 2, 2, 3, 3, 4, 4, 5, 5, 6, 6, 7, 7, 8, 8, 9, 9, 10, 10, 11, 11, 12, 12, 13, 13}
)

// litEntry and distEntry give the entry of a symbol, without the bits it takes; 0
// for symbols that no stream may use.
func litEntry(sym int) uint32 {
	switch {
	case sym < 256:
		return uint32(sym)<<16 | 1<<5 | isLiteral
	case sym == 256:
		return isEnd
	case sym < maxLit:
		return uint32(lengthBase[sym-257])<<16 | uint32(lengthMore[sym-257])<<8 | isCopy
	}
	return 0
}

func distEntry(sym int) uint32 {
	if sym < maxDist {
		return uint32(distBase[sym])<<16 | uint32(distMore[sym])<<8 | isCopy
	}
	return 0
}

// codeEntry is for the code lengths; isCode tells 0 from no symbol.
func codeEntry(sym int) uint32 { return uint32(sym)<<16 | isCode }

// build fills a table for the canonical code with these lengths (RFC 1951,
// 3.2.2). It reports whether they make one: a complete code, a single code of one bit,
// or no code at all, of which every use is an error (as compress/flate has it).
func build(table []uint32, first uint, lengths []uint8, entry func(int) uint32) bool {
	var count, next [maxLen + 2]int
	for _, l := range lengths {
		count[l]++
	}
	count[0] = 0
	code, longest := 0, 0
	for l := 1; l <= maxLen; l++ {
		code <<= 1
		next[l] = code
		code += count[l]
		if count[l] > 0 {
			longest = l
		}
		if code > 1<<l {
			return false
		}
	}
	whole := code == 1<<maxLen
	if !whole {
		if longest > 1 {
			return false
		}
		clear(table)
		if longest == 0 {
			return true
		}
	}
	// Symbols by length, then by number: the order of the codes.
	var at [maxLen + 2]int
	for l := 1; l <= maxLen; l++ {
		at[l+1] = at[l] + count[l]
	}
	var sorted [320]uint16
	used := at[maxLen+1]
	for sym, l := range lengths {
		if l > 0 {
			sorted[at[l]] = uint16(sym)
			at[l]++
		}
	}
	mask := 1<<first - 1
	end := 1 << first // of what is used of the table
	prefix, second, size := -1, 0, uint(0)
	for i := 0; i < used; i++ {
		sym := int(sorted[i])
		l := uint(lengths[sym])
		reversed := int(bits.Reverse16(uint16(next[l])) >> (16 - l))
		next[l]++
		e := entry(sym)
		if e != 0 {
			e |= uint32(l)
		}
		if l <= first {
			for j := reversed; j <= mask; j += 1 << l {
				table[j] = e
			}
			continue
		}
		if reversed&mask != prefix {
			// The longest code with this beginning tells the size: the
			// codes follow one another, and fill the second table.
			prefix, second, size = reversed&mask, end, l-first
			for room, k := 1<<size, i; ; {
				for k < used && uint(lengths[sorted[k]]) == first+size && room > 0 {
					room--
					k++
				}
				if room == 0 || k == used {
					break
				}
				size++
				room <<= 1
			}
			end += 1 << size
			if end > len(table) {
				return false // cannot be; but a panic would be worse
			}
			table[prefix] = uint32(second)<<16 | uint32(size)<<8 | isSecond
		}
		for j := reversed >> first; j < 1<<size; j += 1 << (l - first) {
			table[second+j] = e
		}
	}
	return true
}

// pair joins literals whose codes fit into the first table together. An entry is
// joined with one of a smaller index that is still single, so it goes downward.
func pair(table *[litSize]uint32) {
	zero := table[0]
	for i := 1<<litBits - 1; i >= 0; i-- {
		e := table[i]
		if e&isLiteral == 0 {
			continue
		}
		l := e & 31
		f := zero
		if i>>l != 0 {
			f = table[i>>l]
		}
		if f&isLiteral == 0 || l+f&31 > litBits {
			continue
		}
		table[i] = e&(0xff<<16) | f&(0xff<<16)<<8 | isLiteral | 2<<5 | (l + f&31)
	}
}

// fixed are the tables of RFC 1951, 3.2.6.
var fixed = func() *tables {
	var lengths [288]uint8
	for i := range lengths {
		switch {
		case i < 144:
			lengths[i] = 8
		case i < 256:
			lengths[i] = 9
		case i < 280:
			lengths[i] = 7
		default:
			lengths[i] = 8
		}
	}
	t := &tables{}
	build(t.lit[:], litBits, lengths[:], litEntry)
	pair(&t.lit)
	for i := range 32 {
		lengths[i] = 5
	}
	build(t.dist[:], distBits, lengths[:32], distEntry)
	return t
}()
