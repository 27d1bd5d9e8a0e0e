package phantom

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
)

// storage is half a unit in the last place of float32 at the brightest point
// (2048), with room for the last bits of two orders of double arithmetic.
const storage = 0.62e-4

func simulate(t testing.TB, s *Scan, workers int) []float32 {
	t.Helper()
	d, err := s.Simulate(context.Background(), workers)
	if err != nil {
		t.Fatal(err)
	}
	return d
}

// invert is a plain Gauss-Jordan inverse: an oracle that knows nothing of rigid maps.
func invert(m [16]float64) [16]float64 {
	v := Identity()
	for c := range 4 {
		p := c
		for r := c; r < 4; r++ {
			if math.Abs(m[4*r+c]) > math.Abs(m[4*p+c]) {
				p = r
			}
		}
		for k := range 4 {
			m[4*c+k], m[4*p+k] = m[4*p+k], m[4*c+k]
			v[4*c+k], v[4*p+k] = v[4*p+k], v[4*c+k]
		}
		d := m[4*c+c]
		for k := range 4 {
			m[4*c+k] /= d
			v[4*c+k] /= d
		}
		for r := range 4 {
			if f := m[4*r+c]; r != c {
				for k := range 4 {
					m[4*r+k] -= f * m[4*c+k]
					v[4*r+k] -= f * v[4*c+k]
				}
			}
		}
	}
	return v
}

func sampleScan(axis int) *Scan {
	n := [3]int{17, 15, 14}
	aff := Mul(Rigid([3]float64{3, -2, 1}, [3]float64{0.3, -0.2, 0.1}, [3]float64{}), axial(n, [3]float64{11, 13, 12}))
	return &Scan{Head: head1, N: n, NT: 3, Affine: aff, TR: 1.5, SliceAxis: axis, SliceTimes: Interleaved(n[axis], 1.5),
		Motion: Jerk(Walk(5, 4, 0.1, 0.2, [3]float64{0, -20, -60}), 2.3, [3]float64{9, -7, 5}, [3]float64{0.2, 0.1, -0.15}, [3]float64{1, 2, 3}),
		Blobs: []Blob{
			{[3]float64{-30, 10, 12}, 14, 0.05, Tone{0.21, 0.4}.At},
			{[3]float64{20, -30, -10}, 18, -0.08, Tones(3, 4, 0.1)},
		},
		Gain: func(t float64, x [3]float64) float64 { return 1 + 0.001*x[0] - 0.0005*x[1] + 0.02*t },
		Seed: 9}
}

// Every sample is the formula of the package comment, here evaluated afresh: the
// time from the schedule, the place by a general matrix inverse, the product of
// head, blobs and gain.
func TestSimulateIsTheFormula(t *testing.T) {
	for axis := range 3 {
		for _, perVolume := range []bool{false, true} {
			s := sampleScan(axis)
			s.PerVolume = perVolume
			data := simulate(t, s, 2)
			times := s.SliceTimes
			middle := (slices.Min(times) + slices.Max(times)) / 2
			i, inside := 0, 0
			for n := range s.NT {
				for z := range s.N[2] {
					for y := range s.N[1] {
						for x := range s.N[0] {
							v := [3]int{x, y, z}
							u := float64(n)*s.TR + times[v[axis]]
							at := u
							if perVolume {
								at = float64(n)*s.TR + middle
							}
							world := Apply(s.Affine, [3]float64{float64(x), float64(y), float64(z)})
							p := Apply(invert(s.Motion(at)), world)
							want := plainAt(s.Head, p)
							if want > 0 {
								inside++
							}
							for _, b := range s.Blobs {
								var r2 float64
								for k := range p {
									r2 += (p[k] - b.Centre[k]) * (p[k] - b.Centre[k])
								}
								want *= 1 + b.Amplitude*b.Course(u)*math.Pow(max(0, 1-r2/(8*b.SD*b.SD)), 4)
							}
							want *= s.Gain(u, world)
							if math.Abs(float64(data[i])-want) > storage*max(1, want/2048) {
								t.Fatalf("axis %d, per volume %v: voxel %v of volume %d: got %g, want %g", axis, perVolume, v, n, data[i], want)
							}
							if math.Abs(s.Value(x, y, z, n)-want) > 1e-9 {
								t.Fatalf("Value %v of volume %d: got %g, want %g", v, n, s.Value(x, y, z, n), want)
							}
							i++
						}
					}
				}
			}
			if i != len(data) || inside < i/10 {
				t.Fatalf("%d samples, %d inside, %d simulated", i, inside, len(data))
			}
		}
	}
}

