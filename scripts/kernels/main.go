// Command kernels writes the vector kernels of package kernel: run
// go generate ./pkg/kernel.
//
// The functions are AVX2 with FMA and use the sixteen registers that such a
// processor has. Lengths are those that the Go callers promise: they check them
// and leave what does not fill a register to the plain functions.
package main

import (
	"fmt"
	"strings"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

func main() {
	ConstraintExpr("amd64")
	addFIR()
	addProduct()
	powersOfSums()
	weightedSums()
	foldPair()
	for _, b := range []int{4, 8} {
		precision(b)
		transforms()
		halves()
	}
	precision(4)
	deinterleave()
	phases()
	sums()
	crosses()
	Generate()
}

// function begins a function that keeps no pointer it is given. T in the
// signature is the float of the present precision.
func function(name, signature, doc string) {
	TEXT(name, NOSPLIT, strings.NewReplacer("*T", fmt.Sprintf("*float%d", 8*bytes), " float,", fmt.Sprintf(" float%d,", 8*bytes)).Replace(signature))
	Pragma("noescape")
	Doc(doc)
}

// params loads parameters into general registers.
func params(names ...string) []Register {
	list := make([]Register, len(names))
	for k, name := range names {
		list[k] = Load(Param(name), GP64())
	}
	return list
}

// end closes a function that used vector registers.
func end() {
	VZEROUPPER()
	RET()
}

// addFIR is y[i] += Σ_t h[t]·x[i+t] for n samples, n a multiple of 8: 96 sums
// at a time in twelve registers, which hides the latency of the products and
// shares the load of a tap among them; then 32 and 8 at a time.
func addFIR() {
	function("addFIRAVX2", "func(y *float32, n int, x *float32, h *float32, taps int)",
		"addFIRAVX2 adds a filtered signal of n samples, n a multiple of 8, to y: taps >= 1.")
	p := params("y", "n", "x", "h", "taps")
	y, n, x, h, taps := p[0], p[1], p[2], p[3], p[4]
	steps := []int{12, 4, 1}
	name := func(k int) string {
		if k == len(steps) {
			return "done"
		}
		return []string{"wide", "middle", "narrow"}[k]
	}
	for k, sums := range steps {
		Label(name(k))
		CMPQ(n, U32(8*sums))
		JL(LabelRef(name(k + 1)))
		sum := make([]VecVirtual, sums)
		for j := range sum {
			sum[j] = YMM()
			VMOVUPS(Mem{Base: y, Disp: 32 * j}, sum[j])
		}
		t, tap := GP64(), YMM()
		XORQ(t, t)
		Label(name(k) + "_tap")
		VBROADCASTSS(Mem{Base: h, Index: t, Scale: 4}, tap)
		for j := range sum {
			VFMADD231PS(Mem{Base: x, Index: t, Scale: 4, Disp: 32 * j}, tap, sum[j])
		}
		INCQ(t)
		CMPQ(t, taps)
		JL(LabelRef(name(k) + "_tap"))
		for j := range sum {
			VMOVUPS(sum[j], Mem{Base: y, Disp: 32 * j})
		}
		ADDQ(U32(32*sums), y)
		ADDQ(U32(32*sums), x)
		SUBQ(U32(8*sums), n)
		JMP(LabelRef(name(k)))
	}
	Label("done")
	end()
}

// addProduct is s[k] += a[k]·b[k], complex in split form, for n bins, n a
// multiple of 8.
func addProduct() {
	function("addProductAVX2", "func(sr, si, ar, ai, br, bi *float32, n int)",
		"addProductAVX2 adds the complex products of n bins, n a multiple of 8.")
	at := params("sr", "si", "ar", "ai", "br", "bi", "n")
	n, i := at[6], GP64()
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
	end()
}
