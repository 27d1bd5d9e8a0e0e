package realign_test

import (
	"math/rand/v2"
	"slices"
	"testing"

	"evenkeel/realign"
)

func TestOtsuSplitsTwoClasses(t *testing.T) {
	var v []float32
	for i := range 1000 {
		v = append(v, float32(10+i%5), float32(500+i%50))
	}
	if got, air := realign.Otsu(v); got < 200 || got > 320 || air != 12 {
		t.Errorf("threshold %g between classes at 10..14 and 500..549", got)
	}
	if got, _ := realign.Otsu([]float32{3, 3, 3}); got != 3 {
		t.Errorf("a constant volume: %g", got)
	}
}

func TestPiecesAndHoles(t *testing.T) {
	n := [3]int{7, 7, 5}
	at := func(x, y, z int) int { return x + 7*(y+7*z) }
	mask := make([]bool, 7*7*5)
	for z := 1; z < 4; z++ {
		for y := 1; y < 5; y++ {
			for x := 1; x < 5; x++ {
				mask[at(x, y, z)] = true
			}
		}
	}
	whole := slices.Clone(mask)
	mask[at(2, 2, 2)] = false // a hole
	mask[at(6, 6, 4)] = true  // another piece
	realign.KeepLargest(mask, n)
	realign.FillHoles(mask, n)
	if !slices.Equal(mask, whole) {
		t.Error("the piece should be whole and alone")
	}
	grown := realign.Dilate(mask, n, 1)
	if !grown[at(0, 2, 2)] || grown[at(0, 0, 2)] || !grown[at(5, 4, 3)] || grown[at(6, 4, 3)] {
		t.Error("one layer of face neighbours")
	}
}

func TestHeadMaskFindsTheHead(t *testing.T) {
	data := scan(t, standard, []realign.Pose{realign.Identity}, 9, nil)
	mask := realign.HeadMask(standard, data)
	in, out := 0, 0
	i := 0
	for z := range 32 {
		for y := range 64 {
			for x := range 64 {
				p := at(standard, x, y, z)
				r := p[0]*p[0]/3600 + p[1]*p[1]/5625 + p[2]*p[2]/3600
				if r < 0.9 && !mask[i] {
					in++
				}
				if r > 2.5 && mask[i] {
					out++
				}
				i++
			}
		}
	}
	if in > 0 || out > 0 {
		t.Errorf("%d voxels of the head left out, %d far outside taken in", in, out)
	}
}

// Air need not be at zero: the mask of a head on any background is the same.
func TestHeadMaskOnBackground(t *testing.T) {
	data := scan(t, small, []realign.Pose{realign.Identity}, 9, nil)
	want := realign.HeadMask(small, data)
	for _, level := range []float32{5000, -5000} {
		moved := slices.Clone(data)
		for i := range moved {
			moved[i] += level
		}
		differ := 0
		for i, in := range realign.HeadMask(small, moved) {
			if in != want[i] {
				differ++
			}
		}
		if differ > len(want)/1000 { // float32 at 5000 rounds to half a thousandth
			t.Errorf("air at %g: %d voxels differ", level, differ)
		}
	}
}

func TestMedianAgainstSorting(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 3))
	for n := 1; n < 60; n++ {
		v := make([]float32, n)
		for i := range v {
			v[i] = float32(r.IntN(10))
		}
		s := slices.Clone(v)
		slices.Sort(s)
		if got := realign.Median(v); got != s[n/2] {
			t.Fatalf("median of %v: %g", s, got)
		}
	}
	if realign.Median(nil) != 0 {
		t.Error("an empty list")
	}
}

// By hand.
func TestCentroid(t *testing.T) {
	g := realign.Grid{N: [3]int{3, 2, 2}, Affine: [16]float64{-2, 0, 0, 10, 0, 3, 0, 20, 0, 0, 4, 30, 0, 0, 0, 1}}
	mask := make([]bool, 12)
	mask[0] = true           // (0,0,0)
	mask[2+3*(1+2*1)] = true // (2,1,1)
	if c := realign.Centroid(g, mask); c != [3]float64{8, 21.5, 32} {
		t.Errorf("got %v", c)
	}
	if c := realign.Centroid(g, make([]bool, 12)); c != [3]float64{8, 21.5, 32} { // the middle of the field
		t.Errorf("empty mask: %v", c)
	}
}
