package kernel

import "math"

// Unknowns of a link.
const Unknowns = 6

// A Link is what a chain's normal equations say of one of its members, each of six
// unknowns of two kinds, three of either, whose penalties have strengths of their own.
// With S the diagonal matrix of the strengths, the block on the diagonal is H + Q[0] S,
// those one and two members back are Q[1] S and Q[2] S, and the right-hand side is G - S U.
type Link struct {
	H [Unknowns * (Unknowns + 1) / 2]float64 // upper triangle, by rows
	G [Unknowns]float64
	U [Unknowns]float64
	Q [3]float64
}

// A Rung is one row of blocks of the factor L (the matrix is L L'), and of y = L^-1 b.
type Rung struct {
	// D holds the block on the diagonal transposed, D[k][a] = L[a][k] for k < a, with the
	// reciprocals of its own diagonal.
	D [Unknowns][Unknowns]float64
	// One and Two are the blocks one and two members back. Two is upper triangular.
	One, Two [Unknowns][Unknowns]float64
	Y        [Unknowns]float64
}

// Eliminate makes a rung from its link and the two rungs before; for the first two
// members these are zero. A matrix that is not definite to working precision leaves
// numbers that are not finite, or zero reciprocals. (Block form of band Cholesky: Golub, Van
// Loan, Matrix Computations, algorithm 4.3.5; from memory.)
func (r *Rung) Eliminate(l *Link, strengths *[2]float64, r1, r2 *Rung) {
	for a := range Unknowns {
		x := &r.Two[a]
		s := float64(l.Q[2] * strengths[a/3])
		for c := a; c < Unknowns; c++ {
			v := 0.0
			if c == a {
				v = s
			}
			for k := a; k < c; k++ {
				v -= float64(x[k] * r2.D[k][c])
			}
			x[c] = float64(v * r2.D[c][c])
		}
	}
	for a := range Unknowns {
		x, t := &r.One[a], &r.Two[a]
		s := float64(l.Q[1] * strengths[a/3])
		for c := range Unknowns {
			v := 0.0
			if c == a {
				v = s
			}
			for k := a; k < Unknowns; k++ {
				v -= float64(t[k] * r1.One[c][k])
			}
			for k := range c {
				v -= float64(x[k] * r1.D[k][c])
			}
			x[c] = float64(v * r1.D[c][c])
		}
	}
	at := 0
	for b := range Unknowns {
		for a := b; a < Unknowns; a++ {
			v := l.H[at]
			at++
			if a == b {
				v += float64(l.Q[0] * strengths[a/3])
			}
			for k := a; k < Unknowns; k++ {
				v -= float64(r.Two[a][k] * r.Two[b][k])
			}
			x, y := &r.One[a], &r.One[b]
			for k := range Unknowns {
				v -= float64(x[k] * y[k])
			}
			for k := range b {
				v -= float64(r.D[k][a] * r.D[k][b])
			}
			if a == b {
				r.D[a][a] = 1 / math.Sqrt(v)
			} else {
				r.D[b][a] = float64(v * r.D[b][b])
			}
		}
	}
	for a := range Unknowns {
		v := l.G[a] - float64(strengths[a/3]*l.U[a])
		for k := a; k < Unknowns; k++ {
			v -= float64(r.Two[a][k] * r2.Y[k])
		}
		for k := range Unknowns {
			v -= float64(r.One[a][k] * r1.Y[k])
		}
		for k := range a {
			v -= float64(r.D[k][a] * r.Y[k])
		}
		r.Y[a] = float64(v * r.D[a][a])
	}
}

// LadderLanes is how many pairs of strengths [Ladder] takes.
const LadderLanes = 4

// rungSize is the number of elements of a rung that count: two triangles, a square, y.
const rungSize = 2*Unknowns*(Unknowns+1)/2 + Unknowns*Unknowns + Unknowns

// Ladder eliminates a chain under four pairs of strengths, as [Rung.Eliminate] does member
// by member, and keeps none of the factors: inverse receives, of each member and pair, the
// product of the reciprocals on the diagonal of L, and gained the square of |y|. inverse is as
// long as links.
func Ladder(inverse [][LadderLanes]float64, links []Link, strengths *[LadderLanes][2]float64) (gained [LadderLanes]float64) {
	check(len(inverse) == len(links), "products and links differ in number")
	if len(links) == 0 {
		return gained
	}
	if useAssembly {
		var rungs [3 * rungSize][LadderLanes]float64
		var s [2][LadderLanes]float64
		for lane, pair := range strengths {
			s[0][lane], s[1][lane] = pair[0], pair[1]
		}
		ladder(&inverse[0][0], &gained[0], &links[0].H[0], len(links), &s[0][0], &rungs[0][0])
		return gained
	}
	ladderPlain(inverse, &gained, links, strengths)
	return gained
}

func ladderPlain(inverse [][LadderLanes]float64, gained *[LadderLanes]float64, links []Link, strengths *[LadderLanes][2]float64) {
	for lane := range strengths {
		var rungs [3]Rung
		r, r1, r2 := &rungs[0], &rungs[1], &rungs[2]
		sum := 0.0
		for i := range links {
			r.Eliminate(&links[i], &strengths[lane], r1, r2)
			product := r.D[0][0]
			for a := 1; a < Unknowns; a++ {
				product = float64(product * r.D[a][a])
			}
			inverse[i][lane] = product
			for _, y := range r.Y {
				sum += float64(y * y)
			}
			r, r1, r2 = r2, r, r1
		}
		gained[lane] = sum
	}
}
