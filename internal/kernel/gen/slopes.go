package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

func slopes() {
	function("slopes", "func(out *float32, outStride int, in *float32, inStride int, value *float32, index *int32, n int, frame *float32)", "slopes is the assembly of slopesPlain; strides are in bytes, n is a multiple of 8.")
	out, s := arg("out"), arg("outStride")
	in, t := arg("in"), arg("inStride")
	value, index, n, frame := arg("value"), arg("index"), arg("n"), arg("frame")
	// Four rows from a base: 0, stride, 2 stride and 3 stride.
	triple := func(r reg.GPVirtual) reg.GPVirtual {
		x := g.GP64()
		g.LEAQ(Mem{Base: r, Index: r, Scale: 2}, x)
		return x
	}
	s3, t3 := triple(s), triple(t)
	more := g.GP64()
	g.LEAQ(Mem{Base: out, Index: s, Scale: 4}, more)
	rows := func(base, stride, stride3 reg.GPVirtual, k int) Mem {
		switch k {
		case 0:
			return at(base, 0)
		case 3:
			return indexed(base, stride3, 1)
		}
		return indexed(base, stride, uint8(k))
	}
	constant := func(k int) reg.VecVirtual { return broadcast(at(frame, 4*k)) }
	// times is the product with a constant.
	times := func(k int, x reg.VecVirtual) reg.VecVirtual {
		c := constant(k)
		g.VMULPS(x, c, c)
		return c
	}
	g.Label("eight")
	i := g.YMM()
	g.VCVTDQ2PS(at(index, 0), i)
	gain := times(16, i)
	g.VADDPS(constant(15), gain, gain)
	p := g.YMM()
	g.VMULPS(rows(in, t, t3, 0), gain, p)
	g.VMOVUPS(p, rows(out, s, s3, 0))
	r := g.YMM()
	g.VMOVUPS(at(value, 0), r)
	g.VSUBPS(p, r, r)
	g.VMOVUPS(r, rows(out, s, s3, 1))
	var d, j, x [3]reg.VecVirtual
	for k := range d {
		d[k] = g.YMM()
		g.VMOVUPS(rows(in, t, t3, 1+k), d[k])
	}
	for k := range j {
		j[k] = times(3*k, d[0])
		for m := 1; m < 3; m++ {
			g.VADDPS(times(3*k+m, d[m]), j[k], j[k])
		}
		g.VMULPS(gain, j[k], j[k])
	}
	g.VMOVUPS(j[0], rows(out, s, s3, 2))
	g.VMOVUPS(j[1], rows(out, s, s3, 3))
	g.VMOVUPS(j[2], rows(more, s, s3, 0))
	for k := range x {
		x[k] = times(12+k, i)
		g.VADDPS(constant(9+k), x[k], x[k])
	}
	for k := range x {
		a, b := (k+1)%3, (k+2)%3
		u, v := g.YMM(), g.YMM()
		g.VMULPS(x[a], j[b], u)
		g.VMULPS(x[b], j[a], v)
		g.VSUBPS(v, u, u)
		g.VMOVUPS(u, rows(more, s, s3, 1+k))
	}
	for _, p := range []reg.GPVirtual{out, more, in, value, index} {
		g.ADDQ(U8(32), p)
	}
	g.SUBQ(U8(8), n)
	g.JNZ(LabelRef("eight"))
	g.VZEROUPPER()
	g.RET()
}
