package kernel

import (
	"fmt"
	"math"
	"unsafe"
)

// Float is what a transform computes in.
type Float interface{ float32 | float64 }

// Twiddles are the factors of one step of radix 4.
type Twiddles[T Float] struct {
	s int // interleaved transforms of the step
	// each holds, for p = 0..m/4-1, the real and imaginary parts of
	// w = e^{-j2πp/m}, of its square and of its cube.
	each [][6]T
	// rows are the same for vectors: six rows where s = 1; six registers for
	// each two p, each value four times, where s = 4 in float32.
	rows []T
}

// NewTwiddles returns the factors of the step that takes s transforms of size m,
// a multiple of 4. It panics on another m.
func NewTwiddles[T Float](m, s int) *Twiddles[T] {
	if m < 4 || m%4 != 0 || s < 1 {
		panic(fmt.Sprintf("kernel: twiddles of %d transforms of %d values", s, m))
	}
	t := &Twiddles[T]{s: s, each: make([][6]T, m/4)}
	for p := range t.each {
		for q := 1; q <= 3; q++ {
			sin, cos := math.Sincos(-2 * math.Pi * float64(q*p) / float64(m))
			t.each[p][2*q-2], t.each[p][2*q-1] = T(cos), T(sin)
		}
	}
	switch {
	case s == 1:
		t.rows = make([]T, 6*len(t.each))
		for p, w := range t.each {
			for k, v := range w {
				t.rows[k*len(t.each)+p] = v
			}
		}
	case s == 4 && unsafe.Sizeof(T(0)) == 4 && len(t.each)%2 == 0:
		for p := 0; p < len(t.each); p += 2 {
			for k := range 6 {
				for lane := range 8 {
					t.rows = append(t.rows, t.each[p+lane/4][k])
				}
			}
		}
	}
	return t
}

// size is the number of values of the step.
func (t *Twiddles[T]) size() int { return 4 * len(t.each) * t.s }

// The steps of the complex transform of n values [Van Loan 1992, section 1.7].
// A step of radix 4 takes s transforms of size m = n/s that lie interleaved
// (value p of transform q at p·s+q) to 4·s transforms of size m/4: for
// p = 0..m/4-1, with w = e^{-j2πp/m},
//
//	y[4p]   = a + b + c + d            a = x[p],        c = x[p + 2·m/4]
//	y[4p+1] = (a - jb - c + jd)·w      b = x[p + m/4],  d = x[p + 3·m/4]
//	y[4p+2] = (a - b + c - d)·w²
//	y[4p+3] = (a + jb - c - jd)·w³
//
// All slices of a step hold n values in split format; y must not overlap x.
// Steps panic if lengths do not fit. The plain inner loops run over slices of
// the same known length or over arrays, so that they need no bounds checks.

// lanes is the number of values of T in a register, 0 where the vector functions
// are not in use.
func lanes[T Float]() int {
	if !vector {
		return 0
	}
	return int(32 / unsafe.Sizeof(T(0)))
}

// fills reports whether n values are some registers and nothing else.
func fills[T Float](n int) bool {
	l := lanes[T]()
	return l > 0 && n > 0 && n%l == 0
}

// f32 and f64 return the address of the first of the values, for a vector
// function of that precision.
func f32[T Float](x []T) *float32 { return (*float32)(unsafe.Pointer(unsafe.SliceData(x))) }
func f64[T Float](x []T) *float64 { return (*float64)(unsafe.Pointer(unsafe.SliceData(x))) }

// single reports whether T is float32.
func single[T Float]() bool { return unsafe.Sizeof(T(0)) == 4 }

// fits panics unless four slices have n values.
func fits[T Float](step string, n int, yr, yi, xr, xi []T) {
	if len(yr) != n || len(yi) != n || len(xr) != n || len(xi) != n {
		panic(fmt.Sprintf("kernel: %s step of %d values: lengths %d, %d, %d, %d", step, n, len(yr), len(yi), len(xr), len(xi)))
	}
}

