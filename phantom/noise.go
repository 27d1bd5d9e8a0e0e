package phantom

import (
	"math"
	"math/rand/v2"

	"evenkeel/internal/detmath"
)

// noise gives pairs of independent standard normal numbers. The library's own
// NormFloat64 is not used: its rare branches go through math.Exp and math.Log,
// whose last bits differ between machines.
type noise struct{ src *rand.PCG }

// newNoise is the generator of one slice of one volume. Its state is made of a
// mixed seed and the slice's place, so that neighbours share no stream.
func newNoise(seed uint64, volume, slice int) noise {
	place := uint64(volume)<<32 | uint64(uint32(slice))
	return noise{rand.NewPCG(mix(seed), mix(place^mix(seed+1)))}
}

// mix is the finaliser of SplitMix64 (Steele, Lea, Flood 2014, OOPSLA, fig. 17
// [constants from memory]).
func mix(z uint64) uint64 {
	z += 0x9e3779b97f4a7c15
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

// pair is the polar method (Marsaglia, Bray 1964, SIAM Review 6(3):260-264 [from
// memory]).
func (n noise) pair() (a, b float64) {
	for {
		// 53 random bits to [-1, 1): exact.
		u := float64(n.src.Uint64()>>11)*(1./(1<<52)) - 1
		v := float64(n.src.Uint64()>>11)*(1./(1<<52)) - 1
		s := float64(u*u) + float64(v*v)
		if s < 1 && s > 0 {
			f := math.Sqrt(-2 * detmath.Log(s) / s)
			return float64(u * f), float64(v * f)
		}
	}
}

// rician is the magnitude of the signal plus complex Gaussian noise of standard
// deviation sd in each part (Rice 1944; Gudbjartsson, Patz 1995, MRM 34:910-914).
func (n noise) rician(signal, sd float64) float64 {
	a, b := n.pair()
	re, im := signal+float64(sd*a), float64(sd*b)
	return math.Sqrt(float64(re*re) + float64(im*im))
}
