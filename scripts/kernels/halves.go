package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// halves are the steps between a complex transform and the real one of twice
// the size, see pkg/kernel/halves.go.
func halves() {
	var order Mem
	if bytes == 4 {
		order = GLOBL("backwards", RODATA|NOPTR)
		for k := range 8 {
			DATA(4*k, U32(uint32(7-k)))
		}
	}
	half := constant("oneHalf", 0.5)
	// reverse writes the values of a register or of memory backwards.
	reverse := func(from Op, backwards, to VecVirtual) {
		if bytes == 8 {
			VPERMPD(Imm(0x1B), from, to)
			return
		}
		VPERMPS(from, backwards, to)
	}
	orders := func() VecVirtual {
		v := YMM()
		if bytes == 4 {
			VMOVDQU(order, v)
		}
		return v
	}

	function(named("splitHalves"), "func(re, im, cos, sin *T, last, n int)",
		named("splitHalves")+" splits n bins from 1 up, n a multiple of "+width()+", and those from last down.")
	p := params("re", "im", "cos", "sin", "last", "n")
	re, im, cos, sin, last, n := p[0], p[1], p[2], p[3], p[4], p[5]
	// Bin 1 + i and bin last - i; eight from last-7 on are read backwards.
	upR, upI := GP64(), GP64()
	LEAQ(Mem{Base: re, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upR)
	LEAQ(Mem{Base: im, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upI)
	backwards, h := orders(), YMM()
	spread(half, h)
	turned := func(at Register) VecVirtual {
		v := YMM()
		reverse(Mem{Base: at}, backwards, v)
		return v
	}
	Label("eight")
	ra, ia := loaded(Mem{Base: re, Disp: bytes}), loaded(Mem{Base: im, Disp: bytes})
	rb, ib := turned(upR), turned(upI)
	er, minusOI := sumDifference(ra, rb)
	or, ei := sumDifference(ia, ib)
	for _, v := range []VecVirtual{er, minusOI, or, ei} {
		mul(h, v, v)
	}
	c, s := loaded(Mem{Base: cos, Disp: bytes}), loaded(Mem{Base: sin, Disp: bytes})
	tr, ti := YMM(), YMM()
	mul(c, or, tr)
	mulTake(minusOI, s, tr)
	mul(s, or, ti)
	mulAdd(minusOI, c, ti) // -ti
	a := YMM()
	add(tr, er, a)
	move(a, Mem{Base: re, Disp: bytes})
	sub(ti, ei, a)
	move(a, Mem{Base: im, Disp: bytes})
	sub(tr, er, er)
	reverse(er, backwards, er)
	move(er, Mem{Base: upR})
	VXORPS(a, a, a)
	sub(ti, a, a)
	sub(ei, a, a)
	reverse(a, backwards, a)
	move(a, Mem{Base: upI})
	for _, r := range []Register{re, im, cos, sin} {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), upR)
	SUBQ(Imm(32), upI)
	SUBQ(Imm(uint64(32/bytes)), n)
	JNZ(LabelRef("eight"))
	end()

	function(named("joinHalves"), "func(zr, zi, re, im, cos, sin *T, last, n int)",
		named("joinHalves")+" joins n bins from 1 up, n a multiple of "+width()+", and those from last down.")
	p = params("zr", "zi", "re", "im", "cos", "sin", "last", "n")
	zr, zi := p[0], p[1]
	re, im, cos, sin, last, n = p[2], p[3], p[4], p[5], p[6], p[7]
	upR, upI = GP64(), GP64()
	LEAQ(Mem{Base: re, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upR)
	LEAQ(Mem{Base: im, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upI)
	upZR, upZI := GP64(), GP64()
	LEAQ(Mem{Base: zr, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upZR)
	LEAQ(Mem{Base: zi, Index: last, Scale: uint8(bytes), Disp: bytes - 32}, upZI)
	backwards = orders()
	turned = func(at Register) VecVirtual {
		v := YMM()
		reverse(Mem{Base: at}, backwards, v)
		return v
	}
	Label("eight")
	ra, ia = loaded(Mem{Base: re, Disp: bytes}), loaded(Mem{Base: im, Disp: bytes})
	er, tr = sumDifference(ra, turned(upR))
	ti, ei = sumDifference(ia, turned(upI))
	c, s = loaded(Mem{Base: cos, Disp: bytes}), loaded(Mem{Base: sin, Disp: bytes})
	or, oi := YMM(), YMM()
	mul(c, tr, or)
	mulTake(s, ti, or)
	mul(s, tr, oi)
	mulAdd(c, ti, oi)
	v := YMM()
	sub(oi, er, v)
	move(v, Mem{Base: zr, Disp: bytes})
	add(or, ei, v)
	move(v, Mem{Base: zi, Disp: bytes})
	add(oi, er, er)
	reverse(er, backwards, er)
	move(er, Mem{Base: upZR})
	sub(ei, or, or)
	reverse(or, backwards, or)
	move(or, Mem{Base: upZI})
	for _, r := range []Register{zr, zi, re, im, cos, sin} {
		ADDQ(Imm(32), r)
	}
	for _, r := range []Register{upR, upI, upZR, upZI} {
		SUBQ(Imm(32), r)
	}
	SUBQ(Imm(uint64(32/bytes)), n)
	JNZ(LabelRef("eight"))
	end()

	function(named("alternate"), "func(x, zr, zi *T, scale float, n int)",
		named("alternate")+" scales and interleaves n values, n a multiple of "+width()+".")
	p = params("x", "zr", "zi", "n")
	x := p[0]
	zr, zi, n = p[1], p[2], p[3]
	scale := YMM()
	spread(NewParamAddr("scale", 24), scale)
	Label("eight")
	r, i := YMM(), YMM()
	mul(Mem{Base: zr}, scale, r)
	mul(Mem{Base: zi}, scale, i)
	low := YMM()
	if bytes == 8 {
		VUNPCKLPD(i, r, low)
		VUNPCKHPD(i, r, r)
	} else {
		VUNPCKLPS(i, r, low)
		VUNPCKHPS(i, r, r)
	}
	front := YMM()
	VINSERTF128(Imm(1), r.AsX(), low, front)
	VPERM2F128(Imm(0x31), r, low, low)
	move(front, Mem{Base: x})
	move(low, Mem{Base: x, Disp: 32})
	ADDQ(Imm(32), zr)
	ADDQ(Imm(32), zi)
	ADDQ(Imm(64), x)
	SUBQ(Imm(uint64(32/bytes)), n)
	JNZ(LabelRef("eight"))
	end()
}
