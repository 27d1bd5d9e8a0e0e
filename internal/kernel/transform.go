package kernel

// Passes of batched complex transforms. Complex sample m of every lane stands at
// z[2m] (real parts) and z[2m+1] (imaginary parts).

// Butterflies runs one pass, in place, of radix 2, 3 or 4 within blocks of radix*q
// complex samples: decimation in frequency (Gentleman, Sande 1966), or its inverse,
// decimation in time (Cooley, Tukey 1965). twiddle holds cos and -sin of 2 pi i
// j/(radix q) for j = 0 ... q-1 and i = 1 ... radix-1, in that nesting; the inverse
// takes the same.
func Butterflies(z []Lanes, radix, q int, twiddle []float64, inverse bool) {
	size := 2 * radix * q
	check(radix >= 2 && radix <= 4 && q > 0 && len(z)%size == 0 && len(twiddle) == 2*(radix-1)*q, "samples are not whole blocks, or twiddles do not fit")
	if len(z) == 0 {
		return
	}
	if useAssembly {
		end, at, w := &z[len(z)-1][LaneCount-1], &z[0][0], &twiddle[0]
		switch {
		case radix == 2 && !inverse:
			forward2(at, end, q, w)
		case radix == 2:
			inverse2(at, end, q, w)
		case radix == 3 && !inverse:
			forward3(at, end, q, w, sin60)
		case radix == 3:
			inverse3(at, end, q, w, sin60)
		case !inverse:
			forward4(at, end, q, w)
		default:
			inverse4(at, end, q, w)
		}
		return
	}
	switch {
	case radix == 2 && !inverse:
		forward2Plain(z, q, twiddle)
	case radix == 2:
		inverse2Plain(z, q, twiddle)
	case radix == 3 && !inverse:
		forward3Plain(z, q, twiddle)
	case radix == 3:
		inverse3Plain(z, q, twiddle)
	case !inverse:
		forward4Plain(z, q, twiddle)
	default:
		inverse4Plain(z, q, twiddle)
	}
}

func forward2Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		wr, wi := twiddle[2*j], twiddle[2*j+1]
		for b := j; 2*b < len(z); b += 2 * q {
			ar, ai := &z[2*b], &z[2*b+1]
			br, bi := &z[2*(b+q)], &z[2*(b+q)+1]
			for l := range ar {
				xr, xi := ar[l]-br[l], ai[l]-bi[l]
				ar[l] += br[l]
				ai[l] += bi[l]
				br[l] = float64(xr*wr) - float64(xi*wi)
				bi[l] = float64(xr*wi) + float64(xi*wr)
			}
		}
	}
}

func inverse2Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		wr, wi := twiddle[2*j], -twiddle[2*j+1]
		for b := j; 2*b < len(z); b += 2 * q {
			ar, ai := &z[2*b], &z[2*b+1]
			br, bi := &z[2*(b+q)], &z[2*(b+q)+1]
			for l := range ar {
				xr := float64(br[l]*wr) - float64(bi[l]*wi)
				xi := float64(br[l]*wi) + float64(bi[l]*wr)
				br[l] = ar[l] - xr
				bi[l] = ai[l] - xi
				ar[l] += xr
				ai[l] += xi
			}
		}
	}
}

// sin60 is the sine of 60 degrees, sqrt(3)/2 (OEIS A010527).
const sin60 = 0.86602540378443864676372317075293618

