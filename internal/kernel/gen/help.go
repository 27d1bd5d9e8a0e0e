package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// function starts a function that keeps no pointer.
func function(name, signature, doc string) {
	g.Function(name)
	g.Pragma("noescape")
	g.SignatureExpr(signature)
	g.Doc(doc)
}

// arg loads a parameter into a general register.
func arg(name string) reg.GPVirtual {
	r := g.GP64()
	g.Load(g.Param(name), r)
	return r
}

// onStack is a parameter as an operand, for want of registers.
func onStack(name string) Mem {
	b, err := g.Param(name).Resolve()
	if err != nil {
		panic(err)
	}
	return b.Addr
}

// at is memory at a displacement in bytes.
func at(base reg.Register, disp int) Mem { return Mem{Base: base, Disp: disp} }

// indexed is memory at base + index*scale.
func indexed(base, index reg.Register, scale uint8) Mem {
	return Mem{Base: base, Index: index, Scale: scale}
}

// scratch reserves so many bytes of stack, aligned to 32: a store across two
// cache lines would delay the loads that follow it.
func scratch(size int) reg.GPVirtual {
	m := g.AllocLocal(size + 32)
	p := g.GP64()
	g.LEAQ(m.Offset(31), p)
	g.ANDQ(I8(-32), p)
	return p
}

// wide is 8 lanes (ymm) or 4 (xmm).
type vec interface {
	reg.Register
}

func register(lanes int) vec {
	if lanes == 8 {
		return g.YMM()
	}
	return g.XMM()
}

// accumulate adds a*b to sum, rounding twice; tmp is lost.
func accumulate(a, b Op, sum, tmp Op) {
	g.VMULPS(a, b, tmp)
	g.VADDPS(tmp, sum, sum)
}
