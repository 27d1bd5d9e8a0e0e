package kernel

// The straightforward scalar code that the kernels are measured against in
// benchmarks: weights in float64, one point at a time, 216 taps in a double loop.

func scalarWeights5(t float64) (w [6]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	t4, u4 := float64(t2*t2), float64(u2*u2)
	w[0] = float32(float64(float64(u4*u) * (1.0 / 120)))
	w[5] = float32(float64(float64(t4*t) * (1.0 / 120)))
	w[2] = float32(scalarCentre5(t2, t4, t))
	w[3] = float32(scalarCentre5(u2, u4, u))
	w[1] = float32(scalarSide5(t))
	w[4] = float32(scalarSide5(u))
	return w
}

func scalarCentre5(x2, x4, x float64) float64 {
	return 0.55 - x2/2 + x4/4 - float64(float64(x4*x)*(1.0/12))
}

func scalarSide5(x float64) float64 {
	r := float64(1.0/24*x) - 1.0/6
	r = float64(r*x) + 1.0/6
	r = float64(r*x) + 1.0/6
	r = float64(r*x) - 5.0/12
	return float64(r*x) + 13.0/60
}

func scalarSlopes5(t float64) (w [6]float32) {
	u := 1 - t
	t2, u2 := float64(t*t), float64(u*u)
	w[0] = float32(-float64(float64(u2*u2) * (1.0 / 24)))
	w[5] = float32(float64(float64(t2*t2) * (1.0 / 24)))
	w[2] = float32(scalarCentreSlope5(t, t2))
	w[3] = float32(-scalarCentreSlope5(u, u2))
	w[1] = float32(scalarSideSlope5(t))
	w[4] = float32(-scalarSideSlope5(u))
	return w
}

func scalarCentreSlope5(x, x2 float64) float64 {
	return -x + float64(x2*x) - float64(float64(x2*x2)*(5.0/12))
}

func scalarSideSlope5(x float64) float64 {
	r := float64(5.0/24*x) - 4.0/6
	r = float64(r*x) + 0.5
	r = float64(r*x) + 1.0/3
	return float64(r*x) - 5.0/12
}

func scalarValue5(c []float32, mx, area, base int, tx, ty, tz float64) float32 {
	wx, wy, wz := scalarWeights5(tx), scalarWeights5(ty), scalarWeights5(tz)
	// Scalars, because the compiler keeps no array in registers.
	w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
	var sum float32
	for k := range wz {
		rows := c[base : base+5*mx+6]
		var plane float32
		for b := range wy {
			r := rows[b*mx:][:6]
			// Two chains of three keep the adder busy; the order is fixed.
			p := float32(w0*r[0]) + float32(w1*r[1]) + float32(w2*r[2])
			q := float32(w3*r[3]) + float32(w4*r[4]) + float32(w5*r[5])
			plane += float32(wy[b] * (p + q))
		}
		sum += float32(wz[k] * plane)
		base += area
	}
	return sum
}

func scalarGradient5(c []float32, mx, area, base int, tx, ty, tz float64) (v float32, g [3]float32) {
	wx, wy, wz := scalarWeights5(tx), scalarWeights5(ty), scalarWeights5(tz)
	dx, dy, dz := scalarSlopes5(tx), scalarSlopes5(ty), scalarSlopes5(tz)
	w0, w1, w2, w3, w4, w5 := wx[0], wx[1], wx[2], wx[3], wx[4], wx[5]
	d0, d1, d2, d3, d4, d5 := dx[0], dx[1], dx[2], dx[3], dx[4], dx[5]
	var gx, gy, gz float32
	for k := range wz {
		rows := c[base : base+5*mx+6]
		var pv, px, py float32
		for b := range wy {
			r := rows[b*mx:][:6]
			r0, r1, r2, r3, r4, r5 := r[0], r[1], r[2], r[3], r[4], r[5]
			p := float32(w0*r0) + float32(w1*r1) + float32(w2*r2)
			q := float32(w3*r3) + float32(w4*r4) + float32(w5*r5)
			dp := float32(d0*r0) + float32(d1*r1) + float32(d2*r2)
			dq := float32(d3*r3) + float32(d4*r4) + float32(d5*r5)
			row := p + q
			pv += float32(wy[b] * row)
			py += float32(dy[b] * row)
			px += float32(wy[b] * (dp + dq))
		}
		v += float32(wz[k] * pv)
		gx += float32(wz[k] * px)
		gy += float32(wz[k] * py)
		gz += float32(dz[k] * pv)
		base += area
	}
	return v, [3]float32{gx, gy, gz}
}
