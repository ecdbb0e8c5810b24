package calibration

import (
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// Abramowitz & Stegun, table 26.8: chi-square passed once in a hundred times.
func TestChiSquareLimit(t *testing.T) {
	for _, c := range []struct{ free, want float64 }{{2, 9.210}, {5, 15.086}, {10, 23.209}, {20, 37.566}} {
		if got := chiSquareLimit(c.free); math.Abs(got/c.want-1) > 0.01 {
			t.Errorf("chiSquareLimit(%g) = %.3f, want %.3f within 1 %%", c.free, got, c.want)
		}
	}
}

// Of figures alike in variance the estimate is their sample variance less that
// variance (DerSimonian & Laird 1986, equation 8, all weights equal); of figures
// that differ by chance alone it is nothing but once in a hundred times.
func TestDisagreementOfBands(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 7))
	const v = 0.04
	apart := []bandFigure{{1, v}, {-1, v}, {0.5, v}, {-0.5, v}, {2, v}}
	if got, want := disagreement(apart), 1.425-v; math.Abs(got-want) > 1e-12 {
		t.Errorf("disagreement of figures apart: %g, want %g", got, want)
	}
	said := 0
	const runs = 5000
	for range runs {
		var bands []bandFigure
		for b := range 6 {
			s := 0.01 * float64(1+b)
			bands = append(bands, bandFigure{3 + s*rng.NormFloat64(), s * s})
		}
		if disagreement(bands) > 0 {
			said++
		}
	}
	if share := float64(said) / runs; share < 0.004 || share > 0.018 {
		t.Errorf("chance is called disagreement in %.4f of the cases, want 0.01", share)
	}
}

// Octaves are cut from the top; the lowest is never narrower than an octave or
// than the fewest lines.
func TestBandEdges(t *testing.T) {
	for from := 1; from < 60; from++ {
		for to := from + 2; to < 700; to += 7 {
			f := &factor{c: &cross{from: from, to: to}, p: make([]float64, to-from)}
			edges := f.bandEdges()
			if edges[0] != 0 || edges[len(edges)-1] != to-from {
				t.Fatalf("lines %d to %d: edges %v, want all of them", from, to, edges)
			}
			for k := 1; k < len(edges); k++ {
				if w := edges[k] - edges[k-1]; w < leastBandLines && len(edges) > 2 {
					t.Fatalf("lines %d to %d: edges %v, want at least %d lines each", from, to, edges, leastBandLines)
				}
			}
		}
	}
}

// The channels of the real line of eight differ over frequency: channel 7 reads
// 1.3 dB more from 0.3 to 16 kHz than from 0.5 to 8 kHz, where the noise of the
// take knows both within 0.3 dB. What is stated of the wide band covers what the
// narrower says, on seven of the eight channels at least: nineteen of twenty.
func TestRealChannelsDifferOverFrequency(t *testing.T) {
	b, rate := recording(t, "line8-room/noise_rec_one.wav")
	var at []rig.Point
	for m := range 8 {
		at = append(at, rig.Point{X: 0.12 * (float64(m) - 3.5)})
	}
	source := rig.Point{X: 0.455 - 0.42, Y: 1.154}
	calibrated := func(from, to float64) *Relative {
		az := math.Atan2(source.Y, source.X) / deg
		e, err := Expect(at, rig.Point{}, rig.Degrees(az, 0), math.Hypot(source.X, source.Y), 343.2, Doubt{Distance: 0.01})
		if err != nil {
			t.Fatal(err)
		}
		r, err := Channels(func() (audio.Source, error) { return audio.FromBlock(rate, b), nil }, e, nil, Options{FromHz: from, ToHz: to})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	wide, narrow := calibrated(300, 16000), calibrated(500, 8000)
	outside := 0
	for m, c := range wide.Channels {
		n := narrow.Channels[m]
		apart, stated := math.Abs(c.LevelDB-n.LevelDB), 2*math.Hypot(c.LevelStd, n.LevelStd)
		if apart > stated {
			outside++
		}
		if apart > 1.5*stated || m == 6 && apart > 2*c.LevelStd {
			t.Errorf("channel %d: %.2f ± %.2f dB over the wide band, %.2f ± %.2f dB over the narrower", m+1, c.LevelDB, 2*c.LevelStd, n.LevelDB, 2*n.LevelStd)
		}
	}
	if outside > 1 {
		t.Errorf("%d of 8 channels lie further apart than is stated, want one at most", outside)
	}
	if c := wide.Channels[6]; c.LevelBands < 0.5 || c.LevelStd < c.LevelBands || c.LevelNoise > 0.2 {
		t.Errorf("channel 7: octaves differ by %.2f dB, stated %.2f dB of which noise %.2f dB: want over 0.5 dB, covered, and noise under 0.2 dB", c.LevelBands, c.LevelStd, c.LevelNoise)
	}
}
