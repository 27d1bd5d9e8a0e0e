package kernel

// A Frame says what the points of a row have in common for [Slopes].
type Frame struct {
	// Turn takes derivatives by voxel to derivatives by mm, row by row.
	Turn [9]float32
	// At is the position of the point of index 0, mm from the centre of rotation, and
	// Step what each further index adds.
	At, Step [3]float32
	// Gain is the brightness at index 0, and GainStep what each further index adds.
	Gain, GainStep float32
}

// SlopeRows are the rows that [Slopes] writes: prediction, residual, and the derivatives of
// the prediction by a shift (3) and a turn (3).
const SlopeRows = 8

// Slopes predicts n values of a row and says how the predictions change with the pose.
// With g the gain at the point's index, v and d the template's value and derivatives by
// voxel, p the position: the prediction is g v, the residual what value holds less that,
// the derivative by a shift g Turn d, and that by a turn p x g Turn d. All in float32.
//
// Row k of the template's, of value and three derivatives, begins at in[k*inStride], and
// row k of the output at out[k*outStride]. Every row must hold n rounded up to eight
// elements; what comes to stand past n is of no account. Nothing may overlap.
func Slopes(out []float32, outStride int, in []float32, inStride int, value []float32, index []int32, n int, f *Frame) {
	if n <= 0 {
		return
	}
	wide := (n + 7) &^ 7
	check(outStride >= wide && inStride >= wide && len(out) >= (SlopeRows-1)*outStride+wide && len(in) >= 3*inStride+wide && len(value) >= wide && len(index) >= wide, "rows that are too short")
	if useAssembly {
		slopes(&out[0], 4*outStride, &in[0], 4*inStride, &value[0], &index[0], wide, &f.Turn[0])
		return
	}
	slopesPlain(out, outStride, in, inStride, value[:n], index[:n], f)
}

func slopesPlain(out []float32, outStride int, in []float32, inStride int, value []float32, index []int32, f *Frame) {
	n := len(value)
	row := func(k int) []float32 { return out[k*outStride:][:n] }
	pred, res := row(0), row(1)
	j0, j1, j2, j3, j4, j5 := row(2), row(3), row(4), row(5), row(6), row(7)
	v, dx, dy, dz := in[:n], in[inStride:][:n], in[2*inStride:][:n], in[3*inStride:][:n]
	t := &f.Turn
	for q := range value {
		i := float32(index[q])
		g := float32(f.GainStep*i) + f.Gain
		p := float32(g * v[q])
		pred[q], res[q] = p, value[q]-p
		a := float32(g * (float32(t[0]*dx[q]) + float32(t[1]*dy[q]) + float32(t[2]*dz[q])))
		b := float32(g * (float32(t[3]*dx[q]) + float32(t[4]*dy[q]) + float32(t[5]*dz[q])))
		c := float32(g * (float32(t[6]*dx[q]) + float32(t[7]*dy[q]) + float32(t[8]*dz[q])))
		x, y, z := float32(f.Step[0]*i)+f.At[0], float32(f.Step[1]*i)+f.At[1], float32(f.Step[2]*i)+f.At[2]
		j0[q], j1[q], j2[q] = a, b, c
		j3[q] = float32(y*c) - float32(z*b)
		j4[q] = float32(z*a) - float32(x*c)
		j5[q] = float32(x*b) - float32(y*a)
	}
}
