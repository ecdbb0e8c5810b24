// Command kernels writes the vector kernels of package kernel: run
// go generate ./pkg/kernel.
package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

func main() {
	ConstraintExpr("amd64")
	addFIR()
	addProduct()
	Generate()
}

// addFIR is y[i] += Σ_t h[t]·x[i+t] for n samples, n a multiple of 8: 32 sums
// at a time in four registers, then 8 at a time.
func addFIR() {
	TEXT("addFIRAVX2", NOSPLIT, "func(y *float32, n int, x *float32, h *float32, taps int)")
	Doc("addFIRAVX2 adds a filtered signal of n samples, n a multiple of 8, to y: taps >= 1.")
	y, n := Load(Param("y"), GP64()), Load(Param("n"), GP64())
	x, h := Load(Param("x"), GP64()), Load(Param("h"), GP64())
	taps := Load(Param("taps"), GP64())
	for _, step := range []struct {
		name string
		sums int
	}{{"wide", 4}, {"narrow", 1}} {
		next := "narrow_block"
		if step.name == "narrow" {
			next = "done"
		}
		Label(step.name + "_block")
		CMPQ(n, Imm(uint64(8*step.sums)))
		JL(LabelRef(next))
		sum := make([]VecVirtual, step.sums)
		for k := range sum {
			sum[k] = YMM()
			VMOVUPS(Mem{Base: y, Disp: 32 * k}, sum[k])
		}
		t := GP64()
		XORQ(t, t)
		Label(step.name + "_tap")
		tap := YMM()
		VBROADCASTSS(Mem{Base: h, Index: t, Scale: 4}, tap)
		for k := range sum {
			VFMADD231PS(Mem{Base: x, Index: t, Scale: 4, Disp: 32 * k}, tap, sum[k])
		}
		INCQ(t)
		CMPQ(t, taps)
		JL(LabelRef(step.name + "_tap"))
		for k := range sum {
			VMOVUPS(sum[k], Mem{Base: y, Disp: 32 * k})
		}
		ADDQ(Imm(uint64(32*step.sums)), y)
		ADDQ(Imm(uint64(32*step.sums)), x)
		SUBQ(Imm(uint64(8*step.sums)), n)
		JMP(LabelRef(step.name + "_block"))
	}
	Label("done")
	VZEROUPPER()
	RET()
}

// addProduct is s[k] += a[k]·b[k], complex in split form, for n bins, n a
// multiple of 8.
func addProduct() {
	TEXT("addProductAVX2", NOSPLIT, "func(sr, si, ar, ai, br, bi *float32, n int)")
	Doc("addProductAVX2 adds the complex products of n bins, n a multiple of 8.")
	var at [6]Register
	for k, name := range []string{"sr", "si", "ar", "ai", "br", "bi"} {
		at[k] = Load(Param(name), GP64())
	}
	n := Load(Param("n"), GP64())
	i := GP64()
	XORQ(i, i)
	Label("bins")
	CMPQ(i, n)
	JGE(LabelRef("end"))
	mem := func(k int) Mem { return Mem{Base: at[k], Index: i, Scale: 4} }
	var v [6]VecVirtual
	for k := range v {
		v[k] = YMM()
		VMOVUPS(mem(k), v[k])
	}
	sr, si, ar, ai, br, bi := v[0], v[1], v[2], v[3], v[4], v[5]
	VFMADD231PS(ar, br, sr)
	VFNMADD231PS(ai, bi, sr)
	VFMADD231PS(ar, bi, si)
	VFMADD231PS(ai, br, si)
	VMOVUPS(sr, mem(0))
	VMOVUPS(si, mem(1))
	ADDQ(Imm(8), i)
	JMP(LabelRef("bins"))
	Label("end")
	VZEROUPPER()
	RET()
}
