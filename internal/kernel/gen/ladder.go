package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// ladder writes kernel.Ladder: four lanes of float64, the steps of Rung.Eliminate one by one.
func ladder() {
	const unknowns = 6
	function("ladder", "func(inverse, gained, links *float64, n int, strengths, rungs *float64)", "ladder is the assembly of ladderPlain; rungs is zero.")
	inverse, links, n, strengths := arg("inverse"), arg("links"), arg("n"), arg("strengths")
	r := arg("rungs")
	// Of a rung: the triangles of D and Two, by rows from the diagonal, One, Y.
	triangle := func(k, a int) int { return k*unknowns - k*(k-1)/2 + a - k }
	const (
		two   = unknowns * (unknowns + 1) / 2
		one   = 2 * two
		y     = one + unknowns*unknowns
		count = y + unknowns
	)
	dAt := func(r reg.GPVirtual, k, a int) Mem { return at(r, 32*triangle(k, a)) }
	twoAt := func(r reg.GPVirtual, a, k int) Mem { return at(r, 32*(two+triangle(a, k))) }
	oneAt := func(r reg.GPVirtual, a, k int) Mem { return at(r, 32*(one+unknowns*a+k)) }
	yAt := func(r reg.GPVirtual, a int) Mem { return at(r, 32*(y+a)) }
	// Of a link, 8 bytes each.
	const (
		g0 = two
		u0 = g0 + unknowns
		q0 = u0 + unknowns
	)
	of := func(k int) reg.VecVirtual {
		v := g.YMM()
		g.VBROADCASTSD(at(links, 8*k), v)
		return v
	}
	strength := func(a int) Mem { return at(strengths, 32*(a/3)) }
	// penalty is q s.
	penalty := func(q, a int) reg.VecVirtual {
		v := of(q0 + q)
		g.VMULPD(strength(a), v, v)
		return v
	}
	zero := func() reg.VecVirtual {
		v := g.YMM()
		g.VXORPD(v, v, v)
		return v
	}
	less := func(v reg.VecVirtual, a, b Mem) {
		t := g.YMM()
		g.VMOVUPD(a, t)
		g.VMULPD(b, t, t)
		g.VSUBPD(t, v, v)
	}
	r1, r2 := g.GP64(), g.GP64()
	g.LEAQ(at(r, 32*count), r1)
	g.LEAQ(at(r, 2*32*count), r2)
	sum := zero()
	ones := g.YMM()
	g.VPCMPEQD(ones, ones, ones)
	g.VPSLLQ(U8(54), ones, ones)
	g.VPSRLQ(U8(2), ones, ones)

	g.Label("link")
	for a := range unknowns {
		for c := a; c < unknowns; c++ {
			var v reg.VecVirtual
			if c == a {
				v = penalty(2, a)
			} else {
				v = zero()
			}
			for k := a; k < c; k++ {
				less(v, twoAt(r, a, k), dAt(r2, k, c))
			}
			g.VMULPD(dAt(r2, c, c), v, v)
			g.VMOVUPD(v, twoAt(r, a, c))
		}
	}
	for a := range unknowns {
		for c := range unknowns {
			var v reg.VecVirtual
			if c == a {
				v = penalty(1, a)
			} else {
				v = zero()
			}
			for k := a; k < unknowns; k++ {
				less(v, twoAt(r, a, k), oneAt(r1, c, k))
			}
			for k := range c {
				less(v, oneAt(r, a, k), dAt(r1, k, c))
			}
			g.VMULPD(dAt(r1, c, c), v, v)
			g.VMOVUPD(v, oneAt(r, a, c))
		}
	}
	h := 0
	for b := range unknowns {
		for a := b; a < unknowns; a++ {
			v := of(h)
			h++
			if a == b {
				g.VADDPD(penalty(0, a), v, v)
			}
			for k := a; k < unknowns; k++ {
				less(v, twoAt(r, a, k), twoAt(r, b, k))
			}
			for k := range unknowns {
				less(v, oneAt(r, a, k), oneAt(r, b, k))
			}
			for k := range b {
				less(v, dAt(r, k, a), dAt(r, k, b))
			}
			if a == b {
				g.VSQRTPD(v, v)
				g.VDIVPD(v, ones, v)
			} else {
				g.VMULPD(dAt(r, b, b), v, v)
			}
			g.VMOVUPD(v, dAt(r, b, a))
		}
	}
	for a := range unknowns {
		v, pull := of(g0+a), of(u0+a)
		g.VMULPD(strength(a), pull, pull)
		g.VSUBPD(pull, v, v)
		for k := a; k < unknowns; k++ {
			less(v, twoAt(r, a, k), yAt(r2, k))
		}
		for k := range unknowns {
			less(v, oneAt(r, a, k), yAt(r1, k))
		}
		for k := range a {
			less(v, dAt(r, k, a), yAt(r, k))
		}
		g.VMULPD(dAt(r, a, a), v, v)
		g.VMOVUPD(v, yAt(r, a))
	}
	p := g.YMM()
	g.VMOVUPD(dAt(r, 0, 0), p)
	for a := range unknowns {
		if a > 0 {
			g.VMULPD(dAt(r, a, a), p, p)
		}
		t := g.YMM()
		g.VMOVUPD(yAt(r, a), t)
		g.VMULPD(t, t, t)
		g.VADDPD(t, sum, sum)
	}
	g.VMOVUPD(p, at(inverse, 0))
	g.ADDQ(U8(32), inverse)
	g.ADDQ(U32(8*(q0+3)), links)
	next := g.GP64()
	g.MOVQ(r2, next)
	g.MOVQ(r1, r2)
	g.MOVQ(r, r1)
	g.MOVQ(next, r)
	g.DECQ(n)
	g.JNZ(LabelRef("link"))
	g.VMOVUPD(sum, at(arg("gained"), 0))
	g.VZEROUPPER()
	g.RET()
}
