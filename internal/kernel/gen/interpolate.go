package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// interpolate sums rows in float64, four lanes a register; each: with a row of
// weights for every tap instead of one weight.
func interpolate(each bool) {
	name, weights := "interpolate", "*float64"
	if each {
		name, weights = "interpolateEach", "**float64"
	}
	function(name, "func(dst *float32, n int, w "+weights+", src **float32, taps int, like *float32) bool", name+" is the assembly of "+name+"Plain.")
	dst, n, w, src, taps, like := arg("dst"), arg("n"), arg("w"), arg("src"), arg("taps"), arg("like")
	i, k, p, q := g.GP64(), g.GP64(), g.GP64(), g.GP64()
	bad, zero, sign := g.YMM(), g.YMM(), g.YMM()
	g.VXORPS(bad, bad, bad)
	g.VXORPS(zero, zero, zero)
	g.VPCMPEQD(sign, sign, sign)
	g.VPSLLD(U8(31), sign, sign)
	settle := func(r, old, none reg.VecVirtual) {
		// r where it is not zero, else the sign of like.
		g.VANDPS(sign, old, old)
		g.VCMPPS(U8(0), zero, r, none)
		g.VBLENDVPS(none, old, r, r)
		g.VSUBPS(r, r, none)
		g.VORPS(none, bad, bad)
	}
	// quads registers of four sums; none: a single sum.
	body := func(label string, quads int) {
		acc := make([]reg.VecVirtual, max(1, quads))
		for v := range acc {
			acc[v] = g.YMM()
			g.VXORPD(acc[v], acc[v], acc[v])
		}
		g.XORQ(k, k)
		loop(label+"_tap", k, 1, taps, func() {
			var by reg.VecVirtual
			if each {
				g.MOVQ(indexed(w, k, 8), q)
			} else {
				by = g.YMM()
				g.VBROADCASTSD(indexed(w, k, 8), by)
			}
			g.MOVQ(indexed(src, k, 8), p)
			if quads == 0 {
				x := g.XMM()
				g.VMOVSS(indexed(p, i, 4), x)
				g.VCVTSS2SD(x, x, x)
				if each {
					g.VMULSD(indexed(q, i, 8), x, x)
				} else {
					g.VMULSD(by.AsX(), x, x)
				}
				g.VADDSD(x, acc[0].AsX(), acc[0].AsX())
				return
			}
			for v := range acc {
				x := g.YMM()
				g.VCVTPS2PD(Mem{Base: p, Index: i, Scale: 4, Disp: 16 * v}, x)
				if each {
					g.VMULPD(Mem{Base: q, Index: i, Scale: 8, Disp: 32 * v}, x, x)
				} else {
					g.VMULPD(by, x, x)
				}
				g.VADDPD(x, acc[v], acc[v])
			}
		})
		if quads == 0 {
			r, old, none := g.YMM(), g.YMM(), g.YMM()
			g.VXORPS(r, r, r)
			g.VXORPS(old, old, old)
			g.VCVTSD2SS(acc[0].AsX(), r.AsX(), r.AsX())
			g.VMOVSS(indexed(like, i, 4), old.AsX())
			settle(r, old, none)
			g.VMOVSS(r.AsX(), indexed(dst, i, 4))
			return
		}
		for v := 0; v < quads; v += 2 {
			r, old, none := acc[v], g.YMM(), g.YMM()
			g.VCVTPD2PSY(r, r.AsX())
			g.VCVTPD2PSY(acc[v+1], acc[v+1].AsX())
			g.VINSERTF128(U8(1), acc[v+1].AsX(), r, r)
			g.VMOVUPS(Mem{Base: like, Index: i, Scale: 4, Disp: 16 * v}, old)
			settle(r, old, none)
			g.VMOVUPS(r, Mem{Base: dst, Index: i, Scale: 4, Disp: 16 * v})
		}
	}
	whole := g.GP64()
	g.XORQ(i, i)
	for _, quads := range []int{8, 2} {
		g.MOVQ(n, whole)
		g.ANDQ(I32(int32(-4*quads)), whole)
		label := fmt.Sprintf("by%d", 4*quads)
		loop(label, i, uint32(4*quads), whole, func() { body(label, quads) })
	}
	loop("one", i, 1, n, func() { body("one", 0) })
	g.VPTEST(bad, bad)
	ok := g.GP8()
	g.SETEQ(ok)
	g.VZEROUPPER()
	g.Store(ok, g.ReturnIndex(0))
	g.RET()
}
