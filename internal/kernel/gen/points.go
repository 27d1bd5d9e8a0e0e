package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// points writes the spline interpolators at arbitrary points: taps along x in
// lanes.
func points() {
	for _, degree := range []int{3, 5} {
		pointKernel(degree, false)
		pointKernel(degree, true)
	}
}

func pointKernel(degree int, gradient bool) {
	taps, lanes := degree+1, 8
	if degree == 3 {
		lanes = 4
	}
	row := 4 * lanes // bytes
	digit := map[int]string{3: "3", 5: "5"}[degree]
	if gradient {
		function("gradient"+digit, "func(v, gx, gy, gz, c *float32, mx, area int, base *int32, tx, ty, tz *float32, n int, table *float32)",
			"gradient"+digit+" is the assembly of gradient"+digit+"Plain.")
	} else {
		function("value"+digit, "func(v, c *float32, mx, area int, base *int32, tx, ty, tz *float32, n int, table *float32)",
			"value"+digit+" is the assembly of value"+digit+"Plain.")
	}
	c, mx, area := arg("c"), arg("mx"), arg("area")
	g.SHLQ(U8(2), mx)
	g.SHLQ(U8(2), area)
	area3, area5 := g.GP64(), reg.GPVirtual(nil)
	g.LEAQ(indexed(area, area, 2), area3)
	if taps == 6 {
		area5 = g.GP64()
		g.LEAQ(indexed(area, area, 4), area5)
	}
	base := arg("base")
	// Weights come first, for some points in a row: the chain from fraction to
	// weight to memory and back is long, and nothing waits for it so.
	const points = 16
	record := 3 * 32
	if gradient {
		record = 6 * 32
	}
	work := scratch(points * record)
	i, stop, rec := g.GP64(), g.GP64(), g.GP64()
	g.XORQ(i, i)

	g.Label("some")
	g.MOVQ(onStack("n"), rec)
	g.CMPQ(i, rec)
	g.JGE(LabelRef("end"))
	g.LEAQ(at(i, points), stop)
	g.CMPQ(stop, rec)
	g.CMOVQGT(rec, stop)
	g.MOVQ(work, rec)
	{
		table, k := arg("table"), g.GP64()
		fractions := [3]reg.GPVirtual{arg("tx"), arg("ty"), arg("tz")}
		g.MOVQ(i, k)
		g.Label("weights")
		for a := range 3 {
			t := register(lanes)
			g.VBROADCASTSS(indexed(fractions[a], k, 4), t)
			g.VMOVUPS(horner(t, table, 0, degree, lanes), at(spot(rec, a, 0)))
			if gradient {
				g.VMOVUPS(horner(t, table, row*(degree+1), degree-1, lanes), at(spot(rec, a+3, 0)))
			}
		}
		g.ADDQ(U32(uint32(record)), rec)
		g.INCQ(k)
		g.CMPQ(k, stop)
		g.JL(LabelRef("weights"))
	}
	g.MOVQ(work, rec)

	g.Label("next")
	p := g.GP64()
	g.MOVLQSX(indexed(base, i, 4), p)
	g.LEAQ(indexed(c, p, 4), p)
	planes := func(z int) Mem {
		switch z {
		case 0:
			return at(p, 0)
		case 1, 2, 4:
			return indexed(p, area, uint8(z))
		case 3:
			return indexed(p, area3, 1)
		}
		return indexed(p, area5, 1)
	}
	var sum, slope []vec // of each plane, over y
	for range taps {
		sum = append(sum, register(lanes))
		if gradient {
			slope = append(slope, register(lanes))
		}
	}
	for y := range taps {
		w, t := register(lanes), register(lanes)
		g.VBROADCASTSS(at(spot(rec, 1, y)), w)
		if !gradient {
			for z := range taps {
				if y == 0 {
					g.VMULPS(planes(z), w, sum[z])
				} else {
					accumulate(planes(z), w, sum[z], t)
				}
			}
		} else {
			d, r := register(lanes), register(lanes)
			g.VBROADCASTSS(at(spot(rec, 4, y)), d)
			for z := range taps {
				g.VMOVUPS(planes(z), r)
				if y == 0 {
					g.VMULPS(r, w, sum[z])
					g.VMULPS(r, d, slope[z])
				} else {
					accumulate(r, w, sum[z], t)
					accumulate(r, d, slope[z], r)
				}
			}
		}
		if y+1 < taps {
			g.ADDQ(mx, p)
		}
	}
	dz := register(lanes)
	for z := range taps {
		w := register(lanes)
		if gradient {
			d := register(lanes)
			g.VBROADCASTSS(at(spot(rec, 5, z)), d)
			if z == 0 {
				g.VMULPS(sum[0], d, dz)
			} else {
				accumulate(sum[z], d, dz, d)
			}
		}
		g.VBROADCASTSS(at(spot(rec, 2, z)), w)
		if z == 0 {
			g.VMULPS(sum[0], w, sum[0])
			if gradient {
				g.VMULPS(slope[0], w, slope[0])
			}
			continue
		}
		accumulate(sum[z], w, sum[0], sum[z])
		if gradient {
			accumulate(slope[z], w, slope[0], slope[z])
		}
	}
	if lanes == 8 {
		// Lanes 6 and 7 hold what lay beyond the taps, be it NaN.
		zero := g.YMM()
		g.VXORPS(zero, zero, zero)
		g.VBLENDPS(U8(0xc0), zero, sum[0], sum[0])
		if gradient {
			g.VBLENDPS(U8(0xc0), zero, slope[0], slope[0])
			g.VBLENDPS(U8(0xc0), zero, dz, dz)
		}
	}
	if !gradient {
		g.VMULPS(at(spot(rec, 0, 0)), sum[0], sum[0])
		out := total(sum[0], lanes)
		g.Load(g.Param("v"), p)
		g.VMOVSS(out, indexed(p, i, 4))
	} else {
		wx, dx := register(lanes), register(lanes)
		g.VMOVUPS(at(spot(rec, 0, 0)), wx)
		g.VMOVUPS(at(spot(rec, 3, 0)), dx)
		g.VMULPS(dx, sum[0], dx)
		g.VMULPS(wx, sum[0], sum[0])
		g.VMULPS(wx, slope[0], slope[0])
		g.VMULPS(wx, dz, dz)
		out := totals([4]vec{sum[0], dx, slope[0], dz}, lanes)
		for k, name := range []string{"v", "gx", "gy", "gz"} {
			g.Load(g.Param(name), p)
			if k == 0 {
				g.VMOVSS(out, indexed(p, i, 4))
			} else {
				g.VEXTRACTPS(U8(k), out, indexed(p, i, 4))
			}
		}
	}
	g.ADDQ(U32(uint32(record)), rec)
	g.INCQ(i)
	g.CMPQ(i, stop)
	g.JL(LabelRef("next"))
	g.JMP(LabelRef("some"))
	g.Label("end")
	g.VZEROUPPER()
	g.RET()
}

