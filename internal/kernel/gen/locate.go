package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// Where the parts of kernel.locator and kernel.locateTable lie, in bytes.
const (
	locatorStart = 24 * iota
	locatorStep
	locatorLo
	locatorHi

	tableHalf    = 64
	tableNumbers = 96
)

func locate() {
	function("locate", "func(base, near, index *int32, tx, ty, tz *float32, first, count int, axes *float64, strides *int32, mask, accept *bool, table *float64, order *uint8) int", "locate is the assembly of locator.plain.")
	first := arg("first")
	axes, strides, mask, table := arg("axes"), arg("strides"), arg("mask"), arg("table")
	work := scratch(32)
	i, to := g.GP64(), g.GP64() // points seen, found
	g.XORQ(i, i)
	g.XORQ(to, to)

	g.Label("next")
	g.CMPQ(i, onStack("count"))
	g.JGE(LabelRef("end"))
	number := [2]reg.VecVirtual{g.YMM(), g.YMM()}
	at0 := g.GP64()
	g.LEAQ(indexed(first, i, 1), at0)
	{
		x, b := g.XMM(), g.YMM()
		g.VXORPS(x, x, x)
		g.VCVTSI2SDQ(at0, x, x)
		g.VBROADCASTSD(x, b)
		for h := range number {
			g.VADDPD(at(table, 32*h), b, number[h])
		}
	}
	// Positions first: most rows begin and end outside.
	var x [3][2]reg.VecVirtual
	var in [2]reg.VecVirtual
	for h := range 2 {
		for a := range 3 {
			x[a][h] = g.YMM()
			v, m := x[a][h], g.YMM()
			g.VBROADCASTSD(at(axes, locatorStep+8*a), v)
			g.VMULPD(number[h], v, v)
			g.VBROADCASTSD(at(axes, locatorStart+8*a), m)
			g.VADDPD(m, v, v)
			for k, limit := range []int{locatorLo, locatorHi} {
				m = g.YMM()
				g.VBROADCASTSD(at(axes, limit+8*a), m)
				g.VCMPPD(U8([]int{2, 13}[k]), v, m, m) // lo <= v; hi >= v; no NaN
				if in[h] == nil {
					in[h] = m
				} else {
					g.VANDPD(m, in[h], in[h])
				}
			}
		}
	}
	inside := narrow(in) // eight masks of 32 bits
	bits := g.GP32()
	g.VMOVMSKPS(inside, bits)
	left := g.GP64()
	g.MOVQ(onStack("count"), left)
	g.SUBQ(i, left)
	g.CMPQ(left, U8(8))
	g.JGE(LabelRef("whole"))
	keep := g.GP64()
	g.MOVQ(U32(1), keep)
	g.MOVQ(left, reg.RCX)
	g.SHLQ(reg.CL, keep)
	g.DECQ(keep)
	g.ANDL(keep.As32(), bits)
	g.Label("whole")
	accept := arg("accept")
	g.TESTQ(accept, accept)
	g.JZ(LabelRef("chosen"))
	chosen, no := g.XMM(), g.GP32()
	{
		zero := g.XMM()
		g.VPXOR(zero, zero, zero)
		g.VMOVQ(indexed(accept, i, 1), chosen)
		g.VPCMPEQB(zero, chosen, chosen)
		g.VPMOVMSKB(chosen, no)
		g.NOTL(no)
		g.ANDL(no, bits)
	}
	g.Label("chosen")
	g.TESTL(bits, bits)
	g.JZ(LabelRef("none"))

	// Cells, fractions, whether past the middle.
	half := g.YMM()
	g.VMOVUPD(at(table, tableHalf), half)
	var frac [3]reg.VecVirtual
	near, base := g.YMM(), g.YMM()
	for a := range 3 {
		var c, t, up [2]reg.VecVirtual
		for h := range 2 {
			c[h], t[h], up[h] = g.YMM(), g.YMM(), g.YMM()
			f := g.YMM()
			g.VCVTTPD2DQY(x[a][h], c[h].AsX())
			g.VCVTDQ2PD(c[h].AsX(), f)
			g.VSUBPD(f, x[a][h], f)
			g.VCMPPD(U8(2), f, half, up[h]) // half <= f
			g.VCVTPD2PSY(f, t[h].AsX())
		}
		cell, nearest := g.YMM(), g.YMM()
		frac[a] = g.YMM()
		g.VINSERTF128(U8(1), c[1].AsX(), c[0], cell)
		g.VINSERTF128(U8(1), t[1].AsX(), t[0], frac[a])
		g.VPSUBD(narrow(up), cell, nearest)
		if a == 0 {
			g.VMOVDQA(cell, base)
			g.VMOVDQA(nearest, near)
			continue
		}
		s := g.YMM()
		g.VPBROADCASTD(at(strides, 4*(a-1)), s)
		g.VPMULLD(s, nearest, nearest)
		g.VPADDD(nearest, near, near)
		s = g.YMM()
		g.VPBROADCASTD(at(strides, 4*(a+1)), s)
		g.VPMULLD(s, cell, cell)
		g.VPADDD(cell, base, base)
	}
	origin := g.YMM()
	g.VPBROADCASTD(at(strides, 16), origin)
	g.VPADDD(origin, base, base)

	// The mask, voxel by voxel: faster than a gather, and no byte beside is read.
	// Points outside look at the first voxel.
	g.VPAND(inside, near, near)
	g.VMOVDQU(near, at(work, 0))
	seen := g.XMM()
	for l := range 8 {
		v := g.GP64()
		g.MOVL(at(work, 4*l), v.As32())
		if l == 0 {
			b := g.GP32()
			g.MOVBLZX(indexed(mask, v, 1), b)
			g.VMOVD(b, seen)
			continue
		}
		g.VPINSRB(U8(l), indexed(mask, v, 1), seen, seen)
	}
	out := g.GP32()
	{
		zero := g.XMM()
		g.VPXOR(zero, zero, zero)
		g.VPCMPEQB(zero, seen, seen)
		g.VPMOVMSKB(seen, out)
		g.NOTL(out)
		g.ANDL(out, bits)
	}
	g.JZ(LabelRef("none"))

	// Those found move to the front.
	order := arg("order")
	perm := g.YMM()
	g.VPMOVZXBD(indexed(order, bits.As64(), 8), perm)
	index := g.YMM()
	{
		n := g.XMM()
		g.VMOVD(at0.As32(), n)
		g.VPBROADCASTD(n, index)
		g.VPADDD(at(table, tableNumbers), index, index)
	}
	for _, s := range []struct {
		name string
		v    reg.VecVirtual
	}{{"base", base}, {"near", near}, {"index", index}, {"tx", frac[0]}, {"ty", frac[1]}, {"tz", frac[2]}} {
		p := arg(s.name)
		g.VPERMD(s.v, perm, s.v)
		g.VMOVDQU(s.v, indexed(p, to, 4))
	}
	g.POPCNTL(bits, bits)
	g.ADDQ(bits.As64(), to)
	g.Label("none")
	g.ADDQ(U8(8), i)
	g.JMP(LabelRef("next"))
	g.Label("end")
	g.VZEROUPPER()
	g.Store(to, g.ReturnIndex(0))
	g.RET()
}

// narrow makes eight masks of 32 bits of two times four of 64.
func narrow(m [2]reg.VecVirtual) reg.VecVirtual {
	v := g.YMM()
	g.VSHUFPS(U8(0x88), m[1], m[0], v)
	g.VPERMQ(U8(0xd8), v, v)
	return v
}
