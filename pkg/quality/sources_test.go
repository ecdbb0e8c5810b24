package quality

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

// soundOf inspects a take of sources of a kind at azimuths, some noise in every
// microphone.
func soundOf(t *testing.T, mics []rig.Mic, kind, spectrum string, rate int, seconds float64, seed uint64, azimuths ...float64) *Result {
	t.Helper()
	level, sensor := -30.0, -45.0
	sc := &scenario.Scenario{Name: "take", RateHz: rate, DurationS: seconds, Seed: seed, SensorDBFS: &sensor, Rig: &rig.Rig{Name: "rig", Mics: mics}}
	for k, az := range azimuths {
		sc.Sources = append(sc.Sources, scenario.Source{Name: fmt.Sprintf("source %d", k+1), Kind: kind, Spectrum: spectrum, LevelDBFS: &level, At: &scenario.Place{AzimuthDeg: &az}})
	}
	r, err := sc.Render(scenario.Options{})
	if err != nil {
		t.Fatal(err)
	}
	q, err := New(mics, rate, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(r.Mix(), 4096, q); err != nil {
		t.Fatal(err)
	}
	return q.Result()
}

// Of two sounds of equal strength a microphone on one side hears the phase turned
// over for a part of the band: no channel is.
func TestTwoSourcesTurnNoChannelOver(t *testing.T) {
	if testing.Short() {
		t.Skip("renders takes")
	}
	grid := make([]rig.Point, 16)
	for m := range grid {
		grid[m] = rig.Point{X: 0.03 * (float64(m%4) - 1.5), Z: 0.03 * (float64(m/4) - 1.5)}
	}
	mics := microphones(grid)
	for _, pair := range [][2]float64{{68, 180}, {68, 240}, {68, 150}, {40, 130}, {50, 160}, {30, 110}} {
		r := soundOf(t, mics, scenario.KindNoise, scenario.SpectrumPink, 16000, 2.5, 5, pair[0], pair[1])
		for _, f := range r.Findings {
			if f.Severity != Info {
				t.Errorf("azimuths %g°: %s: %s", pair, f.Code, f.Message())
			}
		}
	}
}

// The low part of a clap comes late through the filter that thumps are looked
// for in: it is none, wherever in a moment the clap falls.
func TestClapsAreNoThumps(t *testing.T) {
	const rate, claps = 16000, 80
	rng := rand.New(rand.NewPCG(3, 3))
	b := audio.NewBlock(2, claps*rate/4)
	for i := range b.Frames() {
		s := 0.3 * rng.NormFloat64() * math.Exp(-float64(i%(rate/4)-i/(rate/4)*5)/(0.004*rate))
		if i%(rate/4) < i/(rate/4)*5 {
			s = 0
		}
		for m := range 2 {
			b.Channel(m)[i] = float32(s + 0.003*rng.NormFloat64())
		}
	}
	r := inspected(t, microphones(rig.Line(2, 0.12)), rate, b)
	for _, f := range r.Findings {
		if f.Code == CodeHandling {
			t.Errorf("%s: %s", f.Code, f.Message())
		}
	}
}
