package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

type ymm = reg.VecVirtual

// complexSample is one complex sample of eight lanes.
const complexSample = 2 * sample

func transform() {
	for _, inverse := range []bool{false, true} {
		butterflies(2, inverse)
		butterflies(3, inverse)
		butterflies(4, inverse)
	}
	mirrored()
}

func op(f func(ops ...Op), a, b Op) ymm {
	r := g.YMM()
	f(a, b, r)
	return r
}

func add(a, b ymm) ymm { return op(g.VADDPD, b, a) }
func sub(a, b ymm) ymm { return op(g.VSUBPD, b, a) }
func mul(a ymm, b Op) ymm {
	return op(g.VMULPD, b, a)
}

// butterflies runs a pass over samples from z to end, exclusive of what lies past it.
func butterflies(radix int, inverse bool) {
	name := fmt.Sprintf("forward%d", radix)
	if inverse {
		name = fmt.Sprintf("inverse%d", radix)
	}
	signature := "func(z, end *float64, q int, twiddle *float64)"
	if radix == 3 {
		signature = "func(z, end *float64, q int, twiddle *float64, sine float64)"
	}
	function(name, signature, name+" is the assembly of "+name+"Plain; end is the last value of z.")
	z, end, q, twiddle := arg("z"), arg("end"), arg("q"), arg("twiddle")
	left, step := g.GP64(), g.GP64()
	g.MOVQ(q, left)
	g.SHLQ(U8(7), q) // bytes between the points of a butterfly
	g.MOVQ(q, step)
	for range radix - 1 {
		g.ADDQ(q, step)
	}
	double := g.GP64()
	g.LEAQ(indexed(q, q, 1), double)
	negative := g.YMM()
	g.VPCMPEQD(negative, negative, negative)
	g.VPSLLQ(U8(63), negative, negative)
	p, third := g.GP64(), g.GP64()
	// place is the real (0) or imaginary (1) part of point n, of half h.
	place := func(n, part, h int) Mem {
		m := Mem{Base: p, Disp: sample*part + 32*h}
		switch n {
		case 1:
			m.Index, m.Scale = q, 1
		case 2:
			m.Index, m.Scale = double, 1
		case 3:
			m.Base, m.Index, m.Scale = third, double, 1
		}
		return m
	}
	load := func(n, part, h int) ymm {
		r := g.YMM()
		g.VMOVUPD(place(n, part, h), r)
		return r
	}
	store := func(r ymm, n, part, h int) { g.VMOVUPD(r, place(n, part, h)) }
	// factor is cos (0) or -sin (1), conjugated for the inverse, of point n.
	factor := func(n, part int) ymm { return broadcast64(at(twiddle, 16*(n-1)+8*part)) }
	// times multiplies a complex number by the factor of point n.
	times := func(xr, xi ymm, n int) (r, i ymm) {
		wr, wi := factor(n, 0), factor(n, 1)
		if inverse {
			g.VXORPD(negative, wi, wi)
		}
		return sub(mul(xr, wr), mul(xi, wi)), add(mul(xr, wi), mul(xi, wr))
	}
	var sine ymm
	if radix == 3 {
		sine = broadcast64(onStack("sine"))
	}
	body := func(h int, unit bool) {
		// The two ways in: times the factors here (inverse), there (forward), or not at all.
		in := func(n int) (r, i ymm) {
			r, i = load(n, 0, h), load(n, 1, h)
			if n > 0 && inverse && !unit {
				return times(r, i, n)
			}
			return r, i
		}
		out := func(r, i ymm, n int) {
			if n > 0 && !inverse && !unit {
				r, i = times(r, i, n)
			}
			store(r, n, 0, h)
			store(i, n, 1, h)
		}
		switch radix {
		case 2:
			br, bi := in(1)
			ar, ai := in(0)
			out(sub(ar, br), sub(ai, bi), 1)
			out(add(ar, br), add(ai, bi), 0)
		case 3:
			br, bi := in(1)
			cr, ci := in(2)
			ar, ai := in(0)
			sr, si := add(br, cr), add(bi, ci)
			dr, di := mul(sub(br, cr), sine), mul(sub(bi, ci), sine)
			halved := g.YMM()
			onehalf(halved)
			hr, hi := sub(ar, mul(sr, halved)), sub(ai, mul(si, halved))
			out(add(ar, sr), add(ai, si), 0)
			// h - i d and h + i d, the other way round for the inverse.
			first, second := 1, 2
			if inverse {
				first, second = 2, 1
			}
			out(add(hr, di), sub(hi, dr), first)
			out(sub(hr, di), add(hi, dr), second)
		case 4:
			cr, ci := in(2)
			ar, ai := in(0)
			pr, pi, mr, mi := add(ar, cr), add(ai, ci), sub(ar, cr), sub(ai, ci)
			br, bi := in(1)
			dr, di := in(3)
			sr, si, tr, ti := add(br, dr), add(bi, di), sub(br, dr), sub(bi, di)
			out(add(pr, sr), add(pi, si), 0)
			out(sub(pr, sr), sub(pi, si), 2)
			// m - i t and m + i t, the other way round for the inverse.
			first, second := 1, 3
			if inverse {
				first, second = 3, 1
			}
			out(add(mr, ti), sub(mi, tr), first)
			out(sub(mr, ti), add(mi, tr), second)
		}
	}
	blocks := func(label string, unit bool) {
		g.MOVQ(z, p)
		g.Label(label)
		if radix == 4 {
			g.LEAQ(indexed(p, q, 1), third)
		}
		body(0, unit)
		body(1, unit)
		g.ADDQ(step, p)
		g.CMPQ(p, end)
		g.JL(LabelRef(label))
	}
	next := func() {
		addTo(z, complexSample)
		addTo(twiddle, 16*(radix-1))
		g.DECQ(left)
	}
	if radix == 4 { // the first butterflies' factors are one
		blocks("first", true)
		next()
	}
	down("butterfly", left, func() {
		blocks("block", false)
		addTo(z, complexSample)
		addTo(twiddle, 16*(radix-1))
	})
	g.VZEROUPPER()
	g.RET()
}

