package phantom

import (
	"context"
	"errors"
	"fmt"
	"math"

	"evenkeel/internal/parallel"
)

// Blob is a region that is active: the intensity is multiplied by
// 1 + Amplitude*Weight(x)*Course(t). It belongs to the head and moves with it.
type Blob struct {
	Centre    [3]float64 // mm, head frame
	SD        float64    // mm, see Weight
	Amplitude float64    // fraction
	Course    func(t float64) float64
}

// Weight is g: (1 - r^2/(8 SD^2))^4 within sqrt(8) SD of the centre and 0 beyond,
// which has the peak 1 and the curvature there of a Gaussian of that SD. x in mm,
// head frame.
func (b *Blob) Weight(x [3]float64) float64 {
	var q float64
	for k := range 3 {
		e := x[k] - b.Centre[k]
		q += float64(e * e)
	}
	return bump(q / float64(bumpReach*float64(b.SD*b.SD)))
}

// Scan is one EPI series to simulate. Simulate does not change it.
type Scan struct {
	Head       *Head
	N          [3]int // voxels along i, j, k
	NT         int
	Affine     [16]float64 // voxel index to world mm, row-major
	TR         float64     // s
	SliceAxis  int         // 0, 1, 2 for i, j, k
	SliceTimes []float64   // s, by slice index; nil: all at the start of the volume
	Motion     Motion      // nil: still
	PerVolume  bool        // true: every slice of volume n is taken at the pose of Middle of that volume (for tests of volume poses); its activation and gain keep the slice's own time
	Blobs      []Blob
	NoiseSD    float64                               // of each part of the complex noise; what is stored is the magnitude (Rician)
	Gain       func(t float64, x [3]float64) float64 // receive gain at a scanner point (world mm), nil: 1
	Seed       uint64                                // of the noise
}

// SliceTime is when slice k of volume n is excited (s from the start of the
// first volume).
func (s *Scan) SliceTime(n, k int) float64 {
	t := float64(float64(n) * s.TR)
	if s.SliceTimes != nil {
		t += s.SliceTimes[k]
	}
	return t
}

// Middle is halfway between the earliest and the latest slice time (s from the
// start of a volume).
func (s *Scan) Middle() float64 {
	if len(s.SliceTimes) == 0 {
		return 0
	}
	lo, hi := s.SliceTimes[0], s.SliceTimes[0]
	for _, t := range s.SliceTimes {
		lo, hi = min(lo, t), max(hi, t)
	}
	return lo + (hi-lo)/2
}

// Pose is where the head is (head frame to world mm) when slice k of volume n is
// taken.
func (s *Scan) Pose(n, k int) [16]float64 {
	if s.PerVolume {
		return s.VolumePose(n)
	}
	return s.Motion.at(s.SliceTime(n, k))
}

// VolumePose is where the head is at Middle of volume n.
func (s *Scan) VolumePose(n int) [16]float64 {
	return s.Motion.at(float64(float64(n)*s.TR) + s.Middle())
}

// Moved is the true map (world mm) from a point of the head where it stood at
// Middle of one volume to where it stood at Middle of another: with from the
// reference, the matrix of the pose table.
func (s *Scan) Moved(from, to int) [16]float64 {
	return Mul(s.VolumePose(to), Inverse(s.VolumePose(from)))
}

// Value is the signal, without noise, of voxel (i, j, k) in volume n.
func (s *Scan) Value(i, j, k, n int) float64 {
	v := [3]int{i, j, k}
	slice := v[s.SliceAxis]
	t := s.SliceTime(n, slice)
	x := Apply(s.Affine, [3]float64{float64(i), float64(j), float64(k)})
	h := Apply(Inverse(s.Pose(n, slice)), x)
	f := s.Head.At(h)
	for b := range s.Blobs {
		f = float64(f * (1 + float64(float64(s.Blobs[b].Amplitude*s.Blobs[b].Course(t))*s.Blobs[b].Weight(h))))
	}
	if s.Gain != nil {
		f = float64(f * s.Gain(t, x))
	}
	return f
}

