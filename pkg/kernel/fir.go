package kernel

import "fmt"

// AddFIR adds a filtered signal to y, the taps in reversed order:
//
//	y[i] += Σ_t reversed[t]·x[i+t],   len(x) >= len(y) + len(reversed) - 1
//
// y must not overlap x. It panics if x is too short.
func AddFIR(y, x, reversed []float32) {
	if len(y) == 0 || len(reversed) == 0 {
		return
	}
	if len(x) < len(y)+len(reversed)-1 {
		panic(fmt.Sprintf("kernel: %d taps for %d samples from %d", len(reversed), len(y), len(x)))
	}
	if !vector {
		addFIR(y, x, reversed)
		return
	}
	n := len(y) &^ 7
	if n > 0 {
		addFIRAVX2(&y[0], n, &x[0], &reversed[0], len(reversed))
	}
	if n < len(y) {
		addFIR(y[n:], x[n:], reversed)
	}
}

// addFIR is the definition. It works eight taps and four samples at a time; a
// plain sum a sample takes twice as long. The order of the additions is the
// same for every sample.
func addFIR(y, x, reversed []float32) {
	t := 0
	for ; t+8 <= len(reversed); t += 8 {
		h := (*[8]float32)(reversed[t:])
		h0, h1, h2, h3, h4, h5, h6, h7 := h[0], h[1], h[2], h[3], h[4], h[5], h[6], h[7]
		u := x[t : t+len(y)+7]
		i := 0
		for ; i+4 <= len(y); i += 4 {
			q, o := (*[11]float32)(u[i:]), (*[4]float32)(y[i:])
			o[0] += h0*q[0] + h1*q[1] + (h2*q[2] + h3*q[3]) + (h4*q[4] + h5*q[5] + (h6*q[6] + h7*q[7]))
			o[1] += h0*q[1] + h1*q[2] + (h2*q[3] + h3*q[4]) + (h4*q[5] + h5*q[6] + (h6*q[7] + h7*q[8]))
			o[2] += h0*q[2] + h1*q[3] + (h2*q[4] + h3*q[5]) + (h4*q[6] + h5*q[7] + (h6*q[8] + h7*q[9]))
			o[3] += h0*q[3] + h1*q[4] + (h2*q[5] + h3*q[6]) + (h4*q[7] + h5*q[8] + (h6*q[9] + h7*q[10]))
		}
		for ; i < len(y); i++ {
			q := (*[8]float32)(u[i:])
			y[i] += h0*q[0] + h1*q[1] + (h2*q[2] + h3*q[3]) + (h4*q[4] + h5*q[5] + (h6*q[6] + h7*q[7]))
		}
	}
	for ; t+4 <= len(reversed); t += 4 {
		h0, h1, h2, h3 := reversed[t], reversed[t+1], reversed[t+2], reversed[t+3]
		u := x[t : t+len(y)+3]
		i := 0
		if len(y) >= 4 {
			x0, x1, x2 := u[0], u[1], u[2]
			for ; i+4 <= len(y); i += 4 {
				q, o := (*[4]float32)(u[i+3:]), (*[4]float32)(y[i:])
				x3, x4, x5, x6 := q[0], q[1], q[2], q[3]
				o[0] += h0*x0 + h1*x1 + (h2*x2 + h3*x3)
				o[1] += h0*x1 + h1*x2 + (h2*x3 + h3*x4)
				o[2] += h0*x2 + h1*x3 + (h2*x4 + h3*x5)
				o[3] += h0*x3 + h1*x4 + (h2*x5 + h3*x6)
				x0, x1, x2 = x4, x5, x6
			}
		}
		for ; i < len(y); i++ {
			y[i] += h0*u[i] + h1*u[i+1] + (h2*u[i+2] + h3*u[i+3])
		}
	}
	for ; t < len(reversed); t++ {
		h, u := reversed[t], x[t:t+len(y)]
		for i, v := range u {
			y[i] += h * v
		}
	}
}