func forward3Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		w := twiddle[4*j : 4*j+4 : 4*j+4]
		w1r, w1i, w2r, w2i := w[0], w[1], w[2], w[3]
		for at := j; 2*at < len(z); at += 3 * q {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			for l := range ar {
				sr, si := br[l]+cr[l], bi[l]+ci[l]
				dr, di := float64((br[l]-cr[l])*sin60), float64((bi[l]-ci[l])*sin60)
				hr, hi := ar[l]-float64(0.5*sr), ai[l]-float64(0.5*si)
				ar[l] += sr
				ai[l] += si
				// b' = h - i d, c' = h + i d
				xr, xi := hr+di, hi-dr
				br[l] = float64(xr*w1r) - float64(xi*w1i)
				bi[l] = float64(xr*w1i) + float64(xi*w1r)
				xr, xi = hr-di, hi+dr
				cr[l] = float64(xr*w2r) - float64(xi*w2i)
				ci[l] = float64(xr*w2i) + float64(xi*w2r)
			}
		}
	}
}

func inverse3Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		w := twiddle[4*j : 4*j+4 : 4*j+4]
		w1r, w1i, w2r, w2i := w[0], -w[1], w[2], -w[3]
		for at := j; 2*at < len(z); at += 3 * q {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			for l := range ar {
				pr := float64(br[l]*w1r) - float64(bi[l]*w1i)
				pi := float64(br[l]*w1i) + float64(bi[l]*w1r)
				qr := float64(cr[l]*w2r) - float64(ci[l]*w2i)
				qi := float64(cr[l]*w2i) + float64(ci[l]*w2r)
				sr, si := pr+qr, pi+qi
				dr, di := float64((pr-qr)*sin60), float64((pi-qi)*sin60)
				hr, hi := ar[l]-float64(0.5*sr), ai[l]-float64(0.5*si)
				ar[l] += sr
				ai[l] += si
				// b = h + i d, c = h - i d
				br[l], bi[l] = hr-di, hi+dr
				cr[l], ci[l] = hr+di, hi-dr
			}
		}
	}
}

func forward4Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		w := twiddle[6*j : 6*j+6 : 6*j+6]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], w[1], w[2], w[3], w[4], w[5]
		for at := j; 2*at < len(z); at += 4 * q {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			dr, di := &z[2*(at+3*q)], &z[2*(at+3*q)+1]
			if j == 0 { // every twiddle is one
				for l := range ar {
					pr, pi := ar[l]+cr[l], ai[l]+ci[l]
					mr, mi := ar[l]-cr[l], ai[l]-ci[l]
					sr, si := br[l]+dr[l], bi[l]+di[l]
					tr, ti := br[l]-dr[l], bi[l]-di[l]
					ar[l], ai[l] = pr+sr, pi+si
					br[l], bi[l] = mr+ti, mi-tr
					cr[l], ci[l] = pr-sr, pi-si
					dr[l], di[l] = mr-ti, mi+tr
				}
				continue
			}
			for l := range ar {
				pr, pi := ar[l]+cr[l], ai[l]+ci[l]
				mr, mi := ar[l]-cr[l], ai[l]-ci[l]
				sr, si := br[l]+dr[l], bi[l]+di[l]
				tr, ti := br[l]-dr[l], bi[l]-di[l]
				ar[l], ai[l] = pr+sr, pi+si
				xr, xi := mr+ti, mi-tr // m - i t
				br[l] = float64(xr*w1r) - float64(xi*w1i)
				bi[l] = float64(xr*w1i) + float64(xi*w1r)
				xr, xi = pr-sr, pi-si
				cr[l] = float64(xr*w2r) - float64(xi*w2i)
				ci[l] = float64(xr*w2i) + float64(xi*w2r)
				xr, xi = mr-ti, mi+tr // m + i t
				dr[l] = float64(xr*w3r) - float64(xi*w3i)
				di[l] = float64(xr*w3i) + float64(xi*w3r)
			}
		}
	}
}

