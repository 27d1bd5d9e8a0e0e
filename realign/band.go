package realign

import (
	"math"

	"evenkeel/internal/detmath"
)

// A path has six unknowns for every excitation, and its prior ties each
// excitation to the next two: the normal equations are banded.
const (
	poseUnknowns = 6
	bandWidth    = 3*poseUnknowns - 1 // entries below the diagonal
)

// band is a symmetric matrix of half-width bandWidth: row[i][bandWidth+j-i] is
// the entry (i, j) for j in [i-bandWidth, i].
type band [][bandWidth + 1]float64

// add adds v to the entry (i, j), j <= i, i-j <= bandWidth.
func (m band) add(i, j int, v float64) { m[i][bandWidth+j-i] += v }

// cholesky replaces m by its lower factor L (m = L L'); ok is false if m is not
// positive definite to working precision. (Golub, Van Loan, Matrix
// Computations, algorithm 4.3.5, band Cholesky; from memory.)
func (m band) cholesky() bool {
	for i := range m {
		ri := &m[i]
		lo := max(0, i-bandWidth)
		for j := lo; j <= i; j++ {
			rj := &m[j]
			v := ri[bandWidth+j-i]
			for k := max(lo, j-bandWidth); k < j; k++ {
				v -= float64(ri[bandWidth+k-i] * rj[bandWidth+k-j])
			}
			if j < i {
				ri[bandWidth+j-i] = float64(v * rj[bandWidth])
				continue
			}
			if !(v > 0) || math.IsInf(v, 1) {
				return false
			}
			// The reciprocal of the diagonal is kept in its place: it is all
			// that is ever needed of it.
			ri[bandWidth] = 1 / math.Sqrt(v)
		}
	}
	return true
}

// logDiagonal is the sum of the logarithms of the diagonal of the factor.
func (m band) logDiagonal() float64 {
	s := 0.0
	for i := range m {
		s -= detmath.Log(m[i][bandWidth])
	}
	return s
}

// solve overwrites b by the solution of L L' x = b.
func (m band) solve(b []float64) {
	for i := range m {
		ri := &m[i]
		v := b[i]
		for k := max(0, i-bandWidth); k < i; k++ {
			v -= float64(ri[bandWidth+k-i] * b[k])
		}
		b[i] = float64(v * ri[bandWidth])
	}
	for i := len(m) - 1; i >= 0; i-- {
		ri := &m[i]
		b[i] = float64(b[i] * ri[bandWidth])
		for k := max(0, i-bandWidth); k < i; k++ {
			b[k] -= float64(ri[bandWidth+k-i] * b[i])
		}
	}
}

// inverseBand returns the entries of (L L')^-1 inside the band, by the
// recurrence of Takahashi, Fagan, Chin 1973 (from memory; tested against a
// dense inverse): Z(i,j) = d(i,j)/L(i,i)^2 - sum over k > i of L(k,i) Z(k,j) / L(i,i).
func (m band) inverseBand() band {
	n := len(m)
	z := make(band, n)
	at := func(i, j int) float64 {
		if i < j {
			i, j = j, i
		}
		return z[i][bandWidth+j-i]
	}
	for i := n - 1; i >= 0; i-- {
		d := m[i][bandWidth]
		for j := min(n-1, i+bandWidth); j >= i; j-- {
			v := 0.0
			for k := i + 1; k <= min(n-1, i+bandWidth); k++ {
				if k-j <= bandWidth && j-k <= bandWidth {
					v -= float64(m[k][bandWidth+i-k] * at(k, j))
				}
			}
			v = float64(v * d)
			if j == i {
				v += float64(d * d)
			}
			z[j][bandWidth+i-j] = v
		}
	}
	return z
}
