package realign_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"evenkeel/realign"
)

// chainOf draws a chain of n slots, each with data of its own, and the dense matrix of
// its equations and their right-hand side for a path at rest.
func chainOf(r *rand.Rand, n int) (c *realign.Chain, data []realign.SlotData, a *mat.SymDense, b *mat.VecDense) {
	times := make([]float64, n)
	for s := 1; s < n; s++ {
		times[s] = times[s-1] + 0.5 + r.Float64()
	}
	c = realign.NewChain(times, 1)
	strength := [2]float64{3, 5}
	c.SetStrengths(strength[0], strength[1])
	a, b = mat.NewSymDense(6*n, nil), mat.NewVecDense(6*n, nil)
	for s := range n {
		c.Weights()[s] = 0.2 + r.Float64()
		var half, h [6][6]float64
		var d realign.Params
		for i := range 6 {
			d[i] = r.NormFloat64()
			for j := range 6 {
				half[i][j] = r.NormFloat64()
			}
		}
		for i := range 6 {
			for j := range 6 {
				for k := range 6 {
					h[i][j] += half[i][k] * half[j][k]
				}
			}
			h[i][i] += 0.5
		}
		data = append(data, realign.MakeSlot(h, d))
		for i := range 6 {
			for j := i; j < 6; j++ {
				a.SetSym(6*s+i, 6*s+j, a.At(6*s+i, 6*s+j)+h[i][j])
			}
			for j := range 6 {
				b.SetVec(6*s+i, b.AtVec(6*s+i)+h[i][j]*d[j])
			}
		}
	}
	for s := 1; s < n-1; s++ {
		for k := range 6 {
			for i := range 3 {
				for j := 0; j <= i; j++ {
					u, v := 6*(s-1+i)+k, 6*(s-1+j)+k
					a.SetSym(u, v, a.At(u, v)+c.Weights()[s]*strength[k/3]*c.Bend()[s][i]*c.Bend()[s][j])
				}
			}
		}
	}
	return c, data, a, b
}

// Against the dense routines of gonum's mat. The condition of the matrices
// drawn is below 1e4, so that twelve digits remain.
func TestLadderAgainstDense(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for _, n := range []int{1, 2, 3, 4, 5, 9, 40} {
		c, data, a, b := chainOf(r, n)
		var chol mat.Cholesky
		if !chol.Factorize(a) || chol.Cond() > 1e5 {
			t.Fatalf("n = %d: a bad draw", n)
		}
		delta, evidence, ok := c.Step(data, make([]realign.Params, n))
		if !ok {
			t.Fatalf("n = %d: not positive definite", n)
		}
		var x mat.VecDense
		if err := chol.SolveVecTo(&x, b); err != nil {
			t.Fatal(err)
		}
		for i := range delta {
			if math.Abs(delta[i]-x.AtVec(i)) > 1e-11*(1+math.Abs(x.AtVec(i))) {
				t.Errorf("n = %d: x[%d] = %.15g, want %.15g", n, i, delta[i], x.AtVec(i))
			}
		}
		want := mat.Dot(b, &x)/2 - chol.LogDet()/2 + 1.5*float64(n-2)*(math.Log(3)+math.Log(5))
		if math.Abs(evidence-want) > 1e-12*float64(6*n)*(1+math.Abs(want)) {
			t.Errorf("n = %d: evidence %.15g, want %.15g", n, evidence, want)
		}
		if lt, lr := c.Strengths(); math.Abs(c.EvidenceAt(data, make([]realign.Params, n), lt, lr)-evidence) > 1e-12*float64(6*n)*(1+math.Abs(want)) {
			t.Errorf("n = %d: the evidence differs between a step and a look", n)
		}
		var inv mat.SymDense
		if err := chol.InverseTo(&inv); err != nil {
			t.Fatal(err)
		}
		for s, z := range c.Covariances() {
			for i := range 6 {
				for j := range 6 {
					if got, want := z[i][j], inv.At(6*s+i, 6*s+j); math.Abs(got-want) > 1e-11*(1+math.Abs(want)) {
						t.Errorf("n = %d: slot %d: inverse (%d, %d) = %.15g, want %.15g", n, s, i, j, got, want)
					}
				}
			}
		}
	}
}

func TestLadderRefuses(t *testing.T) {
	p := make([]realign.Params, 5)
	step := func(h [6][6]float64) bool {
		data := make([]realign.SlotData, len(p))
		for s := range data {
			data[s] = realign.MakeSlot(precision(1, 0), realign.Params{})
		}
		data[3] = realign.MakeSlot(h, realign.Params{})
		c := realign.NewChain([]float64{0, 1, 2, 3, 4}, 1)
		// So weak that data have to do.
		c.SetStrengths(1e-30, 1e-30)
		_, _, ok := c.Step(data, p)
		return ok
	}
	if !step(precision(1, 0)) {
		t.Fatal("a definite matrix does not pass")
	}
	for name, v := range map[string]float64{"zero": 0, "negative": -1, "no number": math.NaN(), "infinite": math.Inf(1)} {
		for a := range 6 {
			h := precision(1, 0)
			h[a][a] = v
			if step(h) && v != 0 {
				t.Errorf("a matrix with a diagonal entry that is %s passes for positive definite", name)
			}
		}
	}
	// Indefinite although its diagonal is positive.
	if step(precision(1, 1.1)) {
		t.Error("an indefinite matrix passes for positive definite")
	}
}

// A stiff chain of slots that all see alike looks the same from either end, to the
// arithmetic: what is far from one end comes of long recurrences from the other.
func TestCovariancesOfALongStiffChain(t *testing.T) {
	const n = 3000
	times := make([]float64, n)
	data := make([]realign.SlotData, n)
	for s := range data {
		times[s] = float64(s)
		data[s] = realign.MakeSlot(precision(0.05, 0.4), realign.Params{})
	}
	c := realign.NewChain(times, 1)
	c.SetStrengths(1e8, 6e11)
	if _, _, ok := c.Step(data, make([]realign.Params, n)); !ok {
		t.Fatal("no solution")
	}
	z := c.Covariances()
	for s := range n / 2 {
		for i := range 6 {
			for j := range 6 {
				// As correlations. The condition is 1e8 times 400: six digits remain.
				scale := math.Sqrt(z[s][i][i] * z[s][j][j])
				if d := math.Abs(z[s][i][j]-z[n-1-s][i][j]) / scale; !(d < 1e-6) {
					t.Fatalf("slots %d and %d from the ends: (%d, %d) is %g and %g", s, s, i, j, z[s][i][j], z[n-1-s][i][j])
				}
			}
		}
	}
}
