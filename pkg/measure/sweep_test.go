package measure

import (
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
)

// sweepCorrection is the level in a band over an averaging time re the level
// of an exponential sweep: 10·log10[(T_sweep/T_avg)·ln(f2/f1)/ln(f_end/f_start)],
// IEC 61260-2:2016, Annex B.
func sweepCorrection(sweepS, averageS, f1, f2, start, end float64) float64 {
	return 10 * math.Log10(sweepS/averageS*math.Log(f2/f1)/math.Log(end/start))
}

func TestSweptSineReadsItsTimeInTheBand(t *testing.T) {
	// G9: IEC 61260-2:2016, Annex B, worked example: 127 dB in, 0.01 Hz to
	// 1 MHz in 30 s, a third: -19.03 dB, 107.97 dB.
	b := third(0, 1000)
	if got := sweepCorrection(30, 30, b.LowHz, b.HighHz, 0.01, 1e6); math.Abs(got+19.03) > 0.01 || math.Abs(127+got-107.97) > 0.01 {
		t.Errorf("correction %.3f dB, want -19.03", got)
	}
	// G8: the response to a sweep lies within ±0.4 dB of the expectation
	// (IEC 61260-1:2014, 5.14, class 1).
	const rate, seconds, start, end = 48000, 20, 25.0, 22000.0
	x := audio.NewBlock(1, (seconds+2)*rate)
	k := math.Log(end/start) / seconds
	for i := range seconds * rate {
		at := float64(i) / rate
		x.Channel(0)[i+rate] = float32(0.5 * math.Sin(2*math.Pi*start/k*(math.Exp(k*at)-1)))
	}
	m := metered(t, rate, x, 4096, MeterOptions{})
	for _, s := range []*Series{m.Thirds(), m.Octaves()} {
		for _, tr := range s.Tracks {
			average := float64(len(tr.Power)) * tr.HopS
			want := 20*math.Log10(0.5) + sweepCorrection(seconds, average, tr.Band.LowHz, tr.Band.HighHz, start, end)
			if got := audio.PowerDB(mean(tr.Power, tr.inside(nil))); math.Abs(got-want) > 0.4 {
				t.Errorf("band %g Hz of %g: sweep reads %.3f dBFS, want %.3f within 0.4", tr.Band.NominalHz, tr.Band.HighHz-tr.Band.LowHz, got, want)
			}
		}
	}
}

func TestBandsAddUp(t *testing.T) {
	// G8: the sum of neighbouring bands, +0.8 to -1.8 dB (IEC 61260-1:2014,
	// 5.16, class 1), at any frequency between the lowest and highest mid-band.
	for _, rate := range []int{16000, 44100, 48000, 96000} {
		l, err := newLayout(rate)
		if err != nil {
			t.Fatal(err)
		}
		top := l.bands[l.thirds-1].CentreHz
		for hz := l.bands[0].CentreHz; hz < top; hz *= 1.013 {
			sum := 0.0
			for gi := range l.grids {
				g := &l.grids[gi]
				for i, b := range g.bands {
					if b < l.thirds && math.Abs(math.Log2(hz/l.bands[b].CentreHz)) < 1 {
						sum += l.response(g, i, hz)
					}
				}
			}
			if d := 10 * math.Log10(sum); d > 0.8 || d < -1.8 {
				t.Errorf("rate %d: bands add up to %.3f dB at %.1f Hz", rate, d, hz)
			}
		}
	}
}

func TestMeasuredResponseIsTheComputedOne(t *testing.T) {
	// The mask is checked on a computed response; here sines through the meter.
	const rate = 44100
	l, err := newLayout(rate)
	if err != nil {
		t.Fatal(err)
	}
	for _, hz := range []float64{47, 50, 56.5, 99, 141.5, 210, 333, 640, 700, 905, 3000, 15000} {
		x := audio.NewBlock(1, 4*rate)
		for i := range x.Channel(0) {
			x.Channel(0)[i] = float32(math.Sin(2*math.Pi*hz/rate*float64(i) + 1))
		}
		p := metered(t, rate, x, 4096, MeterOptions{}).Thirds()
		for gi := range l.grids {
			g := &l.grids[gi]
			for i, b := range g.bands {
				if b >= l.thirds {
					continue
				}
				want := 10 * math.Log10(l.response(g, i, hz))
				if want < -60 {
					continue // products of the sine with its mirror image show
				}
				// Entries differ by the phase of the sine against its mirror image.
				at := p.Tracks[b].inside([]Stretch{{0.1, 3.9}})
				if got := audio.PowerDB(mean(p.Tracks[b].Power, at)); math.Abs(got-want) > 0.1 {
					t.Errorf("%g Hz in band %g Hz: %.3f dB, want %.3f", hz, l.bands[b].NominalHz, got, want)
				}
			}
		}
	}
}

func TestDecimatorIsAFilterAndEveryNthSample(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 5))
	x := make([]float32, 3001)
	for i := range x {
		x[i] = float32(r.NormFloat64())
	}
	for _, factor := range []int{1, 3, 17, 250} {
		taps := lowpass(0.2/float64(factor), 0.5/float64(factor))
		want := make([]float64, 0, len(x)/factor+1)
		for at := 0; at < len(x); at += factor {
			sum := 0.0
			for k, h := range taps {
				if i := at + k - len(taps)/2; i >= 0 && i < len(x) {
					sum += float64(h) * float64(x[i])
				}
			}
			want = append(want, sum)
		}
		d := newDecimator(taps, factor, 100, 8)
		var got []float32
		take := func() {
			for d.ready() > 0 {
				d.advance(1)
				got = append(got, d.last(1)[0])
			}
		}
		for at := 0; at < len(x); at += 100 {
			d.add(x[at:min(at+100, len(x))])
			take()
		}
		d.flush()
		take()
		if len(got) < len(want) {
			t.Fatalf("factor %d: %d samples, want %d", factor, len(got), len(want))
		}
		for i, w := range want {
			if math.Abs(float64(got[i])-w) > 1e-5 {
				t.Fatalf("factor %d: sample %d is %g, want %g", factor, i, got[i], w)
			}
		}
	}
}