// check finds what would make a Scan meaningless.
func (s *Scan) check() error {
	switch {
	case s.Head == nil:
		return errors.New("phantom: scan without a head")
	case s.N[0] < 1 || s.N[1] < 1 || s.N[2] < 1 || s.NT < 1:
		return fmt.Errorf("phantom: scan of %d x %d x %d voxels and %d volumes: each must be 1 or more", s.N[0], s.N[1], s.N[2], s.NT)
	case s.SliceAxis < 0 || s.SliceAxis > 2:
		return fmt.Errorf("phantom: slice axis %d, expected 0, 1 or 2", s.SliceAxis)
	case s.SliceTimes != nil && len(s.SliceTimes) != s.N[s.SliceAxis]:
		return fmt.Errorf("phantom: %d slice times for %d slices", len(s.SliceTimes), s.N[s.SliceAxis])
	case !(s.TR > 0) || math.IsInf(s.TR, 0):
		return fmt.Errorf("phantom: repetition time %g s, expected more than 0", s.TR)
	case !(s.NoiseSD >= 0) || math.IsInf(s.NoiseSD, 0):
		return fmt.Errorf("phantom: noise SD %g, expected 0 or more", s.NoiseSD)
	}
	for i, b := range s.Blobs {
		if !(b.SD > 0) || b.Course == nil {
			return fmt.Errorf("phantom: active region %d needs an SD above 0 and a course", i)
		}
	}
	return nil
}

// live is an active region within one slice: its course is one number there.
type live struct {
	blob *Blob
	amp  float64
}

// Simulate samples the head slice by slice, each at its own time and pose:
// data[x+nx*(y+ny*(z+nz*t))]. Bytes do not depend on workers. It fails when the
// Scan makes no sense, when Motion gives a map that is not rigid, or when ctx is
// cancelled.
func (s *Scan) Simulate(ctx context.Context, workers int) ([]float32, error) {
	if err := s.check(); err != nil {
		return nil, err
	}
	slices := s.N[s.SliceAxis]
	size := s.N[0] * s.N[1] * s.N[2]
	data := make([]float32, size*s.NT)
	scratch := make([][]live, max(1, workers))
	err := parallel.For(ctx, workers, s.NT*slices, func(worker, i int) error {
		n, k := i/slices, i%slices
		pose := s.Pose(n, k)
		if !isRigid(pose) {
			return fmt.Errorf("phantom: the motion at volume %d, slice %d is not a rigid map: %v", n, k, pose)
		}
		t := s.SliceTime(n, k)
		active := scratch[worker][:0]
		for b := range s.Blobs {
			active = append(active, live{&s.Blobs[b], float64(s.Blobs[b].Amplitude * s.Blobs[b].Course(t))})
		}
		scratch[worker] = active
		s.slice(data[n*size:(n+1)*size], n, k, t, Mul(Inverse(pose), s.Affine), active)
		return nil
	})
	if err != nil {
		return nil, err
	}
	return data, nil
}

// slice fills slice k of one volume; toHead takes voxel indices to the head frame.
func (s *Scan) slice(vol []float32, n, k int, t float64, toHead [16]float64, active []live) {
	lo, hi := [3]int{}, s.N
	lo[s.SliceAxis], hi[s.SliceAxis] = k, k+1
	gen := newNoise(s.Seed, n, k)
	for z := lo[2]; z < hi[2]; z++ {
		for y := lo[1]; y < hi[1]; y++ {
			row := vol[s.N[0]*(y+s.N[1]*z):]
			for x := lo[0]; x < hi[0]; x++ {
				v := [3]float64{float64(x), float64(y), float64(z)}
				h := Apply(toHead, v)
				f := s.Head.At(h)
				if f != 0 {
					for _, a := range active {
						f = float64(f * (1 + float64(a.amp*a.blob.Weight(h))))
					}
					if s.Gain != nil {
						f = float64(f * s.Gain(t, Apply(s.Affine, v)))
					}
				}
				if s.NoiseSD > 0 {
					f = gen.rician(f, s.NoiseSD)
				}
				row[x] = float32(f)
			}
		}
	}
}
