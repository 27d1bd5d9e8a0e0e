package pipeline

import (
	"cmp"
	"fmt"
	"slices"
	"strconv"
	"strings"
)

// A Shard is one of N parts of the selected runs; K counts from 1. The zero
// value is everything.
type Shard struct{ K, N int }

// ParseShard reads K/N; it returns a [*UsageError].
func ParseShard(v string) (Shard, error) {
	a, b, ok := strings.Cut(v, "/")
	k, err1 := strconv.Atoi(a)
	n, err2 := strconv.Atoi(b)
	if !ok || err1 != nil || err2 != nil || k < 1 || n < 1 || k > n {
		return Shard{}, &UsageError{Where: "--shard", Message: fmt.Sprintf("found %q, expected K/N with K from 1 to N", v)}
	}
	return Shard{k, n}, nil
}

// Pick returns the plans of this part, in their order. The echoes of one run
// stay together. Parts are balanced by the voxels of their runs: the largest
// unit goes to the part with the least so far (Graham 1969, SIAM J. Appl. Math.
// 17(2):416-429: the largest part is at most 4/3 of what the best division has).
// Sizes come from the images' headers and ties are broken by name: the parts are
// the same on every machine that sees the same files. An image whose header cannot
// be read (not fetched there, say) counts as one voxel, so that machines on which
// different files are missing may divide differently.
func (s Shard) Pick(plans []*Plan) []*Plan {
	if s.N <= 1 {
		return plans
	}
	type unit struct {
		name string
		size int64
	}
	var units []unit
	at := map[string]int{}
	for _, p := range plans {
		name := p.unit()
		i, ok := at[name]
		if !ok {
			i = len(units)
			at[name] = i
			units = append(units, unit{name: name})
		}
		units[i].size += p.voxels()
	}
	slices.SortFunc(units, func(a, b unit) int {
		return cmp.Or(cmp.Compare(b.size, a.size), cmp.Compare(a.name, b.name))
	})
	load := make([]int64, s.N)
	mine := map[string]bool{}
	for _, u := range units {
		to := 0
		for i := range load {
			if load[i] < load[to] {
				to = i
			}
		}
		load[to] += u.size
		mine[u.name] = to == s.K-1
	}
	return slices.DeleteFunc(slices.Clone(plans), func(p *Plan) bool { return !mine[p.unit()] })
}

// voxels is the size of a run for balancing: samples of its series. Whether the
// run will be refused is left out of it on purpose: that can depend on the
// memory of the machine.
func (p *Plan) voxels() int64 {
	if p.Header == nil {
		return 1
	}
	nx, ny, nz, nt := p.Header.Size()
	return int64(nx) * int64(ny) * int64(nz) * int64(nt)
}
