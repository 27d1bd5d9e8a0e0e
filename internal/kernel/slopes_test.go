package kernel

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// slopeRun is a row of n points between strides that are longer.
func slopeRun(seed uint64, n int) (f *Frame, in, value []float32, index []int32, run func() [][]float32) {
	r := random(seed)
	wide := (n + 7) &^ 7
	stride := wide + int(seed%5)
	in, value = noise(r, 4*stride), noise(r, wide)
	index = make([]int32, wide)
	for i := range index {
		index[i] = int32(r.IntN(3) + 2*i)
	}
	f = &Frame{At: [3]float32{-60, 20, 35}, Step: [3]float32{3.3, 0.1, -0.2}, Gain: 1.05, GainStep: -0.002}
	copy(f.Turn[:], noise(r, 9))
	return f, in, value, index, func() [][]float32 {
		out := make([]float32, SlopeRows*stride)
		Slopes(out, stride, in, stride, value, index, n, f)
		var rows [][]float32
		for k := range SlopeRows {
			rows = append(rows, out[k*stride:][:n])
		}
		return rows
	}
}

func TestSlopesTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		_, in, _, _, run := slopeRun(uint64(rapid.IntRange(0, 1e6).Draw(t, "seed")), rapid.IntRange(0, 70).Draw(t, "n"))
		if len(in) > 20 {
			in[3], in[20] = float32(math.NaN()), float32(math.Inf(1))
		}
		both(t, run)
	})
}

// The definition in float64. A derivative by a turn is a difference of products of up to
// 500 mm, five roundings each of 2^-24: 3e-4 at most.
func TestSlopesAgainstDirect(t *testing.T) {
	const n = 61
	f, in, value, index, run := slopeRun(3, n)
	stride := len(in) / 4
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		out := run()
		SetPlain(was)
		for q := range n {
			i := float64(index[q])
			g := float64(f.Gain) + i*float64(f.GainStep)
			var d, p [3]float64
			for a := range 3 {
				for k := range 3 {
					d[a] += g * float64(f.Turn[3*a+k]) * float64(in[(1+k)*stride+q])
				}
				p[a] = float64(f.At[a]) + i*float64(f.Step[a])
			}
			pred := g * float64(in[q])
			want := [SlopeRows]float64{pred, float64(value[q]) - pred, d[0], d[1], d[2], p[1]*d[2] - p[2]*d[1], p[2]*d[0] - p[0]*d[2], p[0]*d[1] - p[1]*d[0]}
			for k, w := range want {
				if got := float64(out[k][q]); math.Abs(got-w) > 3e-4 || k < 5 && math.Abs(got-w) > 1e-6 {
					t.Errorf("plain %v, point %d, row %d: %g, want %g", plain, q, k, got, w)
				}
			}
		}
	}
}

// Rows end where memory does.
func TestSlopesStayInside(t *testing.T) {
	for _, front := range []bool{false, true} {
		for n := 8; n <= 24; n += 8 {
			r := random(uint64(n))
			in, value := fenced(t, noise(r, 4*n), front), fenced(t, noise(r, n), front)
			out := fenced(t, make([]float32, SlopeRows*n), front)
			both(t, func() [][]float32 {
				Slopes(out, n, in, n, value, make([]int32, n), n, &Frame{Gain: 1})
				return [][]float32{append([]float32(nil), out...)}
			})
		}
	}
}

func TestSameBytesSlopes(t *testing.T) {
	_, _, _, _, run := slopeRun(7, 1001)
	sameBytes(t, "92351f03b401a09f", run)
}
