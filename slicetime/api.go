package slicetime

import "context"

// Schedule says when each slice of a volume is excited, in seconds from the volume's start.
type Schedule struct {
	Times []float64 // by slice index along Axis, increasing index
	Axis  int       // 0,1,2 = i,j,k
	TR    float64
}

// Shot is one excitation: slices excited at the same instant.
type Shot struct {
	Time   float64
	Slices []int
}

// Shots groups the slices by their instant, in order of time (ties: slices in increasing index).
func (s Schedule) Shots() []Shot { panic("todo") }

// Middle is halfway between the earliest and the latest slice time.
func (s Schedule) Middle() float64 { panic("todo") }

// Words describes the schedule for people: "interleaved ascending, odd slices first, 36 shots, multiband 2, gap 0.35 s" or the like.
func (s Schedule) Words() string { panic("todo") }

type Kernel int

const (
	Fourier Kernel = iota
	Sinc
)

type Options struct {
	Kernel Kernel
	Reach  int // samples on each side of the sinc kernel; 0 = 8
}

// MinVolumes is the fewest samples temporal interpolation accepts.
const MinVolumes = 4

// Series shifts one or more equally spaced series by a constant shift.
// Shifter holds tables and scratch for one length and one shift; it belongs to one goroutine.
type Shifter struct{}

// NewShifter prepares for series of n samples, each wanted shift samples later (shift = (tRef - tau)/TR: out[m] = x(m + shift)).
func NewShifter(n int, shift float64, opt Options) *Shifter { panic("todo") }

// Shift writes to dst the n samples of src moved by the shift; dst may be src. Shift 0 copies bit for bit.
func (s *Shifter) Shift(dst, src []float32) []float32 { panic("todo") }

// Correct moves every slice of the series (data[x+nx*(y+ny*(z+nz*t))], in place) to the instant ref (s from each volume's start).
// Bytes do not depend on workers.
func Correct(ctx context.Context, data []float32, nx, ny, nz, nt int, s Schedule, ref float64, opt Options, workers int) error {
	panic("todo")
}
