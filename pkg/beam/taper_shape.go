package beam

import "math"

// dolphChebyshev returns the n amplitudes, from end to end and without a
// particular scale, whose pattern on a uniform line has side lobes of equal
// height sll dB below the main lobe [Dolph 1946]: the inverse transform of the
// Chebyshev polynomial T_{n-1}(x0 cos(psi/2)), x0 = cosh(acosh(R)/(n-1)),
// R = 10^(sll/20), taken at the n points psi = 2 pi k/n.
func dolphChebyshev(n int, sll float64) []float64 {
	a := make([]float64, n)
	if n == 1 {
		a[0] = 1
		return a
	}
	r := math.Pow(10, sll/20)
	x0 := math.Cosh(math.Acosh(r) / float64(n-1))
	half := (n - 1) / 2 // for even n the term k = n/2 is T of 0, which is 0
	level := make([]float64, half+1)
	for k := range level {
		level[k] = chebyshevT(n-1, x0*math.Cos(math.Pi*float64(k)/float64(n)))
	}
	for i := range a {
		x := float64(i) - float64(n-1)/2
		sum := level[0]
		for k := 1; k <= half; k++ {
			sum += 2 * level[k] * math.Cos(2*math.Pi*float64(k)*x/float64(n))
		}
		a[i] = sum / (float64(n) * r)
	}
	return a
}

// chebyshevT returns the Chebyshev polynomial of the first kind of degree n at
// x.
func chebyshevT(n int, x float64) float64 {
	switch {
	case x > 1:
		return math.Cosh(float64(n) * math.Acosh(x))
	case x < -1:
		v := math.Cosh(float64(n) * math.Acosh(-x))
		if n%2 == 1 {
			return -v
		}
		return v
	}
	return math.Cos(float64(n) * math.Acos(x))
}

// taylorShape returns the continuous taper of [Taylor 1955] at x, -1/2..1/2 of
// the aperture: 1 + 2 sum F_m cos(2 pi m x), with nbar - 1 coefficients, the
// first side lobes sll dB below the main lobe.
func taylorShape(x, sll float64, nbar int) float64 {
	v := 1.0
	for m := 1; m < nbar; m++ {
		v += 2 * taylorCoefficient(m, sll, nbar) * math.Cos(2*math.Pi*float64(m)*x)
	}
	return v
}

// taylorCoefficient returns F_m of [Taylor 1955] for 1 <= m < nbar.
func taylorCoefficient(m int, sll float64, nbar int) float64 {
	a := math.Acosh(math.Pow(10, sll/20)) / math.Pi
	nb := float64(nbar)
	sigma2 := nb * nb / (a*a + (nb-0.5)*(nb-0.5))
	m2 := float64(m * m)
	num, den := 1.0, 2.0
	if m%2 == 0 {
		num = -1
	}
	for i := 1; i < nbar; i++ {
		h := float64(i) - 0.5
		num *= 1 - m2/(sigma2*(a*a+h*h))
		if i != m {
			den *= 1 - m2/float64(i*i)
		}
	}
	return num / den
}