// A head moved by whole voxels is the same image, moved.
func TestWholeVoxelShift(t *testing.T) {
	n := [3]int{30, 32, 28}
	d := [3]float64{6, 6, 7}
	s := &Scan{Head: head1, N: n, NT: 1, Affine: axial(n, d), TR: 2, SliceAxis: 2}
	still := simulate(t, s, 1)
	s.Motion = Steps([]Step{{0, [3]float64{-6, 12, 7}, [3]float64{}}}, [3]float64{}) // i runs to the left: +1, +2, +1 voxels
	moved := simulate(t, s, 1)
	seen := 0
	for z := 1; z < n[2]; z++ {
		for y := 2; y < n[1]; y++ {
			for x := 1; x < n[0]; x++ {
				a, b := moved[x+n[0]*(y+n[1]*z)], still[x-1+n[0]*(y-2+n[1]*(z-1))]
				near(t, "moved voxel", float64(a), float64(b), 2*storage)
				if b > 100 {
					seen++
				}
			}
		}
	}
	if seen < 3000 {
		t.Errorf("only %d voxels of the head compared", seen)
	}
}

// Each slice shows the phase of its own instant.
func TestSlicesShowTheirOwnPhase(t *testing.T) {
	tone := Tone{Freq: 0.05, Phase: 0.7}
	n := [3]int{3, 3, 12}
	const nt, tr = 20, 2.0 // one period of 0.05 Hz is ten volumes: sums over two are exact
	for name, times := range map[string][]float64{"interleaved": Interleaved(12, tr), "sequential": Sequential(12, tr), "multiband": Multiband(12, 3, tr)} {
		s := &Scan{Head: head1, N: n, NT: nt, Affine: axial(n, [3]float64{4, 4, 4}), TR: tr, SliceAxis: 2, SliceTimes: times,
			Blobs: []Blob{{Centre: [3]float64{0, 0, 0}, SD: 40, Amplitude: 0.03, Course: tone.At}}}
		data := simulate(t, s, 2)
		for k := range 12 {
			var re, im float64
			for v := range nt {
				y := float64(data[4+9*(k+12*v)])
				a := 2 * math.Pi * tone.Freq * tr * float64(v)
				re += y * math.Sin(a)
				im += y * math.Cos(a)
			}
			want := tone.PhaseAt(times[k])
			// float32 storage of 1000 +- 10 over 20 samples: 2e-5/10 rad.
			near(t, fmt.Sprintf("%s, slice %d: phase", name, k), math.Remainder(math.Atan2(im, re)-want, 2*math.Pi), 0, 1e-5)
		}
	}
}

func TestSimulateAddsRicianNoiseOnTop(t *testing.T) {
	s := sampleScan(1)
	clean := simulate(t, s, 2)
	s.NoiseSD = 9
	noisy := simulate(t, s, 2)
	i := 0
	for n := range s.NT {
		for z := range s.N[2] {
			for y := range s.N[1] {
				_ = z
				for range s.N[0] {
					if math.Abs(float64(noisy[i]-clean[i])) > 6.5*9+12 { // beyond any of 10 000 normal draws, plus the Rician floor
						t.Fatalf("sample %d of volume %d, slice %d: %g became %g", i, n, y, clean[i], noisy[i])
					}
					i++
				}
			}
		}
	}
	var d, q float64
	m := 0
	for i := range clean {
		if clean[i] > 200 {
			e := float64(noisy[i] - clean[i])
			d, q, m = d+e, q+e*e, m+1
		}
	}
	// Far above the noise the magnitude is normal with the mean sigma^2/2A higher.
	near(t, "SD on the head", math.Sqrt(q/float64(m)), 9, 5*9/math.Sqrt(2*float64(m)))
	near(t, "mean on the head", d/float64(m), 0.06, 5*9/math.Sqrt(float64(m)))
	s.Seed++
	if slices.Equal(simulate(t, s, 1), noisy) {
		t.Error("another seed gives the same noise")
	}
}

