package render

import (
	"math"
	"slices"
	"testing"
)

// samplesOf runs a strip over a signal in hops of odd sizes.
func samplesOf(s *Strip, x []float64, additions bool) []float32 {
	l := NewLine(s, 16000, 11, 3, additions)
	out := make([]float32, len(x))
	for at, n := 0, 1; at < len(x); at, n = at+n, n*5%1999+1 {
		n = min(n, len(x)-at)
		l.Run(out[at:at+n], append([]float64(nil), x[at:at+n]...))
	}
	return out
}

func plain() *Strip { return &Strip{Factor: 1, ClipAt: math.Inf(1)} }

func ramp(n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = 0.5 * math.Sin(0.013*float64(i)) * math.Cos(0.0017*float64(i))
	}
	return x
}

func TestPlainStripPassesSoundOn(t *testing.T) {
	x := ramp(5000)
	for i, v := range samplesOf(plain(), x, true) {
		if v != float32(x[i]) {
			t.Fatalf("frame %d = %g, want %g", i, v, x[i])
		}
	}
}

func TestStripClipsAtItsLevel(t *testing.T) {
	s := plain()
	s.ClipAt, s.Factor = 0.3, -1.5
	for i, v := range samplesOf(s, ramp(5000), false) {
		want := -1.5 * ramp(5000)[i]
		want = math.Max(-0.3, math.Min(0.3, want))
		if math.Abs(float64(v)-want) > 1e-7 {
			t.Fatalf("frame %d = %g, want %g", i, v, want)
		}
		if i > 300 {
			break
		}
	}
}

func TestDropOutsAreDigitalSilence(t *testing.T) {
	s := plain()
	s.Sensor, s.DC = 0.1, 0.2
	s.Silent = [][2]int64{{100, 150}, {140, 400}, {2048, 2049}}
	for i, v := range samplesOf(s, ramp(3000), true) {
		silent := i >= 100 && i < 400 || i == 2048
		if silent != (v == 0) {
			t.Fatalf("frame %d = %g", i, v)
		}
	}
}

func TestRepeatedBlocksAreCopiesOfTheOneBefore(t *testing.T) {
	s := plain()
	s.Sensor = 0.1
	s.Repeat, s.Repeated = 300, []int64{2, 5, 6}
	y := samplesOf(s, ramp(3000), true)
	for block := 1; block < 10; block++ {
		same := slices.Equal(y[300*block:300*block+300], y[300*block-300:300*block])
		if want := slices.Contains(s.Repeated, int64(block)); same != want {
			t.Errorf("block %d is a copy of the one before: %v, want %v", block, same, want)
		}
	}
}

func TestDeadChannelShowsOneStep(t *testing.T) {
	s := plain()
	s.Dead, s.Sensor, s.DC = true, 0.1, 0.3
	seen := map[float32]int{}
	for _, v := range samplesOf(s, ramp(4000), true) {
		seen[v*32768]++
	}
	if len(seen) != 3 || seen[0] == 0 || seen[1] == 0 || seen[-1] == 0 {
		t.Errorf("a dead channel holds %v 16-bit units, want -1, 0 and 1", seen)
	}
	for _, v := range samplesOf(s, ramp(4000), false) {
		if v != 0 {
			t.Fatal("a dead channel lets the target through")
		}
	}
}

func TestHumIsItsPartials(t *testing.T) {
	s := plain()
	s.Hum = []Partial{{0.1, 0.02, 0.5}, {0.05, 0.04, 1}}
	for i, v := range samplesOf(s, make([]float64, 3000), true) {
		want := 0.1*math.Sin(0.02*float64(i)+0.5) + 0.05*math.Sin(0.04*float64(i)+1)
		if math.Abs(float64(v)-want) > 1e-7 {
			t.Fatalf("frame %d = %g, want %g", i, v, want)
		}
	}
	for _, v := range samplesOf(s, make([]float64, 300), false) {
		if v != 0 {
			t.Fatal("hum in the isolated target")
		}
	}
}

func TestThumpsStrikeAndDieAway(t *testing.T) {
	s := plain()
	s.Thumps = []Thump{{At: 1000, Amplitude: 0.5, Omega: 2 * math.Pi * 60 / 16000, Decay: 1.0 / 400}}
	y := samplesOf(s, make([]float64, 8000), true)
	peak := float32(0)
	for i, v := range y {
		if i < 1000 && v != 0 || i > 1000+12*400 && v != 0 {
			t.Fatalf("frame %d = %g outside the thump", i, v)
		}
		peak = max(peak, v)
	}
	if peak < 0.3 || peak > 0.5 {
		t.Errorf("peak %g, want 0.3 to 0.5", peak)
	}
}

// Gusts have unit power in the mean, as exp(a·z - a²) squared has, z Gaussian;
// their level swings, and there is nothing above the rumble.
func TestGustsHaveUnitPowerAndSwing(t *testing.T) {
	const rate = 8000
	var powers []float64
	var total float64
	for seed := range uint64(12) {
		x := take(newGusts(rate, seed, 0), 60*rate)
		total += meanSquare(x) / 12
		for at := 0; at+rate <= len(x); at += rate {
			powers = append(powers, 10*math.Log10(meanSquare(x[at:at+rate])))
		}
	}
	if db := 10 * math.Log10(total); math.Abs(db) > 1 {
		t.Errorf("mean power of 12 minutes = %.2f dB, want 0 within 1", db)
	}
	slices.Sort(powers)
	if swing := powers[len(powers)*9/10] - powers[len(powers)/10]; swing < 6 || swing > 20 {
		t.Errorf("level swings by %.1f dB between tenths, want 6 to 20", swing)
	}
}

// A clock that runs fast by 100 ppm has after 100 s taken 0.01 s too many
// frames: its frame lies earlier in the sound (the definition of parts per
// million); lateness moves it too.
func TestClockAndDelayMoveFrames(t *testing.T) {
	s := plain()
	s.ClockPPM = 100
	if got, want := s.Position(4800000, 48000), 4800000-480.0; math.Abs(got-want) > 0.05 {
		t.Errorf("frame 4800000 of a fast clock holds frame %.2f, want %.2f", got, want)
	}
	s = plain()
	s.Delay = 0.001
	if got := s.Position(1000, 48000); got != 952 || !s.Shifts() {
		t.Errorf("frame 1000 of a channel late by 1 ms holds frame %g, want 952", got)
	}
	if plain().Shifts() {
		t.Error("a plain channel shifts")
	}
}

func TestStripsDoNotAllocate(t *testing.T) {
	s := plain()
	s.Sensor, s.Wind, s.DC = 0.1, 0.1, 0.1
	s.Repeat, s.Repeated = 512, []int64{3}
	l := NewLine(s, 16000, 1, 0, true)
	x, y := make([]float64, HopFrames), make([]float32, HopFrames)
	if n := testing.AllocsPerRun(20, func() { l.Run(y, x) }); n != 0 {
		t.Errorf("%g allocations a hop, want 0", n)
	}
}
