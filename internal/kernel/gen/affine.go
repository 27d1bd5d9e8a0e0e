package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// Rows of the table of constants, eight alike in each: kernel.affineTable.
const (
	half = 32 * iota
	quarter
	twelfth
	elevenTwentieths
	perHundredTwenty
	twentyFourth
	sixth
	fiveTwelfths
	thirteenSixtieths
	twoThirds
	lanes32 // 0 to 7 as int32
	lanes64 // as float64, two rows
)

func affine() {
	for _, dims := range []int{3, 2} {
		for _, degree := range []int{3, 5} {
			affineRow(degree, dims)
		}
	}
}

// affineRow is for fields of three dimensions, or of two.
func affineRow(degree, dims int) {
	taps := degree + 1
	name := fmt.Sprintf("%sRow%d", map[int]string{3: "affine", 2: "flat"}[dims], degree)
	sizes := map[int]string{3: "mx, area", 2: "mx"}[dims]
	function(name, "func(dst *float32, n int, c *float32, "+sizes+" int, axes *float64, table *float32, masks *int32)", name+" is the assembly of "+name+"Plain.")
	dst, c, mx, axes, table := arg("dst"), arg("c"), arg("mx"), arg("axes"), arg("table")
	area := reg.GPVirtual(nil)
	if dims == 3 {
		area = arg("area")
	}
	mx3, mx5 := g.GP64(), reg.GPVirtual(nil)
	g.LEAQ(indexed(mx, mx, 2), mx3)
	g.SHLQ(U8(2), mx3)
	if taps == 6 {
		mx5 = g.GP64()
		g.LEAQ(indexed(mx, mx, 4), mx5)
		g.SHLQ(U8(2), mx5)
	}
	work := scratch(2*taps*32 + 2*32)
	fy, fz := at(work, 2*taps*32), at(work, 2*taps*32+32)
	constant := func(row int) Mem { return at(table, row) }
	one := g.YMM()
	i := g.GP64()
	g.XORQ(i, i)

	g.Label("next")
	g.CMPQ(i, onStack("n"))
	g.JGE(LabelRef("end"))
	ones(one)
	// Where the next eight lie: cells as int32, fractions as float32.
	index := [2]reg.VecVirtual{g.YMM(), g.YMM()}
	{
		x := g.XMM()
		g.VXORPS(x, x, x)
		g.VCVTSI2SDQ(i, x, x)
		b := g.YMM()
		g.VBROADCASTSD(x, b)
		g.VADDPD(at(table, lanes64), b, index[0])
		g.VADDPD(at(table, lanes64+32), b, index[1])
	}
	same := g.YMM()
	var fractionX reg.VecVirtual
	p := g.GP64()
	g.MOVQ(c, p)
	for a := range dims {
		var cells, fracs [2]reg.VecVirtual
		zero, limit := g.YMM(), g.YMM()
		g.VXORPD(zero, zero, zero)
		start, step := g.YMM(), g.YMM()
		g.VBROADCASTSD(at(axes, 8*a), start)
		g.VBROADCASTSD(at(axes, 8*(dims+a)), step)
		g.VBROADCASTSD(at(axes, 8*(2*dims+a)), limit)
		for h := range 2 {
			u, f := g.YMM(), g.YMM()
			cells[h], fracs[h] = g.YMM(), g.YMM()
			g.VMULPD(step, index[h], u)
			g.VADDPD(start, u, u)
			g.VMAXPD(zero, u, u) // zero where NaN
			g.VMINPD(limit, u, u)
			g.VCVTTPD2DQY(u, cells[h].AsX())
			g.VCVTDQ2PD(cells[h].AsX(), f)
			g.VSUBPD(f, u, u)
			g.VCVTPD2PSY(u, fracs[h].AsX())
		}
		cell, frac := g.YMM(), g.YMM()
		g.VINSERTF128(U8(1), cells[1].AsX(), cells[0], cell)
		g.VINSERTF128(U8(1), fracs[1].AsX(), fracs[0], frac)
		if a == 0 {
			g.VPSUBD(at(table, lanes32), cell, cell)
			fractionX = frac
		} else {
			g.VMOVUPS(frac, [3]Mem{{}, fy, fz}[a])
		}
		at0, eq := g.YMM(), g.YMM()
		g.VPBROADCASTD(cell.AsX(), at0)
		g.VPCMPEQD(at0, cell, eq)
		if a == 0 {
			g.VMOVDQA(eq, same)
		} else {
			g.VPAND(eq, same, same)
		}
		k := g.GP64()
		g.VMOVD(cell.AsX(), k.As32())
		switch a {
		case 1:
			g.IMULQ(mx, k)
		case 2:
			g.IMULQ(area, k)
		}
		g.LEAQ(indexed(p, k, 4), p)
	}
	// How many of the eight lie in a row of cells: those up to the first that does not.
	run := g.GP32()
	g.VMOVMSKPS(same, run)
	g.NOTL(run)
	g.BSFL(run, run)

	// Weights: of x in registers, of y and z in memory.
	var wx [6]reg.VecVirtual
	for a := dims - 1; a >= 0; a-- {
		t := fractionX
		if a > 0 {
			t = g.YMM()
			g.VMOVUPS([3]Mem{{}, fy, fz}[a], t)
		}
		u := g.YMM()
		g.VSUBPS(t, one, u)
		put := func(tap int, w reg.VecVirtual) {
			if a == 0 {
				wx[tap] = w
			} else {
				g.VMOVUPS(w, at(work, 32*(taps*(a-1)+tap)))
			}
		}
		for side := range 2 {
			x := [2]reg.VecVirtual{t, u}[side]
			tap := func(k int) int { return [2]int{degree - k, k}[side] }
			if degree == 5 {
				put(tap(0), outer5(x, constant))
				put(tap(4), side5(x, constant))
				put(tap(3), centre5(x, constant))
			} else {
				put(tap(0), outer3(x, constant))
				put(tap(2), centre3(x, constant, one))
			}
		}
	}

	sum := g.YMM()
	w, z := g.GP64(), g.GP64()
	if dims == 3 {
		g.VXORPS(sum, sum, sum)
		g.MOVQ(work, w)
		g.MOVQ(U32(taps), z)
		g.Label("plane")
	}
	plane := g.YMM()
	for y := range taps {
		tapAt := func(k int) Mem {
			m := at(p, 4*k)
			switch y {
			case 1, 2:
				m.Index, m.Scale = mx, uint8(4*y)
			case 3:
				m.Index, m.Scale = mx3, 1
			case 5:
				m.Index, m.Scale = mx5, 1
			}
			return m
		}
		if y == 4 { // no index has a scale of 16
			q := g.GP64()
			g.LEAQ(indexed(p, mx, 8), q)
			tapAt = func(k int) Mem { return Mem{Base: q, Index: mx, Scale: 8, Disp: 4 * k} }
		}
		var part [2]reg.VecVirtual
		for h := range part {
			s := g.YMM()
			from, to := h*taps/2, (h+1)*taps/2
			for k := from; k < to; k++ {
				if k == from {
					g.VMULPS(tapAt(k), wx[k], s)
				} else {
					accumulate(tapAt(k), wx[k], s, g.YMM())
				}
			}
			part[h] = s
		}
		g.VADDPS(part[1], part[0], part[0])
		if y == 0 {
			g.VMULPS(at(work, 0), part[0], plane)
		} else {
			accumulate(at(work, 32*y), part[0], plane, part[0])
		}
	}
	if dims == 3 {
		accumulate(at(w, 32*taps), plane, sum, plane)
		g.ADDQ(I8(32), w)
		g.LEAQ(indexed(p, area, 4), p)
		g.DECQ(z)
		g.JNZ(LabelRef("plane"))
	} else {
		sum = plane
	}

	left := g.GP64()
	g.MOVQ(onStack("n"), left)
	g.SUBQ(i, left)
	g.CMPQ(left, I8(8))
	g.JL(LabelRef("tail"))
	g.VMOVUPS(sum, indexed(dst, i, 4))
	g.ADDQ(run.As64(), i)
	g.JMP(LabelRef("next"))
	g.Label("tail")
	mask := tailMask(arg("masks"), left)
	g.VMASKMOVPS(sum, mask, indexed(dst, i, 4))
	g.ADDQ(run.As64(), i)
	g.JMP(LabelRef("next"))
	g.Label("end")
	g.VZEROUPPER()
	g.RET()
}