// bytes of the sample scan with noise, over all three axes: the same for any
// workers and, because the digest stands here, on every machine, with fused
// multiply-add available (GOAMD64=v3, arm64) or not.
const sampleDigest = "9d0239b75fefe494da0d850f8dfe8e750aa6026f0f7a9913e5e62f20972d012b"

func TestSameBytes(t *testing.T) {
	h := sha256.New()
	for axis := range 3 {
		s := sampleScan(axis)
		s.NoiseSD = 9
		// Gain is the caller's own arithmetic: here without products that could fuse.
		s.Gain = func(t float64, x [3]float64) float64 { return 1 + x[0]/1024 }
		s.Blobs = append(s.Blobs, Blob{[3]float64{0, -50, 0}, 12, 0.04, Response([]Event{{0, 2}, {3, 0}})})
		s.Motion = Compose(s.Motion, Breathing(0.3, [3]float64{0, 0, 1}, [3]float64{0.01, 0, 0}, [3]float64{0, 0, -60}))
		first := simulate(t, s, 1)
		for _, w := range []int{0, 2, 3, 7, 100} {
			if !slices.Equal(simulate(t, s, w), first) {
				t.Errorf("axis %d: %d workers give other bytes than 1", axis, w)
			}
		}
		if err := binary.Write(h, binary.LittleEndian, first); err != nil {
			t.Fatal(err)
		}
	}
	if got := hex.EncodeToString(h.Sum(nil)); got != sampleDigest {
		t.Errorf("digest %s, want %s: the phantom changed, or this machine rounds differently", got, sampleDigest)
	}
}

func TestSimulateRefusesNonsense(t *testing.T) {
	for want, spoil := range map[string]func(s *Scan){
		"without a head": func(s *Scan) { s.Head = nil },
		"0 x 15 x 14":    func(s *Scan) { s.N[0] = 0 },
		"0 volumes":      func(s *Scan) { s.NT = 0 },
		"slice axis 3":   func(s *Scan) { s.SliceAxis = 3 },
		"13 slice times": func(s *Scan) { s.SliceTimes = s.SliceTimes[:13] },
		"repetition":     func(s *Scan) { s.TR = math.NaN() },
		"noise SD":       func(s *Scan) { s.NoiseSD = -1 },
		"region 1 needs": func(s *Scan) { s.Blobs[1].Course = nil },
		"region 0 needs": func(s *Scan) { s.Blobs[0].SD = 0 },
		"not a rigid map": func(s *Scan) {
			s.Motion = func(float64) [16]float64 { return [16]float64{2, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1} }
		},
	} {
		s := sampleScan(2)
		spoil(s)
		d, err := s.Simulate(context.Background(), 2)
		if err == nil || !strings.Contains(err.Error(), want) || d != nil {
			t.Errorf("want an error with %q, got %v", want, err)
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := sampleScan(2).Simulate(ctx, 2); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: got %v", err)
	}
}

func TestWithoutSliceTimesAllSlicesStandAtTheStart(t *testing.T) {
	s := sampleScan(2)
	s.SliceTimes = nil
	a := simulate(t, s, 1)
	s.SliceTimes = make([]float64, s.N[2])
	if !slices.Equal(a, simulate(t, s, 1)) || s.Middle() != 0 {
		t.Error("nil differs from zeros")
	}
}

// Slices taken at different instants, or side by side, share no noise.
func TestEverySliceHasNoiseOfItsOwn(t *testing.T) {
	for axis := range 3 {
		s := sampleScan(axis)
		s.Affine[3] += 1000 // the head is out of the field: noise alone
		s.NoiseSD = 9
		seen := map[float32][2]int{}
		twice := 0
		for i, v := range simulate(t, s, 2) {
			p := [3]int{i % s.N[0], i / s.N[0] % s.N[1], i / (s.N[0] * s.N[1]) % s.N[2]}
			at := [2]int{i / (s.N[0] * s.N[1] * s.N[2]), p[axis]}
			if was, ok := seen[v]; ok && was != at {
				twice++
			}
			seen[v] = at
		}
		// 10 710 values among the 2^23 or so float32 that hold them: some ten
		// meet by chance; one slice in two places would bring 200.
		if twice > 60 {
			t.Errorf("axis %d: %d values occur in two slices", axis, twice)
		}
	}
}
