package measure

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
)

// older are the relative attenuation limits of class 1 in the edition before:
// G7, IEC 61260:1995 = ANSI S1.11-2004, Table 1. They differ from those of
// 2014, so that a statement on a class must name the edition.
var older = []struct{ x, low, high float64 }{
	{0, -0.3, 0.3}, {1. / 8, -0.3, 0.4}, {1. / 4, -0.3, 0.6}, {3. / 8, -0.3, 1.3}, {0.5, -0.3, 5.0},
	{0.5, 2.0, math.Inf(1)}, {1, 17.5, math.Inf(1)}, {2, 42, math.Inf(1)}, {3, 61, math.Inf(1)}, {4, 70, math.Inf(1)},
}

// The filters lie within class 1 of the older edition too, at its break points.
func TestBandFiltersKeepToTheOlderEdition(t *testing.T) {
	for i := range older {
		if older[i].x != limits[i].x {
			t.Fatalf("break point %d: %g and %g", i, older[i].x, limits[i].x)
		}
		if older[i].low == limits[i].low && older[i].x < 4 {
			t.Errorf("at G^%g both editions ask for %g dB: one of the tables is wrong", older[i].x, older[i].low)
		}
	}
	for _, rate := range []int{16000, 48000, 192000} {
		t.Run(fmt.Sprint(rate), func(t *testing.T) {
			l, err := newLayout(rate)
			if err != nil {
				t.Fatal(err)
			}
			for gi := range l.grids {
				g := &l.grids[gi]
				for i, b := range g.bands {
					per := 3.0
					if b >= l.thirds {
						per = 1
					}
					for j, lim := range older {
						if lim.x == 0.5 {
							continue // the edge itself, where the limits of both sides meet
						}
						for _, w := range []float64{breakpoint(j, per), 1 / breakpoint(j, per)} {
							hz := w * l.bands[b].CentreHz
							if hz >= float64(rate)/2 {
								continue
							}
							if got := -10 * math.Log10(l.response(g, i, hz)); got < lim.low || got > lim.high {
								t.Errorf("band %g Hz (1/%g octave): attenuation %.2f dB at G^%g, limits of 1995 %.1f to %.1f", l.bands[b].NominalHz, per, got, lim.x, lim.low, lim.high)
							}
						}
					}
				}
			}
		})
	}
}

// J2: the mean of 8 channels of independent noise, 200,000 samples, against
// 10·log10(8) = 9.0309 dB, ±0.05 dB (simulated check of J1: Van Trees 2002,
// section 2.6).
func TestMeanOfEightInWhiteNoise(t *testing.T) {
	const n, mics = 200000, 8
	rng := rand.New(rand.NewPCG(11, 0))
	x, y := audio.NewBlock(mics, n), audio.NewBlock(1, n)
	for i := range n {
		sum := 0.0
		for m := range mics {
			v := 0.1 * rng.NormFloat64()
			x.Channel(m)[i] = float32(v)
			sum += v
		}
		y.Channel(0)[i] = float32(sum / mics)
	}
	in, out := NewTotals(mics), NewTotals(1)
	if err := in.Write(x); err != nil {
		t.Fatal(err)
	}
	if err := out.Write(y); err != nil {
		t.Fatal(err)
	}
	power := 0.0
	for _, l := range in.Levels() {
		power += audio.FromPowerDB(l.RMSDBFS) / mics
	}
	if got := audio.PowerDB(power) - out.Levels()[0].RMSDBFS; math.Abs(got-9.0309) > 0.05 {
		t.Errorf("noise reduction %.4f dB, want 9.0309", got)
	}
}
