package kernel

import (
	"fmt"
	"math"
)

// equal panics unless all lengths are n.
func equal(what string, n int, lengths ...int) {
	for _, l := range lengths {
		if l != n {
			panic(fmt.Sprintf("kernel: %s of %d values with %d", what, n, l))
		}
	}
}

// Dot returns Σ a[i]·b[i], by eight sums or more that are added at the end. It
// panics if the lengths differ.
func Dot(a, b []float32) float32 {
	equal("scalar product", len(a), len(b))
	if n := len(a) &^ 31; vector && n > 0 {
		return dotAVX2(&a[0], &b[0], n) + dot(a[n:], b[n:])
	}
	return dot(a, b)
}

// dot is the definition.
func dot(a, b []float32) float32 {
	b = b[:len(a)]
	var s0, s1, s2, s3, s4, s5, s6, s7 float32
	for len(a) >= 8 && len(b) >= 8 {
		s0 += a[0] * b[0]
		s1 += a[1] * b[1]
		s2 += a[2] * b[2]
		s3 += a[3] * b[3]
		s4 += a[4] * b[4]
		s5 += a[5] * b[5]
		s6 += a[6] * b[6]
		s7 += a[7] * b[7]
		a, b = a[8:], b[8:]
	}
	for i, v := range a {
		s0 += v * b[i]
	}
	return ((s0 + s1) + (s2 + s3)) + ((s4 + s5) + (s6 + s7))
}

// Dot64 returns Σ a[i]·b[i] by four sums that are added at the end: the same bits
// with either set. It panics if the lengths differ.
func Dot64(a, b []float64) float64 {
	equal("scalar product", len(a), len(b))
	var s0, s1, s2, s3 float64
	for len(a) >= 4 && len(b) >= 4 {
		s0 += a[0] * b[0]
		s1 += a[1] * b[1]
		s2 += a[2] * b[2]
		s3 += a[3] * b[3]
		a, b = a[4:], b[4:]
	}
	for i, v := range a {
		s0 += v * b[i]
	}
	return (s0 + s1) + (s2 + s3)
}

// Peak returns the largest magnitude of x, 0 for none. What is not a number
// counts as more than infinity.
func Peak(x []float32) float32 {
	top := uint32(0)
	if n := len(x) &^ 31; vector && n > 0 {
		top, x = peakAVX2(&x[0], n), x[n:]
	}
	return math.Float32frombits(max(top, peak(x)))
}

// peak is the definition: without its sign, a float32 is ordered like its bits.
func peak(x []float32) uint32 {
	top := uint32(0)
	for _, v := range x {
		top = max(top, math.Float32bits(v)&^(1<<31))
	}
	return top
}

// Squares are sums of values and of their squares, eight of each, such that
// value i of a stream goes to the sums i modulo eight: the bits that come out
// depend neither on how the stream is cut nor on the set.
type Squares struct {
	sum, square [8]float64
	next        int // the sums that the next value goes to
}

// Add takes in the values of x.
func (s *Squares) Add(x []float32) {
	for s.next > 0 && len(x) > 0 {
		s.one(x[0])
		x = x[1:]
	}
	if n := len(x) &^ 7; vector && n > 0 {
		addSquaresAVX2(&s.sum[0], &s.square[0], &x[0], n)
		x = x[n:]
	}
	for len(x) >= 8 {
		s.eight((*[8]float32)(x))
		x = x[8:]
	}
	for _, v := range x {
		s.one(v)
	}
}

func (s *Squares) eight(x *[8]float32) {
	for k, v := range x {
		d := float64(v)
		s.sum[k] += d
		s.square[k] += d * d // the product is exact
	}
}

func (s *Squares) one(x float32) {
	d := float64(x)
	s.sum[s.next] += d
	s.square[s.next] += d * d
	s.next = (s.next + 1) % 8
}

// Sum is the sum of the values.
func (s *Squares) Sum() float64 { return folded(&s.sum) }

// Square is the sum of their squares.
func (s *Squares) Square() float64 { return folded(&s.square) }

func folded(s *[8]float64) float64 {
	return ((s[0] + s[1]) + (s[2] + s[3])) + ((s[4] + s[5]) + (s[6] + s[7]))
}

// Powers writes re² + im² to p. It panics if the lengths differ.
func Powers(p, re, im []float32) {
	equal("powers", len(p), len(re), len(im))
	if n := len(p) &^ 7; vector && n > 0 {
		powersAVX2(&p[0], &re[0], &im[0], n)
		p, re, im = p[n:], re[n:], im[n:]
	}
	re, im = re[:len(p)], im[:len(p)]
	for k := range p {
		p[k] = re[k]*re[k] + im[k]*im[k]
	}
}

// Multiply writes a·b to y, which may be a or b. It panics if the lengths
// differ.
func Multiply(y, a, b []float32) {
	equal("product", len(y), len(a), len(b))
	if n := len(y) &^ 7; vector && n > 0 {
		multiplyAVX2(&y[0], &a[0], &b[0], n)
		y, a, b = y[n:], a[n:], b[n:]
	}
	a, b = a[:len(y)], b[:len(y)]
	for i := range y {
		y[i] = a[i] * b[i]
	}
}

// Quantise writes x times full to q, rounded to even and clipped at -full and
// full-1; full is a power of two of at most 2^24 and x holds numbers. Both sets
// give the same integers. It panics if the lengths differ.
func Quantise(q []int32, x []float32, full float32) {
	equal("integers", len(q), len(x))
	if n := len(q) &^ 7; vector && n > 0 {
		quantiseAVX2(&q[0], &x[0], full, -full, full-1, n)
		q, x = q[n:], x[n:]
	}
	for i, v := range x {
		// A clipped value is a whole number, so that clipping first is the same.
		q[i] = int32(math.RoundToEven(float64(min(max(v*full, -full), full-1))))
	}
}

// AddCross is s[k] = keep·s[k] + w[k]·a[k]·b*[k] in split form: a weighted
// cross-spectrum. A nil w is all ones. It panics if the lengths differ.
func AddCross(sr, si, ar, ai, br, bi, w []float64, keep float64) {
	n := len(sr)
	equal("cross-spectrum", n, len(si), len(ar), len(ai), len(br), len(bi))
	if w != nil {
		equal("cross-spectrum", n, len(w))
	}
	first := 0
	if vector && n >= 4 {
		first = n &^ 3
		if w == nil {
			addCrossAVX2(&sr[0], &si[0], &ar[0], &ai[0], &br[0], &bi[0], keep, first)
		} else {
			addWeightedCrossAVX2(&sr[0], &si[0], &ar[0], &ai[0], &br[0], &bi[0], &w[0], keep, first)
		}
	}
	addCross(sr, si, ar, ai, br, bi, w, keep, first)
}

// addCross is the definition, from bin first on.
func addCross(sr, si, ar, ai, br, bi, w []float64, keep float64, first int) {
	for k := first; k < len(sr); k++ {
		re, im := ar[k]*br[k]+ai[k]*bi[k], ai[k]*br[k]-ar[k]*bi[k]
		if w != nil {
			re, im = w[k]*re, w[k]*im
		}
		sr[k], si[k] = keep*sr[k]+re, keep*si[k]+im
	}
}