func inverse4Plain(z []Lanes, q int, twiddle []float64) {
	for j := range q {
		w := twiddle[6*j : 6*j+6 : 6*j+6]
		w1r, w1i, w2r, w2i, w3r, w3i := w[0], -w[1], w[2], -w[3], w[4], -w[5]
		for at := j; 2*at < len(z); at += 4 * q {
			ar, ai := &z[2*at], &z[2*at+1]
			br, bi := &z[2*(at+q)], &z[2*(at+q)+1]
			cr, ci := &z[2*(at+2*q)], &z[2*(at+2*q)+1]
			dr, di := &z[2*(at+3*q)], &z[2*(at+3*q)+1]
			if j == 0 {
				for l := range ar {
					pr, pi := ar[l]+cr[l], ai[l]+ci[l]
					mr, mi := ar[l]-cr[l], ai[l]-ci[l]
					sr, si := br[l]+dr[l], bi[l]+di[l]
					tr, ti := br[l]-dr[l], bi[l]-di[l]
					ar[l], ai[l] = pr+sr, pi+si
					br[l], bi[l] = mr-ti, mi+tr
					cr[l], ci[l] = pr-sr, pi-si
					dr[l], di[l] = mr+ti, mi-tr
				}
				continue
			}
			for l := range ar {
				xr := float64(br[l]*w1r) - float64(bi[l]*w1i)
				xi := float64(br[l]*w1i) + float64(bi[l]*w1r)
				yr := float64(cr[l]*w2r) - float64(ci[l]*w2i)
				yi := float64(cr[l]*w2i) + float64(ci[l]*w2r)
				vr := float64(dr[l]*w3r) - float64(di[l]*w3i)
				vi := float64(dr[l]*w3i) + float64(di[l]*w3r)
				pr, pi := ar[l]+yr, ai[l]+yi
				mr, mi := ar[l]-yr, ai[l]-yi
				sr, si := xr+vr, xi+vi
				tr, ti := xr-vr, xi-vi
				ar[l], ai[l] = pr+sr, pi+si
				br[l], bi[l] = mr-ti, mi+tr // m + i t
				cr[l], ci[l] = pr-sr, pi-si
				dr[l], di[l] = mr+ti, mi-tr // m - i t
			}
		}
	}
}

// Mirrored applies to bins k and m-k of a transform of m complex samples, for k from 1
// to below m/2, what is linear in a bin and its mirror's conjugate: with V = conj Z[m-k]
// Z[k] becomes A Z[k] + B V. table holds the real and imaginary parts of A and B of
// every bin, and place where bins stand in z.
func Mirrored(z []Lanes, place []int, table []float64) {
	m := len(place)
	check(len(z) == 2*m && len(table) == 4*m, "samples, places and table differ in length")
	pairs := (m - 1) / 2
	for _, p := range place {
		check(p >= 0 && p < m, "a place outside the samples")
	}
	if pairs <= 0 {
		return
	}
	if useAssembly {
		mirrored(&z[0][0], &place[1], &place[m-1], &table[4], &table[4*(m-1)], pairs)
		return
	}
	mirroredPlain(z, place, table)
}

func mirroredPlain(z []Lanes, place []int, table []float64) {
	m := len(place)
	for k := 1; 2*k < m; k++ {
		i, j := place[k], place[m-k]
		zr, zi := &z[2*i], &z[2*i+1]
		vr, vi := &z[2*j], &z[2*j+1]
		t, u := table[4*k:4*k+4:4*k+4], table[4*(m-k):4*(m-k)+4:4*(m-k)+4]
		ar, ai, br, bi := t[0], t[1], t[2], t[3]
		cr, ci, dr, di := u[0], u[1], u[2], u[3]
		for l := range zr {
			r, s := zr[l], zi[l]
			q, v := vr[l], vi[l]
			zr[l] = (float64(ar*r) - float64(ai*s)) + (float64(br*q) + float64(bi*v))
			zi[l] = (float64(ar*s) + float64(ai*r)) + (float64(bi*q) - float64(br*v))
			vr[l] = (float64(cr*q) - float64(ci*v)) + (float64(dr*r) + float64(di*s))
			vi[l] = (float64(cr*v) + float64(ci*q)) + (float64(di*r) - float64(dr*s))
		}
	}
}
