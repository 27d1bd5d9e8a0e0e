package slicetime

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"runtime"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// hashed is a number in [0, 1) made of integers only, the same on every machine.
func hashed(i int) float64 {
	h := uint64(i)*0x9e3779b97f4a7c15 + 0x632be59bd9b4e019
	h ^= h >> 29
	h *= 0xbf58476d1ce4e5b9
	h ^= h >> 32
	return float64(h>>11) / (1 << 53)
}

func sliceOf(at int, size [3]int, axis int) int {
	return []int{at % size[0], at / size[0] % size[1], at / (size[0] * size[1])}[axis]
}

// Property 8: Correct gives every voxel exactly what a Shifter gives its series
// alone, whatever the axis, the sizes, the workers and the neighbours; slices
// that do not move and voxels that do not change keep their bits, NaNs included.
func TestCorrectIsShifter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var size [3]int
		for a := range size {
			// Rows longer than a block and shorter than a batch.
			size[a] = rapid.OneOf(rapid.IntRange(1, 6), rapid.SampledFrom([]int{15, 16, 17, 63, 65})).Draw(t, "size")
		}
		if size[0]*size[1]*size[2] > 3000 {
			size[2] = 1
		}
		axis := rapid.IntRange(0, 2).Draw(t, "axis")
		nt := rapid.OneOf(rapid.IntRange(MinVolumes, 12), rapid.IntRange(18, 40)).Draw(t, "nt")
		opt := drawOptions(t)
		s := Schedule{Axis: axis, TR: 2}
		for range size[axis] {
			s.Times = append(s.Times, float64(rapid.IntRange(0, 7).Draw(t, "time"))/4)
		}
		ref := rapid.SampledFrom([]float64{s.Middle(), 0, 1.25, .3}).Draw(t, "ref")
		nxyz := size[0] * size[1] * size[2]
		data := make([]float32, nxyz*nt)
		seed := rapid.IntRange(0, 1<<40).Draw(t, "seed")
		for i := range data {
			at := i % nxyz
			switch h := hashed(seed + at); {
			case h < .1: // processed like others it would lose its sign
				data[i] = float32(math.Copysign(0, -1))
			case h < .3: // background
				data[i] = float32(math.Floor(10 * h))
			case h < .33:
				data[i] = float32(math.NaN())
			case h < .36:
				data[i] = float32(math.Ldexp(hashed(seed+i), 120))
			default:
				data[i] = float32(1000*h + 20*hashed(seed+7*i+1))
			}
		}
		got := slices.Clone(data)
		workers := rapid.IntRange(0, 5).Draw(t, "workers")
		if err := Correct(context.Background(), got, size[0], size[1], size[2], nt, s, ref, opt, workers); err != nil {
			t.Fatal(err)
		}
		shifters := make([]*Shifter, size[axis])
		for k := range shifters {
			shifters[k] = NewShifter(nt, (ref-s.Times[k])/s.TR, opt)
		}
		series := make([]float32, nt)
		for at := range nxyz {
			for v := range nt {
				series[v] = data[at+nxyz*v]
			}
			shifters[sliceOf(at, size, axis)].Shift(series, series)
			for v, want := range series {
				g := got[at+nxyz*v]
				if math.Float32bits(g) != math.Float32bits(want) && !(g != g && want != want) {
					t.Fatalf("size %v, axis %d, voxel %d, volume %d: %g, alone %g", size, axis, at, v, g, want)
				}
			}
		}
	})
}

// The direction of the shift, on a line in time: a slice taken at tau reads the
// line at tau, and after the move at ref.
func TestCorrectDirection(t *testing.T) {
	s := Schedule{Times: []float64{0, 1.5, .5, 1}, Axis: 2, TR: 2}
	const nt = 30
	for _, ref := range []float64{0, .75, 2} {
		data := make([]float32, 4*nt)
		for v := range nt {
			for k, tau := range s.Times {
				data[k+4*v] = float32(100 + 3*(2*float64(v)+tau)) // 3 a second
			}
		}
		if err := Correct(t.Context(), data, 1, 1, 4, nt, s, ref, Options{}, 1); err != nil {
			t.Fatal(err)
		}
		for i, v := range data {
			want := 100 + 3*(2*float64(i/4)+ref)
			if math.Abs(float64(v)-want) > lineLimit*want {
				t.Fatalf("ref %g: volume %d slice %d is %g, want %g", ref, i/4, i%4, v, want)
			}
		}
	}
}

