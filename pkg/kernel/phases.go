package kernel

import "fmt"

// Phases are the sums of filters of many taps over blocks of n samples, kept
// apart by the place of a tap modulo eight: row v holds
//
//	z_v[i] = Σ_u reversed[8u+v]·x[i+8u],  i = 0..n+7,
//
// added up over signals, and y[i] = Σ_v z_v[i+v]. That is the sum of AddFIR, in
// another order; with vectors the samples are then read in whole registers, each
// of which serves four taps, and what is shifted by less than a register is
// shifted once for all signals. It is for one goroutine at a time.
type Phases struct {
	n, stride int
	z         []float32 // z[v*stride+i]
}

// NewPhases returns sums of nothing over n samples, a positive multiple of 8. It
// panics on another n. An n with n+8 a multiple of 24 is fastest.
func NewPhases(n int) *Phases {
	if n <= 0 || n%8 != 0 {
		panic(fmt.Sprintf("kernel: phases of %d samples: want a multiple of 8", n))
	}
	return &Phases{n: n, stride: n + 8, z: make([]float32, 8*(n+8))}
}

// Clear makes them sums of nothing.
func (p *Phases) Clear() { clear(p.z) }

// Add adds x filtered with the taps, a multiple of 8 of them in reversed order.
// It panics on another number and if x has fewer than n + len(reversed) samples,
// of which the last one counts for nothing.
func (p *Phases) Add(x, reversed []float32) {
	if len(reversed)%8 != 0 || len(x) < p.n+len(reversed) {
		panic(fmt.Sprintf("kernel: phases of %d samples: %d taps over %d samples", p.n, len(reversed), len(x)))
	}
	switch {
	case len(reversed) == 0:
	case vector:
		addPhasesAVX2(&p.z[0], p.stride, p.stride/8, &x[0], &reversed[0], len(reversed)/8)
	default:
		p.add(x, reversed)
	}
}

// add is the definition.
func (p *Phases) add(x, reversed []float32) {
	for v := range 8 {
		z := p.z[v*p.stride:][:p.stride]
		for u := v; u < len(reversed); u += 8 {
			h := reversed[u]
			for i, s := range x[u-v:][:len(z)] {
				z[i] += h * s
			}
		}
	}
}

// Join writes the sums to y, of n samples. It panics on another length.
func (p *Phases) Join(y []float32) {
	if len(y) != p.n {
		panic(fmt.Sprintf("kernel: phases of %d samples into %d", p.n, len(y)))
	}
	if vector {
		joinPhasesAVX2(&y[0], &p.z[0], p.stride, p.n)
		return
	}
	p.join(y)
}

// join is the definition.
func (p *Phases) join(y []float32) {
	at := func(v int) []float32 { return p.z[v*p.stride+v:][:len(y)] }
	z0, z1, z2, z3, z4, z5, z6, z7 := at(0), at(1), at(2), at(3), at(4), at(5), at(6), at(7)
	for i := range y {
		y[i] = (z0[i] + z1[i] + z2[i] + z3[i]) + (z4[i] + z5[i] + z6[i] + z7[i])
	}
}
