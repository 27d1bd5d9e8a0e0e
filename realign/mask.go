package realign

// HeadMask finds the head in a volume: voxels above the middle between the air
// and Otsu's threshold (Otsu 1979, IEEE Trans. SMC 9(1):62-66) of the lightly
// smoothed volume, of which the largest face-connected piece is kept and its holes
// are filled. The middle, because Otsu's threshold lies midway between air and
// tissue and would leave out the dark parts of a shaded head; a Nyquist ghost,
// usually below a tenth of the head, stays outside. The air, the mean of what is
// below the threshold, need not be at zero.
func HeadMask(g Grid, vol []float32) []bool {
	s := newSmoother(g, maskSmoothing(g), [3]int{1, 1, 1})
	v := make([]float32, g.voxels())
	s.run(v, vol)
	split, air := otsu(v)
	t := float32((split + air) / 2)
	mask := make([]bool, len(v))
	for i, x := range v {
		mask[i] = x > t
	}
	keepLargest(mask, g.N)
	fillHoles(mask, g.N)
	return mask
}

func maskSmoothing(g Grid) float64 {
	e := g.edges()
	return max(e[0], e[1], e[2]) / 2
}

// otsu returns the threshold that splits the values into two classes of least
// variance inside, over 256 equal bins from the least to the greatest value;
// where a gap between the classes makes many thresholds equally good, the middle
// of the gap. below is the mean of the lower class.
func otsu(v []float32) (split, below float64) {
	const bins = 256
	lo, hi := v[0], v[0]
	for _, x := range v {
		lo, hi = min(lo, x), max(hi, x)
	}
	if !(hi > lo) {
		return float64(hi), float64(hi)
	}
	var h [bins]int
	scale := float64(bins) / float64(hi-lo)
	for _, x := range v {
		h[min(bins-1, int(float64(float64(x-lo)*scale)))]++
	}
	total, weight := 0.0, 0.0
	for i, n := range h {
		total += float64(n)
		weight += float64(float64(i) * float64(n))
	}
	best, at, last := -1.0, 0, 0
	n0, s0 := 0.0, 0.0
	for i, n := range h {
		n0 += float64(n)
		s0 += float64(float64(i) * float64(n))
		n1 := total - n0
		if n0 == 0 || n1 == 0 {
			continue
		}
		d := s0/n0 - (weight-s0)/n1
		// Otsu 1979, eq. 14: variance between the classes.
		switch b := float64(float64(float64(n0*n1)*d) * d); {
		case b > best:
			best, at, last = b, i, i
		case b == best:
			last = i
		}
	}
	split = float64(lo) + float64(at+last+2)/(2*scale)
	sum, count := 0.0, 0.0
	for _, x := range v {
		if float64(x) < split {
			sum += float64(x)
			count++
		}
	}
	return split, sum / count
}

// neighbours calls fn with the index of every face neighbour of voxel i.
func neighbours(i int, n [3]int, fn func(int)) {
	x, y, z := i%n[0], i/n[0]%n[1], i/(n[0]*n[1])
	if x > 0 {
		fn(i - 1)
	}
	if x < n[0]-1 {
		fn(i + 1)
	}
	if y > 0 {
		fn(i - n[0])
	}
	if y < n[1]-1 {
		fn(i + n[0])
	}
	if z > 0 {
		fn(i - n[0]*n[1])
	}
	if z < n[2]-1 {
		fn(i + n[0]*n[1])
	}
}

// flood labels all voxels reachable from the seeds through voxels where open
// holds, and returns how many there are.
func flood(seeds []int, n [3]int, label []int32, mark int32, open func(int) bool) int {
	stack := seeds
	for _, i := range stack {
		label[i] = mark
	}
	count := len(stack)
	for len(stack) > 0 {
		i := stack[len(stack)-1]
		stack = stack[:len(stack)-1]
		neighbours(i, n, func(j int) {
			if label[j] == 0 && open(j) {
				label[j] = mark
				count++
				stack = append(stack, j)
			}
		})
	}
	return count
}

// keepLargest clears all but the largest face-connected piece (the first, if
// several are as large).
func keepLargest(mask []bool, n [3]int) {
	label := make([]int32, len(mask))
	best, bestCount, next := int32(0), 0, int32(0)
	for i, in := range mask {
		if in && label[i] == 0 {
			next++
			if c := flood([]int{i}, n, label, next, func(j int) bool { return mask[j] }); c > bestCount {
				best, bestCount = next, c
			}
		}
	}
	for i := range mask {
		mask[i] = label[i] == best && best > 0
	}
}

// fillHoles sets every voxel from which the field's border cannot be reached
// outside the mask.
func fillHoles(mask []bool, n [3]int) {
	var seeds []int
	for i := range mask {
		x, y, z := i%n[0], i/n[0]%n[1], i/(n[0]*n[1])
		if !mask[i] && (x == 0 || x == n[0]-1 || y == 0 || y == n[1]-1 || z == 0 || z == n[2]-1) {
			seeds = append(seeds, i)
		}
	}
	label := make([]int32, len(mask))
	flood(seeds, n, label, 1, func(j int) bool { return !mask[j] })
	for i := range mask {
		mask[i] = mask[i] || label[i] == 0
	}
}

// dilate returns the mask grown by some layers of face neighbours.
func dilate(mask []bool, n [3]int, layers int) []bool {
	out := append([]bool(nil), mask...)
	var rim []int
	for range layers {
		rim = rim[:0]
		for i, in := range out {
			if in {
				neighbours(i, n, func(j int) {
					if !out[j] {
						rim = append(rim, j)
					}
				})
			}
		}
		for _, j := range rim {
			out[j] = true
		}
	}
	return out
}

// Centroid returns the mean world position of a mask's voxels, mm; the centre
// of the field for an empty mask.
func Centroid(g Grid, mask []bool) [3]float64 {
	var s [3]float64
	count := 0.0
	i := 0
	for z := range g.N[2] {
		for y := range g.N[1] {
			for x := range g.N[0] {
				if mask[i] {
					s[0] += float64(x)
					s[1] += float64(y)
					s[2] += float64(z)
					count++
				}
				i++
			}
		}
	}
	if count == 0 {
		return g.world(float64(g.N[0]-1)/2, float64(g.N[1]-1)/2, float64(g.N[2]-1)/2)
	}
	return g.world(s[0]/count, s[1]/count, s[2]/count)
}
