package kernel

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// linksOf draws a chain whose matrix is definite: squares, and second differences.
func linksOf(seed uint64, n int) []Link {
	r := random(seed)
	unit := func() float64 { return float64(int(r.Uint32()>>12)-1<<19) / (1 << 19) }
	links := make([]Link, n)
	for i := range links {
		l := &links[i]
		var half [Unknowns][Unknowns]float64
		for a := range half {
			for b := range half {
				half[a][b] = unit()
			}
			l.G[a], l.U[a] = unit(), unit()
		}
		at := 0
		for a := range half {
			for b := a; b < Unknowns; b++ {
				for k := range half {
					l.H[at] += float64(half[a][k] * half[b][k])
				}
				if a == b {
					l.H[at] += 0.25
				}
				at++
			}
		}
	}
	for i := 1; i < n-1; i++ {
		w := 1.25 + unit()
		for k, b := range [3]float64{1, -2, 1} {
			l := &links[i-1+k]
			l.Q[0] += float64(float64(w*b) * b)
			switch k {
			case 1:
				l.Q[1] -= 2 * w
			case 2:
				l.Q[1] -= 2 * w
				l.Q[2] += w
			}
		}
	}
	return links
}

func ladderRun(links []Link, strengths [LadderLanes][2]float64) func() [][]float32 {
	return func() [][]float32 {
		inverse := make([][LadderLanes]float64, len(links))
		gained := Ladder(inverse, links, &strengths)
		rows := [][]float32{split(gained[:])}
		for _, p := range inverse {
			rows = append(rows, split(p[:]))
		}
		return rows
	}
}

func TestLadderTwins(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		links := linksOf(rapid.Uint64().Draw(t, "seed"), rapid.IntRange(0, 20).Draw(t, "links"))
		s := rapid.Float64Range(1e-3, 1e6)
		var strengths [LadderLanes][2]float64
		for lane := range strengths {
			strengths[lane] = [2]float64{s.Draw(t, "shift"), s.Draw(t, "turn")}
		}
		both64(t, ladderRun(links, strengths))
		// A chain that is not definite in one lane leaves the others alone.
		strengths[2][0] = -1e9
		both64(t, ladderRun(links, strengths))
	})
}

// both64 is both for float64 that were split: what holds no number there is told by
// its upper half alone.
func both64(t *rapid.T, f func() [][]float32) {
	both(t, func() [][]float32 {
		rows := f()
		for _, r := range rows {
			for i := 0; i < len(r); i += 2 {
				v := math.Float64frombits(uint64(math.Float32bits(r[i+1]))<<32 | uint64(math.Float32bits(r[i])))
				if v != v {
					r[i], r[i+1] = float32(math.NaN()), float32(math.NaN())
				}
			}
		}
		return rows
	})
}

// Lanes do not see each other: each is what it would be beside copies of itself.
func TestLadderLanes(t *testing.T) {
	links := linksOf(3, 9)
	strengths := [LadderLanes][2]float64{{1, 2}, {10, 0.5}, {1e4, 1e-2}, {0.3, 1e5}}
	inverse := make([][LadderLanes]float64, len(links))
	gained := Ladder(inverse, links, &strengths)
	for lane, s := range strengths {
		alone := make([][LadderLanes]float64, len(links))
		g := Ladder(alone, links, &[LadderLanes][2]float64{s, s, s, s})
		if g[0] != gained[lane] || gained[lane] == 0 {
			t.Errorf("lane %d: %g, alone %g", lane, gained[lane], g[0])
		}
		for i := range inverse {
			if inverse[i][lane] != alone[i][3] {
				t.Errorf("lane %d, link %d: %g, alone %g", lane, i, inverse[i][lane], alone[i][3])
			}
		}
	}
}

func TestSameBytesLadder(t *testing.T) {
	sameBytes(t, "b61a0cae163f30d1", ladderRun(linksOf(5, 101), [LadderLanes][2]float64{{1, 2}, {10, 0.5}, {1e4, 1e-2}, {0.3, 1e5}}))
}

func BenchmarkLadder(b *testing.B) {
	links := linksOf(1, 7200)
	inverse := make([][LadderLanes]float64, len(links))
	for _, plain := range []bool{false, true} {
		b.Run(map[bool]string{false: "asm", true: "plain"}[plain], func(b *testing.B) {
			defer SetPlain(SetPlain(plain))
			per := perItem()
			for b.Loop() {
				Ladder(inverse, links, &[LadderLanes][2]float64{{1, 2}, {10, 0.5}, {1e4, 1e-2}, {0.3, 1e5}})
			}
			per(b, LadderLanes*len(links), "link")
		})
	}
}
