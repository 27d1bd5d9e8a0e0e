package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

func prefilter() {
	for _, degree := range []int{3, 5} {
		for _, lanes := range []int{32, 8} {
			strip(degree, lanes)
		}
	}
	transposes()
	function("reflect", "func(dst, end, inner *float32, n int, masks *int32)", "reflect is the assembly of reflectPlain.")
	end, inner := arg("end"), arg("inner")
	elementwise("dst", func(load func(reg.Register) reg.VecVirtual) reg.VecVirtual {
		v := load(end)
		g.VADDPS(v, v, v)
		g.VSUBPS(load(inner), v, v)
		return v
	})
}

// strip writes the filter of so many neighbouring lines, each in a lane.
func strip(degree, lanes int) {
	name := fmt.Sprintf("strip%dx%d", degree, lanes)
	function(name, "func(dst *float32, dstStride int, src *float32, srcStride int, work *float32, n int, factors *float32, w1 *float32, k1 int, w2 *float32, k2 int)",
		fmt.Sprintf("%s is the assembly of eightPlain, degree %d, %d lanes.", name, degree, lanes))
	vecs, row := lanes/8, 4*lanes
	dst, ds, src, ss := arg("dst"), arg("dstStride"), arg("src"), arg("srcStride")
	g.SHLQ(U8(2), ds)
	g.SHLQ(U8(2), ss)
	work, n, factors := arg("work"), arg("n"), arg("factors")
	// The scratch begins with first and slope; row k of the lines follows.
	first := func(v int) Mem { return at(work, 32*v) }
	slope := func(v int) Mem { return at(work, row+32*v) }
	one := g.YMM()
	ones(one)

	// The ends stay as they are.
	q, p := g.GP64(), g.GP64()
	g.MOVQ(n, q)
	g.DECQ(q)
	g.MOVQ(q, p)
	g.IMULQ(ds, p)
	g.ADDQ(dst, p) // last row out
	g.IMULQ(ss, q)
	g.ADDQ(src, q) // last row in
	span := broadcast(at(factors, 4))
	for v := range vecs {
		f, l := g.YMM(), g.YMM()
		g.VMOVUPS(at(src, 32*v), f)
		g.VMOVUPS(at(q, 32*v), l)
		g.VMOVUPS(f, at(dst, 32*v))
		g.VMOVUPS(l, at(p, 32*v))
		g.VMOVUPS(f, first(v))
		g.VSUBPS(f, l, l)
		g.VDIVPS(span, l, l)
		g.VMOVUPS(l, slope(v))
	}
	count := g.GP64()
	interior := func() {
		g.MOVQ(n, count)
		g.SUBQ(I8(2), count)
	}
	row1 := func() { g.LEAQ(at(work, 3*row), p) }
	interior()
	g.CMPQ(count, I8(0))
	g.JLE(LabelRef("end"))

	// What is left of a line, times the gain.
	gain, kf := broadcast(at(factors, 0)), g.YMM()
	g.VMOVAPS(one, kf)
	g.MOVQ(src, q)
	g.ADDQ(ss, q)
	row1()
	g.Label("detrend")
	for v := range vecs {
		s := g.YMM()
		g.VMOVUPS(at(q, 32*v), s)
		g.VSUBPS(first(v), s, s)
		l := g.YMM()
		g.VMULPS(slope(v), kf, l)
		g.VSUBPS(l, s, s)
		g.VMULPS(gain, s, s)
		g.VMOVUPS(s, at(p, 32*v))
	}
	g.VADDPS(one, kf, kf)
	g.ADDQ(ss, q)
	g.ADDQ(U32(row), p)
	g.DECQ(count)
	g.JNZ(LabelRef("detrend"))

	poles := degree / 2
	for pole := range poles {
		label := func(s string) string { return fmt.Sprintf("%s%d", s, pole+1) }
		z := broadcast(at(factors, 4*(3+pole)))
		c := make([]reg.VecVirtual, vecs)
		for v := range c {
			c[v] = g.YMM()
			g.VXORPS(c[v], c[v], c[v])
		}
		w := arg(label("w"))
		g.Load(g.Param(label("k")), count)
		row1()
		g.TESTQ(count, count)
		g.JZ(LabelRef(label("begun")))
		g.Label(label("begin"))
		f := broadcast(at(w, 0))
		for v := range c {
			accumulate(at(p, 32*v), f, c[v], g.YMM())
		}
		g.ADDQ(I8(4), w)
		g.ADDQ(U32(row), p)
		g.DECQ(count)
		g.JNZ(LabelRef(label("begin")))
		g.Label(label("begun"))

		interior()
		row1()
		g.Label(label("forward"))
		for v := range c {
			g.VMULPS(z, c[v], c[v])
			g.VADDPS(at(p, 32*v), c[v], c[v])
			g.VMOVUPS(c[v], at(p, 32*v))
		}
		g.ADDQ(U32(row), p)
		g.DECQ(count)
		g.JNZ(LabelRef(label("forward")))

		for v := range c {
			g.VXORPS(c[v], c[v], c[v])
		}
		interior()
		last := pole == poles-1
		if last {
			g.MOVQ(count, q)
			g.IMULQ(ds, q)
			g.ADDQ(dst, q) // row n-2
			g.VBROADCASTSS(at(factors, 8), kf)
		}
		g.Label(label("backward"))
		g.SUBQ(U32(row), p)
		for v := range c {
			g.VSUBPS(at(p, 32*v), c[v], c[v])
			g.VMULPS(z, c[v], c[v])
			if last {
				l := g.YMM()
				g.VMULPS(slope(v), kf, l)
				g.VADDPS(l, c[v], l)
				g.VADDPS(first(v), l, l)
				g.VMOVUPS(l, at(q, 32*v))
			} else {
				g.VMOVUPS(c[v], at(p, 32*v))
			}
		}
		if last {
			g.VSUBPS(one, kf, kf)
			g.SUBQ(ds, q)
		}
		g.DECQ(count)
		g.JNZ(LabelRef(label("backward")))
	}
	g.Label("end")
	g.VZEROUPPER()
	g.RET()
}

