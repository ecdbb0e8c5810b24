package delay

import "fmt"

// AddFIR adds a filtered signal to y, the taps in reversed order:
//
//	y[i] += Σ_t reversed[t]·x[i+t],   len(x) >= len(y) + len(reversed) - 1
//
// It works four taps and four samples at a time, so that each value is loaded
// once for four products; a plain sum a sample takes twice as long. The order
// of the additions depends on i only by i mod 4. It panics if x is too short.
func AddFIR(y, x, reversed []float32) {
	if len(x) < len(y)+len(reversed)-1 {
		panic(fmt.Sprintf("delay: %d taps for %d samples from %d", len(reversed), len(y), len(x)))
	}
	t := 0
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