// The pieces of the B-splines as in the plain twin.

func outer5(x reg.VecVirtual, constant func(int) Mem) reg.VecVirtual {
	v := g.YMM()
	g.VMULPS(x, x, v)
	g.VMULPS(v, v, v)
	g.VMULPS(x, v, v)
	g.VMULPS(constant(perHundredTwenty), v, v)
	return v
}

func side5(x reg.VecVirtual, constant func(int) Mem) reg.VecVirtual {
	r := g.YMM()
	g.VMULPS(constant(twentyFourth), x, r)
	g.VSUBPS(constant(sixth), r, r)
	for range 2 {
		g.VMULPS(x, r, r)
		g.VADDPS(constant(sixth), r, r)
	}
	g.VMULPS(x, r, r)
	g.VSUBPS(constant(fiveTwelfths), r, r)
	g.VMULPS(x, r, r)
	g.VADDPS(constant(thirteenSixtieths), r, r)
	return r
}

func centre5(x reg.VecVirtual, constant func(int) Mem) reg.VecVirtual {
	q, r, s := g.YMM(), g.YMM(), g.YMM()
	g.VMULPS(x, x, q)
	g.VMULPS(constant(twelfth), x, s)
	g.VMOVUPS(constant(quarter), r)
	g.VSUBPS(s, r, r)
	g.VMULPS(q, r, r)
	g.VSUBPS(constant(half), r, r)
	g.VMULPS(q, r, r)
	g.VADDPS(constant(elevenTwentieths), r, r)
	return r
}

func outer3(x reg.VecVirtual, constant func(int) Mem) reg.VecVirtual {
	v := g.YMM()
	g.VMULPS(x, x, v)
	g.VMULPS(x, v, v)
	g.VMULPS(constant(sixth), v, v)
	return v
}

func centre3(x reg.VecVirtual, constant func(int) Mem, one reg.VecVirtual) reg.VecVirtual {
	q, r := g.YMM(), g.YMM()
	g.VMULPS(x, x, q)
	g.VMULPS(constant(half), x, r)
	g.VSUBPS(one, r, r)
	g.VMULPS(q, r, r)
	g.VADDPS(constant(twoThirds), r, r)
	return r
}