// onehalf sets r to 0.5.
func onehalf(r ymm) {
	g.VPCMPEQD(r, r, r)
	g.VPSLLQ(U8(55), r, r)
	g.VPSRLQ(U8(2), r, r)
}

func mirrored() {
	function("mirrored", "func(z *float64, place, mirror *int, table, mirrored *float64, n int)", "mirrored is the assembly of mirroredPlain; mirror and mirrored run downwards.")
	z, place, mirror, table, tableMirror, n := arg("z"), arg("place"), arg("mirror"), arg("table"), arg("mirrored"), arg("n")
	i, j := g.GP64(), g.GP64()
	down("pairs", n, func() {
		g.MOVQ(at(place, 0), i)
		g.MOVQ(at(mirror, 0), j)
		g.SHLQ(U8(7), i)
		g.SHLQ(U8(7), j)
		g.ADDQ(z, i)
		g.ADDQ(z, j)
		for h := range 2 {
			load := func(p reg.Register, part int) ymm {
				r := g.YMM()
				g.VMOVUPD(halfOf(p, sample*part, h), r)
				return r
			}
			r, s, q, v := load(i, 0), load(i, 1), load(j, 0), load(j, 1)
			line := func(p, t reg.Register, r, s, q, v ymm) {
				f := func(k int) ymm { return broadcast64(at(t, 8*k)) }
				ar, ai, br, bi := f(0), f(1), f(2), f(3)
				g.VMOVUPD(add(sub(mul(r, ar), mul(s, ai)), add(mul(q, br), mul(v, bi))), halfOf(p, 0, h))
				g.VMOVUPD(add(add(mul(s, ar), mul(r, ai)), sub(mul(q, bi), mul(v, br))), halfOf(p, sample, h))
			}
			line(i, table, r, s, q, v)
			line(j, tableMirror, q, v, r, s)
		}
		addTo(place, 8)
		addTo(mirror, -8)
		addTo(table, 32)
		addTo(tableMirror, -32)
	})
	g.VZEROUPPER()
	g.RET()
}
