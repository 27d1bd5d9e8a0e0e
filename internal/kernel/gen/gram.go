package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// gramStride is the distance of rows in the scratch of kernel.Gram, in bytes.
const gramStride = 128 * 4

func gram() {
	function("weigh", "func(a, b, row, w *float32, n int)", "weigh is the assembly of weighPlain; n is a multiple of 8.")
	a, b, row, w, n := arg("a"), arg("b"), arg("row"), arg("w"), arg("n")
	i := g.GP64()
	g.XORQ(i, i)
	zero := g.YMM()
	g.VXORPS(zero, zero, zero)
	loop("points", i, 8, n, func() {
		r, v, mask := g.YMM(), g.YMM(), g.YMM()
		g.VMOVUPS(indexed(w, i, 4), v)
		g.VCMPPS(U8(4), zero, v, mask) // not equal, or unordered
		g.VANDPS(indexed(row, i, 4), mask, r)
		g.VMOVUPS(r, indexed(b, i, 4))
		g.VMULPS(r, v, v)
		g.VMOVUPS(v, indexed(a, i, 4))
	})
	g.VZEROUPPER()
	g.RET()

	function("gramBlock", "func(sum *float64, a, b *float32, tiles, n int)", "gramBlock is the assembly of gramBlockPlain; n is a multiple of 8.")
	sum, a, b := arg("sum"), arg("a"), arg("b")
	tiles, n := arg("tiles"), arg("n")
	left := g.GP64()
	g.Label("rows")
	q := g.GP64()
	g.MOVQ(b, q)
	g.MOVQ(tiles, left)
	g.Label("columns")
	var acc [9]reg.VecVirtual
	for k := range acc {
		acc[k] = g.YMM()
		g.VXORPS(acc[k], acc[k], acc[k])
	}
	i = g.GP64()
	g.XORQ(i, i)
	loop("block", i, 8, n, func() {
		var x [3]reg.VecVirtual
		for k := range x {
			x[k] = g.YMM()
			g.VMOVUPS(Mem{Base: a, Index: i, Scale: 4, Disp: gramStride * k}, x[k])
		}
		for c := range 3 {
			y := g.YMM()
			g.VMOVUPS(Mem{Base: q, Index: i, Scale: 4, Disp: gramStride * c}, y)
			for r := range x {
				accumulate(x[r], y, acc[3*r+c], g.YMM())
			}
		}
	})
	for k := range acc {
		low, high, half := g.YMM(), g.YMM(), g.XMM()
		g.VCVTPS2PD(acc[k].(reg.Vec).AsX(), low)
		g.VEXTRACTF128(U8(1), acc[k], half)
		g.VCVTPS2PD(half, high)
		g.VADDPD(at(sum, 32*k), low, low)
		g.VADDPD(high, low, low)
		g.VMOVUPD(low, at(sum, 32*k))
	}
	g.ADDQ(U32(9*32), sum)
	g.ADDQ(U32(3*gramStride), q)
	g.DECQ(left)
	g.JNZ(LabelRef("columns"))
	g.ADDQ(U32(3*gramStride), a)
	g.ADDQ(U32(3*gramStride), b)
	g.DECQ(tiles)
	g.JNZ(LabelRef("rows"))
	g.VZEROUPPER()
	g.RET()
}

// loop runs body for i from its value up to n in steps.
func loop(label string, i reg.GPVirtual, step uint32, n Op, body func()) {
	g.Label(label)
	g.CMPQ(i, n)
	g.JGE(LabelRef(label + "_end"))
	body()
	g.ADDQ(U32(step), i)
	g.JMP(LabelRef(label))
	g.Label(label + "_end")
}
