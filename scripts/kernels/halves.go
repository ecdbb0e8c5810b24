package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// halves are the steps between a complex transform and the real one of twice
// the size, see pkg/kernel/halves.go.
func halves() {
	order := GLOBL("backwards", RODATA|NOPTR)
	for k := range 8 {
		DATA(4*k, U32(uint32(7-k)))
	}
	half := GLOBL("oneHalf", RODATA|NOPTR)
	DATA(0, F32(0.5))

	function("splitHalvesAVX2", "func(re, im, cos, sin *float32, last, n int)",
		"splitHalvesAVX2 splits n bins from 1 up, n a multiple of 8, and those from last down.")
	p := params("re", "im", "cos", "sin", "last", "n")
	re, im, cos, sin, last, n := p[0], p[1], p[2], p[3], p[4], p[5]
	// Bin 1 + i and bin last - i; eight from last-7 on are read backwards.
	upR, upI := GP64(), GP64()
	LEAQ(Mem{Base: re, Index: last, Scale: 4, Disp: -28}, upR)
	LEAQ(Mem{Base: im, Index: last, Scale: 4, Disp: -28}, upI)
	backwards, h := YMM(), YMM()
	VMOVDQU(order, backwards)
	VBROADCASTSS(half, h)
	turned := func(at Register) VecVirtual {
		v := YMM()
		VPERMPS(Mem{Base: at}, backwards, v)
		return v
	}
	Label("eight")
	ra, ia := loaded(Mem{Base: re, Disp: 4}), loaded(Mem{Base: im, Disp: 4})
	rb, ib := turned(upR), turned(upI)
	er, minusOI := sumDifference(ra, rb)
	or, ei := sumDifference(ia, ib)
	for _, v := range []VecVirtual{er, minusOI, or, ei} {
		VMULPS(h, v, v)
	}
	c, s := loaded(Mem{Base: cos, Disp: 4}), loaded(Mem{Base: sin, Disp: 4})
	tr, ti := YMM(), YMM()
	VMULPS(c, or, tr)
	VFNMADD231PS(minusOI, s, tr)
	VMULPS(s, or, ti)
	VFMADD231PS(minusOI, c, ti) // -ti
	a := YMM()
	VADDPS(tr, er, a)
	VMOVUPS(a, Mem{Base: re, Disp: 4})
	VSUBPS(ti, ei, a)
	VMOVUPS(a, Mem{Base: im, Disp: 4})
	VSUBPS(tr, er, er)
	VPERMPS(er, backwards, er)
	VMOVUPS(er, Mem{Base: upR})
	VXORPS(a, a, a)
	VSUBPS(ti, a, a)
	VSUBPS(ei, a, a)
	VPERMPS(a, backwards, a)
	VMOVUPS(a, Mem{Base: upI})
	for _, r := range []Register{re, im, cos, sin} {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), upR)
	SUBQ(Imm(32), upI)
	SUBQ(Imm(8), n)
	JNZ(LabelRef("eight"))
	end()

	function("joinHalvesAVX2", "func(zr, zi, re, im, cos, sin *float32, last, n int)",
		"joinHalvesAVX2 joins n bins from 1 up, n a multiple of 8, and those from last down.")
	p = params("zr", "zi", "re", "im", "cos", "sin", "last", "n")
	zr, zi := p[0], p[1]
	re, im, cos, sin, last, n = p[2], p[3], p[4], p[5], p[6], p[7]
	upR, upI = GP64(), GP64()
	LEAQ(Mem{Base: re, Index: last, Scale: 4, Disp: -28}, upR)
	LEAQ(Mem{Base: im, Index: last, Scale: 4, Disp: -28}, upI)
	upZR, upZI := GP64(), GP64()
	LEAQ(Mem{Base: zr, Index: last, Scale: 4, Disp: -28}, upZR)
	LEAQ(Mem{Base: zi, Index: last, Scale: 4, Disp: -28}, upZI)
	backwards = YMM()
	VMOVDQU(order, backwards)
	turned = func(at Register) VecVirtual {
		v := YMM()
		VPERMPS(Mem{Base: at}, backwards, v)
		return v
	}
	Label("eight")
	ra, ia = loaded(Mem{Base: re, Disp: 4}), loaded(Mem{Base: im, Disp: 4})
	er, tr = sumDifference(ra, turned(upR))
	ti, ei = sumDifference(ia, turned(upI))
	c, s = loaded(Mem{Base: cos, Disp: 4}), loaded(Mem{Base: sin, Disp: 4})
	or, oi := YMM(), YMM()
	VMULPS(c, tr, or)
	VFNMADD231PS(s, ti, or)
	VMULPS(s, tr, oi)
	VFMADD231PS(c, ti, oi)
	v := YMM()
	VSUBPS(oi, er, v)
	VMOVUPS(v, Mem{Base: zr, Disp: 4})
	VADDPS(or, ei, v)
	VMOVUPS(v, Mem{Base: zi, Disp: 4})
	VADDPS(oi, er, er)
	VPERMPS(er, backwards, er)
	VMOVUPS(er, Mem{Base: upZR})
	VSUBPS(ei, or, or)
	VPERMPS(or, backwards, or)
	VMOVUPS(or, Mem{Base: upZI})
	for _, r := range []Register{zr, zi, re, im, cos, sin} {
		ADDQ(Imm(32), r)
	}
	for _, r := range []Register{upR, upI, upZR, upZI} {
		SUBQ(Imm(32), r)
	}
	SUBQ(Imm(8), n)
	JNZ(LabelRef("eight"))
	end()

	function("alternateAVX2", "func(x, zr, zi *float32, scale float32, n int)",
		"alternateAVX2 scales and interleaves n values, n a multiple of 8.")
	p = params("x", "zr", "zi", "n")
	x := p[0]
	zr, zi, n = p[1], p[2], p[3]
	scale := YMM()
	VBROADCASTSS(NewParamAddr("scale", 24), scale)
	Label("eight")
	r, i := YMM(), YMM()
	VMULPS(Mem{Base: zr}, scale, r)
	VMULPS(Mem{Base: zi}, scale, i)
	low := YMM()
	VUNPCKLPS(i, r, low)
	VUNPCKHPS(i, r, r)
	VMOVUPS(low.AsX(), Mem{Base: x})
	VMOVUPS(r.AsX(), Mem{Base: x, Disp: 16})
	VEXTRACTF128(Imm(1), low, Mem{Base: x, Disp: 32})
	VEXTRACTF128(Imm(1), r, Mem{Base: x, Disp: 48})
	ADDQ(Imm(32), zr)
	ADDQ(Imm(32), zi)
	ADDQ(Imm(64), x)
	SUBQ(Imm(8), n)
	JNZ(LabelRef("eight"))
	end()
}
