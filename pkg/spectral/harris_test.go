package spectral

import (
	"math"
	"testing"
)

// B18: F. J. Harris 1978, Table I (rows from memory, recomputed with numpy): the
// windows that are here, 2048 points. Cells of the table that do not recompute
// (B18x: scalloping of Hamming, widths of Blackman and the 6 dB width of the
// four-term window) have the recomputed number.
func TestWindowsHaveTheFiguresOfHarris(t *testing.T) {
	const n = 2048
	for _, c := range []struct {
		name  string
		shape Shape
		want  [9]float64
	}{
		{"rectangle", Rectangle, [9]float64{-13, 1, 1, 0.89, 3.92, 3.92, 1.21, 75, 50}},
		{"cos", SqrtHann, [9]float64{-23, 0.64, 1.23, 1.2, 2.1, 3.01, 1.64, 75.5, 31.8}},
		{"Hann", Hann, [9]float64{-32, 0.5, 1.5, 1.44, 1.42, 3.18, 2, 65.9, 16.7}},
		{"Hamming", Hamming, [9]float64{-43, 0.54, 1.36, 1.3, 1.7514, 3.1, 1.81, 70.7, 23.5}},
		{"Kaiser 2", Kaiser(2 * math.Pi), [9]float64{-46, 0.49, 1.5, 1.43, 1.46, 3.2, 1.99, 65.7, 16.9}},
		{"Kaiser 2.5", Kaiser(2.5 * math.Pi), [9]float64{-57, 0.44, 1.65, 1.57, 1.2, 3.38, 2.2, 59.5, 11.2}},
		{"Kaiser 3", Kaiser(3 * math.Pi), [9]float64{-69, 0.4, 1.8, 1.71, 1.02, 3.56, 2.39, 53.9, 7.4}},
		{"Kaiser 3.5", Kaiser(3.5 * math.Pi), [9]float64{-82, 0.37, 1.93, 1.83, 0.89, 3.74, 2.57, 48.8, 4.8}},
		{"Blackman", Blackman, [9]float64{-58, 0.42, 1.73, 1.6409, 1.1, 3.47, 2.295, 56.7, 9}},
		{"Blackman-Harris", BlackmanHarris, [9]float64{-92, 0.36, 2, 1.9, 0.83, 3.85, 2.662, 46, 3.8}},
	} {
		w := Periodic(n, c.shape)
		sum, square, middle := 0.0, 0.0, w[n/2]
		for _, v := range w {
			sum += v
			square += v * v
		}
		// The response k bins away, re that at its own: Periodic is even about n/2.
		response := func(k float64) float64 {
			re := 0.0
			for i, v := range w {
				re += v * math.Cos(2*math.Pi*k*float64(i-n/2)/n)
			}
			return re / sum
		}
		width := func(level float64) float64 {
			low, high := 0.0, 3.0
			for range 40 {
				if mid := (low + high) / 2; response(mid) > level {
					low = mid
				} else {
					high = mid
				}
			}
			return 2 * low
		}
		overlap := func(part float64) float64 {
			shift, both := int(n*(1-part)), 0.0
			for i, v := range w[shift:] {
				both += v * w[i]
			}
			return 100 * both / square
		}
		lobe, k := 0.0, 1.0
		for response(k) > 0 {
			k += 0.05
		}
		for ; k < 8; k += 0.05 {
			lobe = math.Max(lobe, math.Abs(response(k)))
		}
		enbw, scallop := n*square/(sum*sum), -20*math.Log10(response(0.5))
		got := [9]float64{20 * math.Log10(lobe), sum / n / middle, enbw, width(math.Pow(10, -0.15)), scallop, scallop + 10*math.Log10(enbw), width(0.5), overlap(0.75), overlap(0.5)}
		for i, name := range []string{"side lobe dB", "coherent gain", "noise bandwidth", "3 dB width", "scalloping dB", "worst loss dB", "6 dB width", "overlap 75 %", "overlap 50 %"} {
			within := [9]float64{1.2, 0.013, 0.013, 0.014, 0.02, 0.02, 0.014, 0.35, 0.35}[i]
			if math.Abs(got[i]-c.want[i]) > within {
				t.Errorf("%s: %s %.4f, want %g within %g", c.name, name, got[i], c.want[i], within)
			}
		}
	}
}