// FirstStep is the step with s = 1.
func FirstStep[T Float](yr, yi, xr, xi []T, tw *Twiddles[T]) {
	fits("first", tw.size(), yr, yi, xr, xi)
	switch {
	case tw.s != 1:
		panic(fmt.Sprintf("kernel: first step of %d transforms", tw.s))
	case !fills[T](len(tw.each)):
		first4(yr, yi, xr, xi, tw.each)
	case single[T]():
		firstStepFloat32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), f32(tw.rows), len(tw.each))
	default:
		firstStepFloat64AVX2(f64(yr), f64(yi), f64(xr), f64(xi), f64(tw.rows), len(tw.each))
	}
}

// FirstStepReal is FirstStep for n values in x whose real and imaginary parts
// alternate: x[0] + j·x[1], x[2] + j·x[3], ...
func FirstStepReal[T Float](yr, yi, x []T, tw *Twiddles[T]) {
	if n := tw.size(); len(yr) != n || len(yi) != n || len(x) != 2*n {
		panic(fmt.Sprintf("kernel: first step of %d values: lengths %d, %d, %d", n, len(yr), len(yi), len(x)))
	}
	switch {
	case tw.s != 1:
		panic(fmt.Sprintf("kernel: first step of %d transforms", tw.s))
	case !fills[T](len(tw.each)):
		firstReal4(yr, yi, x, tw.each)
	case single[T]():
		firstStepRealFloat32AVX2(f32(yr), f32(yi), f32(x), f32(tw.rows), len(tw.each))
	default:
		firstStepRealFloat64AVX2(f64(yr), f64(yi), f64(x), f64(tw.rows), len(tw.each))
	}
}

// Step is a step with s = 4 or a multiple of 16.
func Step[T Float](yr, yi, xr, xi []T, tw *Twiddles[T]) {
	fits("middle", tw.size(), yr, yi, xr, xi)
	each := (*T)(unsafe.Pointer(unsafe.SliceData(tw.each)))
	switch s := tw.s; {
	case s != 4 && s%16 != 0:
		panic(fmt.Sprintf("kernel: middle step of %d transforms: want 4 or a multiple of 16", s))
	case s == 4 && single[T]() && vector && len(tw.rows) > 0:
		secondStepFloat32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), f32(tw.rows), len(tw.each))
	case fills[T](s) && single[T]():
		stepFloat32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), (*float32)(unsafe.Pointer(each)), len(tw.each), s)
	case fills[T](s):
		stepFloat64AVX2(f64(yr), f64(yi), f64(xr), f64(xi), (*float64)(unsafe.Pointer(each)), len(tw.each), s)
	case s == 4:
		second4(yr, yi, xr, xi, tw.each)
	default:
		step4(yr, yi, xr, xi, tw.each, s)
	}
}

// LastStep4 is the step with m = 4, whose twiddles are all 1. n is a multiple
// of 4.
func LastStep4[T Float](yr, yi, xr, xi []T) {
	fits("last", len(yr)&^3, yr, yi, xr, xi)
	switch s := len(yr) / 4; {
	case !fills[T](s):
		last4(yr, yi, xr, xi)
	case single[T]():
		lastStep4Float32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), s)
	default:
		lastStep4Float64AVX2(f64(yr), f64(yi), f64(xr), f64(xi), s)
	}
}

// LastStep8 is a step with m = 8 and one of radix 2 after it in one, the end of
// sizes that are not a power of 4: n/8 transforms of eight values. n is a
// multiple of 8.
func LastStep8[T Float](yr, yi, xr, xi []T) {
	fits("last", len(yr)&^7, yr, yi, xr, xi)
	switch s := len(yr) / 8; {
	case !fills[T](s):
		last8(yr, yi, xr, xi)
	case single[T]():
		lastStep8Float32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), s)
	default:
		lastStep8Float64AVX2(f64(yr), f64(yi), f64(xr), f64(xi), s)
	}
}

// LastStep2 is the step of radix 2 after one with m = 8, for sizes where the
// columns of LastStep8 would fall on the same cache sets. n is even.
func LastStep2[T Float](yr, yi, xr, xi []T) {
	fits("last", len(yr)&^1, yr, yi, xr, xi)
	switch s := len(yr) / 2; {
	case !fills[T](s):
		last2(yr, yi, xr, xi)
	case single[T]():
		lastStep2Float32AVX2(f32(yr), f32(yi), f32(xr), f32(xi), s)
	default:
		lastStep2Float64AVX2(f64(yr), f64(yi), f64(xr), f64(xi), s)
	}
}
