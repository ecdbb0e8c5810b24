package spectral

import (
	"fmt"

	"alidade/pkg/kernel"
)

// Complex is a plan for transforms of n complex values in split format, n a
// power of two. Two real signals carried as real and imaginary part share one
// transform. It holds scratch memory and is for one goroutine at a time.
type Complex[T Float] struct {
	n      int
	steps  []*kernel.Twiddles[T] // of each step of radix 4 but a last one
	last   int                   // the radix of the last step
	br, bi []T                   // scratch
}

// NewComplex returns a plan for n complex values. n must be a power of two, 2
// to MaxSize.
func NewComplex[T Float](n int) (*Complex[T], error) {
	if _, ok := log2(n); !ok || n < 2 || n > MaxSize {
		return nil, fmt.Errorf("spectral: transform of %d complex values: want a power of two, 2 to %d", n, MaxSize)
	}
	c := &Complex[T]{n: n}
	m := n
	for ; m > 8 || m == 8 && (n == 8 || n >= 8192); m /= 4 {
		c.steps = append(c.steps, kernel.NewTwiddles[T](m, n/m))
	}
	c.last = m
	c.br, c.bi = pair[T](n)
	return c, nil
}

// Clone returns a plan of the same size with scratch memory of its own.
func (c *Complex[T]) Clone() *Complex[T] {
	d := *c
	d.br, d.bi = pair[T](c.n)
	return &d
}

// Len is the number n of complex values.
func (c *Complex[T]) Len() int { return c.n }

// Forward writes to re and im the n bins of the signal xr + j·xi. re and im may
// be xr and xi; other overlaps are not allowed. It panics if a length is not n.
func (c *Complex[T]) Forward(re, im, xr, xi []T) {
	c.check("forward", re, im, xr, xi)
	c.transform(re, im, xr, xi)
}

// Inverse writes to xr and xi the signal whose n bins are re + j·im, the factor
// 1/n included. xr and xi may be re and im; other overlaps are not allowed. It
// panics if a length is not n.
func (c *Complex[T]) Inverse(xr, xi, re, im []T) {
	c.check("inverse", xr, xi, re, im)
	c.InverseUnscaled(xr, xi, re, im)
	scale := T(1 / float64(c.n))
	for i := range xr {
		xr[i] *= scale
	}
	for i := range xi {
		xi[i] *= scale
	}
}

// InverseUnscaled is Inverse without the factor 1/n, for callers that hold it
// in what they multiply with.
func (c *Complex[T]) InverseUnscaled(xr, xi, re, im []T) {
	c.check("inverse", xr, xi, re, im)
	// With real and imaginary part swapped, a transform runs backwards.
	c.transform(xi, xr, im, re)
}

func (c *Complex[T]) check(what string, a, b, x, y []T) {
	if len(a) != c.n || len(b) != c.n || len(x) != c.n || len(y) != c.n {
		panic(fmt.Sprintf("spectral: %s transform of %d complex values: lengths %d, %d, %d, %d", what, c.n, len(a), len(b), len(x), len(y)))
	}
}

// transform is the unscaled forward transform [Stockham 1966].
func (c *Complex[T]) transform(re, im, xr, xi []T) {
	if len(c.steps)%2 == 0 && &re[0] == &xr[0] {
		// With an odd number of steps, the first one would overwrite what it
		// reads.
		copy(c.br, xr)
		copy(c.bi, xi)
		xr, xi = c.br, c.bi
	}
	c.run(re, im, xr, xi, 0)
}

// forwardReal is transform for the n values x[0] + j·x[1], x[2] + j·x[3], ...
func (c *Complex[T]) forwardReal(re, im, x []T) {
	if len(c.steps) == 0 { // two values, or four
		tr, ti := c.br, c.bi
		for i := range tr {
			tr[i], ti[i] = x[2*i], x[2*i+1]
		}
		c.run(re, im, tr, ti, 0)
		return
	}
	tr, ti := re, im
	if len(c.steps)%2 == 1 {
		tr, ti = c.br, c.bi
	}
	kernel.FirstStepReal(tr, ti, x, c.steps[0])
	c.run(re, im, tr, ti, 1)
}

// run carries out the steps from the given one on. The data go to and fro
// between the scratch and re, im, such that the last step ends there.
func (c *Complex[T]) run(re, im, xr, xi []T, from int) {
	for k := from; k < len(c.steps); k++ {
		yr, yi := c.br, c.bi
		if (len(c.steps)-k)%2 == 0 {
			yr, yi = re, im
		}
		if k == 0 {
			kernel.FirstStep(yr, yi, xr, xi, c.steps[0])
		} else {
			kernel.Step(yr, yi, xr, xi, c.steps[k])
		}
		xr, xi = yr, yi
	}
	switch c.last {
	case 2:
		kernel.LastStep2(re, im, xr, xi)
	case 4:
		kernel.LastStep4(re, im, xr, xi)
	default:
		kernel.LastStep8(re, im, xr, xi)
	}
}
