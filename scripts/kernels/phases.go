package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// phases are the filter whose sums are kept apart by the place of a tap modulo
// eight, see pkg/kernel/phases.go: then the samples are read in whole registers,
// and each of them serves four taps.
func phases() {
	function("addPhasesAVX2", "func(z *float32, stride, vectors int, x, h *float32, groups int)",
		"addPhasesAVX2 adds to eight rows, stride values apart, of vectors registers the sums of groups times eight taps.")
	p := params("z", "stride", "vectors", "x", "h", "groups")
	z, stride, vectors, x, h, groups := p[0], p[1], p[2], p[3], p[4], p[5]
	SHLQ(Imm(2), stride)
	three := tripled(stride)
	upper := GP64() // rows 4 to 7
	tile := func(columns int, z Register, taps int) {
		rows := quarters(z, stride, three)
		var sum [4][]VecVirtual
		for v := range sum {
			for j := range columns {
				m := rows[v]
				m.Disp = 32 * j
				sum[v] = append(sum[v], loaded(m))
			}
		}
		at, tap, left := GP64(), GP64(), GP64()
		MOVQ(x, at)
		MOVQ(h, tap)
		MOVQ(groups, left)
		name := []string{"", "one", "", "three"}[columns] + []string{"_low", "_high"}[taps/4]
		Label(name)
		var xs []VecVirtual
		for j := range columns {
			xs = append(xs, loaded(Mem{Base: at, Disp: 32 * j}))
		}
		for v := range sum {
			t := YMM()
			VBROADCASTSS(Mem{Base: tap, Disp: 4 * (taps + v)}, t)
			for j := range columns {
				VFMADD231PS(xs[j], t, sum[v][j])
			}
		}
		ADDQ(Imm(32), at)
		ADDQ(Imm(32), tap)
		DECQ(left)
		JNZ(LabelRef(name))
		for v := range sum {
			for j := range columns {
				m := rows[v]
				m.Disp = 32 * j
				VMOVUPS(sum[v][j], m)
			}
		}
	}
	for _, columns := range []int{3, 1} {
		name, next := "three", "one"
		if columns == 1 {
			name, next = "one", "done"
		}
		Label(name)
		CMPQ(vectors, Imm(uint64(columns)))
		JL(LabelRef(next))
		LEAQ(Mem{Base: z, Index: stride, Scale: 4}, upper)
		tile(columns, z, 0)
		tile(columns, upper, 4)
		ADDQ(Imm(uint64(32*columns)), z)
		ADDQ(Imm(uint64(32*columns)), x)
		SUBQ(Imm(uint64(columns)), vectors)
		JMP(LabelRef(name))
	}
	Label("done")
	end()

	function("joinPhasesAVX2", "func(y, z *float32, stride, n int)",
		"joinPhasesAVX2 adds up eight rows, each one sample on, for n samples, n a multiple of 8.")
	p = params("y", "z", "stride", "n")
	y, n := p[0], p[3]
	z, stride = p[1], p[2]
	SHLQ(Imm(2), stride)
	three = tripled(stride)
	upper = GP64()
	LEAQ(Mem{Base: z, Index: stride, Scale: 4}, upper)
	Label("eight")
	var s [2]VecVirtual
	for half, base := range []Register{z, upper} {
		for v, m := range quarters(base, stride, three) {
			m.Disp = 4 * (4*half + v)
			if v == 0 {
				s[half] = loaded(m)
			} else {
				VADDPS(m, s[half], s[half])
			}
		}
	}
	VADDPS(s[1], s[0], s[0])
	VMOVUPS(s[0], Mem{Base: y})
	for _, r := range []Register{y, z, upper} {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(8), n)
	JNZ(LabelRef("eight"))
	end()
}
