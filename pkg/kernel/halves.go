package kernel

import "fmt"

// Between the transform Z of the n/2 complex values x[2i] + j·x[2i+1] and the
// one-sided spectrum X of the n real ones stand, with E the spectrum of the even
// values and O that of the odd ones, c + js = e^{j2πk/n} and h = n/2,
//
//	E[k] = (Z[k] + Z*[h-k])/2,  O[k] = (Z[k] - Z*[h-k])/2j,
//	X[k] = E[k] + (c - js)·O[k],  X[h-k] = (E[k] - (c - js)·O[k])*.

// whole is how many of n values fill registers.
func whole[T Float](n int) int {
	if l := lanes[T](); l > 0 && n > 0 {
		return n / l * l
	}
	return 0
}

// SplitHalves takes Z in re[:h] and im[:h] to X in re and im, of h+1 values, in
// place; cos and sin are c and s for k = 0..h/2. It panics if lengths do not
// fit.
func SplitHalves[T Float](re, im, cos, sin []T) {
	h := len(re) - 1
	if h < 2 || h%2 != 0 || len(im) != h+1 || len(cos) != h/2+1 || len(sin) != h/2+1 {
		panic(fmt.Sprintf("kernel: split of %d and %d values with %d and %d twiddles", len(re), len(im), len(cos), len(sin)))
	}
	r, i := re[0], im[0]
	re[0], im[0] = r+i, 0
	re[h], im[h] = r-i, 0
	first := 1
	// Bins 1 to n and h-1 down to h-n, which must not meet.
	if n := whole[T](h/2 - 1); n > 0 {
		if single[T]() {
			splitHalvesFloat32AVX2(f32(re), f32(im), f32(cos), f32(sin), h-1, n)
		} else {
			splitHalvesFloat64AVX2(f64(re), f64(im), f64(cos), f64(sin), h-1, n)
		}
		first += n
	}
	for a, b := first, h-first; a <= b; a, b = a+1, b-1 {
		er, ei := (re[a]+re[b])*0.5, (im[a]-im[b])*0.5
		or, oi := (im[a]+im[b])*0.5, (re[b]-re[a])*0.5
		c, s := cos[a], sin[a]
		tr, ti := c*or+s*oi, c*oi-s*or
		re[a], im[a] = er+tr, ei+ti
		re[b], im[b] = er-tr, ti-ei
	}
}

// JoinHalves writes to zr and zi, of h values, 2·Z for the spectrum X in re and
// im, of h+1 values. The imaginary parts of bins 0 and h count as zero. zr and
// zi must not overlap re and im. It panics if lengths do not fit.
func JoinHalves[T Float](zr, zi, re, im, cos, sin []T) {
	h := len(zr)
	if h < 2 || h%2 != 0 || len(zi) != h || len(re) != h+1 || len(im) != h+1 || len(cos) != h/2+1 || len(sin) != h/2+1 {
		panic(fmt.Sprintf("kernel: join of %d and %d values to %d and %d with %d and %d twiddles", len(re), len(im), len(zr), len(zi), len(cos), len(sin)))
	}
	zr[0], zi[0] = re[0]+re[h], re[0]-re[h]
	first := 1
	if n := whole[T](h/2 - 1); n > 0 {
		if single[T]() {
			joinHalvesFloat32AVX2(f32(zr), f32(zi), f32(re), f32(im), f32(cos), f32(sin), h-1, n)
		} else {
			joinHalvesFloat64AVX2(f64(zr), f64(zi), f64(re), f64(im), f64(cos), f64(sin), h-1, n)
		}
		first += n
	}
	for a, b := first, h-first; a <= b; a, b = a+1, b-1 {
		er, ei := re[a]+re[b], im[a]-im[b]
		tr, ti := re[a]-re[b], im[a]+im[b]
		c, s := cos[a], sin[a]
		or, oi := c*tr-s*ti, c*ti+s*tr
		zr[a], zi[a] = er-oi, ei+or
		zr[b], zi[b] = er+oi, or-ei
	}
}

// Alternate writes scale·zr[i] to x[2i] and scale·zi[i] to x[2i+1]. It panics
// if lengths do not fit.
func Alternate[T Float](x, zr, zi []T, scale T) {
	if len(zi) != len(zr) || len(x) != 2*len(zr) {
		panic(fmt.Sprintf("kernel: %d and %d values into %d", len(zr), len(zi), len(x)))
	}
	if n := whole[T](len(zr)); n > 0 {
		if single[T]() {
			alternateFloat32AVX2(f32(x), f32(zr), f32(zi), float32(scale), n)
		} else {
			alternateFloat64AVX2(f64(x), f64(zr), f64(zi), float64(scale), n)
		}
		x, zr, zi = x[2*n:], zr[n:], zi[n:]
	}
	x, zi = x[:2*len(zr)], zi[:len(zr)]
	for k, r := range zr {
		x[2*k] = r * scale
		x[2*k+1] = zi[k] * scale
	}
}
