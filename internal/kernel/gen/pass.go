package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// Where the parts of kernel.passTable lie, in bytes: rows of eight alike, but for the
// numbers.
const (
	passNumbers64 = 32 * iota // 0 to 7 as float64, two rows
	_
	passEight64 // four times 8, as float64
	passHalf
	passPieces // per pair of taps the even and the odd piece, highest power first
)

func passes() {
	for _, degree := range []int{3, 5} {
		passOf(degree)
	}
}

func passOf(degree int) {
	taps := degree + 1
	name := fmt.Sprintf("pass%d", degree)
	function(name, "func(dst *float32, dstStride, rows, width int, c *float32, rowStride, tapStride int, follow *int32, axes *float64, table *float32, masks *int32)",
		fmt.Sprintf("%s is the assembly of passPlain, degree %d.", name, degree))
	dst, c, stride, axes, table, follow := arg("dst"), arg("c"), arg("tapStride"), arg("axes"), arg("table"), arg("follow")
	g.SHLQ(U8(2), stride)
	stride3, stride5 := g.GP64(), reg.GPVirtual(nil)
	g.LEAQ(indexed(stride, stride, 2), stride3)
	if taps == 6 {
		stride5 = g.GP64()
		g.LEAQ(indexed(stride, stride, 4), stride5)
	}
	row, i := g.GP64(), g.GP64()
	g.XORQ(row, row)

	g.Label("row")
	g.CMPQ(row, onStack("rows"))
	g.JGE(LabelRef("end"))
	origin := g.YMM()
	{
		x := g.XMM()
		g.VXORPS(x, x, x)
		g.VCVTSI2SDQ(row, x, x)
		g.VMULSD(at(axes, 16), x, x)
		g.VADDSD(at(axes, 0), x, x)
		g.VBROADCASTSD(x, origin)
	}
	number := [2]reg.VecVirtual{g.YMM(), g.YMM()}
	count := g.YMM()
	for h := range number {
		g.VMOVUPD(at(table, passNumbers64+32*h), number[h])
	}
	g.VMOVDQU(at(follow, 0), count)
	g.XORQ(i, i)

	g.Label("eight")
	// Where the next eight lie: first taps as int32, fractions as float32.
	var cells, fracs [2]reg.VecVirtual
	{
		zero, step, limit, eight := g.YMM(), g.YMM(), g.YMM(), g.YMM()
		g.VXORPD(zero, zero, zero)
		g.VBROADCASTSD(at(axes, 8), step)
		g.VBROADCASTSD(at(axes, 24), limit)
		g.VMOVUPD(at(table, passEight64), eight)
		for h := range 2 {
			u, f := g.YMM(), g.YMM()
			cells[h], fracs[h] = g.YMM(), g.YMM()
			g.VMULPD(step, number[h], u)
			g.VADDPD(eight, number[h], number[h])
			g.VADDPD(origin, u, u)
			g.VMAXPD(zero, u, u) // zero where NaN
			g.VMINPD(limit, u, u)
			g.VCVTTPD2DQY(u, cells[h].AsX())
			g.VCVTDQ2PD(cells[h].AsX(), f)
			g.VSUBPD(f, u, u)
			g.VCVTPD2PSY(u, fracs[h].AsX())
		}
	}
	key, s := g.YMM(), g.YMM()
	g.VINSERTF128(U8(1), cells[1].AsX(), cells[0], key)
	g.VINSERTF128(U8(1), fracs[1].AsX(), fracs[0], s)
	g.VPSUBD(count, key, key)
	g.VPADDD(at(follow, 32), count, count)

	// Weights, about the middle of the cell.
	g.VSUBPS(at(table, passHalf), s, s)
	q := g.YMM()
	g.VMULPS(s, s, q)
	w := make([]reg.VecVirtual, taps)
	disp := passPieces
	for p := range taps / 2 {
		var piece [2]reg.VecVirtual
		for k := range piece {
			piece[k] = g.YMM()
			g.VMULPS(at(table, disp), q, piece[k])
			g.VADDPS(at(table, disp+32), piece[k], piece[k])
			disp += 64
			if degree == 5 {
				g.VMULPS(q, piece[k], piece[k])
				g.VADDPS(at(table, disp), piece[k], piece[k])
				disp += 32
			}
		}
		g.VMULPS(s, piece[1], piece[1])
		w[p], w[degree-p] = g.YMM(), g.YMM()
		g.VSUBPS(piece[1], piece[0], w[p])
		g.VADDPS(piece[1], piece[0], w[degree-p])
	}

	// sum goes over the taps of the cell that lane 0 of k lies in.
	sum := func(k reg.VecVirtual) reg.VecVirtual {
		p := g.GP64()
		x := g.GP32()
		g.VMOVD(k.AsX(), x)
		g.MOVLQSX(x, p)
		g.IMULQ(stride, p)
		g.LEAQ(indexed(p, i, 4), p)
		g.ADDQ(c, p)
		tap := func(k int) Mem {
			switch k {
			case 0:
				return at(p, 0)
			case 3:
				return indexed(p, stride3, 1)
			case 5:
				return indexed(p, stride5, 1)
			}
			return indexed(p, stride, uint8(k))
		}
		var part [2]reg.VecVirtual
		for h := range part {
			part[h] = g.YMM()
			for k := h * taps / 2; k < (h+1)*taps/2; k++ {
				if k == h*taps/2 {
					g.VMULPS(tap(k), w[k], part[h])
				} else {
					accumulate(tap(k), w[k], part[h], g.YMM())
				}
			}
		}
		g.VADDPS(part[1], part[0], part[0])
		return part[0]
	}
	same := g.YMM()
	g.VPBROADCASTD(key.AsX(), same)
	g.VPCMPEQD(same, key, same)
	bits := g.GP32()
	g.VMOVMSKPS(same, bits)
	v := sum(key)
	g.XORL(U32(255), bits)
	g.JNZ(LabelRef("more"))

	g.Label("summed")
	left := g.GP64()
	g.MOVQ(onStack("width"), left)
	g.SUBQ(i, left)
	g.CMPQ(left, I8(8))
	g.JL(LabelRef("tail"))
	g.VMOVUPS(v, indexed(dst, i, 4))
	g.ADDQ(U8(8), i)
	g.CMPQ(i, onStack("width"))
	g.JL(LabelRef("eight"))
	g.Label("nextRow")
	step := g.GP64()
	g.MOVQ(onStack("dstStride"), step)
	g.LEAQ(indexed(dst, step, 4), dst)
	g.MOVQ(onStack("rowStride"), step)
	g.LEAQ(indexed(c, step, 4), c)
	g.INCQ(row)
	g.JMP(LabelRef("row"))
	g.Label("tail")
	mask := tailMask(arg("masks"), left)
	g.VMASKMOVPS(v, mask, indexed(dst, i, 4))
	g.JMP(LabelRef("nextRow"))

	// Lanes of another cell: the first of them, and those with it.
	g.Label("more")
	g.MOVQ(onStack("width"), left)
	g.SUBQ(i, left)
	g.CMPQ(left, I8(8))
	g.JGE(LabelRef("all"))
	keep := g.GP64()
	g.MOVQ(U32(1), keep)
	g.MOVQ(left, reg.RCX)
	g.SHLQ(reg.CL, keep)
	g.DECQ(keep)
	g.ANDL(keep.As32(), bits)
	g.JZ(LabelRef("summed"))
	g.Label("all")
	{
		lane := g.GP32()
		g.BSFL(bits, lane)
		x, k := g.XMM(), g.YMM()
		g.VMOVD(lane, x)
		g.VPBROADCASTD(x, k)
		g.VPERMD(key, k, k)
		also := g.YMM()
		g.VPCMPEQD(k, key, also)
		g.VBLENDVPS(also, sum(k), v, v)
		done := g.GP32()
		g.VMOVMSKPS(also, done)
		g.NOTL(done)
		g.ANDL(done, bits)
		g.JNZ(LabelRef("all"))
	}
	g.JMP(LabelRef("summed"))
	g.Label("end")
	g.VZEROUPPER()
	g.RET()
}
