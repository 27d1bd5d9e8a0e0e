package realign

import (
	"math"

	"evenkeel/internal/detmath"
	"evenkeel/internal/kernel"
)

// smoother filters volumes of one grid by a Gaussian that is isotropic in mm,
// and can thin them out on the way. Past the field's edge samples continue by
// the rule of [kernel.Prefilter]. It owns its scratch and belongs to one goroutine.
type smoother struct {
	in, out [3]int
	first   [3]int // input index of output 0
	stride  [3]int
	kernel  [3][]float32 // half kernels: [0] is the centre
	a, b    []float32
	line    []float32
	full    []float32 // a line before it is thinned
	past    []float32 // rows past the ends
	rows    [][]float32
}

// newSmoother prepares a Gaussian of sigma mm (0: none) on g; every stride-th
// sample is kept, placed so that the margins at both ends are alike.
func newSmoother(g Grid, sigmaMM float64, stride [3]int) *smoother {
	s := &smoother{in: g.N, stride: stride}
	edge := g.edges()
	longest := 0
	for a := range 3 {
		s.first[a] = ((g.N[a] - 1) % stride[a]) / 2
		s.out[a] = (g.N[a]-1-s.first[a])/stride[a] + 1
		s.kernel[a] = gaussian(sigmaMM / edge[a])
		longest = max(longest, g.N[a]+2*len(s.kernel[a]))
	}
	s.a = make([]float32, s.out[0]*s.in[1]*s.in[2])
	s.b = make([]float32, s.out[0]*s.out[1]*s.in[2])
	s.line = make([]float32, longest)
	return s
}

// gaussian returns the half kernel of a sampled Gaussian that sums to one over
// both sides; it is cut at 4 sigma, where less than 1e-4 of the weight is left.
func gaussian(sigma float64) []float32 {
	r := int(math.Ceil(float64(4 * sigma)))
	k := make([]float64, r+1)
	k[0] = 1
	sum := 1.0
	for i := 1; i <= r; i++ {
		u := float64(i) / sigma
		k[i] = detmath.Exp(-float64(u*u) / 2)
		sum += 2 * k[i]
	}
	out := make([]float32, r+1)
	for i := range k {
		out[i] = float32(k[i] / sum)
	}
	return out
}

// grid returns the sampling of the output on the input grid g.
func (s *smoother) grid(g Grid) Grid {
	o := Grid{N: s.out, Affine: g.Affine}
	p := g.world(float64(s.first[0]), float64(s.first[1]), float64(s.first[2]))
	for r := range 3 {
		for a := range 3 {
			o.Affine[4*r+a] *= float64(s.stride[a])
		}
		o.Affine[4*r+3] = p[r]
	}
	return o
}

// run writes the smoothed, thinned volume to dst.
func (s *smoother) run(dst, vol []float32) {
	nx, ny, nz := s.in[0], s.in[1], s.in[2]
	ox, oy, oz := s.out[0], s.out[1], s.out[2]
	if len(vol) != nx*ny*nz || len(dst) != ox*oy*oz {
		panic("realign: smoother and volume differ in size")
	}
	// Along x: one padded line at a time, of which every stride-th value stays.
	h := s.kernel[0]
	r := len(h) - 1
	s.full = sized(s.full, nx)
	full := s.full
	for row := range ny * nz {
		src := vol[nx*row:][:nx]
		out := s.a[ox*row:][:ox]
		line := s.line[:nx+2*r]
		copy(line[r:], src)
		if r < nx {
			first, last := 2*src[0], 2*src[nx-1]
			for i := 1; i <= r; i++ {
				line[r-i], line[r+nx-1+i] = first-src[i], last-src[nx-1-i]
			}
		} else {
			for i := 1; i <= r; i++ {
				line[r-i], line[r+nx-1+i] = oddSample(src, -i), oddSample(src, nx-1+i)
			}
		}
		if s.stride[0] == 1 {
			filterLine(out, h, line)
			continue
		}
		filterLine(full, h, line)
		for o := range out {
			out[o] = full[s.first[0]+o*s.stride[0]]
		}
	}
	for k := range nz {
		s.across(s.b[ox*oy*k:][:ox*oy], s.a[ox*ny*k:][:ox*ny], ox, ny, oy, 1)
	}
	s.across(dst, s.b, ox*oy, nz, oz, 2)
}

// filterLine and filterRows are those of package kernel, for filters of any reach.
func filterLine(dst, h, line []float32) {
	if len(h)-1 <= kernel.MostReach {
		kernel.SymmetricLine(dst, h, line)
		return
	}
	var rows [][]float32
	for k := range 2*len(h) - 1 {
		rows = append(rows, line[k:][:len(dst)])
	}
	filterRows(dst, h, rows)
}

func filterRows(dst, h []float32, rows [][]float32) {
	r := len(h) - 1
	if r <= kernel.MostReach {
		kernel.Symmetric(dst, h, rows)
		return
	}
	for i, v := range rows[r] {
		dst[i] = float32(h[0] * v)
	}
	for k := 1; k <= r; k++ {
		a, b := rows[r-k], rows[r+k]
		for i := range dst {
			dst[i] += float32(h[k] * (a[i] + b[i]))
		}
	}
}

// across filters along an axis whose samples are rows of w values: n rows in,
// m rows out.
func (s *smoother) across(dst, src []float32, w, n, m, axis int) {
	h := s.kernel[axis]
	r := len(h) - 1
	// The rows past both ends: f(k) = 2 f(edge) - f(mirrored), with as many turns as
	// a short axis needs: sign and offset follow from oddWalk.
	s.past = sized(s.past, 2*r*w)
	s.rows = sized(s.rows, n+2*r)
	first, last := src[:w], src[w*(n-1):][:w]
	for k := range s.rows {
		at := k - r
		if at >= 0 && at < n {
			s.rows[k] = src[w*at:][:w]
			continue
		}
		i0, sign, ends := oddWalk(at, n)
		in := src[w*i0:][:w]
		q := k
		if at >= n {
			q -= n
		}
		out := s.past[w*q:][:w]
		for i := range out {
			out[i] = float32(ends[0]*first[i]) + float32(ends[1]*last[i]) + float32(sign*in[i])
		}
		s.rows[k] = out
	}
	for o := range m {
		c := s.first[axis] + o*s.stride[axis]
		filterRows(dst[w*o:][:w], h, s.rows[c:c+2*r+1])
	}
}

// oddWalk expresses the sample at an index outside [0, n) under the rule of [kernel.Prefilter]:
// ends[0] f(0) + ends[1] f(n-1) + sign f(i).
func oddWalk(k, n int) (i int, sign float32, ends [2]float32) {
	sign = 1
	if n == 1 {
		return 0, 1, ends
	}
	for k < 0 || k >= n {
		if k < 0 {
			ends[0] += 2 * sign
			k = -k
		} else {
			ends[1] += 2 * sign
			k = 2*(n-1) - k
		}
		sign = -sign
	}
	return k, sign, ends
}

func oddSample(line []float32, k int) float32 {
	i, sign, ends := oddWalk(k, len(line))
	return float32(ends[0]*line[0]) + float32(ends[1]*line[len(line)-1]) + float32(sign*line[i])
}
