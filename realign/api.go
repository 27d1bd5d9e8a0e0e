package realign

import "context"

// Pose is a rigid map of world space, x -> R x + T (mm, RAS+): it takes a point of the reference to where that point was in a volume. The zero value is NOT a pose; use Identity.
type Pose struct {
	Q [4]float64 // unit quaternion w,x,y,z
	T [3]float64 // mm
}

var Identity = Pose{Q: [4]float64{1, 0, 0, 0}}

// FromParams builds R = Rz Ry Rx about the centre c: x -> R (x-c) + c + shift.
func FromParams(shiftMM, turnRad, c [3]float64) Pose { panic("todo") }

// Params is the inverse of FromParams.
func (p Pose) Params(c [3]float64) (shiftMM, turnRad [3]float64) { panic("todo") }
func (p Pose) Matrix() [16]float64                               { panic("todo") }
func FromMatrix(m [16]float64) Pose                              { panic("todo") }
func (p Pose) Apply(x [3]float64) [3]float64                     { panic("todo") }
func (p Pose) Compose(q Pose) Pose                               { panic("todo") } // first q, then p
func (p Pose) Inverse() Pose                                     { panic("todo") }

// Path is the pose as a function of time.
type Path struct {
	Times []float64
	Poses []Pose
}

func (p Path) At(t float64) Pose { panic("todo") }

// Grid is the sampling of a volume: N voxels per axis, Affine maps index to world mm.
type Grid struct {
	N      [3]int
	Affine [16]float64
}

type State string

const (
	Aligned  State = "aligned"
	Doubtful State = "doubtful"
	Lost     State = "lost"
)

// Volume is what was found for one volume.
type Volume struct {
	Pose       Pose // for a lost volume: interpolated between its aligned neighbours
	State      State
	Fit        float64 // correlation with the reference inside the head after alignment
	Outside    float64 // share of the head outside the field of view
	Iterations int
	Reason     string // why not aligned, "" if aligned
}

type Reference int

const (
	Mean Reference = iota
	First
	Middle
	Index
	External
)

type Options struct {
	Reference Reference
	Index     int       // with Index
	External  []float32 // with External: a volume on the same grid
	SliceAxis int       // 0,1,2
	Workers   int
}

// Estimate is the outcome for a run.
type Estimate struct {
	Volumes        []Volume
	Reference      []float32          // the reference volume, on the grid
	Mask           []bool             // head mask on the grid
	Centre         [3]float64         // centroid of the mask, world mm: the rotation centre
	ReferenceIndex int                // volume whose pose the reference stands at, -1 for an external one
	Parameters     map[string]float64 // every constant the estimate used (smoothing, margins, thresholds) for the record
}

// TooFewAligned is returned when fewer than two volumes could be aligned.
type TooFewAligned struct{ Aligned, Volumes int }

func (e *TooFewAligned) Error() string { panic("todo") }

// EstimateVolumes finds one pose a volume. data[t*nv:(t+1)*nv] is volume t; it is not changed.
func EstimateVolumes(ctx context.Context, g Grid, data []float32, nt int, opt Options) (*Estimate, error) {
	panic("todo")
}

// HeadMask finds the head in a volume.
func HeadMask(g Grid, vol []float32) []bool { panic("todo") }

// Map says where each output voxel comes from: Row fills the source voxel index coordinates of output voxels (0..nx-1, j, k).
type Map interface {
	Row(j, k int, x, y, z []float64)
}

// PoseMap maps voxels of the reference grid into a volume at pose p.
func PoseMap(g Grid, p Pose) Map { panic("todo") }

// Resampler interpolates volumes by B-splines; it owns scratch and belongs to one goroutine.
type Resampler struct{}

func NewResampler(n [3]int, degree int) *Resampler { panic("todo") } // degree 3 or 5
// Load prefilters a volume.
func (r *Resampler) Load(vol []float32) { panic("todo") }

// Eval fills dst (same grid) from m; points outside the field take the value at the nearest point of its edge.
func (r *Resampler) Eval(dst []float32, m Map) { panic("todo") }

// MotionTargets: matrices are written as the record and the pose sidecar hold them.
