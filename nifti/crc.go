package nifti

// CRC-32 of pieces, joined. RFC 1952, 8: the checksum is the remainder of a
// polynomial over GF(2), written with its highest power in the lowest bit, so
// that for two runs of bytes A and B, with the ones that are added before and
// after cancelling out,
//
//	crc(AB) = crc(A) * x^(8 len(B)) + crc(B)  modulo the polynomial.
//
// Multiplication by a fixed power is a linear map (a 32x32 matrix over GF(2));
// it is kept as that power, and applied by shifts and additions.

// crcPolynomial is that of RFC 1952, 8, without its highest power.
const crcPolynomial = 0xedb88320

// crcTimes multiplies two polynomials; 1<<31 is one.
func crcTimes(a, b uint32) uint32 {
	var p uint32
	for ; a != 0; a <<= 1 {
		if a>>31 != 0 {
			p ^= b
		}
		b = b>>1 ^ crcPolynomial&-(b&1) // times x
	}
	return p
}

// crcPower returns x^(8n).
func crcPower(n int64) uint32 {
	p, square := uint32(1<<31), uint32(1<<(31-8))
	for ; n > 0; n >>= 1 {
		if n&1 != 0 {
			p = crcTimes(p, square)
		}
		square = crcTimes(square, square)
	}
	return p
}

// A joiner collects the checksum of a run of pieces. Most pieces of a file have
// one length, so the power of the last one is kept.
type joiner struct {
	crc   uint32
	len   int
	power uint32 // of len
}

func (j *joiner) add(crc uint32, n int) {
	if n != j.len || j.power == 0 {
		j.len, j.power = n, crcPower(int64(n))
	}
	j.crc = crcTimes(j.crc, j.power) ^ crc
}