// spot is the scratch of the weight of tap k: kinds 0, 1, 2 are the weights of x,
// y, z, kinds 3, 4, 5 the slopes.
func spot(work reg.Register, kind, k int) (reg.Register, int) { return work, 32*kind + 4*k }

// horner evaluates the polynomials of all lanes, coefficients in rows of table.
func horner(t vec, table reg.Register, from, degree, lanes int) vec {
	w := register(lanes)
	g.VMOVUPS(at(table, from+4*lanes*degree), w)
	for k := degree - 1; k >= 0; k-- {
		g.VMULPS(t, w, w)
		g.VADDPS(at(table, from+4*lanes*k), w, w)
	}
	return w
}

// total sums lanes in the order of lanes8 and lanes4.
func total(v vec, lanes int) reg.Register {
	t := register(lanes)
	g.VPERMILPS(U8(0b01001110), v, t)
	g.VADDPS(t, v, v)
	g.VPERMILPS(U8(0b10110001), v, t)
	g.VADDPS(t, v, v)
	if lanes == 4 {
		return v
	}
	hi, y := g.XMM(), v.(reg.VecVirtual)
	g.VEXTRACTF128(U8(1), v, hi)
	g.VADDPS(hi, y.AsX(), y.AsX())
	return y.AsX()
}

// totals sums the lanes of four vectors, each in the order of total.
func totals(v [4]vec, lanes int) reg.Register {
	var half [2]vec
	for k := range half {
		lo, hi := register(lanes), register(lanes)
		g.VUNPCKLPS(v[2*k+1], v[2*k], lo) // a0 b0 a1 b1
		g.VUNPCKHPS(v[2*k+1], v[2*k], hi) // a2 b2 a3 b3
		g.VADDPS(hi, lo, lo)
		half[k] = lo
	}
	lo, hi := register(lanes), register(lanes)
	g.VUNPCKLPD(half[1], half[0], lo)
	g.VUNPCKHPD(half[1], half[0], hi)
	g.VADDPS(hi, lo, lo)
	if lanes == 4 {
		return lo
	}
	x, y := g.XMM(), lo.(reg.VecVirtual)
	g.VEXTRACTF128(U8(1), lo, x)
	g.VADDPS(x, y.AsX(), y.AsX())
	return y.AsX()
}
