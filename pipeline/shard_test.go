package pipeline

import (
	"errors"
	"fmt"
	"testing"

	"pgregory.net/rapid"

	"evenkeel/dataset"
	"evenkeel/nifti"
)

func sized(name, group string, nt int) *Plan {
	h := &nifti.Header{Dim: [8]int64{4, 4, 4, 4, int64(nt), 1, 1, 1}}
	return &Plan{Run: dataset.Run{Stem: name, File: name, Group: group}, Header: h}
}

// Whatever the sizes: every run is in exactly one part, echoes stay together,
// order is kept, and no part has more than the bound of Graham 1969 for longest-first
// lists, load <= (4/3 - 1/(3N)) best, best being at least the mean and the largest unit.
func TestShardsPartition(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(1, 7).Draw(t, "parts")
		var plans []*Plan
		var total, largest int64
		for i := range rapid.IntRange(0, 30).Draw(t, "units") {
			echoes := rapid.IntRange(1, 3).Draw(t, "echoes")
			nt := rapid.IntRange(1, 400).Draw(t, "volumes")
			for e := range echoes {
				plans = append(plans, sized(fmt.Sprintf("run%02d_echo-%d", i, e), fmt.Sprintf("run%02d", i), nt))
			}
			size := int64(64 * nt * echoes)
			total += size
			largest = max(largest, size)
		}
		seen := map[*Plan]int{}
		for k := 1; k <= n; k++ {
			part := Shard{k, n}.Pick(plans)
			load := int64(0)
			for i, p := range part {
				seen[p]++
				load += p.voxels()
				if i > 0 && part[i-1].Run.File >= p.Run.File {
					t.Fatal("order is not kept")
				}
				for _, q := range plans {
					if q.unit() == p.unit() {
						found := false
						for _, r := range part {
							found = found || r == q
						}
						if !found {
							t.Fatal("echoes were parted")
						}
					}
				}
			}
			// With fewer units than parts the mean says little: the list
			// bound against max(mean, largest) is 2 - 1/N then.
			best := max(float64(total)/float64(n), float64(largest))
			if float64(load) > 2*best {
				t.Fatalf("part %d/%d holds %d of %d", k, n, load, total)
			}
		}
		for _, p := range plans {
			if seen[p] != 1 {
				t.Fatalf("%s is in %d parts", p.Run.Stem, seen[p])
			}
		}
	})
}

// Largest first: 5, 4, 3, 3, 3 in two parts gives 9 and 9 (5+4 against 3+3+3 is what
// sorting by size and filling the emptier part does not find: 5+3, 4+3+3).
func TestShardBalance(t *testing.T) {
	plans := []*Plan{sized("a", "a", 3), sized("b", "b", 5), sized("c", "c", 3), sized("d", "d", 4), sized("e", "e", 3)}
	var names [2]string
	for k := range 2 {
		for _, p := range (Shard{k + 1, 2}).Pick(plans) {
			names[k] += p.Run.Stem
		}
	}
	if names != [2]string{"bc", "ade"} {
		t.Errorf("got %v", names)
	}
}

func TestParseShard(t *testing.T) {
	if s, err := ParseShard("2/3"); err != nil || s != (Shard{2, 3}) {
		t.Error(s, err)
	}
	for _, v := range []string{"", "1", "0/3", "4/3", "1/0", "-1/3", "a/b", "1/3/5", "1.5/3"} {
		var usage *UsageError
		if _, err := ParseShard(v); !errors.As(err, &usage) {
			t.Errorf("%q: %v", v, err)
		}
	}
}
