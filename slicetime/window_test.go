package slicetime

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"sync"
	"testing"

	"pgregory.net/rapid"
)

// run is a run as a stream: volumes outside the window are gone.
type run struct {
	data        []float32
	volume      int
	first, last int
}

func (r *run) at(t int) []float32 {
	if t < r.first || t > r.last {
		panic(fmt.Sprintf("volume %d outside %d to %d", t, r.first, r.last))
	}
	return r.data[t*r.volume:][:r.volume]
}

// Volume by volume, from no more than the window, everything comes out as from
// Correct, for any size, axis, schedule and shift, of any order of volumes.
func TestWindowIsCorrect(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var size [3]int
		for a := range size {
			size[a] = rapid.OneOf(rapid.IntRange(1, 6), rapid.SampledFrom([]int{15, 16, 17, 65})).Draw(t, "size")
		}
		if size[0]*size[1]*size[2] > 3000 {
			size[1] = 1
		}
		nt := rapid.OneOf(rapid.IntRange(MinVolumes, 24), rapid.IntRange(25, 100)).Draw(t, "nt")
		s := Schedule{Axis: rapid.IntRange(0, 2).Draw(t, "axis"), TR: 2}
		spread := rapid.SampledFrom([]float64{0, .25, 2, 2, 2, float64(nt), 1.9 * float64(nt)}).Draw(t, "spread")
		for range size[s.Axis] {
			s.Times = append(s.Times, spread*float64(rapid.IntRange(0, 7).Draw(t, "time"))/8)
		}
		ref := rapid.SampledFrom([]float64{s.Middle(), 0, spread, .3, -1.7}).Draw(t, "ref")
		opt := Options{Kernel: Sinc, Reach: rapid.SampledFrom([]int{0, 0, 1, 2, 3, 12, 32}).Draw(t, "reach")}
		w, err := NewWindow(size[0], size[1], size[2], nt, s, ref, opt)
		if err != nil {
			t.Skip(err) // a shift of more than the run
		}
		volume := size[0] * size[1] * size[2]
		data := make([]float32, volume*nt)
		seed := rapid.IntRange(0, 1<<40).Draw(t, "seed")
		for i := range data {
			at := i % volume
			switch h := hashed(seed + at); {
			case h < .1:
				data[i] = float32(math.Copysign(0, -1))
			case h < .3:
				data[i] = float32(math.Floor(10 * h))
			case h < .33:
				data[i] = float32(math.Inf(1))
			case h < .36 && i/volume == nt/2:
				data[i] = float32(math.NaN())
			case h < .39 && i/volume%2 == 0: // a kernel overshoots it
				data[i] = -math.MaxFloat32
			case h < .39:
				data[i] = math.MaxFloat32
			default:
				data[i] = float32(1000*h + 20*hashed(seed+7*i+1))
			}
		}
		want := slices.Clone(data)
		if err := Correct(context.Background(), want, size[0], size[1], size[2], nt, s, ref, opt, rapid.IntRange(1, 4).Draw(t, "workers")); err != nil {
			t.Fatal(err)
		}
		before := [2]int{}
		order := make([]int, nt)
		for v := range order {
			order[v] = v
			first, last := w.Needs(v)
			if first < before[0] || last < before[1] || first > v || last < v || last >= nt {
				t.Fatalf("volume %d of %d needs %d to %d, the one before from %d to %d", v, nt, first, last, before[0], before[1])
			}
			before = [2]int{first, last}
			reach := opt.reach()
			least, most := 0, 0
			for _, shift := range s.shifts(ref) {
				least, most = min(least, int(math.Floor(shift))), max(most, int(math.Ceil(shift)))
			}
			if n := last - first; n > max(endVolumes, 2*reach+1+most-least, 2*(reach+most), 2*(reach-least)) {
				t.Fatalf("volume %d of %d needs %d to %d, %d volumes (shifts %v, reach %d)", v, nt, first, last, n+1, s.shifts(ref), reach)
			}
		}
		if rapid.Bool().Draw(t, "shuffled") {
			slices.SortFunc(order, func(a, b int) int { return (a*7919+seed)%nt*nt + a - (b*7919+seed)%nt*nt - b })
		}
		got := make([]float32, volume)
		check := func(v int) {
			for at, g := range got {
				if c := want[at+volume*v]; math.Float32bits(g) != math.Float32bits(c) && !(g != g && c != c) {
					t.Fatalf("size %v, axis %d, %d volumes, voxel %d, volume %d: %g, of Correct %g", size, s.Axis, nt, at, v, g, c)
				}
			}
		}
		if many := rapid.IntRange(0, 9).Draw(t, "at once"); many > 0 {
			for v := 0; v < nt; v += many {
				several := make([][]float32, min(many, nt-v))
				for j := range several {
					several[j] = make([]float32, volume)
				}
				r := &run{data: data, volume: volume}
				r.first, _ = w.Needs(v)
				_, r.last = w.Needs(v + len(several) - 1)
				w.Volumes(several, v, r.at)
				for j := range several {
					copy(got, several[j])
					check(v + j)
				}
			}
		}
		for _, v := range order {
			r := &run{data: data, volume: volume}
			r.first, r.last = w.Needs(v)
			w.Volume(got, v, r.at)
			check(v)
		}
	})
}

