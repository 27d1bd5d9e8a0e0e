package phantom

import "context"

// Head is an analytic head: intensity at any point (world mm, head frame), evaluated exactly.
type Head struct{}

// NewHead draws an invented head (soft-edged ellipsoidal shell and tissue, smooth blobs, a few folds) from a seed; mean signal inside about 900, background 0.
func NewHead(seed uint64) *Head { panic("todo") }

// At is the intensity at a point of the head frame (mm).
func (h *Head) At(x [3]float64) float64 { panic("todo") }

// Inside reports whether the point lies inside the head (half intensity of the outer edge).
func (h *Head) Inside(x [3]float64) bool { panic("todo") }

// Motion gives the rigid map (row-major 4x4, world mm) from the head frame to where the head is at time t (s).
type Motion func(t float64) [16]float64

// Blob is a region that is active: intensity is multiplied by 1 + Amplitude*g(distance)*Course(t).
type Blob struct {
	Centre    [3]float64
	SD        float64 // mm
	Amplitude float64 // fraction
	Course    func(t float64) float64
}

// Scan is one EPI series to simulate.
type Scan struct {
	Head       *Head
	N          [3]int
	NT         int
	Affine     [16]float64 // voxel index to world mm
	TR         float64
	SliceAxis  int
	SliceTimes []float64 // by slice index
	Motion     Motion    // nil: still
	PerVolume  bool      // true: every slice of volume n is taken at the pose of the middle of volume n (for tests of volume poses)
	Blobs      []Blob
	NoiseSD    float64                               // Rician noise: magnitude of signal + complex Gaussian
	Gain       func(t float64, x [3]float64) float64 // receive gain at a scanner point (world mm), nil: 1
	Seed       uint64
}

// Simulate samples the head slice by slice, each at its own time and pose: data[x+nx*(y+ny*(z+nz*t))]. Bytes do not depend on workers.
func (s *Scan) Simulate(ctx context.Context, workers int) ([]float32, error) { panic("todo") }

// Interleaved, Sequential and Multiband make slice schedules (seconds by slice index).
func Interleaved(n int, tr float64) []float64       { panic("todo") }
func Sequential(n int, tr float64) []float64        { panic("todo") }
func Multiband(n, factor int, tr float64) []float64 { panic("todo") } // n divisible by factor

// Walk is a smooth band-limited random motion (sum of sinusoids below fmax Hz), rms shift sd mm and rotation sd rad about centre, 0 at t = 0.
func Walk(seed uint64, shiftSD, turnSD, fmax float64, centre [3]float64) Motion { panic("todo") }

// Jerk adds a sudden rigid step (shift mm, turn rad about centre) from time at on.
func Jerk(base Motion, at float64, shift, turn, centre [3]float64) Motion { panic("todo") }

// TrueRun is what is exactly known about one run of the demo cohort.
type TrueRun struct {
	Stem string
	Scan *Scan
}

// WriteCohort writes the invented demo cohort (three small runs: one interleaved, one multiband, one with a jerk) as a raw BIDS dataset
// into dir (which must not exist or be empty) and returns what is true of it, in the order of the runs' names.
func WriteCohort(ctx context.Context, dir string, workers int) ([]TrueRun, error) { panic("todo") }
