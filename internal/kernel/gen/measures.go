package main

import (
	. "github.com/mmcloughlin/avo/operand"
)

// from16 turns 16-bit integers into float32, eight at a time; scaled: in float64 on the way.
func from16(unsigned, scaled bool) {
	name, signature := "fromInt16", "func(dst *float32, src *int16, n int)"
	if unsigned {
		name = "fromUint16"
	}
	if scaled {
		name, signature = name+"Scaled", "func(dst *float32, src *int16, n int, slope, inter float64)"
	}
	function(name, signature, name+" is the assembly of the function of that name, for a multiple of eight numbers.")
	dst, src, n, i := arg("dst"), arg("src"), arg("n"), g.GP64()
	extend := g.VPMOVSXWD
	if unsigned {
		extend = g.VPMOVZXWD
	}
	g.XORQ(i, i)
	if !scaled {
		loop("by8", i, 8, n, func() {
			x := g.YMM()
			extend(indexed(src, i, 2), x)
			g.VCVTDQ2PS(x, x)
			g.VMOVUPS(x, indexed(dst, i, 4))
		})
	} else {
		slope, inter := g.YMM(), g.YMM()
		g.VBROADCASTSD(onStack("slope"), slope)
		g.VBROADCASTSD(onStack("inter"), inter)
		loop("by8", i, 8, n, func() {
			lo, hi := g.YMM(), g.YMM()
			extend(indexed(src, i, 2), lo)
			g.VEXTRACTI128(U8(1), lo, hi.AsX())
			g.VCVTDQ2PD(lo.AsX(), lo)
			g.VCVTDQ2PD(hi.AsX(), hi)
			g.VMULPD(slope, lo, lo)
			g.VMULPD(slope, hi, hi)
			g.VADDPD(inter, lo, lo)
			g.VADDPD(inter, hi, hi)
			g.VCVTPD2PSY(lo, lo.AsX())
			g.VCVTPD2PSY(hi, hi.AsX())
			g.VMOVUPS(lo.AsX(), indexed(dst, i, 4))
			g.VMOVUPS(hi.AsX(), Mem{Base: dst, Index: i, Scale: 4, Disp: 16})
		})
	}
	g.VZEROUPPER()
	g.RET()
}

// changes sums values and squared differences in float64, four strands each.
func changes() {
	function("changes", "func(sums *[8]float64, now *float32, before *float32, n int)", "changes is the assembly of changesPlain for a multiple of four values.")
	sums, now, before, n, i := arg("sums"), arg("now"), arg("before"), arg("n"), g.GP64()
	level, square := g.YMM(), g.YMM()
	g.VXORPD(level, level, level)
	g.VXORPD(square, square, square)
	g.XORQ(i, i)
	loop("by4", i, 4, n, func() {
		x, d := g.YMM(), g.YMM()
		g.VCVTPS2PD(indexed(now, i, 4), x)
		g.VCVTPS2PD(indexed(before, i, 4), d)
		g.VSUBPD(d, x, d)
		g.VADDPD(x, level, level)
		g.VMULPD(d, d, d)
		g.VADDPD(d, square, square)
	})
	g.VMOVUPD(level, at(sums, 0))
	g.VMOVUPD(square, at(sums, 32))
	g.VZEROUPPER()
	g.RET()
}

// apart sums distances from the median of four others, and magnitudes, in float64, four strands each.
func apart() {
	function("apart", "func(sums *[8]float64, x *float32, others *[4]*float32, n int)", "apart is the assembly of Apart for a multiple of four values.")
	sums, px, others, n, i := arg("sums"), arg("x"), arg("others"), arg("n"), g.GP64()
	pa, pb, pc, pd := g.GP64(), g.GP64(), g.GP64(), g.GP64()
	g.MOVQ(at(others, 0), pa)
	g.MOVQ(at(others, 8), pb)
	g.MOVQ(at(others, 16), pc)
	g.MOVQ(at(others, 24), pd)
	dist, size, half, sign, one := g.YMM(), g.YMM(), g.YMM(), g.YMM(), g.GP64()
	g.VXORPD(dist, dist, dist)
	g.VXORPD(size, size, size)
	g.MOVQ(U64(0x3fe0000000000000), one) // 0.5
	g.VMOVQ(one, half.AsX())
	g.VBROADCASTSD(half.AsX(), half)
	g.VPCMPEQD(sign, sign, sign)
	g.VPSRLQ(U8(1), sign, sign) // all but the sign
	g.XORQ(i, i)
	loop("by4", i, 4, n, func() {
		a, c, lo, hi, lo2, hi2, x := g.YMM(), g.YMM(), g.YMM(), g.YMM(), g.YMM(), g.YMM(), g.YMM()
		g.VMOVUPS(indexed(pa, i, 4), a.AsX())
		g.VMOVUPS(indexed(pc, i, 4), c.AsX())
		g.VMINPS(indexed(pb, i, 4), a.AsX(), lo.AsX())
		g.VMAXPS(indexed(pb, i, 4), a.AsX(), hi.AsX())
		g.VMINPS(indexed(pd, i, 4), c.AsX(), lo2.AsX())
		g.VMAXPS(indexed(pd, i, 4), c.AsX(), hi2.AsX())
		g.VMAXPS(lo2.AsX(), lo.AsX(), lo.AsX())
		g.VMINPS(hi2.AsX(), hi.AsX(), hi.AsX())
		g.VCVTPS2PD(lo.AsX(), lo)
		g.VCVTPS2PD(hi.AsX(), hi)
		g.VCVTPS2PD(indexed(px, i, 4), x)
		g.VADDPD(hi, lo, lo)
		g.VMULPD(half, lo, lo)
		g.VSUBPD(lo, x, lo)
		g.VANDPD(sign, lo, lo)
		g.VANDPD(sign, x, x)
		g.VADDPD(lo, dist, dist)
		g.VADDPD(x, size, size)
	})
	g.VMOVUPD(dist, at(sums, 0))
	g.VMOVUPD(size, at(sums, 32))
	g.VZEROUPPER()
	g.RET()
}

// courses adds four volumes to sums over time of every voxel.
func courses() {
	function("courses", "func(d1 *float64, d2 *float64, first *float32, volumes *[4]*float32, n int)", "courses is the assembly of Courses for a multiple of four values.")
	d1, d2, first, volumes, n, i := arg("d1"), arg("d2"), arg("first"), arg("volumes"), arg("n"), g.GP64()
	var from [4]func() Mem
	for k := range from {
		p := g.GP64()
		g.MOVQ(at(volumes, 8*k), p)
		from[k] = func() Mem { return indexed(p, i, 4) }
	}
	g.XORQ(i, i)
	loop("by4", i, 4, n, func() {
		f, s1, s2 := g.YMM(), g.YMM(), g.YMM()
		g.VCVTPS2PD(indexed(first, i, 4), f)
		g.VMOVUPD(indexed(d1, i, 8), s1)
		g.VMOVUPD(indexed(d2, i, 8), s2)
		for k := range from {
			d := g.YMM()
			g.VCVTPS2PD(from[k](), d)
			g.VSUBPD(f, d, d)
			g.VADDPD(d, s1, s1)
			g.VMULPD(d, d, d)
			g.VADDPD(d, s2, s2)
		}
		g.VMOVUPD(s1, indexed(d1, i, 8))
		g.VMOVUPD(s2, indexed(d2, i, 8))
	})
	g.VZEROUPPER()
	g.RET()
}
