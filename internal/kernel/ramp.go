package kernel

// AddRamp adds to dst the values of src times a factor that is start at the first and
// grows by step with each: dst[i] += (start + step i) src[i], all in float32. dst may be src.
func AddRamp(dst, src []float32, start, step float32) {
	check(len(dst) == len(src), "rows differ in length")
	if useAssembly && len(dst) > 0 {
		addRamp(&dst[0], &src[0], len(dst), start, step, &affineTable[0], &masks[0])
		return
	}
	addRampPlain(dst, src, start, step)
}

func addRampPlain(dst, src []float32, start, step float32) {
	src = src[:len(dst)]
	for i := range dst {
		f := float32(step*float32(i)) + start
		dst[i] += float32(f * src[i])
	}
}

// OverRamp divides likewise, by no less than least: dst[i] = src[i] / max(start +
// step i, least), where no number by least. dst may be src.
func OverRamp(dst, src []float32, start, step, least float32) {
	check(len(dst) == len(src), "rows differ in length")
	if useAssembly && len(dst) > 0 {
		overRamp(&dst[0], &src[0], len(dst), start, step, least, &affineTable[0], &masks[0])
		return
	}
	overRampPlain(dst, src, start, step, least)
}

func overRampPlain(dst, src []float32, start, step, least float32) {
	src = src[:len(dst)]
	for i := range dst {
		f := float32(step*float32(i)) + start
		if !(f > least) {
			f = least
		}
		dst[i] = src[i] / f
	}
}
