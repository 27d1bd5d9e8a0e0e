package main

import (
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// A sample of eight lanes of float64 is two registers, 64 bytes.
const (
	sample    = 64
	mostOrder = 8
)

// pair is both halves of a sample.
type pair [2]reg.VecVirtual

func newPair() pair { return pair{g.YMM(), g.YMM()} }

func halfOf(base reg.Register, disp, h int) Mem { return at(base, disp+32*h) }

func loadPair(base reg.Register, disp int) pair {
	p := newPair()
	for h, r := range p {
		g.VMOVUPD(halfOf(base, disp, h), r)
	}
	return p
}

func (p pair) store(base reg.Register, disp int) {
	for h, r := range p {
		g.VMOVUPD(r, halfOf(base, disp, h))
	}
}

func (p pair) zero() {
	for _, r := range p {
		g.VXORPD(r, r, r)
	}
}

// each is f for both halves.
func (p pair) each(f func(h int, r reg.VecVirtual)) pair {
	for h, r := range p {
		f(h, r)
	}
	return p
}

func broadcast64(m Op) reg.VecVirtual {
	v := g.YMM()
	g.VBROADCASTSD(m, v)
	return v
}

// down runs body n times; n is lost.
func down(label string, n reg.GPVirtual, body func()) {
	g.Label(label)
	g.TESTQ(n, n)
	g.JZ(LabelRef(label + "_end"))
	body()
	g.DECQ(n)
	g.JMP(LabelRef(label))
	g.Label(label + "_end")
}

func addTo(p reg.Register, bytes int) { g.ADDQ(I32(int32(bytes)), p) }

func lanesFunctions() {
	widenLanes()
	narrowLanes()
	line()
	sumLanes()
	lags()
	solve()
	predict(false)
	predict(true)
}

func widenLanes() {
	function("widenLanes", "func(x *float64, src *float32, stride, n int)", "widenLanes is the assembly of widenLanesPlain.")
	x, src, stride, n := arg("x"), arg("src"), arg("stride"), arg("n")
	g.SHLQ(U8(2), stride)
	down("samples", n, func() {
		newPair().each(func(h int, r reg.VecVirtual) {
			g.VCVTPS2PD(at(src, 16*h), r)
			g.VMOVUPD(r, halfOf(x, 0, h))
		})
		addTo(x, sample)
		g.ADDQ(stride, src)
	})
	g.VZEROUPPER()
	g.RET()
}

func narrowLanes() {
	function("narrowLanes", "func(dst *float32, stride int, r *float64, n int, level, slope *float64, from, shift float64, bounds *float64)", "narrowLanes is the assembly of narrowLanesPlain.")
	dst, stride, r, n := arg("dst"), arg("stride"), arg("r"), arg("n")
	level, slope := loadPair(arg("level"), 0), loadPair(arg("slope"), 0)
	d, shift := broadcast64(onStack("from")), broadcast64(onStack("shift"))
	bounds := arg("bounds")
	most, least, one := broadcast64(at(bounds, 0)), broadcast64(at(bounds, 8)), broadcast64(at(bounds, 16))
	g.SHLQ(U8(2), stride)
	down("samples", n, func() {
		t := g.YMM()
		g.VADDPD(shift, d, t)
		g.VADDPD(one, d, d)
		newPair().each(func(h int, v reg.VecVirtual) {
			g.VMULPD(slope[h], t, v)
			g.VADDPD(v, level[h], v)
			g.VADDPD(halfOf(r, 0, h), v, v)
			// The second source, here the value, is what comes out for a NaN.
			g.VMINPD(v, most, v)
			g.VMAXPD(v, least, v)
			g.VCVTPD2PSY(v, v.AsX())
			g.VMOVUPS(v.AsX(), at(dst, 16*h))
		})
		addTo(r, sample)
		g.ADDQ(stride, dst)
	})
	g.VZEROUPPER()
	g.RET()
}

func line() {
	function("line", "func(x *float64, n int, numbers *float64, level, slope, top *float64)", "line is the assembly of linePlain.")
	x, n, numbers := arg("x"), arg("n"), arg("numbers")
	p, left := g.GP64(), g.GP64()
	pass := func(label string, body func()) {
		g.MOVQ(x, p)
		g.MOVQ(n, left)
		down(label, left, func() {
			body()
			addTo(p, sample)
		})
	}
	level, slope, top := newPair(), newPair(), newPair()
	level.zero()
	slope.zero()
	top.zero()
	pass("sum", func() {
		level.each(func(h int, r reg.VecVirtual) { g.VADDPD(halfOf(p, 0, h), r, r) })
	})
	level.each(func(h int, r reg.VecVirtual) { g.VDIVPD(broadcast64(at(numbers, 0)), r, r) })
	d, one := broadcast64(at(numbers, 8)), broadcast64(at(numbers, 24))
	pass("slope", func() {
		loadPair(p, 0).each(func(h int, v reg.VecVirtual) {
			g.VSUBPD(level[h], v, v)
			g.VMULPD(d, v, v)
			g.VADDPD(v, slope[h], slope[h])
		})
		g.VADDPD(one, d, d)
	})
	slope.each(func(h int, r reg.VecVirtual) { g.VDIVPD(broadcast64(at(numbers, 16)), r, r) })
	g.VBROADCASTSD(at(numbers, 8), d)
	sign := g.YMM()
	g.VPCMPEQD(sign, sign, sign)
	g.VPSRLQ(U8(1), sign, sign)
	pass("rest", func() {
		loadPair(p, 0).each(func(h int, v reg.VecVirtual) {
			m := g.YMM()
			g.VSUBPD(level[h], v, v)
			g.VMULPD(d, slope[h], m)
			g.VSUBPD(m, v, v)
			g.VMOVUPD(v, halfOf(p, 0, h))
			g.VANDPD(sign, v, v)
			g.VMAXPD(top[h], v, top[h]) // top where the value is NaN
		})
		g.VADDPD(one, d, d)
	})
	level.store(arg("level"), 0)
	slope.store(arg("slope"), 0)
	top.store(arg("top"), 0)
	g.VZEROUPPER()
	g.RET()
}

func sumLanes() {
	function("sumLanes", "func(sum *float64, w *float64, x *float64, n int)", "sumLanes is the assembly of sumLanesPlain.")
	sum, w, x, n := arg("sum"), arg("w"), arg("x"), arg("n")
	acc := newPair()
	acc.zero()
	down("taps", n, func() {
		f := broadcast64(at(w, 0))
		newPair().each(func(h int, v reg.VecVirtual) {
			g.VMULPD(halfOf(x, 0, h), f, v)
			g.VADDPD(v, acc[h], acc[h])
		})
		addTo(w, 8)
		addTo(x, sample)
	})
	acc.store(sum, 0)
	g.VZEROUPPER()
	g.RET()
}

// lags sums x[t] x[t-j] for nine j; x is the first t.
func lags() {
	function("lags", "func(phi, x *float64, n int)", "lags is the assembly of lagsPlain for order 8.")
	phi, x, n := arg("phi"), arg("x"), arg("n")
	for h, label := range []string{"low", "high"} {
		var acc [mostOrder + 1]reg.VecVirtual
		for j := range acc {
			acc[j] = g.YMM()
			g.VXORPD(acc[j], acc[j], acc[j])
		}
		p, left := g.GP64(), g.GP64()
		g.MOVQ(x, p)
		g.MOVQ(n, left)
		down(label, left, func() {
			v := g.YMM()
			g.VMOVUPD(halfOf(p, 0, h), v)
			for j := range acc {
				m := g.YMM()
				g.VMULPD(halfOf(p, -sample*j, h), v, m)
				g.VADDPD(m, acc[j], acc[j])
			}
			addTo(p, sample)
		})
		for j := range acc {
			g.VMOVUPD(acc[j], halfOf(phi, sample*j, h))
		}
	}
	g.VZEROUPPER()
	g.RET()
}

// solve is the rest of the fit, unrolled for order 8: s is the fields phi, lower and
// coef of kernel.Autoregression.
func solve() {
	const q = mostOrder
	function("solve", "func(s, first, last *float64, share float64)", "solve is the assembly of Autoregression.solvePlain for order 8; s is phi, lower and coef.")
	s, first, last := arg("s"), arg("first"), arg("last")
	phi := func(i, j int) int { return sample * ((q+1)*min(i, j) + max(i, j)) }
	lower := func(i, j int) int { return sample * ((q+1)*(q+1) + q*i + j) }
	coef := func(i int) int { return sample * ((q+1)*(q+1) + q*q + i) }
	normal := func(i, j int) pair {
		return loadPair(s, phi(i, j)).each(func(h int, r reg.VecVirtual) { g.VADDPD(halfOf(s, phi(q-i, q-j), h), r, r) })
	}
	// less takes the product of two samples in s from p.
	less := func(p pair, a, b int) {
		m := loadPair(s, a)
		p.each(func(h int, r reg.VecVirtual) {
			g.VMULPD(halfOf(s, b, h), m[h], m[h])
			g.VSUBPD(m[h], r, r)
		})
	}
	for i := range q {
		for j := i; j < q; j++ {
			a, c := loadPair(first, sample*(q-1-i)), loadPair(last, sample*(q-1-i))
			newPair().each(func(h int, r reg.VecVirtual) {
				g.VMULPD(halfOf(first, sample*(q-1-j), h), a[h], a[h])
				g.VADDPD(halfOf(s, phi(i, j), h), a[h], r)
				g.VMULPD(halfOf(last, sample*(q-1-j), h), c[h], c[h])
				g.VSUBPD(c[h], r, r)
				g.VMOVUPD(r, halfOf(s, phi(i+1, j+1), h))
			})
		}
	}
	ridge := newPair()
	ridge.zero()
	for i := 1; i <= q; i++ {
		c := normal(i, i)
		ridge.each(func(h int, r reg.VecVirtual) { g.VADDPD(c[h], r, r) })
	}
	zero := g.YMM()
	g.VXORPD(zero, zero, zero)
	one := g.YMM() // 0x3ff0000000000000
	g.VPCMPEQD(one, one, one)
	g.VPSLLQ(U8(54), one, one)
	g.VPSRLQ(U8(2), one, one)
	share := broadcast64(onStack("share"))
	ridge.each(func(h int, r reg.VecVirtual) {
		g.VMULPD(share, r, r)
		above := g.YMM()
		g.VCMPPD(U8(0x1e), zero, r, above) // greater, false for a NaN
		g.VBLENDVPD(above, r, one, r)
	})
	for i := range q {
		for j := range i {
			c := normal(i+1, j+1)
			for k := range j {
				less(c, lower(i, k), lower(j, k))
			}
			c.store(s, lower(i, j))
		}
		d, c := normal(i+1, i+1), normal(i+1, 0)
		d.each(func(h int, r reg.VecVirtual) { g.VADDPD(ridge[h], r, r) })
		for k := range i {
			a := loadPair(s, lower(i, k))
			a.each(func(h int, ld reg.VecVirtual) {
				u, m := g.YMM(), g.YMM()
				g.VDIVPD(halfOf(s, lower(k, k), h), ld, u)
				g.VMOVUPD(u, halfOf(s, lower(i, k), h))
				g.VMULPD(u, ld, m)
				g.VSUBPD(m, d[h], d[h])
				g.VMULPD(halfOf(s, coef(k), h), u, u)
				g.VSUBPD(u, c[h], c[h])
			})
		}
		d.store(s, lower(i, i))
		c.store(s, coef(i))
	}
	for i := q - 1; i >= 0; i-- {
		c := loadPair(s, coef(i))
		c.each(func(h int, r reg.VecVirtual) { g.VDIVPD(halfOf(s, lower(i, i), h), r, r) })
		for k := i + 1; k < q; k++ {
			less(c, lower(k, i), coef(k))
		}
		c.store(s, coef(i))
	}
	g.VZEROUPPER()
	g.RET()
}

func predict(both bool) {
	name, signature := "forward", "func(after *float64, n int, coef, limit *float64)"
	if both {
		name, signature = "outward", "func(after, before *float64, n int, coef, limit *float64)"
	}
	function(name, signature, name+" predicts n samples of order 8, from after on and, if given, from before backwards.")
	after, n, coef := arg("after"), arg("n"), arg("coef")
	ways := []struct {
		p   reg.GPVirtual
		way int
	}{{after, 1}}
	if both {
		ways = append(ways, struct {
			p   reg.GPVirtual
			way int
		}{arg("before"), -1})
	}
	limit := loadPair(arg("limit"), 0)
	least := newPair().each(func(h int, r reg.VecVirtual) {
		g.VPCMPEQD(r, r, r)
		g.VPSLLQ(U8(63), r, r)
		g.VXORPD(limit[h], r, r)
	})
	down("samples", n, func() {
		sums := make([]pair, len(ways))
		for w := range ways {
			sums[w] = newPair()
			sums[w].zero()
		}
		for k := range mostOrder {
			a := loadPair(coef, sample*k)
			for w, side := range ways {
				sums[w].each(func(h int, r reg.VecVirtual) {
					m := g.YMM()
					g.VMULPD(halfOf(side.p, -side.way*sample*(k+1), h), a[h], m)
					g.VADDPD(m, r, r)
				})
			}
		}
		for w, side := range ways {
			sums[w].each(func(h int, r reg.VecVirtual) {
				// The second source, here the sum, is what comes out for a NaN or
				// for zeros of either sign.
				g.VMINPD(r, limit[h], r)
				g.VMAXPD(r, least[h], r)
				g.VMOVUPD(r, halfOf(side.p, 0, h))
			})
			addTo(side.p, side.way*sample)
		}
	})
	g.VZEROUPPER()
	g.RET()
}