// An event seen by all slices at once stands at the same volume time in all of
// them afterwards: the case slice timing exists for (Henson et al. 1999,
// Sladky et al. 2011). A smooth bump, correlation time well above TR.
func TestCorrectAlignsEvents(t *testing.T) {
	s := Schedule{TR: 2, Axis: 2}
	const nz, nt = 10, 60
	for k := range nz {
		s.Times = append(s.Times, 2*float64((k*3)%nz)/nz)
	}
	response := func(sec float64) float64 { return 1000 + 30*math.Exp(-(sec-61)*(sec-61)/(2*9)) }
	data := make([]float32, nz*nt)
	for i := range data {
		data[i] = float32(response(2*float64(i/nz) + s.Times[i%nz]))
	}
	ref := s.Middle()
	if err := Correct(t.Context(), data, 1, 1, nz, nt, s, ref, Options{}, 2); err != nil {
		t.Fatal(err)
	}
	for i, v := range data {
		// A Gaussian of sd 1.5 samples holds 3e-5 of its height above the Nyquist
		// frequency; the fitted line makes a bend at each end, where the
		// prediction beyond it is a guess.
		limit := 1e-3
		if v := i / nz; v < 2 || v >= nt-2 {
			limit = 5e-3
		}
		if want := response(2*float64(i/nz) + ref); math.Abs(float64(v)-want) > 30*limit {
			t.Errorf("volume %d slice %d: %g, want %g", i/nz, i%nz, v, want)
		}
	}
}

// The same bytes on every machine: this digest was made on amd64 and must come
// out of any other architecture and optimisation level. It changes only when
// the method does, and then on purpose.
func TestCorrectDigest(t *testing.T) {
	const nx, ny, nz = 5, 7, 6
	s := Schedule{Times: []float64{0, 1, .25, 1.25, .5, 1.5}, Axis: 2, TR: 1.75}
	for _, c := range []struct {
		nt     int
		kernel Kernel
		want   string
	}{
		{50, Fourier, "d66d76bc9120edd95ef71ca654ae325227e23863e9bacffb76fe37f2abc6d8bd"},
		{50, Sinc, "479e6145a4416b0310f887707205a323a6391a054859a2a69d1c15b93c180ada"},
		// Shorter than arFull: another order and ridge.
		{10, Fourier, "abb55ff14ac7d497533dd3c621313d5593c12dd8e2c8d4c9edfdce7df04ba4e4"},
		{10, Sinc, "65fadb02a6775497996856780788aefecb67dcb9b6dc760463d7ffc56d9426fd"},
	} {
		nt, kernel, want := c.nt, c.kernel, c.want
		data := make([]float32, nx*ny*nz*nt)
		for i := range data {
			data[i] = float32(500 + 100*hashed(i%(nx*ny*nz)) + 20*hashed(i+12345))
		}
		for workers := 1; workers <= 4; workers++ {
			out := slices.Clone(data)
			if err := Correct(t.Context(), out, nx, ny, nz, nt, s, s.Middle(), Options{Kernel: kernel}, workers); err != nil {
				t.Fatal(err)
			}
			h := sha256.New()
			if err := binary.Write(h, binary.LittleEndian, out); err != nil {
				t.Fatal(err)
			}
			if got := fmt.Sprintf("%x", h.Sum(nil)); got != want {
				t.Errorf("%s, %d volumes, %d workers, %s: digest %s, want %s", kernel, nt, workers, runtime.GOARCH, got, want)
			}
		}
	}
}

