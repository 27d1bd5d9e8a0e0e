package slicetime

import (
	"fmt"
	"math"

	"evenkeel/internal/kernel"
)

// Kernel is a way to interpolate in time.
type Kernel int

const (
	// Fourier shifts the phase of every frequency: flat to the Nyquist frequency.
	Fourier Kernel = iota
	// Sinc is a windowed sinc of finite reach: local, but it loses the top of the band.
	Sinc
)

func (k Kernel) String() string {
	switch k {
	case Fourier:
		return "fourier"
	case Sinc:
		return "sinc"
	}
	return fmt.Sprintf("Kernel(%d)", int(k))
}

// DefaultReach is the reach of the sinc kernel when none is given, and MaxReach the longest.
const (
	DefaultReach = 8
	MaxReach     = 32
)

// Options say how to interpolate. The zero value is the default, Fourier.
type Options struct {
	Kernel Kernel
	Reach  int // samples on each side of the sinc kernel, 1 to MaxReach; 0 = DefaultReach
}

// Check returns an [*ArgumentError] if the options are out of range.
func (o Options) Check() error {
	if o.Kernel != Fourier && o.Kernel != Sinc {
		return &ArgumentError{"kernel", o.Kernel.String(), "fourier or sinc"}
	}
	if o.Reach < 0 || o.Reach > MaxReach {
		return &ArgumentError{"reach of the sinc kernel", fmt.Sprint(o.Reach), fmt.Sprintf("1 to %d samples, or 0 for %d", MaxReach, DefaultReach)}
	}
	return nil
}

func (o Options) reach() int {
	if o.Reach == 0 {
		return DefaultReach
	}
	return o.Reach
}

// MinVolumes is the fewest samples temporal interpolation accepts. With 2 or 3
// the line takes all, or all but one, degrees of freedom, and what remains to be
// interpolated is the line. Whatever returns lines as lines cannot then keep
// white noise down: half a sample beyond the last of n, the least SD of an
// unbiased estimate is that of the fitted line (Gauss and Markov),
// sqrt(1/n + (n/2)^2/(n (n^2-1)/12)) times that of a sample: 1.58 for 2, 1.21 for
// 3, 1.02 for 4, 0.91 for 5. Such a run is better left as it was taken, and
// callers say so.
const MinVolumes = 4

// ArgumentError says which argument of a call cannot be worked with.
type ArgumentError struct {
	What, Found, Expected string
}

func (e *ArgumentError) Error() string {
	return fmt.Sprintf("slice timing: %s is %s, expected %s", e.What, e.Found, e.Expected)
}

// smallestShift: a shift nearer to zero than this many samples is none. The
// halves and differences of decimal slice times leave such residues. A value
// moves by at most pi times the shift times the amplitude, here 3e-9 of it:
// a twentieth of the rounding of float32.
const smallestShift = 1e-9

// split returns the whole samples of a shift, within -far to far, and the rest,
// between -0.5 and 0.5; none is true for a shift that is none.
func split(shift float64, far int) (whole int, rest float64, none bool) {
	if math.Abs(shift) < smallestShift {
		return 0, 0, true
	}
	// Halves go towards zero, so that a move and its opposite are mirror images.
	nearest := math.Copysign(math.Ceil(math.Abs(shift)-0.5), shift)
	rest = shift - nearest
	if math.Abs(rest) < smallestShift {
		rest = 0
	}
	return int(max(-float64(far), min(float64(far), nearest))), rest, false
}

// plan is what all shifts by Fourier of series of one length share; read only.
type plan struct {
	n, ext int
	order  int     // of the autoregression
	ridge  float64 // its share of the mean diagonal
	taper  []float64
	fft    *fft
}

func newPlan(n int) *plan {
	const e = extension
	p := &plan{n: n, ext: e, taper: taperFor(e), fft: newFFT(fftLength((n + 2*e + 1) / 2))}
	p.order, p.ridge = predictor(n)
	return p
}

// length is the number of samples of a work buffer: extension, series,
// extension, and zeros up to the length of the transform.
func (p *plan) length() int { return 2 * p.fft.m }

// move is one constant shift; read only once made.
type move struct {
	*plan
	shift float64 // = whole + rest, |rest| <= 0.5
	whole int
	phase *phaseShift // rest != 0
}

func (p *plan) newMove(shift float64) *move {
	// Beyond the extension only the line is left, however far.
	whole, rest, none := split(shift, p.n+2*p.ext)
	m := &move{plan: p, shift: shift, whole: whole}
	if none {
		m.shift = 0
	} else if rest != 0 {
		m.phase = newPhaseShift(p.fft, rest)
	}
	return m
}

