package render

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// errorDB returns the largest complex error of taps against a delay, dB, from
// 0 to the share top of Nyquist.
func errorDB(h []float64, start int, delay, top float64) float64 {
	worst := 0.0
	for i := range 400 {
		omega := math.Pi * top * float64(i) / 399
		worst = math.Max(worst, cmplx.Abs(TapResponse(h, start, omega)-cmplx.Rect(1, -omega*delay)))
	}
	return 20 * math.Log10(worst)
}

// The ideal fractional delay is e^{-jωd} (Laakso, Välimäki, Karjalainen & Laine
// 1996); 41 fractions of both signs.
func TestDirectKernelIsExactBelow115DB(t *testing.T) {
	worst := math.Inf(-1)
	for i := range 41 {
		delay := -3 + 6*float64(i)/40 + 0.0123
		start, h := delayTaps(delay)
		worst = math.Max(worst, errorDB(h, start, delay, 0.9))
	}
	if worst > -115 {
		t.Errorf("largest error up to 0.9 of Nyquist = %.1f dB, want below -115", worst)
	}
	t.Logf("direct kernel: %.1f dB", worst)
}

func TestTablesInterpolateBetweenTheirFractions(t *testing.T) {
	direct, reflection := DirectTable(), NewTable(reflectionTaps, 512, reflectionBeta)
	for _, v := range []struct {
		name  string
		table *Table
		top   float64
		bound float64
	}{{"direct", direct, 0.9, -115}, {"reflection", reflection, 0.85, -85}} {
		worst := math.Inf(-1)
		rng := rand.New(rand.NewPCG(1, 1))
		for range 41 {
			delay := 40 + v.table.frac(rng)
			h := make([]float64, 200)
			v.table.add([][]float64{h}, delay+40, []float64{1})
			worst = math.Max(worst, errorDB(h, 0, delay+40, v.top))
		}
		if worst > v.bound {
			t.Errorf("%s table: largest error up to %g of Nyquist = %.1f dB, want below %g", v.name, v.top, worst, v.bound)
		}
		t.Logf("%s table: %.1f dB", v.name, worst)
	}
}

// frac is a random fraction, the ends of the table among them.
func (k *Table) frac(rng *rand.Rand) float64 {
	switch rng.IntN(8) {
	case 0:
		return 0
	case 1:
		return 1 - 1e-12
	}
	return rng.Float64()
}

// At reads a sine between its samples.
func TestTableReadsBetweenSamples(t *testing.T) {
	k := DirectTable()
	rng := rand.New(rand.NewPCG(2, 3))
	for range 200 {
		omega := 0.9 * math.Pi * rng.Float64()
		phase := 2 * math.Pi * rng.Float64()
		frac := k.frac(rng)
		x := make([]float64, k.Taps)
		for i := range x {
			x[i] = math.Sin(omega*float64(i) + phase)
		}
		at := float64(k.Taps/2-1) + frac
		want := math.Sin(omega*at + phase)
		if got := k.At(x, frac); math.Abs(got-want) > 4e-6 { // -108 dB: both signs of frequency add up
			t.Fatalf("sine of %.3f rad at %.4f = %.7f, want %.7f", omega, at, got, want)
		}
	}
}

func TestTapsOutsideTheResponseAreDropped(t *testing.T) {
	k := NewTable(reflectionTaps, 64, reflectionBeta)
	for _, delay := range []float64{-500, -33.5, -0.25, 0, 9.75, 41, 500} {
		long := make([]float64, 200)
		k.add([][]float64{long}, delay+100, []float64{0.7})
		short := make([]float64, 10)
		k.add([][]float64{short}, delay, []float64{0.7})
		for i, v := range short {
			want := 0.0
			if delay+100 > 0 && delay+100 < 400 {
				want = long[100+i]
			}
			if v != want {
				t.Fatalf("delay %g: tap %d = %g, want %g", delay, i, v, want)
			}
		}
	}
}
