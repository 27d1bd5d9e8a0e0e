package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

func fir() {
	symmetric()
}

// strips runs body over n values from i: many registers at a time, then one, then
// the tail, for which body gets a mask, or for scalar tails one value at a time.
func strips(many int, n reg.GPVirtual, i reg.GPVirtual, body func(label string, vecs int, tail bool)) {
	whole := g.GP64()
	g.XORQ(i, i)
	for _, vecs := range []int{many, 1} {
		label := fmt.Sprintf("by%d", 8*vecs)
		g.MOVQ(n, whole)
		g.ANDQ(I32(int32(-8*vecs)), whole)
		loop(label, i, uint32(8*vecs), whole, func() { body(label, vecs, false) })
	}
}

func symmetric() {
	function("symmetric", "func(dst *float32, n int, rows **float32, h *float32, reach int, masks *int32)", "symmetric is the assembly of symmetricPlain.")
	dst, n, rows, h, reach, masks := arg("dst"), arg("n"), arg("rows"), arg("h"), arg("reach"), arg("masks")
	g.LEAQ(indexed(rows, reach, 8), rows) // the centre
	i := g.GP64()
	var mask reg.VecVirtual
	body := func(label string, vecs int, tail bool) {
		load := func(row reg.Register, v int) reg.VecVirtual {
			x := g.YMM()
			m := Mem{Base: row, Index: i, Scale: 4, Disp: 32 * v}
			if tail {
				g.VMASKMOVPS(m, mask, x)
			} else {
				g.VMOVUPS(m, x)
			}
			return x
		}
		acc := make([]reg.VecVirtual, vecs)
		before, after, k := g.GP64(), g.GP64(), g.GP64()
		g.MOVQ(at(rows, 0), before)
		w := broadcast(at(h, 0))
		for v := range acc {
			acc[v] = load(before, v)
			g.VMULPS(w, acc[v], acc[v])
		}
		g.XORQ(k, k)
		g.Label(label + "_tap")
		g.CMPQ(k, reach)
		g.JGE(LabelRef(label + "_sum"))
		g.INCQ(k)
		w = broadcast(indexed(h, k, 4))
		g.MOVQ(indexed(rows, k, 8), after)
		g.NEGQ(k)
		g.MOVQ(indexed(rows, k, 8), before)
		g.NEGQ(k)
		for v := range acc {
			x := load(before, v)
			g.VADDPS(load(after, v), x, x)
			accumulate(w, x, acc[v], x)
		}
		g.JMP(LabelRef(label + "_tap"))
		g.Label(label + "_sum")
		for v := range acc {
			m := Mem{Base: dst, Index: i, Scale: 4, Disp: 32 * v}
			if tail {
				g.VMASKMOVPS(acc[v], mask, m)
			} else {
				g.VMOVUPS(acc[v], m)
			}
		}
	}
	strips(4, n, i, body)
	g.SUBQ(i, n)
	g.JZ(LabelRef("done"))
	mask = tailMask(masks, n)
	body("rest", 1, true)
	g.Label("done")
	g.VZEROUPPER()
	g.RET()
}
