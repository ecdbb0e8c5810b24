package spectral

import (
	"fmt"
	"math"
	"math/bits"

	"alidade/pkg/kernel"
)

// Float is what a transform computes in.
type Float = kernel.Float

// Smallest and largest sizes of a real transform.
const (
	MinSize = 4
	MaxSize = 1 << 20
)

// FFT is a plan for transforms of n real values, n a power of two: a complex
// transform of half the size whose two halves are then told apart. See the
// package comment for sign and scale. It holds scratch memory and is for one
// goroutine at a time.
type FFT[T Float] struct {
	n     int
	half  *Complex[T]
	cos   []T // cos(2πk/n), k = 0..n/4
	sin   []T
	zr    []T // n/2 values of the inverse before and after its complex transform
	zi    []T
	scale T // 1/n, with the factor 2 of the two halves
}

// NewFFT returns a plan for n real values. n must be a power of two,
// MinSize..MaxSize.
func NewFFT[T Float](n int) (*FFT[T], error) {
	if n < MinSize || n > MaxSize || n&(n-1) != 0 {
		return nil, fmt.Errorf("spectral: transform of %d values: want a power of two, %d to %d", n, MinSize, MaxSize)
	}
	half, err := NewComplex[T](n / 2)
	if err != nil {
		return nil, err
	}
	f := &FFT[T]{n: n, half: half, cos: make([]T, n/4+1), sin: make([]T, n/4+1), scale: T(1 / float64(n))}
	for k := range f.cos {
		s, c := math.Sincos(2 * math.Pi * float64(k) / float64(n))
		f.cos[k], f.sin[k] = T(c), T(s)
	}
	f.zr, f.zi = pair[T](n / 2)
	return f, nil
}

// Clone returns a plan of the same size with scratch memory of its own.
func (f *FFT[T]) Clone() *FFT[T] {
	c := *f
	c.half = f.half.Clone()
	c.zr, c.zi = pair[T](f.n / 2)
	return &c
}

// Len is the number n of real values.
func (f *FFT[T]) Len() int { return f.n }

// Bins is the number of bins, n/2+1.
func (f *FFT[T]) Bins() int { return f.n/2 + 1 }

// Forward writes the spectrum of x to re and im. x has n values and is kept as
// it is, re and im have n/2+1 and must not share memory with x or each other.
// It panics on other lengths.
func (f *FFT[T]) Forward(re, im, x []T) {
	f.check("forward", re, im, x)
	h := f.n / 2
	f.half.forwardReal(re[:h], im[:h], x)
	kernel.SplitHalves(re, im, f.cos, f.sin)
}

// Inverse writes to x the n real values whose spectrum is re and im. The
// imaginary parts of bins 0 and n/2 count as zero. re and im, of n/2+1 values,
// are kept as they are and must not share memory with x. It panics on other
// lengths.
func (f *FFT[T]) Inverse(x, re, im []T) {
	f.check("inverse", re, im, x)
	kernel.JoinHalves(f.zr, f.zi, re, im, f.cos, f.sin)
	// A transform with real and imaginary part swapped runs backwards.
	f.half.transform(f.zi, f.zr, f.zi, f.zr)
	kernel.Alternate(x, f.zr, f.zi, f.scale)
}

func (f *FFT[T]) check(what string, re, im, x []T) {
	if len(x) != f.n || len(re) != f.n/2+1 || len(im) != f.n/2+1 {
		panic(fmt.Sprintf("spectral: %s transform of %d values: got %d values, %d real and %d imaginary parts", what, f.n, len(x), len(re), len(im)))
	}
}

// pair returns two slices of n values for a real and an imaginary part. They
// are staggered: of a power-of-two length and on page boundaries they would
// fall on the same cache sets.
func pair[T Float](n int) (re, im []T) {
	const stagger = 144 // values: 576 or 1152 bytes, nine or eighteen cache lines
	b := make([]T, 2*n+3*stagger)
	return b[stagger : stagger+n : stagger+n], b[n+3*stagger:]
}

// log2 returns the exponent of a power of two, and whether n is one.
func log2(n int) (int, bool) { return bits.Len(uint(n)) - 1, n > 0 && n&(n-1) == 0 }
