package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// What the functions are being written for: 4 or 8 bytes a value, and the
// instructions for them.
var (
	bytes                                           int
	shift                                           uint64 // log2 of bytes
	add, sub, mul, mulAdd, mulSub132, mulTake, move func(...Op)
	spread                                          func(...Op)
	constants                                       = map[string]Mem{}
)

func precision(b int) {
	bytes, shift = b, 2
	add, sub, mul, move, spread = VADDPS, VSUBPS, VMULPS, VMOVUPS, VBROADCASTSS
	mulAdd, mulSub132, mulTake = VFMADD231PS, VFMSUB132PS, VFNMADD231PS
	if b == 8 {
		shift = 3
		add, sub, mul, move, spread = VADDPD, VSUBPD, VMULPD, VMOVUPD, VBROADCASTSD
		mulAdd, mulSub132, mulTake = VFMADD231PD, VFMSUB132PD, VFNMADD231PD
	}
}

// named is a name with the precision and the set in it.
func named(name string) string { return fmt.Sprintf("%sFloat%dAVX2", name, 8*bytes) }

// width is the number of values of a register.
func width() string { return fmt.Sprint(32 / bytes) }

// constant is a value in memory.
func constant(name string, v float64) Mem {
	name = fmt.Sprintf("%s%d", name, 8*bytes)
	if m, ok := constants[name]; ok {
		return m
	}
	m := GLOBL(name, RODATA|NOPTR)
	if bytes == 8 {
		DATA(0, F64(v))
	} else {
		DATA(0, F32(float32(v)))
	}
	constants[name] = m
	return m
}

// zeroed returns a register of zeros.
func zeroed() VecVirtual {
	v := YMM()
	VXORPS(v, v, v)
	return v
}
