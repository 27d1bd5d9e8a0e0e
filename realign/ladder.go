package realign

import (
	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
)

// A path has six unknowns for every excitation, and its prior ties each excitation to
// the next two, component by component: the normal equations are a ladder of 6x6
// blocks, with blocks that are multiples of diagonal matrices one and two steps away
// (kernel.Link).
const poseUnknowns = kernel.Unknowns

type block = [poseUnknowns][poseUnknowns]float64

// back overwrites y = L^-1 b by the solution of L L' x = b. Rungs are those of all slots.
func back(x []params, rungs []kernel.Rung) {
	for s := len(rungs) - 1; s >= 0; s-- {
		r := &rungs[s]
		at := &x[s]
		for a := poseUnknowns - 1; a >= 0; a-- {
			for c := a + 1; c < poseUnknowns; c++ {
				at[a] -= float64(r.D[a][c] * at[c])
			}
			at[a] = float64(at[a] * r.D[a][a])
		}
		for a, v := range at {
			for c := range poseUnknowns {
				if s > 0 {
					x[s-1][c] -= float64(r.One[a][c] * v)
				}
				if s > 1 {
					x[s-2][c] -= float64(r.Two[a][c] * v)
				}
			}
		}
	}
}

// logSum is the sum of the logarithms of many numbers, of which it takes few.
type logSum struct{ sum, product float64 }

func newLogSum() logSum { return logSum{product: 1} }

// add takes the product of the reciprocals on the diagonal of a rung.
func (l *logSum) add(product float64) {
	l.product = float64(l.product * product)
	// Six more of at most 1e30, or at least 1e-30, do not run over.
	if !(l.product > 1e-100 && l.product < 1e100) {
		l.value()
	}
}

func (l *logSum) value() float64 {
	l.sum += detmath.Log(l.product)
	l.product = 1
	return l.sum
}

// covariances returns the blocks on the diagonal of (L L')^-1, by the recurrence of
// Takahashi, Fagan, Chin 1973 in blocks (from memory; tested against a dense inverse):
// with G(k) = L(k,s) L(s,s)^-1, Z(s,j) = d(s,j) (L(s,s) L(s,s)')^-1 - sum over k > s
// of G(k)' Z(k,j).
func covariances(rungs []kernel.Rung) []block {
	out := make([]block, len(rungs))
	var next, second, between block // Z(s+1,s+1), Z(s+2,s+2), Z(s+1,s+2)
	for s := len(rungs) - 1; s >= 0; s-- {
		var g1, g2 block
		if s+1 < len(rungs) {
			g1 = overFactor(&rungs[s+1].One, &rungs[s].D)
		}
		if s+2 < len(rungs) {
			g2 = overFactor(&rungs[s+2].Two, &rungs[s].D)
		}
		// Z(s,s+1) and Z(s,s+2).
		var z1, z2, z block
		for a := range z {
			for b := range z {
				for k := range z {
					z1[a][b] -= float64(g1[k][a]*next[k][b]) + float64(g2[k][a]*between[b][k])
					z2[a][b] -= float64(g1[k][a]*between[k][b]) + float64(g2[k][a]*second[k][b])
				}
			}
		}
		unit := block{}
		for a := range unit {
			unit[a][a] = 1
		}
		inverse := overFactor(&unit, &rungs[s].D) // of L(s,s)
		// One half only: rounding that differs between the two would grow without bounds.
		for a := range z {
			for b := range a + 1 {
				for k := range z {
					z[a][b] += float64(inverse[k][a]*inverse[k][b]) - float64(g1[k][a]*z1[b][k]) - float64(g2[k][a]*z2[b][k])
				}
				z[b][a] = z[a][b]
			}
		}
		out[s] = z
		next, second, between = z, next, z1
	}
	return out
}

// overFactor is x L^-1, L as d of a rung holds it.
func overFactor(x, d *block) (out block) {
	for a := range out {
		for c := poseUnknowns - 1; c >= 0; c-- {
			v := x[a][c]
			for j := c + 1; j < poseUnknowns; j++ {
				v -= float64(out[a][j] * d[c][j])
			}
			out[a][c] = float64(v * d[c][c])
		}
	}
	return out
}