// Several goroutines at once share the work of an end, and none sees it half done.
func TestWindowConcurrently(t *testing.T) {
	const nx, ny, nz, nt = 20, 30, 6, 50
	s := Schedule{Times: []float64{0, 1, .25, 1.25, .5, 1.5}, Axis: 2, TR: 1.75}
	data := make([]float32, nx*ny*nz*nt)
	for i := range data {
		data[i] = float32(500 + 20*hashed(i))
	}
	want := slices.Clone(data)
	opt := Options{Kernel: Sinc}
	if err := Correct(t.Context(), want, nx, ny, nz, nt, s, s.Middle(), opt, 2); err != nil {
		t.Fatal(err)
	}
	for range 5 {
		w, err := NewWindow(nx, ny, nz, nt, s, s.Middle(), opt)
		if err != nil {
			t.Fatal(err)
		}
		var all sync.WaitGroup
		got := make([]float32, len(data))
		for g := range 5 {
			all.Go(func() {
				for v := g; v < nt; v += 5 {
					w.Volume(got[v*nx*ny*nz:][:nx*ny*nz], v, func(t int) []float32 { return data[t*nx*ny*nz:][:nx*ny*nz] })
				}
			})
		}
		all.Wait()
		if !slices.Equal(got, want) {
			t.Fatal("differs from Correct")
		}
	}
}

// A caller's fault at an end reaches the caller and leaves nobody waiting.
func TestWindowEndBroken(t *testing.T) {
	s := Schedule{Times: []float64{0, 1}, Axis: 2, TR: 2}
	w, err := NewWindow(4, 4, 2, 50, s, .5, Options{Kernel: Sinc})
	if err != nil {
		t.Fatal(err)
	}
	var all sync.WaitGroup
	for range 3 {
		all.Go(func() {
			defer func() {
				if recover() == nil {
					t.Error("no panic")
				}
			}()
			w.Volume(make([]float32, 32), 0, func(int) []float32 { return nil })
		})
	}
	all.Wait()
}

func TestWindowRefuses(t *testing.T) {
	good := Schedule{Times: []float64{0, 1, .5}, Axis: 2, TR: 2}
	for what, c := range map[string]struct {
		nt  int
		s   Schedule
		opt Options
	}{
		"kernel":            {8, good, Options{}},
		"number of volumes": {3, good, Options{Kernel: Sinc}},
		"slice axis":        {8, Schedule{good.Times, 3, 2}, Options{Kernel: Sinc}},
	} {
		var arg *ArgumentError
		if _, err := NewWindow(2, 2, 3, c.nt, c.s, .5, c.opt); !errors.As(err, &arg) || arg.What != what {
			t.Errorf("%v, want an ArgumentError about %q", err, what)
		}
		if n := WindowBytes(2, 2, 3, c.nt, c.s, .5, c.opt, 1); n != 0 {
			t.Errorf("%s: %d bytes", what, n)
		}
	}
}

