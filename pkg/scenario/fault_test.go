package scenario

import (
	"math"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// tone is a far tone abeam of a line, without noise.
func tone(faults ...Fault) *Scenario {
	return &Scenario{Name: "tone", RateHz: 48000, DurationS: 1, Seed: 1, Rig: lineRig(3, 0.1), Faults: faults,
		Sources: []Source{{Name: "tone", Kind: KindTone, Hz: 1000, At: at(90, 0), LevelDBFS: number(-20)}}}
}

// expect compares a channel with a function of the frame.
func expect(t *testing.T, name string, b audio.Block, ch int, want func(i float64) float64, tolerance float64) {
	t.Helper()
	for i := 200; i < b.Frames()-200; i++ {
		if got := float64(b.Channel(ch)[i]); !(math.Abs(got-want(float64(i))) <= tolerance) {
			t.Errorf("%s: channel %d, frame %d = %.7f, want %.7f", name, ch+1, i, got, want(float64(i)))
			return
		}
	}
}

func sineAt(i float64) float64 { return 0.1 * math.Sin(2*math.Pi*1000*i/48000) }

func TestGainDelayAndPolarityFaults(t *testing.T) {
	b := whole(t, rendered(t, tone(Fault{Channels: []int{2}, GainDB: -6, DelayUS: 33.3, Polarity: "inverted"})).Mix())
	expect(t, "untouched", b, 0, sineAt, 2e-7)
	expect(t, "faulty", b, 1, func(i float64) float64 {
		return -math.Pow(10, -0.3) * sineAt(i-33.3e-6*48000)
	}, 2e-7)
	early := whole(t, rendered(t, tone(Fault{DelayUS: -150})).Mix())
	for ch := range 3 {
		expect(t, "all early", early, ch, func(i float64) float64 { return sineAt(i + 150e-6*48000) }, 2e-7)
	}
}

// A clock that runs fast by p parts per million hears a tone lower by p parts
// per million.
func TestClockFaultShiftsTheTone(t *testing.T) {
	sc := tone(Fault{Channels: []int{1}, ClockPPM: 500}, Fault{Channels: []int{3}, ClockPPM: -500})
	sc.DurationS = 3
	b := whole(t, rendered(t, sc).Mix())
	expect(t, "fast", b, 0, func(i float64) float64 { return sineAt(i / (1 + 500e-6)) }, 3e-7)
	expect(t, "right", b, 1, sineAt, 2e-7)
	expect(t, "slow", b, 2, func(i float64) float64 { return sineAt(i / (1 - 500e-6)) }, 3e-7)
}

// The hardware has the opposite of the rig's corrections: a rig file without
// faults mends the take.
func TestRigFileIsRightWithoutFaults(t *testing.T) {
	sc := tone()
	m := &sc.Rig.Mics[1]
	m.GainDB, m.Delay, m.Inverted, m.ClockPPM = 4.5, -2e-5, true, 20
	b := whole(t, rendered(t, sc).Mix())
	expect(t, "as the rig says", b, 1, func(i float64) float64 {
		return sineAt(i/(1+20e-6)-2e-5*48000) / m.Factor()
	}, 2e-7)
}

func TestSwappedChannelsTradeMicrophones(t *testing.T) {
	sc := tone(Fault{Channels: []int{1}, SwapWith: 3}, Fault{Channels: []int{1}, GainDB: 6})
	sc.Sources[0].At = at(0, 0)
	b := whole(t, rendered(t, sc).Mix())
	tau := 0.1 / 343.2 * 48000 // the third microphone is nearest
	expect(t, "swapped and loud", b, 0, func(i float64) float64 { return math.Pow(10, 0.3) * sineAt(i+tau) }, 2e-7)
	expect(t, "swapped", b, 2, func(i float64) float64 { return sineAt(i - tau) }, 2e-7)
}

func TestMicrophonesStandWhereTheyReallyAre(t *testing.T) {
	sc := tone(Fault{Channels: []int{3}, MovedMM: []float64{5, -7, 2}})
	sc.PositionScale = 1.02
	got := rendered(t, sc).Microphones()
	for m, want := range []rig.Point{{X: -0.102}, {}, {X: 0.107, Y: -0.007, Z: 0.002}} {
		if got[m].Distance(want) > 1e-12 {
			t.Errorf("microphone %d stands at %v, want %v", m+1, got[m], want)
		}
	}
	sc = tone()
	sc.Rig = lineRig(16, 0.1)
	sc.MisplacedMM = 3
	var square float64
	for m, p := range rendered(t, sc).Microphones() {
		d := p.Distance(sc.Rig.Mics[m].At) * 1000
		square += d * d
	}
	// 48 squares of standard deviation 3 mm: 432 mm², spread by a fifth.
	if square < 432*0.4 || square > 432*1.8 {
		t.Errorf("squared errors add up to %.0f mm², want about 432", square)
	}
}

// The real air and that of the rig file differ: delays follow the real one.
func TestRealAirSetsTheDelays(t *testing.T) {
	sc := tone()
	sc.Rig.Air.TemperatureC = number(30)
	sc.Air = &Air{TemperatureC: number(0)}
	sc.Sources[0].At = at(0, 0)
	r := rendered(t, sc)
	if math.Abs(r.Speed()-331.29) > 0.01 { // F1: ISO 9613-1, 0 °C
		t.Errorf("speed of sound = %.3f m/s, want 331.29", r.Speed())
	}
	b := whole(t, r.Mix())
	expect(t, "cold", b, 2, func(i float64) float64 { return sineAt(i + 0.1/r.Speed()*48000) }, 2e-7)
	sc.Air = nil
	if got := rendered(t, sc).Speed(); math.Abs(got-349.00) > 0.01 { // F1, 30 °C
		t.Errorf("without air of its own: %.3f m/s, want the rig's 349.00", got)
	}
}

func TestClippedFractionIsThatOfTheMix(t *testing.T) {
	sc := tone(Fault{Channels: []int{2}, ClippedFraction: 0.001})
	sc.Sources[0].Kind, sc.Sources[0].Hz = KindTalker, 0
	sc.DurationS = 4
	sc.SensorDBFS = number(-60)
	b := whole(t, rendered(t, sc).Mix())
	peak := float32(0)
	for _, v := range b.Channel(1) {
		peak = max(peak, v, -v)
	}
	n := 0
	for _, v := range b.Channel(1) {
		if v == peak || v == -peak {
			n++
		}
	}
	if want := 192; n < want || n > want+2 {
		t.Errorf("%d frames at the clipping level, want %d", n, want)
	}
}

func TestFaultsOfSeveralChannelsStrikeTogether(t *testing.T) {
	sc := tone(Fault{DropOuts: 3, DropOutMS: 5})
	sc.SensorDBFS = number(-40)
	b := whole(t, rendered(t, sc).Mix())
	silent := 0
	for i := range b.Frames() {
		n := 0
		for ch := range 3 {
			if b.Channel(ch)[i] == 0 {
				n++
			}
		}
		if n == 3 {
			silent++
		} else if n > 1 {
			t.Fatalf("frame %d: %d of 3 channels are silent", i, n)
		}
	}
	if silent < 240 || silent > 720 {
		t.Errorf("%d silent frames, want up to 720", silent)
	}
}

func TestFeedlessChannelsHoldOnlyTheirNoise(t *testing.T) {
	sc := tone()
	sc.Rig.Mics[2].Channel = 5
	sc.SensorDBFS = number(-60)
	b := whole(t, rendered(t, sc).Mix())
	if b.Channels() != 5 {
		t.Fatalf("%d channels, want 5", b.Channels())
	}
	for ch, want := range []float64{-20, -20, -60, -60, -20} {
		if got := level(b, ch, 0, b.Frames()); math.Abs(got-want) > 0.2 {
			t.Errorf("channel %d at %.2f dBFS, want %g", ch+1, got, want)
		}
	}
}
