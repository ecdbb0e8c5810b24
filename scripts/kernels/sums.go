package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// sums are reductions and products of whole slices.
func sums() {
	function("dotAVX2", "func(a, b *float32, n int) float32",
		"dotAVX2 is the scalar product of n values, n a multiple of 32.")
	p := params("a", "b", "n")
	var s [4]VecVirtual
	for k := range s {
		s[k] = zeroed()
	}
	Label("values")
	for k := range s {
		VFMADD231PS(Mem{Base: p[0], Disp: 32 * k}, loaded(Mem{Base: p[1], Disp: 32 * k}), s[k])
	}
	ADDQ(U32(128), p[0])
	ADDQ(U32(128), p[1])
	SUBQ(Imm(32), p[2])
	JNZ(LabelRef("values"))
	VADDPS(s[1], s[0], s[0])
	VADDPS(s[3], s[2], s[2])
	VADDPS(s[2], s[0], s[0])
	half := XMM()
	VEXTRACTF128(Imm(1), s[0], half)
	VADDPS(half, s[0].AsX(), half)
	again := XMM()
	VMOVHLPS(half, half, again)
	VADDPS(again, half, half)
	VMOVSHDUP(half, again)
	VADDSS(again, half, half)
	Store(half, ReturnIndex(0))
	end()

	function("peakAVX2", "func(x *float32, n int) uint32",
		"peakAVX2 is the largest magnitude of n values as bits, n a multiple of 32.")
	p = params("x", "n")
	sign := constantBits("magnitude", 0x7fffffff)
	mask := YMM()
	VBROADCASTSS(sign, mask)
	for k := range s {
		s[k] = zeroed()
	}
	Label("values")
	for k := range s {
		v := YMM()
		VANDPS(Mem{Base: p[0], Disp: 32 * k}, mask, v)
		VPMAXUD(v, s[k], s[k])
	}
	ADDQ(U32(128), p[0])
	SUBQ(Imm(32), p[1])
	JNZ(LabelRef("values"))
	VPMAXUD(s[1], s[0], s[0])
	VPMAXUD(s[3], s[2], s[2])
	VPMAXUD(s[2], s[0], s[0])
	VEXTRACTI128(Imm(1), s[0], half)
	VPMAXUD(half, s[0].AsX(), half)
	VPSHUFD(Imm(0x4E), half, again)
	VPMAXUD(again, half, half)
	VPSHUFD(Imm(0xB1), half, again)
	VPMAXUD(again, half, half)
	top := GP32()
	VMOVD(half, top)
	Store(top, ReturnIndex(0))
	end()

	function("addSquaresAVX2", "func(sum, square *float64, x *float32, n int)",
		"addSquaresAVX2 adds n values and their squares to eight sums each, n a multiple of 8.")
	p = params("sum", "square", "x", "n")
	for k := range s {
		s[k] = YMM()
		VMOVUPD(Mem{Base: p[k/2], Disp: 32 * (k % 2)}, s[k])
	}
	Label("values")
	for k := range 2 {
		v := YMM()
		VCVTPS2PD(Mem{Base: p[2], Disp: 16 * k}, v)
		VADDPD(v, s[k], s[k])
		VFMADD231PD(v, v, s[2+k])
	}
	ADDQ(Imm(32), p[2])
	SUBQ(Imm(8), p[3])
	JNZ(LabelRef("values"))
	for k := range s {
		VMOVUPD(s[k], Mem{Base: p[k/2], Disp: 32 * (k % 2)})
	}
	end()

	function("powersAVX2", "func(p, re, im *float32, n int)",
		"powersAVX2 is p = re² + im² for n values, n a multiple of 8.")
	p = params("p", "re", "im", "n")
	Label("values")
	r, i := loaded(Mem{Base: p[1]}), loaded(Mem{Base: p[2]})
	VMULPS(i, i, i)
	VFMADD231PS(r, r, i)
	VMOVUPS(i, Mem{Base: p[0]})
	advance(p[:3], p[3])
	JNZ(LabelRef("values"))
	end()

	function("multiplyAVX2", "func(y, a, b *float32, n int)",
		"multiplyAVX2 is y = a·b for n values, n a multiple of 8.")
	p = params("y", "a", "b", "n")
	Label("values")
	v := loaded(Mem{Base: p[1]})
	VMULPS(Mem{Base: p[2]}, v, v)
	VMOVUPS(v, Mem{Base: p[0]})
	advance(p[:3], p[3])
	JNZ(LabelRef("values"))
	end()

	function("quantiseAVX2", "func(q *int32, x *float32, scale, low, high float32, n int)",
		"quantiseAVX2 scales, clips and rounds n values to even, n a multiple of 8.")
	p = params("q", "x", "n")
	var limits [3]VecVirtual
	for k := range limits {
		limits[k] = YMM()
		VBROADCASTSS(NewParamAddr([]string{"scale", "low", "high"}[k], 16+4*k), limits[k])
	}
	Label("values")
	v = YMM()
	VMULPS(Mem{Base: p[1]}, limits[0], v)
	VMAXPS(limits[1], v, v)
	VMINPS(limits[2], v, v)
	VCVTPS2DQ(v, v)
	VMOVDQU(v, Mem{Base: p[0]})
	advance(p[:2], p[2])
	JNZ(LabelRef("values"))
	end()
}

// advance moves pointers on by a register of eight and counts them off.
func advance(pointers []Register, left Register) {
	for _, r := range pointers {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(8), left)
}

// constantBits is a value of 32 bits in memory.
func constantBits(name string, v uint32) Mem {
	m := GLOBL(name, RODATA|NOPTR)
	DATA(0, U32(v))
	return m
}

// crosses are sums of cross-spectra in float64.
func crosses() {
	for _, weighted := range []bool{false, true} {
		name, signature, what := "addCrossAVX2", "func(sr, si, ar, ai, br, bi *float64, keep float64, n int)", ""
		if weighted {
			name, signature, what = "addWeightedCrossAVX2", "func(sr, si, ar, ai, br, bi, w *float64, keep float64, n int)", "w·"
		}
		function(name, signature, name+" is s = keep·s + "+what+"a·b* for n bins, n a multiple of 4.")
		p := params("sr", "si", "ar", "ai", "br", "bi")
		var w Register
		offset := 48
		if weighted {
			w = Load(Param("w"), GP64())
			offset = 56
		}
		n, k := Load(Param("n"), GP64()), GP64()
		keep := YMM()
		VBROADCASTSD(NewParamAddr("keep", offset), keep)
		XORQ(k, k)
		Label("bins")
		at := func(r Register) Mem { return Mem{Base: r, Index: k, Scale: 8} }
		load := func(r Register) VecVirtual {
			v := YMM()
			VMOVUPD(at(r), v)
			return v
		}
		ar, ai, br, bi := load(p[2]), load(p[3]), load(p[4]), load(p[5])
		re, im := YMM(), YMM()
		VMULPD(ai, bi, re)
		VFMADD231PD(ar, br, re)
		VMULPD(ar, bi, im)
		VFMSUB231PD(ai, br, im)
		if weighted {
			g := load(w)
			VMULPD(g, re, re)
			VMULPD(g, im, im)
		}
		VFMADD231PD(at(p[0]), keep, re)
		VFMADD231PD(at(p[1]), keep, im)
		VMOVUPD(re, at(p[0]))
		VMOVUPD(im, at(p[1]))
		ADDQ(Imm(4), k)
		CMPQ(k, n)
		JL(LabelRef("bins"))
		end()
	}
}
