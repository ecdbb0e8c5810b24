package main

import (
	"math"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

// value is a register of complex values.
type value struct{ r, i VecVirtual }

// transforms are the steps of the complex transform, see pkg/kernel/transform.go
// for what each of them is.
func transforms() {
	firstStep(named("firstStep"), false)
	firstStep(named("firstStepReal"), true)
	if bytes == 4 {
		secondStep()
	}
	step()
	lastStep2()
	lastStep4()
	lastStep8()
}

// sumDifference returns x + y and x - y; x and y are used up.
func sumDifference(x, y VecVirtual) (sum, difference VecVirtual) {
	sum = YMM()
	add(y, x, sum)
	sub(y, x, x)
	return sum, x
}

// butterfly returns the transform of four values: those after the first are
// still without their twiddle factors.
func butterfly(load func(k int) value) [4]value {
	a, c := load(0), load(2)
	t0r, t1r := sumDifference(a.r, c.r)
	t0i, t1i := sumDifference(a.i, c.i)
	b, d := load(1), load(3)
	t2r, t3r := sumDifference(b.r, d.r)
	t2i, t3i := sumDifference(b.i, d.i)
	return fourth(value{t0r, t0i}, value{t1r, t1i}, value{t2r, t2i}, value{t3r, t3i})
}

// fourth is the second half of a butterfly: t0 + t2, t1 - j·t3, t0 - t2,
// t1 + j·t3.
func fourth(t0, t1, t2, t3 value) [4]value {
	y0r, y2r := sumDifference(t0.r, t2.r)
	y0i, y2i := sumDifference(t0.i, t2.i)
	y1r, y3r := sumDifference(t1.r, t3.i)
	y3i, y1i := sumDifference(t1.i, t3.r)
	return [4]value{{y0r, y0i}, {y1r, y1i}, {y2r, y2i}, {y3r, y3i}}
}

// times returns v·w; v is used up.
func times(v value, wr, wi Op) value {
	i := YMM()
	mul(wi, v.r, i)
	mulAdd(wr, v.i, i)
	mul(wi, v.i, v.i)
	mulSub132(wr, v.i, v.r)
	return value{v.r, i}
}

// loaded returns a register with the eight values at m.
func loaded(m Mem) VecVirtual {
	v := YMM()
	move(m, v)
	return v
}

// quarters are the addresses of a pointer and of one, two and three strides
// after it.
func quarters(at, stride, three Register) [4]Mem {
	return [4]Mem{{Base: at}, {Base: at, Index: stride, Scale: 1}, {Base: at, Index: stride, Scale: 2}, {Base: at, Index: three, Scale: 1}}
}

// tripled returns 3·r in a new register.
func tripled(r Register) Register {
	three := GP64()
	LEAQ(Mem{Base: r, Index: r, Scale: 2}, three)
	return three
}

// across writes four registers as rows to memory such that lane p of register j
// lands at 4·p + j.
func across(to Register, v [4]VecVirtual) {
	u := [4]VecVirtual{YMM(), YMM(), YMM(), YMM()}
	if bytes == 8 {
		VUNPCKLPD(v[1], v[0], u[0])
		VUNPCKHPD(v[1], v[0], u[2])
		VUNPCKLPD(v[3], v[2], u[1])
		VUNPCKHPD(v[3], v[2], u[3])
		rows(to, u)
		return
	}
	VUNPCKLPS(v[1], v[0], u[0])
	VUNPCKLPS(v[3], v[2], u[1])
	VUNPCKHPS(v[1], v[0], u[2])
	VUNPCKHPS(v[3], v[2], u[3])
	VUNPCKLPD(u[1], u[0], v[0])
	VUNPCKHPD(u[1], u[0], v[1])
	VUNPCKLPD(u[3], u[2], v[2])
	VUNPCKHPD(u[3], u[2], v[3])
	rows(to, v)
}

// rows writes the lower halves of four registers to memory, one after the
// other, and behind them the upper halves. Four whole stores are faster than
// eight of halves.
func rows(to Register, v [4]VecVirtual) {
	for k := 0; k < 4; k += 2 {
		low := YMM()
		VINSERTF128(Imm(1), v[k+1].AsX(), v[k], low)
		VPERM2F128(Imm(0x31), v[k+1], v[k], v[k])
		move(low, Mem{Base: to, Disp: 16 * k})
		move(v[k], Mem{Base: to, Disp: 64 + 16*k})
	}
}

// firstStep is the first step: count twiddles, a multiple of 8, wide holds the
// real and imaginary parts of w, w² and w³ in six rows of count values.
func firstStep(name string, alternating bool) {
	what, signature := "", "func(yr, yi, xr, xi, wide *T, count int)"
	if alternating {
		what, signature = " of values whose real and imaginary parts alternate", "func(yr, yi, x, wide *T, count int)"
	}
	function(name, signature, name+" is the first step"+what+"; count is a multiple of "+width()+".")
	to := params("yr", "yi")
	var from []Register
	if alternating {
		from = params("x")
	} else {
		from = params("xr", "xi")
	}
	w, count := Load(Param("wide"), GP64()), Load(Param("count"), GP64())
	row := GP64() // bytes of a row, and of a quarter of the real parts
	MOVQ(count, row)
	SHLQ(Imm(shift), row)
	threeRows := tripled(row)
	w2 := GP64() // the row of the real part of w³, the fifth
	LEAQ(Mem{Base: w, Index: row, Scale: 4}, w2)
	stride, three := row, threeRows
	if alternating {
		stride = GP64()
		MOVQ(row, stride)
		SHLQ(Imm(1), stride)
		three = tripled(stride)
	}
	Label("eight")
	y := butterfly(func(k int) value {
		m := quarters(from[0], stride, three)[k]
		if !alternating {
			return value{loaded(m), loaded(quarters(from[1], stride, three)[k])}
		}
		// The first and third sixteen bytes, the second and fourth: then shuffling
		// within the halves is enough. (A
		// load of the lower half alone would count as a partial definition.)
		low, high := YMM(), YMM()
		at := func(d int) Mem { m.Disp = d; return m }
		VBROADCASTF128(at(0), low)
		VINSERTF128(Imm(1), at(32), low, low)
		VBROADCASTF128(at(16), high)
		VINSERTF128(Imm(1), at(48), high, high)
		r := YMM()
		if bytes == 8 {
			VUNPCKLPD(high, low, r)
			VUNPCKHPD(high, low, low)
		} else {
			VSHUFPS(Imm(0x88), high, low, r)
			VSHUFPS(Imm(0xDD), high, low, low)
		}
		return value{r, low}
	})
	near := quarters(w, row, threeRows)
	y[1] = times(y[1], near[0], near[1])
	y[2] = times(y[2], near[2], near[3])
	y[3] = times(y[3], Mem{Base: w2}, Mem{Base: w2, Index: row, Scale: 1})
	across(to[0], [4]VecVirtual{y[0].r, y[1].r, y[2].r, y[3].r})
	across(to[1], [4]VecVirtual{y[0].i, y[1].i, y[2].i, y[3].i})
	step := uint64(32)
	if alternating {
		step = 64
	}
	for _, r := range from {
		ADDQ(Imm(step), r)
	}
	ADDQ(Imm(32), w)
	ADDQ(Imm(32), w2)
	for _, r := range to {
		ADDQ(Imm(128), r)
	}
	SUBQ(Imm(uint64(32/bytes)), count)
	JNZ(LabelRef("eight"))
	end()
}

// secondStep is the step with s = 4 in float32, count twiddles, an even number:
// two at a time. wide holds the six parts of two twiddles in registers, each four
// times.
func secondStep() {
	function("secondStepFloat32AVX2", "func(yr, yi, xr, xi, wide *float32, count int)",
		"secondStepFloat32AVX2 is the step of four transforms; count is even.")
	p := params("yr", "yi", "xr", "xi", "wide", "count")
	yr, yi, xr, xi, wide, count := p[0], p[1], p[2], p[3], p[4], p[5]
	stride := GP64()
	MOVQ(count, stride)
	SHLQ(Imm(4), stride)
	three := tripled(stride)
	Label("two")
	y := butterfly(func(k int) value {
		return value{loaded(quarters(xr, stride, three)[k]), loaded(quarters(xi, stride, three)[k])}
	})
	for k := 1; k < 4; k++ {
		y[k] = times(y[k], Mem{Base: wide, Disp: 64*k - 64}, Mem{Base: wide, Disp: 64*k - 32})
	}
	rows(yr, [4]VecVirtual{y[0].r, y[1].r, y[2].r, y[3].r})
	rows(yi, [4]VecVirtual{y[0].i, y[1].i, y[2].i, y[3].i})
	ADDQ(Imm(32), xr)
	ADDQ(Imm(32), xi)
	ADDQ(U32(128), yr)
	ADDQ(U32(128), yi)
	ADDQ(U32(192), wide)
	SUBQ(Imm(2), count)
	JNZ(LabelRef("two"))
	end()
}

// step is a step of s transforms, a multiple of 8, and count twiddles.
func step() {
	function(named("step"), "func(yr, yi, xr, xi, tw *T, count, s int)",
		named("step")+" is a step of s transforms, a multiple of "+width()+".")
	p := params("yr", "yi", "xr", "xi", "tw", "count", "s")
	yr, yi, xr, xi, tw, count, s := p[0], p[1], p[2], p[3], p[4], p[5], p[6]
	SHLQ(Imm(shift), s)
	stride := GP64()
	MOVQ(count, stride)
	IMULQ(s, stride)
	three, threeS := tripled(stride), tripled(s)
	Label("twiddle")
	var w [6]VecVirtual
	for k := range w {
		w[k] = YMM()
		spread(Mem{Base: tw, Disp: bytes * k}, w[k])
	}
	left := GP64()
	MOVQ(s, left)
	Label("eight")
	y := butterfly(func(k int) value {
		return value{loaded(quarters(xr, stride, three)[k]), loaded(quarters(xi, stride, three)[k])}
	})
	for k, v := range y {
		if k > 0 {
			v = times(v, w[2*k-2], w[2*k-1])
		}
		move(v.r, quarters(yr, s, threeS)[k])
		move(v.i, quarters(yi, s, threeS)[k])
	}
	for _, r := range []Register{xr, xi, yr, yi} {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), left)
	JNZ(LabelRef("eight"))
	ADDQ(threeS, yr)
	ADDQ(threeS, yi)
	ADDQ(Imm(uint64(6*bytes)), tw)
	DECQ(count)
	JNZ(LabelRef("twiddle"))
	end()
}

