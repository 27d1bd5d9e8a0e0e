package kernel

import (
	"math"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// measured is what the measures of some rows give, as bits.
func measured(rows [][]float32, ints []int16, slope, inter float64) []uint64 {
	n := len(rows[0])
	var out []uint64
	add := func(v ...float64) {
		for _, x := range v {
			out = append(out, math.Float64bits(x))
		}
	}
	level, square := Changes(rows[0], rows[1])
	dist, size := Apart(rows[0], (*[4][]float32)(rows[1:5]))
	add(level, square, dist, size)
	d1, d2 := make([]float64, n), make([]float64, n)
	for i := range d1 {
		d1[i], d2[i] = float64(rows[5][i]), float64(rows[4][i])
	}
	Courses(d1, d2, rows[0], (*[4][]float32)(rows[1:5]))
	add(d1...)
	add(d2...)
	dst := make([]float32, len(ints))
	for _, f := range []func(){
		func() { FromInt16(dst, ints) }, func() { FromUint16(dst, ints) },
		func() { FromInt16Scaled(dst, ints, slope, inter) }, func() { FromUint16Scaled(dst, ints, slope, inter) },
	} {
		f()
		for _, v := range dst {
			out = append(out, uint64(math.Float32bits(v)))
		}
	}
	return out
}

func measureRows(seed uint64, n int) (rows [][]float32, ints []int16) {
	r := random(seed)
	for k := range 6 {
		rows = append(rows, noise(r, n))
		for i := range rows[k] {
			switch (i + k) % 7 {
			case 1:
				rows[k][i] = float32(math.Copysign(0, float64(rows[k][i])))
			case 2:
				rows[k][i] = rows[0][i] // ties
			}
		}
	}
	for range n {
		ints = append(ints, int16(r.Uint64()))
	}
	return rows, ints
}

func TestMeasureTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		rows, ints := measureRows(rapid.Uint64().Draw(t, "seed"), rapid.OneOf(rapid.IntRange(0, 20), rapid.IntRange(0, 300)).Draw(t, "n"))
		slope, inter := rapid.Float64().Draw(t, "slope"), rapid.Float64().Draw(t, "inter")
		var out [2][]uint64
		for k := range out {
			func() {
				defer SetPlain(SetPlain(k == 0))
				out[k] = measured(rows, ints, slope, inter)
			}()
		}
		if !slices.Equal(out[0], out[1]) {
			t.Fatalf("plain Go %x\nassembly %x", out[0], out[1])
		}
	})
}

// Written straight from the definitions; sums of up to 301 terms below 100 in another order.
func TestMeasuresAgainstDirect(t *testing.T) {
	for _, n := range []int{1, 3, 4, 7, 8, 64, 301} {
		rows, ints := measureRows(uint64(n), n)
		for _, plain := range []bool{true, false} {
			was := SetPlain(plain)
			level, square := Changes(rows[0], rows[1])
			dist, size := Apart(rows[0], (*[4][]float32)(rows[1:5]))
			d1, d2 := make([]float64, n), make([]float64, n)
			Courses(d1, d2, rows[5], (*[4][]float32)(rows[1:5]))
			signed, unsigned, scaled, both := make([]float32, n), make([]float32, n), make([]float32, n), make([]float32, n)
			FromInt16(signed, ints)
			FromUint16(unsigned, ints)
			FromInt16Scaled(scaled, ints, 0.37, -5)
			FromUint16Scaled(both, ints, 0.37, -5)
			SetPlain(was)
			var want [4]float64
			for i := range n {
				x := float64(rows[0][i])
				d := x - float64(rows[1][i])
				want[0] += x
				want[1] += d * d
				four := []float64{float64(rows[1][i]), float64(rows[2][i]), float64(rows[3][i]), float64(rows[4][i])}
				slices.Sort(four)
				want[2] += math.Abs(x - (four[1]+four[2])/2)
				want[3] += math.Abs(x)
				var s1, s2 float64
				for k := 1; k < 5; k++ {
					d := float64(rows[k][i]) - float64(rows[5][i])
					s1 += d
					s2 += float64(d * d)
				}
				if d1[i] != s1 || d2[i] != s2 {
					t.Fatalf("%d values, %d: %v %v, want %v %v", n, i, d1[i], d2[i], s1, s2)
				}
				v, u := float64(ints[i]), float64(uint16(ints[i]))
				if float64(signed[i]) != v || float64(unsigned[i]) != u || scaled[i] != float32(float64(0.37*v)-5) || both[i] != float32(float64(0.37*u)-5) {
					t.Fatalf("%d: %v %v %v %v of %d", i, signed[i], unsigned[i], scaled[i], both[i], ints[i])
				}
			}
			for k, got := range []float64{level, square, dist, size} {
				if math.Abs(got-want[k]) > 1e-13*(1+want[3]+want[1]) {
					t.Errorf("%d values, sum %d: %v, want %v (plain Go: %v)", n, k, got, want[k], plain)
				}
			}
		}
	}
}

// Nothing is read or written beyond the rows.
func TestMeasuresStayInside(t *testing.T) {
	for n := range 40 {
		rows, ints := measureRows(uint64(n), n)
		for _, front := range []bool{true, false} {
			var in [][]float32
			for _, r := range rows {
				in = append(in, fenced(t, r, front))
			}
			i16, dst := fenced(t, ints, front), fenced(t, rows[0], front)
			d1, d2 := fenced(t, make([]float64, n), front), fenced(t, make([]float64, n), front)
			Changes(in[0], in[1])
			Apart(in[0], (*[4][]float32)(in[1:5]))
			Courses(d1, d2, in[0], (*[4][]float32)(in[1:5]))
			FromInt16(dst, i16)
			FromUint16(dst, i16)
			FromInt16Scaled(dst, i16, 2, 1)
			FromUint16Scaled(dst, i16, 2, 1)
		}
	}
	for _, f := range []func(){
		func() { Changes(make([]float32, 3), make([]float32, 4)) },
		func() { Apart(make([]float32, 3), &[4][]float32{}) },
		func() { Courses(make([]float64, 3), make([]float64, 3), make([]float32, 3), &[4][]float32{}) },
		func() { FromInt16(make([]float32, 3), make([]int16, 4)) },
		func() { FromUint16Scaled(make([]float32, 5), make([]int16, 4), 1, 0) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Error("rows that differ in length were taken")
				}
			}()
			f()
		}()
	}
}

func BenchmarkFromInt16(b *testing.B) {
	_, ints := measureRows(1, 64*64*36)
	dst := make([]float32, len(ints))
	for b.Loop() {
		FromInt16(dst, ints)
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(ints)), "ns/voxel")
}
