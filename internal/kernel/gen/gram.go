package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// gramStride is the distance of rows in the scratch of kernel.Gram, in bytes.
const gramStride = 64 * 8

func gram() {
	function("widen", "func(a, b *float64, row, w *float32, n int)", "widen is the assembly of widenPlain; n is a multiple of 4.")
	a, b, row, w, n := arg("a"), arg("b"), arg("row"), arg("w"), arg("n")
	i := g.GP64()
	g.XORQ(i, i)
	zero := g.XMM()
	g.VXORPS(zero, zero, zero)
	loop("points", i, 4, n, func() {
		r, v, mask := g.XMM(), g.XMM(), g.XMM()
		g.VMOVUPS(indexed(w, i, 4), v)
		g.VCMPPS(U8(4), zero, v, mask) // not equal, or unordered
		g.VANDPS(indexed(row, i, 4), mask, r)
		rd, vd := g.YMM(), g.YMM()
		g.VCVTPS2PD(r, rd)
		g.VCVTPS2PD(v, vd)
		g.VMOVUPD(rd, indexed(b, i, 8))
		g.VMULPD(rd, vd, vd)
		g.VMOVUPD(vd, indexed(a, i, 8))
	})
	g.VZEROUPPER()
	g.RET()

	function("gramBlock", "func(sum, a, b *float64, tiles, n int)", "gramBlock is the assembly of gramBlockPlain; n is a multiple of 4.")
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
		g.VMOVUPD(at(sum, 32*k), acc[k])
	}
	i = g.GP64()
	g.XORQ(i, i)
	loop("block", i, 4, n, func() {
		var x [3]reg.VecVirtual
		for k := range x {
			x[k] = g.YMM()
			g.VMOVUPD(Mem{Base: a, Index: i, Scale: 8, Disp: gramStride * k}, x[k])
		}
		for c := range 3 {
			y := g.YMM()
			g.VMOVUPD(Mem{Base: q, Index: i, Scale: 8, Disp: gramStride * c}, y)
			for r := range x {
				t := g.YMM()
				g.VMULPD(x[r], y, t)
				g.VADDPD(t, acc[3*r+c], acc[3*r+c])
			}
		}
	})
	for k := range acc {
		g.VMOVUPD(acc[k], at(sum, 32*k))
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