// lastStep2 is the step of radix 2, s a multiple of 8.
func lastStep2() {
	function(named("lastStep2"), "func(yr, yi, xr, xi *T, s int)",
		named("lastStep2")+" is the step of radix 2 of s transforms, a multiple of "+width()+".")
	p := params("yr", "yi", "xr", "xi", "s")
	yr, yi, xr, xi, left := p[0], p[1], p[2], p[3], p[4]
	SHLQ(Imm(shift), left)
	stride := GP64()
	MOVQ(left, stride)
	Label("eight")
	for k, from := range []Register{xr, xi} {
		to := []Register{yr, yi}[k]
		sum, difference := sumDifference(loaded(Mem{Base: from}), loaded(Mem{Base: from, Index: stride, Scale: 1}))
		move(sum, Mem{Base: to})
		move(difference, Mem{Base: to, Index: stride, Scale: 1})
	}
	for _, r := range p[:4] {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), left)
	JNZ(LabelRef("eight"))
	end()
}

// lastStep4 is the last step of radix 4, s a multiple of 8.
func lastStep4() {
	function(named("lastStep4"), "func(yr, yi, xr, xi *T, s int)",
		named("lastStep4")+" is the last step of radix 4 of s transforms, a multiple of "+width()+".")
	p := params("yr", "yi", "xr", "xi", "s")
	yr, yi, xr, xi, left := p[0], p[1], p[2], p[3], p[4]
	SHLQ(Imm(shift), left)
	stride := GP64()
	MOVQ(left, stride)
	three := tripled(stride)
	Label("eight")
	y := butterfly(func(k int) value {
		return value{loaded(quarters(xr, stride, three)[k]), loaded(quarters(xi, stride, three)[k])}
	})
	for k, v := range y {
		move(v.r, quarters(yr, stride, three)[k])
		move(v.i, quarters(yi, stride, three)[k])
	}
	for _, r := range p[:4] {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), left)
	JNZ(LabelRef("eight"))
	end()
}

