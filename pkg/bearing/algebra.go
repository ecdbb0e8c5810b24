package bearing

import "math"

// mat4 is a symmetric matrix of up to maxDims rows.
type mat4 [maxDims][maxDims]float64

// vec4 is a vector of up to maxDims entries.
type vec4 [maxDims]float64

// addScaled adds f·b to m.
func (m *mat4) addScaled(f float64, b *mat4) {
	for i := range m {
		for j := range m[i] {
			m[i][j] += f * b[i][j]
		}
	}
}

// addOuter adds f·v·vᵀ to m.
func (m *mat4) addOuter(f float64, v vec4) {
	for i := range m {
		for j := range m[i] {
			m[i][j] += f * v[i] * v[j]
		}
	}
}

// times returns m·v.
func (m *mat4) times(v vec4) (w vec4) {
	for i := range m {
		for j := range m[i] {
			w[i] += m[i][j] * v[j]
		}
	}
	return w
}

// quad returns vᵀ·m·v.
func (m *mat4) quad(v vec4) float64 {
	w := m.times(v)
	sum := 0.0
	for i := range v {
		sum += v[i] * w[i]
	}
	return sum
}

// sandwich returns a·m·a for symmetric a.
func (m *mat4) sandwich(a *mat4) (out mat4) {
	var half mat4
	for i := range m {
		for j := range m {
			for k := range m {
				half[i][j] += a[i][k] * m[k][j]
			}
		}
	}
	for i := range m {
		for j := range m {
			for k := range m {
				out[i][j] += half[i][k] * a[k][j]
			}
		}
	}
	return out
}

// invert returns the inverse of the leading n rows of m, after lifting it by
// 1 in the direction lift (nil for none; the inverse then has no part along
// it), and whether it is positive definite with a reciprocal condition above
// 1e-12, rows scaled to a unit diagonal. The other rows of the inverse are 0.
func (m *mat4) invert(n int, lift []float64) (inv mat4, ok bool) {
	var a, scale [maxDims][maxDims]float64
	trace := 0.0
	for i := range n {
		trace += m[i][i]
	}
	if !(trace > 0) || math.IsInf(trace, 0) {
		return inv, false
	}
	for i := range n {
		for j := range n {
			a[i][j] = m[i][j]
			if i < len(lift) && j < len(lift) {
				a[i][j] += trace * lift[i] * lift[j]
			}
		}
	}
	var d [maxDims]float64
	for i := range n {
		if !(a[i][i] > 0) {
			return inv, false
		}
		d[i] = 1 / math.Sqrt(a[i][i])
	}
	for i := range n {
		for j := range n {
			scale[i][j] = a[i][j] * d[i] * d[j]
		}
	}
	// Cholesky, then the inverse column by column.
	var l [maxDims][maxDims]float64
	for i := range n {
		for j := 0; j <= i; j++ {
			sum := scale[i][j]
			for k := range j {
				sum -= l[i][k] * l[j][k]
			}
			if i == j {
				if !(sum > 1e-12) {
					return inv, false
				}
				l[i][i] = math.Sqrt(sum)
			} else {
				l[i][j] = sum / l[j][j]
			}
		}
	}
	for c := range n {
		var y [maxDims]float64
		for i := range n {
			sum := 0.0
			if i == c {
				sum = 1
			}
			for k := range i {
				sum -= l[i][k] * y[k]
			}
			y[i] = sum / l[i][i]
		}
		for i := n - 1; i >= 0; i-- {
			sum := y[i]
			for k := i + 1; k < n; k++ {
				sum -= l[k][i] * inv[k][c]
			}
			inv[i][c] = sum / l[i][i]
		}
	}
	for i := range n {
		for j := range n {
			inv[i][j] *= d[i] * d[j]
		}
	}
	// Take the lifted part out again: inv -= lift·liftᵀ/trace, exact where m has
	// no part along lift.
	for i := range lift {
		for j := range lift {
			inv[i][j] -= lift[i] * lift[j] / trace
		}
	}
	return inv, true
}

// eigen3 returns the eigenvalues and unit eigenvectors of the leading n by n
// part of m, n at most 3, by cyclic Jacobi rotations.
func eigen3(m mat4, n int) (values [3]float64, vectors [3][3]float64) {
	var v [3][3]float64
	for i := range 3 {
		v[i][i] = 1
	}
	for range 50 {
		off, diag := 0.0, 0.0
		for p := range n {
			diag += math.Abs(m[p][p])
			for q := p + 1; q < n; q++ {
				off += math.Abs(m[p][q])
			}
		}
		if off <= 1e-15*diag {
			break
		}
		for p := range n {
			for q := p + 1; q < n; q++ {
				if m[p][q] == 0 {
					continue
				}
				theta := (m[q][q] - m[p][p]) / (2 * m[p][q])
				t := 1 / (math.Abs(theta) + math.Sqrt(theta*theta+1))
				if theta < 0 {
					t = -t
				}
				c := 1 / math.Sqrt(t*t+1)
				s := t * c
				for k := range n {
					m[k][p], m[k][q] = c*m[k][p]-s*m[k][q], s*m[k][p]+c*m[k][q]
				}
				for k := range n {
					m[p][k], m[q][k] = c*m[p][k]-s*m[q][k], s*m[p][k]+c*m[q][k]
				}
				for k := range n {
					v[k][p], v[k][q] = c*v[k][p]-s*v[k][q], s*v[k][p]+c*v[k][q]
				}
			}
		}
	}
	for a := range n {
		values[a] = m[a][a]
		for b := range n {
			vectors[a][b] = v[b][a]
		}
	}
	return values, vectors
}

// studentQuantile975 returns the 97.5 % quantile of Student's t distribution:
// exact for 1 and 2 degrees of freedom, else the expansion in 1/nu of
// [Abramowitz & Stegun 1964, 26.7.5], within 1 % from 3 degrees of freedom.
// Below 1 degree it is taken for 1; infinity gives the normal quantile.
func studentQuantile975(nu float64) float64 {
	const z = 1.959963984540054
	switch {
	case math.IsInf(nu, 1):
		return z
	case !(nu > 1):
		return 12.706204736432095
	case nu < 2:
		// Between the exact values, straight in 1/nu.
		f := (1/nu - 0.5) / 0.5
		return 4.302652729696142 + f*(12.706204736432095-4.302652729696142)
	case nu < 3:
		f := (1/nu - 1.0/3) / (0.5 - 1.0/3)
		return 3.182446305284263 + f*(4.302652729696142-3.182446305284263)
	}
	z2 := z * z
	g1 := z * (z2 + 1) / 4
	g2 := z * (5*z2*z2 + 16*z2 + 3) / 96
	g3 := z * (3*z2*z2*z2 + 19*z2*z2 + 17*z2 - 15) / 384
	g4 := z * (79*z2*z2*z2*z2 + 776*z2*z2*z2 + 1482*z2*z2 - 1920*z2 - 945) / 92160
	return z + g1/nu + g2/(nu*nu) + g3/(nu*nu*nu) + g4/(nu*nu*nu*nu)
}
