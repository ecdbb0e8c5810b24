package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// powersOfSums are p[t][k] = |Σ_m x[t][m][k]·w[m][k]|² for four rows t of x, which
// share the load of a weight: eight sums in eight registers, and nothing stored
// but the powers. Values lie in lines of eight real and eight imaginary parts; of
// pairs there are those of their sums, for the real parts of the weights, and
// those of their differences, for the imaginary ones.
func powersOfSums() {
	function("powerOfSumsAVX2", "func(p *float32, pStride int, x *float32, xStride int, w *float32, sources, lines int)",
		"powerOfSumsAVX2 sets four rows of 8·lines powers; strides are in bytes, sources and lines at least 1.")
	powerOf(params("p", "pStride", "x", "xStride", "w", "sources", "lines"), 0)
	function("powerOfPairsAVX2", "func(p *float32, pStride int, x *float32, xStride int, w *float32, pairs, lines int)",
		"powerOfPairsAVX2 sets four rows of 8·lines powers; strides are in bytes, pairs and lines at least 1.")
	powerOf(params("p", "pStride", "x", "xStride", "w", "pairs", "lines"), 64)
}

// powerOf is the body of both: across is how many bytes further than its factor
// for a real part lies that for an imaginary one.
func powerOf(at []Register, across int) {
	p, pStride, x, xStride, w, sources, lines := at[0], at[1], at[2], at[3], at[4], at[5], at[6]
	rows := []Register{x, GP64(), GP64(), GP64()}
	to := []Register{p, GP64(), GP64(), GP64()}
	for t := 1; t < 4; t++ {
		MOVQ(rows[t-1], rows[t])
		ADDQ(xStride, rows[t])
		MOVQ(to[t-1], to[t])
		ADDQ(pStride, to[t])
	}
	m := GP64()
	Label("line")
	var re, im [4]VecVirtual
	for t := range 4 {
		re[t], im[t] = YMM(), YMM()
		VXORPS(re[t], re[t], re[t])
		VXORPS(im[t], im[t], im[t])
	}
	MOVQ(sources, m)
	Label("source")
	wr, wi := YMM(), YMM()
	VMOVUPS(Mem{Base: w}, wr)
	VMOVUPS(Mem{Base: w, Disp: 32}, wi)
	ADDQ(Imm(64), w)
	for t, row := range rows {
		if across == 0 {
			xr, xi := YMM(), YMM()
			VMOVUPS(Mem{Base: row}, xr)
			VMOVUPS(Mem{Base: row, Disp: 32}, xi)
			ADDQ(Imm(64), row)
			VFMADD231PS(xr, wr, re[t])
			VFMADD231PS(xr, wi, im[t])
			VFNMADD231PS(xi, wi, re[t])
			VFMADD231PS(xi, wr, im[t])
			continue
		}
		VFMADD231PS(Mem{Base: row}, wr, re[t])
		VFMADD231PS(Mem{Base: row, Disp: 32}, wr, im[t])
		VFMADD231PS(Mem{Base: row, Disp: across}, wi, im[t])
		VFNMADD231PS(Mem{Base: row, Disp: across + 32}, wi, re[t])
		ADDQ(U32(128), row)
	}
	DECQ(m)
	JNE(LabelRef("source"))
	for t := range 4 {
		VMULPS(re[t], re[t], re[t])
		VFMADD231PS(im[t], im[t], re[t])
		VMOVUPS(re[t], Mem{Base: to[t]})
		ADDQ(Imm(32), to[t])
	}
	DECQ(lines)
	JNE(LabelRef("line"))
	end()
}

// weightedSums is dst[t] = Σ_k p[t][k]·w[k] for four rows t: a sum in a register
// of its own each, and one fold of all four at the end.
func weightedSums() {
	function("weightedSumsAVX2", "func(dst *float32, p *float32, stride int, w *float32, lines int)",
		"weightedSumsAVX2 sets four sums of 8·lines products; the stride is in bytes, lines at least 1.")
	at := params("dst", "p", "stride", "w", "lines")
	dst, p, stride, w, lines := at[0], at[1], at[2], at[3], at[4]
	rows := []Register{p, GP64(), GP64(), GP64()}
	var s [4]VecVirtual
	for t := range s {
		if t > 0 {
			MOVQ(rows[t-1], rows[t])
			ADDQ(stride, rows[t])
		}
		s[t] = YMM()
		VXORPS(s[t], s[t], s[t])
	}
	Label("line")
	v := YMM()
	VMOVUPS(Mem{Base: w}, v)
	ADDQ(Imm(32), w)
	for t, row := range rows {
		VFMADD231PS(Mem{Base: row}, v, s[t])
		ADDQ(Imm(32), row)
	}
	DECQ(lines)
	JNE(LabelRef("line"))
	VHADDPS(s[1], s[0], s[0])
	VHADDPS(s[3], s[2], s[2])
	VHADDPS(s[2], s[0], s[0])
	half := XMM()
	VEXTRACTF128(Imm(1), s[0], half)
	VADDPS(half, s[0].AsX(), half)
	VMOVUPS(half, Mem{Base: dst})
	end()
}

// foldPair writes sums and differences of a and k·b, line by line.
func foldPair() {
	function("foldPairAVX2", "func(y *float32, stride int, ar, ai, br, bi, kr, ki *float32, lines int)",
		"foldPairAVX2 writes 8·lines bins of a pair; the stride is in bytes, lines at least 1.")
	at := params("y", "stride", "ar", "ai", "br", "bi", "kr", "ki", "lines")
	y, stride, lines := at[0], at[1], at[8]
	Label("line")
	var v [6]VecVirtual
	for i := range v {
		v[i] = YMM()
		VMOVUPS(Mem{Base: at[2+i]}, v[i])
		ADDQ(Imm(32), at[2+i])
	}
	ar, ai, br, bi, kr, ki := v[0], v[1], v[2], v[3], v[4], v[5]
	re, im, out := YMM(), YMM(), YMM()
	VMULPS(bi, ki, re)
	VFMSUB231PS(br, kr, re)
	VMULPS(br, ki, im)
	VFMADD231PS(bi, kr, im)
	VADDPS(re, ar, out)
	VMOVUPS(out, Mem{Base: y})
	VADDPS(im, ai, out)
	VMOVUPS(out, Mem{Base: y, Disp: 32})
	VSUBPS(re, ar, out)
	VMOVUPS(out, Mem{Base: y, Disp: 64})
	VSUBPS(im, ai, out)
	VMOVUPS(out, Mem{Base: y, Disp: 96})
	ADDQ(stride, y)
	DECQ(lines)
	JNE(LabelRef("line"))
	end()
}
