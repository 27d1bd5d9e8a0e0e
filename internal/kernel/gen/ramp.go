package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// ramp returns what writes start + step i for the next eight i.
func ramp() func() reg.VecVirtual {
	start, step := broadcast(onStack("start")), broadcast(onStack("step"))
	table := arg("table")
	i, eight := g.YMM(), g.YMM()
	g.VMOVDQU(at(table, 80*4), i) // 0 to 7
	g.VPCMPEQD(eight, eight, eight)
	g.VPSRLD(U8(31), eight, eight)
	g.VPSLLD(U8(3), eight, eight)
	return func() reg.VecVirtual {
		f := g.YMM()
		g.VCVTDQ2PS(i, f)
		g.VPADDD(eight, i, i)
		g.VMULPS(step, f, f)
		g.VADDPS(start, f, f)
		return f
	}
}

func ramps() {
	function("addRamp", "func(dst, src *float32, n int, start, step float32, table *float32, masks *int32)", "addRamp is the assembly of addRampPlain.")
	src := arg("src")
	next := ramp()
	dst := arg("dst")
	elementwise("dst", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		f := next()
		g.VMULPS(load(src), f, f)
		v := load(dst)
		g.VADDPS(f, v, v)
		return v
	})

	function("overRamp", "func(dst, src *float32, n int, start, step, least float32, table *float32, masks *int32)", "overRamp is the assembly of overRampPlain.")
	src = arg("src")
	next = ramp()
	least := broadcast(onStack("least"))
	elementwise("dst", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		f := next()
		g.VMAXPS(least, f, f) // the second operand, here first, where NaN
		v := load(src)
		g.VDIVPS(f, v, v)
		return v
	})
}
