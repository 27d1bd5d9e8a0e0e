package realign

import (
	"context"
	"slices"

	"evenkeel/internal/parallel"
)

// Series gives the volumes of a run, as often as they are needed: from memory, or by
// reading a file anew.
type Series interface {
	// Len is the number of volumes.
	Len() int
	// Each calls f once for every volume t for which want(t) is true (nil: for all),
	// begun in increasing order, from at most workers goroutines; worker, in [0, workers),
	// tells which scratch f may use. vol holds nx*ny*nz voxels, x fastest; it is valid
	// until f returns, and must not be changed.
	//
	// When ctx ends, no further volume is begun and ctx.Err() is returned. The first error
	// in the order of volumes, of f or of reading, ends the pass likewise; a panic inside f
	// is raised again in the caller. Passes must not overlap.
	Each(ctx context.Context, workers int, want func(t int) bool, f func(worker, t int, vol []float32) error) error
}

// Floats is a series in memory: volume t is data[t*nv:(t+1)*nv], nv the voxels of a
// volume. It panics unless data holds nt volumes of one size.
func Floats(data []float32, nt int) Series {
	if nt < 1 || len(data)%nt != 0 {
		panic("realign: a series of volumes that differ in size")
	}
	return floats{data, nt}
}

type floats struct {
	data []float32
	nt   int
}

func (s floats) Len() int { return s.nt }

func (s floats) Each(ctx context.Context, workers int, want func(t int) bool, f func(worker, t int, vol []float32) error) error {
	nv := len(s.data) / s.nt
	return parallel.For(ctx, workers, s.nt, func(worker, t int) error {
		if want != nil && !want(t) {
			return nil
		}
		return f(worker, t, s.data[t*nv:][:nv])
	})
}

// copyOf returns volume t.
func copyOf(ctx context.Context, s Series, t int) (vol []float32, err error) {
	err = s.Each(ctx, 1, func(u int) bool { return u == t }, func(_, _ int, v []float32) error {
		vol = append([]float32(nil), v...)
		return nil
	})
	return vol, err
}

// patched is a series with padded slices filled.
type patched struct {
	Series
	patch func(vol []float32) []float32
}

func (s patched) Each(ctx context.Context, workers int, want func(t int) bool, f func(worker, t int, vol []float32) error) error {
	return s.Series.Each(ctx, workers, want, func(worker, t int, vol []float32) error { return f(worker, t, s.patch(vol)) })
}

// isIn says of each of n volumes whether an increasing list names it.
func isIn(list []int, n int) func(t int) bool {
	in := make([]bool, n)
	for _, t := range list {
		in[t] = true
	}
	return func(t int) bool { return in[t] }
}

// rank is the place of t in an increasing list.
func rank(list []int, t int) int {
	at, _ := slices.BinarySearch(list, t)
	return at
}