// transposes writes the two directions of an exchange between eight rows and
// eight lanes.
func transposes() {
	for _, in := range []bool{true, false} {
		if in {
			function("gather", "func(t *float32, stride int, rows *float32, offsets *int, n int)", "gather is the assembly of gatherPlain; n is at least 8.")
		} else {
			function("scatter", "func(rows *float32, offsets *int, t *float32, stride int, n int)", "scatter is the assembly of scatterPlain; n is at least 8.")
		}
		t, stride, base, n := arg("t"), arg("stride"), arg("rows"), arg("n")
		g.SHLQ(U8(2), stride)
		var row [8]reg.GPVirtual
		offsets := arg("offsets")
		for k := range row {
			row[k] = g.GP64()
			g.MOVQ(at(offsets, 8*k), row[k])
			g.LEAQ(indexed(base, row[k], 4), row[k])
		}
		// n counts what is left; the last eight may overlap those before.
		g.Label("block")
		p := base // no longer wanted
		g.MOVQ(t, p)
		var block [8]reg.VecVirtual // of four lanes each from two rows
		load := func(lo, hi func(half int) Mem, half int) reg.VecVirtual {
			v := g.YMM()
			g.VMOVUPS(lo(half), v.AsX())
			g.VINSERTF128(U8(1), hi(half), v, v)
			return v
		}
		var out [8]reg.VecVirtual
		if in {
			for half := range 2 {
				for k := range 4 {
					r := func(k int) func(int) Mem { return func(h int) Mem { return at(row[k], 16*h) } }
					block[k] = load(r(k), r(k+4), half)
				}
				four(block[:4], out[4*half:])
				for k := range 4 {
					g.VMOVUPS(out[4*half+k], at(p, 0))
					g.ADDQ(stride, p)
				}
			}
		} else {
			// Lanes 0..3 of the eight rows of t become halves of rows 0..3, and so on.
			q := g.GP64()
			g.LEAQ(indexed(t, stride, 4), q)
			for half := range 2 {
				for k := range 4 {
					m := func(base reg.Register) func(int) Mem {
						return func(h int) Mem {
							if k == 3 {
								return Mem{Base: base, Disp: 16 * h}
							}
							return Mem{Base: base, Index: stride, Scale: uint8(max(1, k)), Disp: 16 * h}
						}
					}
					switch k {
					case 0:
						block[k] = load(func(h int) Mem { return at(p, 16*h) }, func(h int) Mem { return at(q, 16*h) }, half)
					case 1, 2:
						block[k] = load(m(p), m(q), half)
					case 3:
						p3, q3 := g.GP64(), g.GP64()
						g.LEAQ(indexed(p, stride, 2), p3)
						g.ADDQ(stride, p3)
						g.LEAQ(indexed(q, stride, 2), q3)
						g.ADDQ(stride, q3)
						block[k] = load(m(p3), m(q3), half)
					}
				}
				four(block[:4], out[:4])
				for k := range 4 {
					g.VMOVUPS(out[k], at(row[4*half+k], 0))
				}
			}
		}
		step := g.GP64()
		g.SUBQ(I8(8), n)
		g.JZ(LabelRef("end"))
		g.MOVQ(U32(8), step)
		g.CMPQ(n, step)
		g.CMOVQLT(n, step)
		for k := range row {
			g.LEAQ(indexed(row[k], step, 4), row[k])
		}
		// If fewer than eight are left, go so far only, and do eight again.
		g.MOVQ(step, p)
		g.IMULQ(stride, p)
		g.ADDQ(p, t)
		g.SUBQ(step, n)
		g.ADDQ(I8(8), n)
		g.JMP(LabelRef("block"))
		g.Label("end")
		g.VZEROUPPER()
		g.RET()
	}
}

// four transposes 4x4 in both halves: out[k] holds column k.
func four(in, out []reg.VecVirtual) {
	a, b, c, d := g.YMM(), g.YMM(), g.YMM(), g.YMM()
	g.VUNPCKLPS(in[1], in[0], a) // 00 10 01 11
	g.VUNPCKHPS(in[1], in[0], b) // 02 12 03 13
	g.VUNPCKLPS(in[3], in[2], c)
	g.VUNPCKHPS(in[3], in[2], d)
	for k := range 4 {
		out[k] = g.YMM()
	}
	g.VUNPCKLPD(c, a, out[0])
	g.VUNPCKHPD(c, a, out[1])
	g.VUNPCKLPD(d, b, out[2])
	g.VUNPCKHPD(d, b, out[3])
}
