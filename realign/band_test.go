package realign_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"evenkeel/realign"
)

// bandOf draws a positive definite band matrix: a sum of squares of rows that
// reach over the band, as the prior's are, and a diagonal.
func bandOf(r *rand.Rand, n int) (realign.Band, *mat.SymDense) {
	dense := mat.NewSymDense(n, nil)
	for lo := range n {
		hi := min(n, lo+realign.BandWidth+1)
		row := make([]float64, hi-lo)
		for i := range row {
			row[i] = r.NormFloat64()
		}
		for i := range row {
			for j := 0; j <= i; j++ {
				dense.SetSym(lo+i, lo+j, dense.At(lo+i, lo+j)+row[i]*row[j])
			}
		}
		dense.SetSym(lo, lo, dense.At(lo, lo)+0.5+r.Float64())
	}
	m := realign.NewBand(n)
	for i := range n {
		for j := max(0, i-realign.BandWidth); j <= i; j++ {
			// In two parts: add adds.
			m.Add(i, j, dense.At(i, j)/4)
			m.Add(i, j, 3*dense.At(i, j)/4)
		}
	}
	return m, dense
}

// Against the dense routines of gonum's mat. The condition of the matrices
// drawn is below 1e4, so that twelve digits remain.
func TestBandAgainstDense(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for _, n := range []int{1, 2, 6, 17, 18, 19, 24, 60, 131} {
		m, dense := bandOf(r, n)
		var chol mat.Cholesky
		if !chol.Factorize(dense) || chol.Cond() > 1e5 {
			t.Fatalf("n = %d: a bad draw", n)
		}
		if !m.Cholesky() {
			t.Fatalf("n = %d: not positive definite", n)
		}
		if got, want := m.LogDiagonal(), chol.LogDet()/2; math.Abs(got-want) > 1e-12*float64(n)*(1+math.Abs(want)) {
			t.Errorf("n = %d: log diagonal %.15g, want %.15g", n, got, want)
		}
		b := make([]float64, n)
		for i := range b {
			b[i] = r.NormFloat64()
		}
		var x mat.VecDense
		if err := chol.SolveVecTo(&x, mat.NewVecDense(n, append([]float64(nil), b...))); err != nil {
			t.Fatal(err)
		}
		m.Solve(b)
		for i := range b {
			if math.Abs(b[i]-x.AtVec(i)) > 1e-11*(1+math.Abs(x.AtVec(i))) {
				t.Errorf("n = %d: x[%d] = %.15g, want %.15g", n, i, b[i], x.AtVec(i))
			}
		}
		var inv mat.SymDense
		if err := chol.InverseTo(&inv); err != nil {
			t.Fatal(err)
		}
		z := m.InverseBand()
		for i := range n {
			for j := max(0, i-realign.BandWidth); j <= i; j++ {
				if got, want := z[i][realign.BandWidth+j-i], inv.At(i, j); math.Abs(got-want) > 1e-11*(1+math.Abs(want)) {
					t.Errorf("n = %d: inverse (%d, %d) = %.15g, want %.15g", n, i, j, got, want)
				}
			}
		}
	}
}

func TestBandRefuses(t *testing.T) {
	for name, v := range map[string]float64{"zero": 0, "negative": -1, "no number": math.NaN(), "infinite": math.Inf(1)} {
		m := realign.NewBand(30)
		for i := range 30 {
			m.Add(i, i, 1)
		}
		m.Add(20, 20, v-1)
		if m.Cholesky() {
			t.Errorf("a matrix with a diagonal entry that is %s passes for positive definite", name)
		}
	}
	// Indefinite although its diagonal is positive.
	m := realign.NewBand(2)
	m.Add(0, 0, 1)
	m.Add(1, 1, 1)
	m.Add(1, 0, 1.1)
	if m.Cholesky() {
		t.Error("an indefinite matrix passes for positive definite")
	}
}
