package realign

import (
	"context"

	"evenkeel/slicetime"
)

// A gain says how bright a volume or slice is against the reference: at a
// scanner point x the factor is g[0] + (g[1] X + g[2] Y + g[3] Z)/80, with
// (X, Y, Z) = x - the centre, in mm.

func gainOf(gain *[4]float64, fromCentre [3]float64) float64 {
	s := float64(gain[1]*fromCentre[0]) + float64(gain[2]*fromCentre[1]) + float64(gain[3]*fromCentre[2])
	return gain[0] + float64(s*(1.0/gainReach))
}

// gainsAt carries the gains of volumes, which hold for the middle of the schedule,
// to the times wanted (s from each volume's start): [volume][time], by the kernel
// that moves the slices themselves. What the gains are uncertain by is then taken
// out of a slice and, once that has been moved, put back as it was. Gains of lost
// volumes lie between those of their neighbours. A run too short to be moved in time
// keeps the gains of its volumes.
func gainsAt(gains [][4]float64, lost []bool, s slicetime.Schedule, times []float64, opt slicetime.Options) [][][4]float64 {
	nt, n := len(gains), len(times)
	data := make([]float32, 4*n*nt)
	for v, g := range gains {
		for k := range n {
			for c, x := range g {
				data[c+4*(k+n*v)] = float32(x)
			}
		}
	}
	bridge(data, 4*n, lost)
	// Sampled at the middle, wanted at some time: the reverse of what is done to
	// slices, so the times are mirrored about the middle.
	mid := s.Middle()
	mirrored := slicetime.Schedule{Axis: 2, TR: s.TR, Times: make([]float64, n)}
	for k, t := range times {
		mirrored.Times[k] = mid - (t - mid)
	}
	if nt >= slicetime.MinVolumes {
		moved := append([]float32(nil), data...)
		// It fails for times that no volume of the run is near to (the slices themselves
		// cannot be moved there either): the gains then stay as they are.
		if err := slicetime.Correct(context.Background(), moved, 4, 1, n, nt, mirrored, mid, opt, 1); err == nil {
			data = moved
		}
	}
	at := make([][][4]float64, nt)
	for v := range at {
		at[v] = make([][4]float64, n)
		for k := range at[v] {
			for c := range at[v][k] {
				at[v][k][c] = float64(data[c+4*(k+n*v)])
			}
		}
	}
	return at
}

// constant is one gain a volume, whatever the slice.
func constant(gains [][4]float64, slices int) [][][4]float64 {
	at := make([][][4]float64, len(gains))
	for v, g := range gains {
		at[v] = make([][4]float64, slices)
		for k := range at[v] {
			at[v][k] = g
		}
	}
	return at
}

// sliceGains are the gains of an estimate by volume and slice; where no times are
// known, those of the volumes.
func (e *Estimate) sliceGains(g Grid, s slicetime.Schedule) [][][4]float64 {
	gains, lost := make([][4]float64, len(e.Volumes)), make([]bool, len(e.Volumes))
	for n, v := range e.Volumes {
		gains[n], lost[n] = v.Gain, v.State == Lost
	}
	if len(s.Times) != g.N[s.Axis] || !(s.TR > 0) {
		return constant(gains, g.N[s.Axis])
	}
	return gainsAt(gains, lost, s, s.Times, slicetime.Options{})
}

// gainRows evaluates a gain along the rows of a grid, where it is linear.
type gainRows struct {
	step, y, z, origin float64
}

func newGainRows(g Grid, centre [3]float64, gain *[4]float64) gainRows {
	at := func(i, j, k float64) float64 {
		p := g.world(i, j, k)
		for a := range p {
			p[a] -= centre[a]
		}
		return gainOf(gain, p)
	}
	o := at(0, 0, 0)
	return gainRows{step: at(1, 0, 0) - o, y: at(0, 1, 0) - o, z: at(0, 0, 1) - o, origin: o}
}

// row is the gain at the start of a row; it grows by step with each voxel.
func (r *gainRows) row(j, k int) float64 {
	return r.origin + float64(r.y*float64(j)) + float64(r.z*float64(k))
}

// at is the gain at a voxel coordinate.
func (r *gainRows) at(x [3]float64) float64 {
	return r.origin + float64(r.step*x[0]) + float64(r.y*x[1]) + float64(r.z*x[2])
}