// lastStep8 is the last step of radix 8, s a multiple of 8: the even bins of
// the eight from sums of values four apart, the odd ones from differences.
func lastStep8() {
	root := constant("rootHalf", math.Sqrt(0.5))
	function(named("lastStep8"), "func(yr, yi, xr, xi *T, s int)",
		named("lastStep8")+" is the last step of radix 8 of s transforms, a multiple of "+width()+".")
	p := params("yr", "yi", "xr", "xi", "s")
	yr, yi, xr, xi, left := p[0], p[1], p[2], p[3], p[4]
	SHLQ(Imm(shift), left)
	s1 := GP64()
	MOVQ(left, s1)
	s3, s5, s7 := tripled(s1), GP64(), GP64()
	LEAQ(Mem{Base: s1, Index: s1, Scale: 4}, s5)
	LEAQ(Mem{Base: s3, Index: s1, Scale: 4}, s7)
	at := func(r Register, k int) Mem {
		switch k {
		case 0:
			return Mem{Base: r}
		case 1, 2, 4:
			return Mem{Base: r, Index: s1, Scale: uint8(k)}
		case 3, 6:
			return Mem{Base: r, Index: s3, Scale: uint8(k / 3)}
		case 5:
			return Mem{Base: r, Index: s5, Scale: 1}
		}
		return Mem{Base: r, Index: s7, Scale: 1}
	}
	half := YMM()
	spread(root, half)
	store := func(first int, y [4]value) {
		for k, v := range y {
			move(v.r, at(yr, first+2*k))
			move(v.i, at(yi, first+2*k))
		}
	}
	Label("eight")
	store(0, butterfly(func(k int) value {
		v := value{loaded(at(xr, k)), loaded(at(xi, k))}
		add(at(xr, k+4), v.r, v.r)
		add(at(xi, k+4), v.i, v.i)
		return v
	}))
	difference := func(k int) value {
		v := value{loaded(at(xr, k)), loaded(at(xi, k))}
		sub(at(xr, k+4), v.r, v.r)
		sub(at(xi, k+4), v.i, v.i)
		return v
	}
	// c1·e^{-jπ/4} and c3·e^{-j3π/4} are (r+i, i-r)/√2 and (i-r, -r-i)/√2.
	c0, c2 := difference(0), difference(2)
	t0r, t1r := sumDifference(c0.r, c2.i)
	t1i, t0i := sumDifference(c0.i, c2.r)
	turned := func(c value) (sum, back VecVirtual) {
		sum = YMM()
		add(c.i, c.r, sum)
		sub(c.r, c.i, c.i)
		mul(half, sum, sum)
		mul(half, c.i, c.i)
		return sum, c.i
	}
	c1r, c1i := turned(difference(1))
	minusC3i, c3r := turned(difference(3))
	t2r, t3r := sumDifference(c1r, c3r)
	t3i, t2i := sumDifference(c1i, minusC3i)
	store(1, fourth(value{t0r, t0i}, value{t1r, t1i}, value{t2r, t2i}, value{t3r, t3i}))
	for _, r := range p[:4] {
		ADDQ(Imm(32), r)
	}
	SUBQ(Imm(32), left)
	JNZ(LabelRef("eight"))
	end()
}
