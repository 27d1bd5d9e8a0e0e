package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// Where the parts of kernel.passTable lie, in bytes: rows of eight alike, but for the
// numbers.
const (
	passNumbers = 32 * iota // 0 to 7
	passEight
	passHalf
	passPieces // per pair of taps the even and the odd piece, highest power first
)

// Where the axes have what, in bytes, and the scratch of 64 outputs.
const (
	passStart = 8 * iota
	passStep
	passRowStep
	passLowest
	passHighest
	passLimit
	passSlope

	passFraction = 0 // float32
	passLo       = 4
	passHi       = 8
	passCell     = 12 // int32
	passSigma    = 16 // float32
	passKeys     = 32 // int32, 64 of them
	passPlaces   = 32 + 4*64
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
	dst, c, stride, table := arg("dst"), arg("c"), arg("tapStride"), arg("table")
	g.SHLQ(U8(2), stride)
	stride3, stride5 := g.GP64(), reg.GPVirtual(nil)
	g.LEAQ(indexed(stride, stride, 2), stride3)
	if taps == 6 {
		stride5 = g.GP64()
		g.LEAQ(indexed(stride, stride, 4), stride5)
	}
	work := scratch(passPlaces + 4*64)
	{
		x := g.XMM()
		g.VXORPS(x, x, x)
		g.VCVTSD2SS(at(arg("axes"), passSlope), x, x)
		g.VMOVSS(x, at(work, passSigma))
	}
	row, i := g.GP64(), g.GP64()
	j, end := g.GP64(), g.GP64() // of 64 outputs
	g.XORQ(row, row)

	g.Label("row")
	g.CMPQ(row, onStack("rows"))
	g.JGE(LabelRef("end"))
	g.XORQ(i, i)

	// 64 outputs are placed against the first of them.
	g.Label("many")
	follow := arg("follow")
	{
		axes := arg("axes")
		u, k, x := g.XMM(), g.XMM(), g.XMM()
		g.VXORPS(u, u, u)
		g.VCVTSI2SDQ(row, u, u)
		g.VMULSD(at(axes, passRowStep), u, u)
		g.VADDSD(at(axes, passStart), u, u)
		g.VXORPS(x, x, x)
		g.VCVTSI2SDQ(i, x, x)
		g.VMULSD(at(axes, passStep), x, x)
		g.VADDSD(u, x, u)
		g.VMAXSD(at(axes, passLowest), u, u)
		g.VMINSD(at(axes, passHighest), u, u)
		g.VROUNDSD(U8(1), u, u, k) // down
		g.VSUBSD(k, u, u)
		g.VCVTSD2SS(u, u, u)
		g.VMOVSS(u, at(work, passFraction))
		g.VMOVSD(at(axes, passLimit), x)
		g.VSUBSD(k, x, x)
		g.VCVTSD2SS(x, x, x)
		g.VMOVSS(x, at(work, passHi))
		cell := g.GP32()
		g.VCVTTSD2SI(k, cell)
		gone := g.GP32()
		g.MOVL(at(follow, 0), gone)
		g.ANDL(i.As32(), gone)
		g.NEGL(gone)
		g.ADDL(cell, gone)
		g.MOVL(gone, at(work, passCell))
		g.NEGL(cell)
		g.VCVTSI2SSL(cell, x, x)
		g.VMOVSS(x, at(work, passLo))
	}
	number := g.YMM()
	g.VMOVUPS(at(table, passNumbers), number)

	// Where they lie: first taps, less their own numbers where taps follow, and
	// distances from the middle of a cell. All of them before the first is used: what
	// follows then does not wait for the whole chain of every eight.
	g.MOVQ(onStack("width"), end)
	g.SUBQ(i, end)
	g.MOVQ(U32(64), j)
	g.CMPQ(end, j)
	g.CMOVQGT(j, end)
	g.XORQ(j, j)
	g.Label("place")
	{
		key, s := g.YMM(), g.YMM()
		bound, floor, gone := g.YMM(), g.YMM(), g.YMM()
		g.VMULPS(broadcast(at(work, passSigma)), number, s)
		g.VADDPS(broadcast(at(work, passFraction)), s, s)
		g.VANDPS(at(follow, 0), number, gone)
		g.VADDPS(at(table, passEight), number, number)
		g.VBROADCASTSS(at(work, passLo), bound)
		g.VSUBPS(gone, bound, bound)
		g.VMAXPS(bound, s, s)
		bound = g.YMM()
		g.VBROADCASTSS(at(work, passHi), bound)
		g.VSUBPS(gone, bound, bound)
		g.VMINPS(bound, s, s)
		g.VROUNDPS(U8(1), s, floor)
		g.VSUBPS(floor, s, s)
		g.VCVTTPS2DQ(floor, key)
		k := g.YMM()
		g.VPBROADCASTD(at(work, passCell), k)
		g.VPADDD(k, key, key)
		g.VSUBPS(at(table, passHalf), s, s)
		g.VMOVDQA(key, Mem{Base: work, Index: j, Scale: 4, Disp: passKeys})
		g.VMOVAPS(s, Mem{Base: work, Index: j, Scale: 4, Disp: passPlaces})
	}
	g.ADDQ(U8(8), j)
	g.CMPQ(j, end)
	g.JL(LabelRef("place"))
	g.XORQ(j, j)

	g.Label("eight")
	key, s := g.YMM(), g.YMM()
	g.VMOVDQA(Mem{Base: work, Index: j, Scale: 4, Disp: passKeys}, key)
	g.VMOVAPS(Mem{Base: work, Index: j, Scale: 4, Disp: passPlaces}, s)

	// Weights, about the middle of the cell.
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
	g.MOVQ(end, left)
	g.SUBQ(j, left)
	g.CMPQ(left, I8(8))
	g.JL(LabelRef("tail"))
	g.VMOVUPS(v, indexed(dst, i, 4))
	g.ADDQ(U8(8), i)
	g.ADDQ(U8(8), j)
	g.CMPQ(j, end)
	g.JL(LabelRef("eight"))
	g.CMPQ(i, onStack("width"))
	g.JL(LabelRef("many"))
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
	g.MOVQ(end, left)
	g.SUBQ(j, left)
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
