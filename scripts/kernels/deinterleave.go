package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// deinterleave are the decoders: eight frames of eight or four channels at a
// time. The lower halves of the registers hold frames 0 to 3, the upper halves
// frames 4 to 7, so that transposing 4 x 4 within the halves is all there is to
// do.
func deinterleave() {
	bytes := func(name string, from [4]int) Mem {
		m := GLOBL(name, RODATA|NOPTR)
		for half := range 2 {
			for k, at := range from {
				for b := range 4 {
					v := uint8(0x80) // zero
					switch {
					case name[4:6] == "24":
						if b > 0 {
							v = uint8(at + b - 1)
						}
					case b > 1:
						v = uint8(at + b - 2)
					}
					DATA(16*half+4*k+b, U8(v))
				}
			}
		}
		return m
	}
	low24, high24 := bytes("take24low", [4]int{0, 3, 6, 9}), bytes("take24high", [4]int{4, 7, 10, 13})
	low16, high16 := bytes("take16low", [4]int{0, 2, 4, 6}), bytes("take16high", [4]int{8, 10, 12, 14})
	scale := GLOBL("fullScale", RODATA|NOPTR)
	DATA(0, F32(1.0/(1<<31)))
	exponent := GLOBL("exponent", RODATA|NOPTR)
	DATA(0, U32(0x7f800000))
	largest := GLOBL("largestExponent", RODATA|NOPTR)
	DATA(0, U32((127+31)<<23))

	for _, kind := range []struct {
		name        string
		low, high   Mem // which bytes make the integers of channels 0-3 and 4-7
		second      int // the byte from which channels 4-7 are read
		whole, ints bool
	}{
		{"16", low16, high16, 0, false, true},
		{"24", low24, high24, 8, false, true},
		{"32", Mem{}, Mem{}, 16, true, true},
		{"Float32", Mem{}, Mem{}, 16, true, false},
	} {
		for _, channels := range []int{8, 4} {
			name := map[int]string{8: "eight", 4: "four"}[channels] + "From" + kind.name + "AVX2"
			signature := "func(dst **float32, src *byte, frame, n int)"
			doc := name + " spreads n frames, n a multiple of 8, over the channels at dst."
			if !kind.ints {
				signature = "func(dst **float32, src *byte, frame, n int) uint32"
				doc += " It returns a value other than 0 if one was not a sample (see LargestSample)."
			}
			function(name, signature, doc)
			p := params("dst", "src", "frame", "n")
			dst, src, frame, n := p[0], p[1], p[2], p[3]
			three, fourth := tripled(frame), GP64()
			i := GP64()
			XORQ(i, i)
			var factor, odd, mask, limit VecVirtual
			takes := []VecVirtual{nil, nil}
			if kind.ints {
				factor = YMM()
				VBROADCASTSS(scale, factor)
			} else {
				odd, mask, limit = YMM(), YMM(), YMM()
				VXORPS(odd, odd, odd)
				VBROADCASTSS(exponent, mask)
				VBROADCASTSS(largest, limit)
			}
			if !kind.whole {
				for k, m := range []Mem{kind.low, kind.high}[:channels/4] {
					takes[k] = YMM()
					VMOVDQU(m, takes[k])
				}
			}
			to := GP64()
			Label("frames")
			LEAQ(Mem{Base: src, Index: frame, Scale: 4}, fourth)
			for group := range channels / 4 {
				var rows [4]VecVirtual
				for k := range rows {
					near, far := quarters(src, frame, three)[k], quarters(fourth, frame, three)[k]
					near.Disp, far.Disp = group*kind.second, group*kind.second
					rows[k] = YMM()
					VBROADCASTI128(near, rows[k])
					VINSERTI128(Imm(1), far, rows[k], rows[k])
					if !kind.whole {
						VPSHUFB(takes[group], rows[k], rows[k])
					}
					if kind.ints {
						VCVTDQ2PS(rows[k], rows[k])
						continue
					}
					e := YMM()
					VANDPS(mask, rows[k], e)
					VPCMPGTD(limit, e, e)
					VORPS(e, odd, odd)
				}
				u := [4]VecVirtual{YMM(), YMM(), YMM(), YMM()}
				VUNPCKLPS(rows[1], rows[0], u[0])
				VUNPCKLPS(rows[3], rows[2], u[1])
				VUNPCKHPS(rows[1], rows[0], u[2])
				VUNPCKHPS(rows[3], rows[2], u[3])
				for k := range 4 {
					v := rows[k]
					if k%2 == 0 {
						VUNPCKLPD(u[k+1], u[k], v)
					} else {
						VUNPCKHPD(u[k], u[k-1], v)
					}
					if kind.ints {
						VMULPS(factor, v, v)
					}
					MOVQ(Mem{Base: dst, Disp: 8 * (4*group + k)}, to)
					VMOVUPS(v, Mem{Base: to, Index: i, Scale: 4})
				}
			}
			LEAQ(Mem{Base: src, Index: frame, Scale: 8}, src)
			ADDQ(Imm(8), i)
			CMPQ(i, n)
			JL(LabelRef("frames"))
			if !kind.ints {
				bad := GP32()
				VMOVMSKPS(odd, bad)
				Store(bad, ReturnIndex(0))
			}
			end()
		}
	}
}