// scratch is one goroutine's work space for one batch of series.
type scratch struct {
	x  []lanes // the extended residuals
	ar kernel.Autoregression
}

func (p *plan) newScratch() *scratch {
	return &scratch{x: make([]lanes, p.length())}
}

// samples is where the caller puts the n samples of the batch.
func (p *plan) samples(s *scratch) []lanes { return s.x[p.ext : p.ext+p.n] }

// run moves the batch whose samples stand in m.samples(s) and writes the n moved
// samples of every lane to dst[t*stride] and the seven values after it.
func (m *move) run(s *scratch, dst []float32, stride int) {
	e, n := m.ext, m.n
	x := s.x
	var level, slope, top lanes
	kernel.Line(x[e:e+n], &level, &slope, &top)
	m.extend(x, &top, &s.ar)
	if m.phase != nil {
		m.phase.apply(x)
		clear(x[n+2*e:]) // nothing stands there, for this move and for the next batch
	}
	mid := float64(float64(n-1) / 2)
	from := e + m.whole // x[from+i] is the residual wanted for sample i
	if lo, hi := max(0, -from), min(n, len(x)-from); lo == 0 && hi == n {
		kernel.NarrowLanes(dst, stride, x[from:from+n], &level, &slope, mid, m.shift)
	} else {
		// Past what is extended only the line is left.
		for i := range n {
			var r lanes
			if i >= lo && i < hi {
				r = x[from+i]
			}
			kernel.NarrowLanes(dst[i*stride:], stride, []lanes{r}, &level, &slope, mid-float64(i), m.shift)
		}
	}
}

// store rounds to float32. Overshoot beside the largest float32 is held there,
// so that finite input never gives an infinity.
func store(v float64) float32 {
	if v > math.MaxFloat32 {
		return math.MaxFloat32
	}
	if v < -math.MaxFloat32 {
		return -math.MaxFloat32
	}
	return float32(v)
}

// Shifter moves equally spaced series of one length by one constant shift. It
// holds tables and scratch and belongs to one goroutine.
type Shifter struct {
	n    int
	move *move // Fourier
	work *scratch
	out  []float32 // [sample][lane]
	sinc *sinc     // Sinc: of a volume of one voxel
	desk *sincDesk
}

// NewShifter prepares for series of n samples, each wanted shift samples later:
// out[m] = x(m + shift), shift = (tRef - tau)/TR for samples taken at
// m TR + tau and wanted at m TR + tRef. It panics if n < MinVolumes, if the
// shift is not finite or if opt.Check fails: callers check outside data first.
func NewShifter(n int, shift float64, opt Options) *Shifter {
	if n < MinVolumes {
		panic("slicetime: series shorter than MinVolumes")
	}
	if math.IsNaN(shift) || math.IsInf(shift, 0) {
		panic("slicetime: shift is not finite")
	}
	if err := opt.Check(); err != nil {
		panic("slicetime: " + err.Error())
	}
	s := &Shifter{n: n}
	if opt.Kernel == Sinc {
		s.sinc = newSinc([3]int{1, 1, 1}, n, 0, []float64{shift}, opt)
		s.desk = s.sinc.newDesk(true)
		return s
	}
	p := newPlan(n)
	s.move = p.newMove(shift)
	if s.move.shift != 0 {
		s.work = p.newScratch()
		s.out = make([]float32, n*laneCount)
	}
	return s
}

// Shift writes to dst the n samples of src moved by the shift and returns dst.
// A nil dst is allocated; dst may be src. Shift 0, and a series whose samples
// are all equal, are copied bit for bit. It panics on a wrong length.
func (s *Shifter) Shift(dst, src []float32) []float32 {
	n := s.n
	if dst == nil {
		dst = make([]float32, n)
	}
	if len(src) != n || len(dst) != n {
		panic("slicetime: series of another length than the Shifter's")
	}
	if s.sinc != nil {
		copy(dst, src)
		s.sinc.inPlace(s.desk, dst, 0)
		return dst
	}
	if s.move.shift == 0 || isConstant(src) {
		copy(dst, src)
		return dst
	}
	x := s.move.samples(s.work)
	for t, v := range src {
		x[t] = lanes{float64(v)} // the other lanes idle at zero
	}
	s.move.run(s.work, s.out, laneCount)
	for t := range dst {
		dst[t] = s.out[t*laneCount]
	}
	return dst
}

func isConstant(x []float32) bool {
	for _, v := range x {
		if v != x[0] {
			return false
		}
	}
	return true
}