func TestCorrectRefuses(t *testing.T) {
	good := Schedule{Times: []float64{0, 1, .5}, Axis: 2, TR: 2}
	for name, c := range map[string]struct {
		nt   int
		s    Schedule
		ref  float64
		opt  Options
		what string
	}{
		"volumes":    {3, good, .5, Options{}, "number of volumes"},
		"axis":       {8, Schedule{good.Times, 3, 2}, .5, Options{}, "slice axis"},
		"count":      {8, Schedule{good.Times, 1, 2}, .5, Options{}, "number of slice times"},
		"TR":         {8, Schedule{good.Times, 2, 0}, .5, Options{}, "repetition time"},
		"TR NaN":     {8, Schedule{good.Times, 2, math.NaN()}, .5, Options{}, "repetition time"},
		"ref":        {8, good, math.NaN(), Options{}, "move of slice index 0"},
		"far":        {8, good, 16.7, Options{}, "move of slice index 0"},
		"time":       {8, Schedule{[]float64{0, math.NaN(), 1}, 2, 2}, .5, Options{}, "move of slice index 1"},
		"kernel":     {8, good, .5, Options{Kernel: 2}, "kernel"},
		"reach":      {8, good, .5, Options{Kernel: Sinc, Reach: 33}, "reach of the sinc kernel"},
		"reach less": {8, good, .5, Options{Kernel: Sinc, Reach: -1}, "reach of the sinc kernel"},
	} {
		data := make([]float32, 2*2*3*c.nt)
		for i := range data {
			data[i] = float32(hashed(i))
		}
		keep := slices.Clone(data)
		err := Correct(t.Context(), data, 2, 2, 3, c.nt, c.s, c.ref, c.opt, 1)
		var arg *ArgumentError
		if !errors.As(err, &arg) || arg.What != c.what {
			t.Errorf("%s: %v, want an ArgumentError about %q", name, err, c.what)
		}
		if !slices.Equal(data, keep) {
			t.Errorf("%s: data changed", name)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if err := Correct(ctx, make([]float32, 2*2*3*8), 2, 2, 3, 8, good, .5, Options{}, 2); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

func allocated(f func()) int64 {
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	f()
	runtime.ReadMemStats(&after)
	return int64(after.TotalAlloc - before.TotalAlloc)
}

// WorkBytes is a bound, and not a wild one.
func TestWorkBytes(t *testing.T) {
	for _, c := range []struct {
		size [3]int
		axis int
		nt   int
		ref  float64
		opt  Options
	}{
		{[3]int{64, 64, 8}, 2, 200, .9, Options{}},
		{[3]int{64, 8, 64}, 1, 200, .9, Options{}},
		{[3]int{40, 64, 30}, 0, 100, .9, Options{}},
		{[3]int{64, 64, 8}, 2, 200, .9, Options{Kernel: Sinc}},
		{[3]int{32, 64, 4}, 2, 200, 300, Options{Kernel: Sinc, Reach: 32}},
		{[3]int{16, 32, 4}, 2, 1000, -1990, Options{Kernel: Sinc}},
		{[3]int{40, 64, 30}, 0, 100, 150, Options{Kernel: Sinc}},
		{[3]int{8, 8, 8}, 0, 10, .9, Options{Kernel: Sinc}},
	} {
		s := Schedule{Axis: c.axis, TR: 2}
		for k := range c.size[c.axis] {
			s.Times = append(s.Times, 2*float64(k)/float64(c.size[c.axis]))
		}
		data := make([]float32, c.size[0]*c.size[1]*c.size[2]*c.nt)
		for i := range data {
			data[i] = float32(i % 13 * (i % 2)) // mostly constant in time: quick
		}
		used := allocated(func() {
			if err := Correct(t.Context(), data, c.size[0], c.size[1], c.size[2], c.nt, s, c.ref, c.opt, 2); err != nil {
				t.Fatal(err)
			}
		})
		bound := WorkBytes(c.size[0], c.size[1], c.size[2], c.nt, c.axis, 2, c.opt)
		if used > bound || bound > 4*used+1<<20 {
			t.Errorf("%+v: allocated %d bytes, WorkBytes says %d", c, used, bound)
		}
	}
}

// The size the plan of speed is made for: 64x64x36 voxels, 200 volumes. Fresh
// values every time; a third of the voxels is background.
func BenchmarkCorrect(b *testing.B) {
	const nx, ny, nz, nt = 64, 64, 36, 200
	raw := make([]float32, nx*ny*nz*nt)
	for i := range raw {
		if at := i % (nx * ny); at%3 != 0 {
			raw[i] = float32(1000 + 50*hashed(i))
		}
	}
	full := make([]float32, len(raw))
	for i := range full {
		full[i] = float32(1000 + 50*hashed(i))
	}
	work := make([]float32, len(raw))
	for _, c := range []struct {
		name string
		from []float32
		axis int
		opt  Options
	}{
		{"fourier/full", full, 2, Options{}},
		{"fourier/third-background", raw, 2, Options{}},
		{"fourier/full/axis-1", full, 1, Options{}},
		{"fourier/full/axis-0", full, 0, Options{}},
		{"sinc-8/full", full, 2, Options{Kernel: Sinc}},
		{"sinc-32/full", full, 2, Options{Kernel: Sinc, Reach: 32}},
	} {
		b.Run(c.name, func(b *testing.B) {
			s := Schedule{Axis: c.axis, TR: 2}
			n := []int{nx, ny, nz}[c.axis]
			for k := range n {
				s.Times = append(s.Times, 2*float64(k)/float64(n))
			}
			b.SetBytes(int64(4 * len(raw)))
			for b.Loop() {
				b.StopTimer()
				copy(work, c.from)
				b.StartTimer()
				if err := Correct(context.Background(), work, nx, ny, nz, nt, s, s.Middle()+.001, c.opt, 1); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
