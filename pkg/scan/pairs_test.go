package scan

import (
	"math"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/beam"
	"alidade/pkg/delay"
	"alidade/pkg/rig"
)

// Beams of many analysed together are those analysed alone, where nothing is
// paired: of a rig that is the same from the other side, with corrections of the
// channels, of one with a microphone left over, and of one without pairs.
func TestPairsAreMicrophonesOneByOne(t *testing.T) {
	kernel, err := delay.NewSinc(128)
	if err != nil {
		t.Fatal(err)
	}
	const rate = 16000
	for _, c := range []struct {
		name  string
		mics  []rig.Point
		pairs int // microphones that have a partner
	}{
		{"line of 6", rig.Line(6, 0.05), 6},
		{"line of 5", rig.Line(5, 0.05), 4},
		{"none", []rig.Point{{X: 0}, {X: 0.03, Y: 0.01}, {X: 0.1}, {Y: 0.13}}, 0},
	} {
		n := len(c.mics)
		sets := make([]*beam.Filters, 12)
		for i := range sets {
			delays := acoustics.Delays(nil, acoustics.Plane{From: rig.Degrees(13*float64(i), 0)}, c.mics, rig.Point{}, speed)
			amplitudes := make([]float64, n)
			for m := range delays {
				delays[m] += 7e-6 * float64((m*m)%5) // corrections, the same in all beams
				amplitudes[m] = (1 + 0.1*float64(m%3)) / float64(n)
			}
			if sets[i], err = beam.DelayAndSum(kernel, rate, delays, amplitudes); err != nil {
				t.Fatal(err)
			}
		}
		x := audio.NewBlock(n, 3*rate)
		for m := range n {
			at := uint64(m + 1)
			for i := range x.Channel(m) {
				at = at*6364136223846793005 + 1442695040888963407
				x.Channel(m)[i] = float32(int32(at>>32)) / (1 << 34)
			}
		}
		heard := func(sets []*beam.Filters) *Analysis {
			a, err := New(audio.Format{Rate: rate, Channels: n}, sets, Options{})
			if err != nil {
				t.Fatal(err)
			}
			if err := a.Write(x); err != nil {
				t.Fatal(err)
			}
			if err := a.Close(); err != nil {
				t.Fatal(err)
			}
			return a
		}
		all := heard(sets)
		for _, g := range all.grids {
			paired := 0
			if g.pairs != nil {
				for q, a := range g.pairs.a {
					if g.pairs.b[q] != a {
						paired += 2
					}
				}
			}
			if paired != c.pairs {
				t.Errorf("%s, windows of %d: %d microphones in pairs, want %d", c.name, g.size, paired, c.pairs)
			}
		}
		for i := range sets {
			alone := heard(sets[i : i+1])
			for b, want := range alone.Level(0) {
				if got := all.Level(i)[b]; math.Abs(got/want-1) > 1e-4 {
					t.Errorf("%s, beam %d, %g Hz: %g, alone %g", c.name, i, all.Bands()[b].NominalHz, got, want)
				}
			}
			for b, want := range alone.ReferenceLevel() {
				if got := all.ReferenceLevel()[b]; got != want {
					t.Errorf("%s, %g Hz: reference %g, alone %g", c.name, all.Bands()[b].NominalHz, got, want)
				}
			}
		}
	}
}
