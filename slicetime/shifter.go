package slicetime

import (
	"fmt"
	"math"
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

// plan is what all shifts of series of one length share; read only.
type plan struct {
	n, ext int
	order  int     // of the autoregression
	ridge  float64 // its share of the mean diagonal
	taper  []float64
	fft    *fft // nil for the sinc kernel
	opt    Options
}

func newPlan(n int, opt Options) *plan {
	const e = extension
	p := &plan{n: n, ext: e, taper: taperFor(e), opt: opt}
	p.order, p.ridge = predictor(n)
	if opt.Kernel == Fourier {
		p.fft = newFFT(fftLength((n + 2*e + 1) / 2))
	}
	return p
}

// length is the number of samples of a work buffer: extension, series,
// extension, and for the transform zeros up to its length.
func (p *plan) length() int {
	if p.fft != nil {
		return 2 * p.fft.m
	}
	return p.n + 2*p.ext
}

// move is one constant shift; read only once made.
type move struct {
	*plan
	shift float64 // = whole + rest, |rest| <= 0.5
	whole int
	phase *phaseShift // Fourier and rest != 0
	taps  []float64   // Sinc and rest != 0
}

func (p *plan) newMove(shift float64) *move {
	m := &move{plan: p, shift: shift}
	if math.Abs(shift) < smallestShift {
		m.shift = 0
		return m
	}
	// Halves go towards zero, so that a move and its opposite are mirror images.
	whole := math.Copysign(math.Ceil(math.Abs(shift)-0.5), shift)
	rest := shift - whole
	if math.Abs(rest) < smallestShift {
		rest = 0
	}
	// Beyond the extension only the line is left, however far.
	far := float64(p.n + 2*p.ext + MaxReach)
	m.whole = int(max(-far, min(far, whole)))
	switch {
	case rest == 0:
	case p.opt.Kernel == Fourier:
		m.phase = newPhaseShift(p.fft, rest)
	default:
		m.taps = sincTaps(p.opt.reach(), rest, kaiserBeta)
	}
	return m
}

// scratch is one goroutine's work space for one batch of series.
type scratch struct {
	x   []lanes // the extended residuals
	out []lanes // sinc only: the moved ones
	ar  arScratch
	// Line of each series: level at the middle of the series, slope per sample.
	level, slope lanes
}

func (p *plan) newScratch() *scratch {
	s := &scratch{x: make([]lanes, p.length())}
	if p.opt.Kernel == Sinc {
		s.out = make([]lanes, p.n)
	}
	return s
}

// samples is where the caller puts the n samples of the batch and finds them moved.
func (p *plan) samples(s *scratch) []lanes { return s.x[p.ext : p.ext+p.n] }

// run moves the batch whose samples stand in p.samples(s) and returns the n
// moved samples of each lane (valid until the next call).
func (m *move) run(s *scratch) []lanes {
	e, n := m.ext, m.n
	x := s.x
	s.removeLine(x[e : e+n])
	m.extend(x, &s.ar)
	out := x
	from := e + m.whole // out[from+i] is the residual wanted for sample i
	switch {
	case m.phase != nil:
		m.phase.apply(x)
		clear(x[n+2*e:]) // nothing stands there, for this move and for the next batch
	case m.taps != nil:
		m.convolve(s.out, x[:n+2*e])
		out, from = s.out, 0
	}
	mid := float64(float64(n-1) / 2)
	// In place: walk against the move, so that nothing is overwritten unread.
	put := func(i int) {
		var r lanes
		if k := from + i; k >= 0 && k < len(out) {
			r = out[k]
		}
		t := (float64(i) - mid) + m.shift
		to := &x[e+i]
		for l := range r {
			to[l] = (s.level[l] + float64(s.slope[l]*t)) + r[l]
		}
	}
	if m.whole >= 0 {
		for i := range n {
			put(i)
		}
	} else {
		for i := n - 1; i >= 0; i-- {
			put(i)
		}
	}
	return x[e : e+n]
}

// removeLine takes the least-squares line out of every lane.
func (s *scratch) removeLine(x []lanes) {
	n := len(x)
	mid := float64(float64(n-1) / 2)
	var sum lanes
	for t := range x {
		for l, v := range x[t] {
			sum[l] += v
		}
	}
	var level, slope lanes
	for l := range level {
		level[l] = sum[l] / float64(n)
	}
	// sum (t-mid)^2 = n (n^2-1)/12; the level is taken out first so that the
	// slope of a constant is rounding of zero, not of a large number.
	for t := range x {
		d := float64(t) - mid
		for l, v := range x[t] {
			slope[l] += float64((v - level[l]) * d)
		}
	}
	squares := float64(n) * (float64(float64(n)*float64(n)) - 1) / 12
	for l := range slope {
		slope[l] /= squares
	}
	for t := range x {
		d := float64(t) - mid
		r := &x[t]
		for l := range r {
			r[l] = (r[l] - level[l]) - float64(slope[l]*d)
		}
	}
	s.level, s.slope = level, slope
}

// convolve writes to out[i] the tap sum about x[ext+whole+i]; x is zero beyond its ends.
func (m *move) convolve(out, x []lanes) {
	reach := len(m.taps) / 2
	for i := range out {
		first := m.ext + m.whole + i - reach
		lo, hi := max(0, -first), min(len(m.taps), len(x)-first)
		var s0, s1, s2, s3, s4, s5, s6, s7 float64
		for j := lo; j < hi; j++ {
			w, v := m.taps[j], &x[first+j]
			s0 += float64(w * v[0])
			s1 += float64(w * v[1])
			s2 += float64(w * v[2])
			s3 += float64(w * v[3])
			s4 += float64(w * v[4])
			s5 += float64(w * v[5])
			s6 += float64(w * v[6])
			s7 += float64(w * v[7])
		}
		out[i] = lanes{s0, s1, s2, s3, s4, s5, s6, s7}
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
	move *move
	work *scratch
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
	p := newPlan(n, opt)
	s := &Shifter{move: p.newMove(shift)}
	if s.move.shift != 0 {
		s.work = p.newScratch()
	}
	return s
}

// Shift writes to dst the n samples of src moved by the shift and returns dst.
// A nil dst is allocated; dst may be src. Shift 0, and a series whose samples
// are all equal, are copied bit for bit. It panics on a wrong length.
func (s *Shifter) Shift(dst, src []float32) []float32 {
	n := s.move.n
	if dst == nil {
		dst = make([]float32, n)
	}
	if len(src) != n || len(dst) != n {
		panic("slicetime: series of another length than the Shifter's")
	}
	if s.move.shift == 0 || isConstant(src) {
		copy(dst, src)
		return dst
	}
	x := s.move.samples(s.work)
	for t, v := range src {
		x[t] = lanes{float64(v)} // the other lanes idle at zero
	}
	for t, v := range s.move.run(s.work) {
		dst[t] = store(v[0])
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