// With few allocations, and what there are within WindowBytes.
func TestWindowBytes(t *testing.T) {
	const nx, ny, nz, nt = 32, 40, 12, 60
	s := Schedule{Axis: 2, TR: 2}
	for k := range nz {
		s.Times = append(s.Times, 2*float64(k)/nz)
	}
	data := make([]float32, nx*ny*nz*nt)
	for i := range data {
		data[i] = float32(hashed(i))
	}
	opt := Options{Kernel: Sinc}
	vol := func(t int) []float32 { return data[t*nx*ny*nz:][:nx*ny*nz] }
	out := make([]float32, nx*ny*nz)
	var w *Window
	used := allocated(func() {
		w, _ = NewWindow(nx, ny, nz, nt, s, s.Middle(), opt)
		for v := range nt {
			w.Volume(out, v, vol)
		}
	})
	bound := WindowBytes(nx, ny, nz, nt, s, s.Middle(), opt, 1)
	if used > bound || bound > 2*used+1<<20 {
		t.Errorf("allocated %d bytes, WindowBytes says %d", used, bound)
	}
	if n := testing.AllocsPerRun(20, func() {
		for _, v := range []int{0, 30, 59} {
			w.Volume(out, v, vol)
		}
	}); n > 0 {
		t.Errorf("%g allocations for three volumes", n)
	}
}

// The end volumes of a long run rest on its last 40 volumes only: what is asked of runs
// of 40 holds there too. All volumes would give .057 and .034, and .89 and .90; 32
// .073 and .043, and .95 and .93.
func TestEndAccuracyOfALongRun(t *testing.T) {
	for _, c := range []struct{ noise, one, three float64 }{{0, .09, .06}, {1, 1, 1}} {
		one, three := endError(Options{Kernel: Sinc}, 200, c.noise)
		t.Logf("sinc, n 200, noise %g: first/last %.3f (bar %g), first/last three %.3f (bar %g)", c.noise, one, c.one, three, c.three)
		if !(one <= c.one) || !(three <= c.three) {
			t.Errorf("noise %g: first/last %.3f and three %.3f, bars %g and %g", c.noise, one, three, c.one, c.three)
		}
	}
	// As in TestNoiseAccuracy, with 2000 draws: .016 for one SD.
	for _, shift := range []float64{.25, .5, -.5, 1} {
		volumes, whole := noiseGain(t, Options{Kernel: Sinc}, 200, shift, 2000)
		for _, v := range []int{0, 1, 2, 7, 8, 100, 191, 192, 197, 198, 199} {
			if !(volumes[v] <= 1.02+3*.016) {
				t.Errorf("shift %g: the noise of volume %d grows to %.3f", shift, v, volumes[v])
			}
		}
		if !(whole <= 1.01) {
			t.Errorf("shift %g: the temporal SD grows by %.3f", shift, whole)
		}
	}
}

// A window's volumes, one after another and eight at a time, as a stream would ask for them.
func BenchmarkWindow(b *testing.B) {
	const nx, ny, nz, nt = 64, 64, 36, 200
	data := make([]float32, nx*ny*nz*nt)
	for i := range data {
		data[i] = float32(1000 + 50*hashed(i))
	}
	s := Schedule{Axis: 2, TR: 2}
	for k := range nz {
		s.Times = append(s.Times, 2*float64(k)/nz)
	}
	for _, many := range []int{1, 8} {
		out := make([][]float32, many)
		for j := range out {
			out[j] = make([]float32, nx*ny*nz)
		}
		b.Run(fmt.Sprint(many), func(b *testing.B) {
			b.SetBytes(int64(4 * len(data)))
			for b.Loop() {
				w, err := NewWindow(nx, ny, nz, nt, s, s.Middle()+.001, Options{Kernel: Sinc})
				if err != nil {
					b.Fatal(err)
				}
				for v := 0; v < nt; v += many {
					w.Volumes(out, v, func(t int) []float32 { return data[t*nx*ny*nz:][:nx*ny*nz] })
				}
			}
		})
	}
}

// Where all samples that are reached are alike, and what is predicted rests on such
// alone, they come back as they are, whatever the series does later.
func TestAlikeForAWhile(t *testing.T) {
	for _, v := range []float64{math.Copysign(0, -1), math.Inf(1), math.Inf(-1), 3} {
		x := slices.Repeat([]float32{float32(v)}, 200)
		for i := 50; i < 150; i++ {
			x[i] = float32(i)
		}
		for _, shift := range []float64{.3, -.3} {
			y := NewShifter(len(x), shift, Options{Kernel: Sinc, Reach: 32}).Shift(nil, x)
			for _, i := range []int{0, 5, 16, 183, 199} { // the reach of all ends before 50
				if math.Float32bits(y[i]) != math.Float32bits(x[i]) {
					t.Errorf("shift %g, sample %d: %g became %g", shift, i, x[i], y[i])
				}
			}
		}
	}
}
