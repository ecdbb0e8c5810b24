package spectral

import (
	"fmt"
	"math"
)

// Complex is a plan for transforms of n complex values in split format, n a
// power of two. Two real signals carried as real and imaginary part share one
// transform. It holds scratch memory and is for one goroutine at a time.
type Complex[T Float] struct {
	n      int
	stages []stage[T]
	two    bool // a step of radix 2 ends the transform
	br, bi []T  // scratch
}

// stage is one step of radix 4: real and imaginary part of e^{-j2πp/m}, of its
// square and its cube for each p = 0..m/4-1, with m the size of the transforms
// that are left and s the number of them.
type stage[T Float] struct {
	tw [][6]T
	m  int
	s  int
}

// NewComplex returns a plan for n complex values. n must be a power of two, 2
// to MaxSize.
func NewComplex[T Float](n int) (*Complex[T], error) {
	if _, ok := log2(n); !ok || n < 2 || n > MaxSize {
		return nil, fmt.Errorf("spectral: transform of %d complex values: want a power of two, 2 to %d", n, MaxSize)
	}
	c := &Complex[T]{n: n}
	m, s := n, 1
	for ; m >= 4; m, s = m/4, s*4 {
		tw := make([][6]T, m/4)
		for p := range m / 4 {
			for q := 1; q <= 3; q++ {
				sin, cos := math.Sincos(-2 * math.Pi * float64(q*p) / float64(m))
				tw[p][2*q-2], tw[p][2*q-1] = T(cos), T(sin)
			}
		}
		c.stages = append(c.stages, stage[T]{tw: tw, m: m, s: s})
	}
	c.two = m == 2
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

// steps is the number of passes over the data.
func (c *Complex[T]) steps() int {
	if c.two {
		return len(c.stages) + 1
	}
	return len(c.stages)
}

// transform is the unscaled forward transform [Stockham 1966].
func (c *Complex[T]) transform(re, im, xr, xi []T) {
	if c.steps()%2 == 1 && &re[0] == &xr[0] {
		// The first step would overwrite what it reads.
		copy(c.br, xr)
		copy(c.bi, xi)
		xr, xi = c.br, c.bi
	}
	c.run(re, im, xr, xi, 0)
}

// forwardReal is transform for the n values x[0] + j·x[1], x[2] + j·x[3], ...
func (c *Complex[T]) forwardReal(re, im, x []T) {
	tr, ti := re, im
	if c.steps()%2 == 0 {
		tr, ti = c.br, c.bi
	}
	if len(c.stages) == 0 {
		tr[0], ti[0] = x[0]+x[2], x[1]+x[3]
		tr[1], ti[1] = x[0]-x[2], x[1]-x[3]
		return
	}
	firstReal4(tr, ti, x, c.stages[0].tw)
	c.run(re, im, tr, ti, 1)
}

// run carries out the steps from the given one on. The data go to and fro
// between the scratch and re, im, such that the last step ends there.
func (c *Complex[T]) run(re, im, xr, xi []T, from int) {
	total := c.steps()
	for k := from; k < total; k++ {
		yr, yi := c.br, c.bi
		if (total-k)%2 == 1 {
			yr, yi = re, im
		}
		switch {
		case k == len(c.stages):
			last2(yr, yi, xr, xi)
		case k == 0:
			first4(yr, yi, xr, xi, c.stages[0].tw)
		case c.stages[k].m == 4:
			last4(yr, yi, xr, xi)
		case k == 1:
			second4(yr, yi, xr, xi, c.stages[1].tw)
		default:
			step4(yr, yi, xr, xi, c.stages[k].tw, c.stages[k].s)
		}
		xr, xi = yr, yi
	}
}
