package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// elementwise writes a kernel over rows of n values, eight at a time, and the rest
// under a mask. body loads its operands by load and returns the result.
func elementwise(out string, body func(load func(row reg.Register) reg.VecVirtual) reg.VecVirtual) {
	dst, n := arg(out), arg("n")
	masks := arg("masks")
	i, whole := g.GP64(), g.GP64()
	g.XORQ(i, i)
	g.MOVQ(n, whole)
	g.ANDQ(I8(-8), whole)
	loop("eight", i, 8, whole, func() {
		v := body(func(row reg.Register) reg.VecVirtual {
			v := g.YMM()
			g.VMOVUPS(indexed(row, i, 4), v)
			return v
		})
		g.VMOVUPS(v, indexed(dst, i, 4))
	})
	g.SUBQ(whole, n)
	g.JZ(LabelRef("done"))
	mask := tailMask(masks, n)
	v := body(func(row reg.Register) reg.VecVirtual {
		v := g.YMM()
		g.VMASKMOVPS(indexed(row, i, 4), mask, v)
		return v
	})
	g.VMASKMOVPS(v, mask, indexed(dst, i, 4))
	g.Label("done")
	g.VZEROUPPER()
	g.RET()
}

// tailMask loads the mask of the first n < 8 lanes; n is lost.
func tailMask(masks, n reg.GPVirtual) reg.VecVirtual {
	mask := g.YMM()
	g.NEGQ(n)
	g.VMOVUPS(Mem{Base: masks, Index: n, Scale: 4, Disp: 32}, mask)
	return mask
}

// broadcast spreads a float32 parameter, or one in memory.
func broadcast(m Op) reg.VecVirtual {
	v := g.YMM()
	g.VBROADCASTSS(m, v)
	return v
}

func rows() {
	function("residual", "func(r, v, t, p1, p2, p3 *float32, n int, gain *float32, masks *int32)", "residual is the assembly of residualPlain.")
	v, t := arg("v"), arg("t")
	p := [3]reg.GPVirtual{arg("p1"), arg("p2"), arg("p3")}
	gain := arg("gain")
	var b [4]reg.VecVirtual
	for k := range b {
		b[k] = broadcast(at(gain, 4*k))
	}
	elementwise("r", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		s := load(p[0])
		g.VMULPS(s, b[1], s)
		g.VADDPS(s, b[0], s)
		for k := 1; k < 3; k++ {
			x := load(p[k])
			g.VMULPS(x, b[k+1], x)
			g.VADDPS(x, s, s)
		}
		g.VMULPS(load(t), s, s)
		r := load(v)
		g.VSUBPS(s, r, r)
		return r
	})

	function("tukey", "func(w, r *float32, n int, inverse float32, masks *int32)", "tukey is the assembly of tukeyPlain.")
	w, r := arg("w"), arg("r")
	inverse := broadcast(onStack("inverse"))
	one, zero := g.YMM(), g.YMM()
	ones(one)
	g.VXORPS(zero, zero, zero)
	elementwise("w", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		u := load(r)
		g.VMULPS(u, inverse, u)
		g.VMULPS(u, u, u)
		g.VSUBPS(u, one, u)
		g.VMAXPS(zero, u, u) // the second operand, here first, where NaN
		g.VMULPS(u, u, u)
		g.VMULPS(load(w), u, u)
		return u
	})

	function("abs", "func(dst, src *float32, n int, masks *int32)", "abs is the assembly of absPlain.")
	src := arg("src")
	sign := g.YMM()
	g.VPCMPEQD(sign, sign, sign)
	g.VPSRLD(U8(1), sign, sign)
	elementwise("dst", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		v := load(src)
		g.VANDPS(sign, v, v)
		return v
	})
}

// ones sets every lane to 1: all bits set, shifted to the exponent of 1.
func ones(v reg.VecVirtual) {
	g.VPCMPEQD(v, v, v)
	g.VPSLLD(U8(25), v, v)
	g.VPSRLD(U8(2), v, v)
}
