package kernel

import (
	"fmt"
	"hash/fnv"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"testing"
)

// both runs f as assembly and in plain Go and compares what it returns bit by bit.
// Where there is no assembly, plain Go still runs twice.
func both(tb interface {
	Helper()
	Fatalf(string, ...any)
}, f func() [][]float32) {
	tb.Helper()
	var out [2][][]float32
	for k := range out {
		func() {
			defer SetPlain(SetPlain(k == 0))
			out[k] = f()
		}()
	}
	for a := range out[0] {
		if len(out[0][a]) != len(out[1][a]) {
			tb.Fatalf("output %d: %d values in plain Go, %d in assembly", a, len(out[0][a]), len(out[1][a]))
		}
		for i, plain := range out[0][a] {
			if got := out[1][a][i]; math.Float32bits(got) != math.Float32bits(plain) && !(got != got && plain != plain) {
				tb.Fatalf("output %d, value %d of %d: %g (%#x) in assembly, %g (%#x) in plain Go", a, i, len(out[0][a]), got, math.Float32bits(got), plain, math.Float32bits(plain))
			}
		}
	}
}

// digest is what a run leaves, as a hash.
func digest(rows ...[]float32) string {
	h := fnv.New64a()
	var b [4]byte
	for _, r := range rows {
		for _, v := range r {
			u := math.Float32bits(v)
			if v != v {
				u = 0x7fc00000 // what a NaN holds besides is the processor's affair
			}
			b = [4]byte{byte(u), byte(u >> 8), byte(u >> 16), byte(u >> 24)}
			h.Write(b[:])
		}
	}
	return fmt.Sprintf("%016x", h.Sum64())
}

// sameBytes holds a digest recorded on amd64 against both twins.
func sameBytes(t *testing.T, want string, f func() [][]float32) {
	t.Helper()
	for _, plain := range []bool{true, false} {
		was := SetPlain(plain)
		got := digest(f()...)
		SetPlain(was)
		if got != want {
			t.Errorf("digest %s, recorded %s (plain Go: %v)", got, want, plain)
		}
	}
}

func random(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 1)) }

// noise fills n values between -1 and 1, of 20 bits, so that no digest hangs on
// more than the arithmetic under test.
func noise(r *rand.Rand, n int) []float32 {
	v := make([]float32, n)
	for i := range v {
		v[i] = float32(int(r.Uint32()>>12)-1<<19) / (1 << 19)
	}
	return v
}

func fractions(r *rand.Rand, n int) []float32 {
	v := make([]float32, n)
	for i := range v {
		v[i] = float32(r.Uint32()>>12) / (1 << 20)
	}
	return v
}

// nan returns n values that are not numbers.
func nan(n int) []float32 {
	v := make([]float32, n)
	for i := range v {
		v[i] = float32(math.NaN())
		if i%2 == 1 {
			v[i] = float32(math.Inf(1 - i&2))
		}
	}
	return v
}

func TestEnvironmentForcesPlainGo(t *testing.T) {
	if os.Getenv("EVENKEEL_PLAIN") == "1" {
		if Assembly() {
			t.Fatal("EVENKEEL_PLAIN=1, and still assembly")
		}
		return
	}
	if Assembly() != haveAVX2 {
		t.Fatalf("assembly: %v, processor has AVX2: %v", Assembly(), haveAVX2)
	}
	c := exec.Command(os.Args[0], "-test.run=^TestEnvironmentForcesPlainGo$")
	c.Env = append(os.Environ(), "EVENKEEL_PLAIN=1")
	if out, err := c.CombinedOutput(); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
}

func TestSetPlain(t *testing.T) {
	was := SetPlain(true)
	if Assembly() {
		t.Error("assembly after SetPlain(true)")
	}
	if !SetPlain(false) {
		t.Error("SetPlain does not return what was")
	}
	if Assembly() != haveAVX2 {
		t.Error("SetPlain(false) does not leave it to the processor")
	}
	SetPlain(was)
}

// perItem returns what reports the processor time from now on per item of a benchmark.
func perItem() func(b *testing.B, items int, item string) {
	from := cpuTime()
	return func(b *testing.B, items int, item string) {
		b.ReportMetric(float64(cpuTime()-from)/float64(b.N)/float64(items), "cpu-ns/"+item)
	}
}

// Kernels with scratch on the stack may make it grow, and move what they were
// given pointers to.
func TestStackMoves(t *testing.T) {
	s := newPoints(3, 5, [3]int{9, 9, 9}, 4)
	want := s.run()
	if !Assembly() {
		t.Log("plain Go only")
	}
	for depth := range 60 {
		done := make(chan [4]float32)
		go func() { done <- deep(depth, s) }() // a fresh, small stack
		if got := <-done; got != [4]float32(want[0]) {
			t.Fatalf("depth %d: %g, want %g", depth, got, want[0])
		}
	}
}

//go:noinline
func deep(depth int, s *pointSet) [4]float32 {
	var fill [16]float32
	if depth > 0 {
		v := deep(depth-1, s)
		fill[depth%16]++
		return v
	}
	var v, tx, ty, tz [4]float32
	var base [4]int32
	copy(tx[:], s.tx)
	copy(ty[:], s.ty)
	copy(tz[:], s.tz)
	copy(base[:], s.base)
	Value5(v[:], s.c, s.m[0], s.m[0]*s.m[1], base[:], tx[:], ty[:], tz[:])
	return v
}
