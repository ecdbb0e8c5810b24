package calibration

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"alidade/pkg/acoustics"
	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/scenario"
)

// What is too noisy, too narrow or no clap at all is refused for that reason,
// and every refusal says what would carry it.
func TestRefusalsHaveTheirReasons(t *testing.T) {
	noisy := makeFaulty(t, solid8(0.08), 41, wideband(60, 0), -12, 0.12, nil)
	low := makeFaulty(t, solid8(0.08), 41, wideband(60, 0), -30, 0.12, nil)
	steady := makeFaulty(t, solid8(0.08), 42, wideband(60, 0), -60, 0.3, nil)
	one := audio.NewBlock(8, 24000)
	for i := range 40 {
		one.Channel(3)[12000+i] = 0.5
	}
	clapped := func() (audio.Source, error) { return audio.FromBlock(48000, one), nil }
	arrivals := func(open func() (audio.Source, error), at []rig.Point) error {
		_, _, err := Arrivals(open, at, nil, 343.2, 0.02, Options{Claps: true})
		return err
	}
	for _, c := range []struct {
		what, want string
		of         func() error
	}{
		{"noise and little of it", "gains would be good to", func() error { _, err := noisy.compare(t, 60, 0, nil, Options{}); return err }},
		{"low frequencies alone", "delays would be good to", func() error {
			_, err := low.compare(t, 60, 0, nil, Options{FromHz: 300, ToHz: 900})
			return err
		}},
		{"a steady sound for claps", "no clap: nothing rises", func() error { _, err := steady.compare(t, 60, 0, nil, Options{Claps: true}); return err }},
		{"a click on one channel", "not one of 1 claps reaches the microphones alike", func() error { return arrivals(clapped, steady.rig.Positions()) }},
		{"a rig of seven metres", "at most 6 m", func() error { return arrivals(clapped, rig.Line(8, 1)) }},
		{"silence", "no two channels", func() error {
			f := &faulty{rig: steady.rig, rate: 48000, speed: 343.2, block: audio.NewBlock(8, 24000)}
			_, err := f.compare(t, 60, 0, nil, Options{})
			return err
		}},
	} {
		err := c.of()
		refused(t, c.what, err, c.want)
		var r *RefusedError
		if errors.As(err, &r) && (r.Help == "" || r.Error() != r.Why) {
			t.Errorf("%s: no help in %+v", c.what, r)
		}
	}
}

// The limits of what is relied on, from both sides; what is no number is not
// relied on.
func TestLimitsOfWhatIsReliedOn(t *testing.T) {
	nan := math.NaN()
	for _, c := range []struct {
		low, high, gain, delay float64
		ok                     bool
	}{
		{1000, 1201, 0.49, 9.9e-6, true}, {1000, 1199, 0.49, 9.9e-6, false}, {1000, 1201, 0.51, 9.9e-6, false},
		{1000, 1201, 0.49, 10.1e-6, false}, {1000, 1201, nan, 9.9e-6, false}, {1000, 1201, 0.49, nan, false},
	} {
		r := &Relative{LowHz: c.low, HighHz: c.high, Channels: make([]Channel, 3)}
		for m := range r.Channels {
			r.Channels[m].LevelNoise, r.Channels[m].LateNoise = c.gain, c.delay
		}
		if err := r.reliable(&factor{heard: []int{0, 1, 2}}); (err == nil) != c.ok {
			t.Errorf("%+v: %v", c, err)
		}
	}
}

// One microphone that is noisier than the others by 10 dB: plain least squares
// on it as the reference comes out low by 20·log10(1 + 1/S) of its
// signal-to-noise ratio S (errors in variables: Fuller 1987, Measurement error
// models, 1.1), 0.83 dB at 10 dB, which the test sees; the others as
// instrument [Reiersøl 1945] leave none of it.
func TestANoisyReferenceGivesNoBias(t *testing.T) {
	const seeds, noisy = 2, 2
	var plain, found float64
	for seed := range seeds {
		f := makeFaulty(t, solid8(0.08), uint64(50+seed), wideband(60, 0), -50, 0.3, nil)
		rng := rand.New(rand.NewPCG(uint64(seed), 77))
		x := f.block.Channel(noisy)
		size := 0.0
		for _, v := range x {
			size += float64(v) * float64(v) / float64(len(x))
		}
		sigma := math.Sqrt(size / 10)
		clean := append([]float32(nil), x...)
		for i := range x {
			x[i] += float32(sigma * rng.NormFloat64())
		}
		// Least squares of the signal on the noisy channel; as it has it, gain 1.
		var both, own float64
		for i := range x {
			both += float64(clean[i]) * float64(x[i])
			own += float64(x[i]) * float64(x[i])
		}
		plain += 20 * math.Log10(both/own) / seeds
		r, err := f.compare(t, 60, 0, nil, Options{Against: noisy + 1, FromHz: 300, ToHz: 16000})
		if err != nil {
			t.Fatal(err)
		}
		for m, c := range r.Channels {
			if m != noisy {
				found += (c.LevelDB - (f.gainDB[m] - f.gainDB[noisy])) / (7 * seeds)
			}
		}
	}
	want := -20 * math.Log10(1.1)
	t.Logf("bias of least squares %.3f dB (theory %.3f dB), of the calibration %+.4f dB", plain, want, found)
	if math.Abs(plain-want) > 0.05 {
		t.Errorf("least squares is biased by %.3f dB, want %.3f dB: the take does not show it", plain, want)
	}
	if math.Abs(found) > 0.08 { // four standard errors of so little noise
		t.Errorf("levels against the noisy microphone are biased by %+.4f dB, want none within 0.08 dB", found)
	}
}

// Where the microphone that the others are to be compared with is dead, their
// mean stands in.
func TestAgainstADeadMicrophone(t *testing.T) {
	f := makeFaulty(t, solid8(0.08), 43, wideband(60, 0), -50, 0.3, func(s *scenario.Scenario) {
		s.Faults = append(s.Faults, scenario.Fault{Channels: []int{5}, Dead: true})
	})
	mean, err := f.compare(t, 60, 0, nil, Options{})
	if err != nil {
		t.Fatal(err)
	}
	dead, err := f.compare(t, 60, 0, nil, Options{Against: 5})
	if err != nil {
		t.Fatal(err)
	}
	if dead.Heard != 7 || dead.Channels[4].Heard || fmt.Sprintf("%+v", dead) != fmt.Sprintf("%+v", mean) {
		t.Errorf("against a dead microphone: %+v\nagainst the mean: %+v", dead, mean)
	}
}

// Air that is 1 °C warmer, a direction 0.5° off: the delays are wrong by what
// the geometry says, to 0.1 µs: beyond what the noise of the take explains, and
// within what is stated with the doubt. Speed of sound by ISO 9613-1,
// 343.2·√(T/293.15) m/s.
func TestWhatIsWrongIsCoveredBecauseItIsDoubted(t *testing.T) {
	f := makeFaulty(t, solid8(0.15), 44, wideband(35, 0), -50, 0.2, nil)
	at, ref := f.rig.Positions(), f.rig.ReferencePoint()
	warmer := f.speed * math.Sqrt(294.15/293.15)
	if s := acoustics.DryAir(21).Speed() / acoustics.DryAir(20).Speed() * f.speed; math.Abs(s-warmer) > 1e-3 {
		t.Fatalf("1 °C makes %.4f m/s, want %.4f m/s", s, warmer)
	}
	for _, c := range []struct {
		what  string
		d     rig.Direction
		speed float64
		doubt Doubt
	}{
		{"1 °C", rig.Degrees(35, 0), warmer, Doubt{Speed: 0.5 / 293.15}},
		{"0.5°", rig.Degrees(35.5, 0), f.speed, Doubt{Direction: 0.5 * deg}},
	} {
		e, err := Expect(at, ref, c.d, math.Inf(1), c.speed, c.doubt)
		if err != nil {
			t.Fatal(err)
		}
		r, err := Channels(f.open, e, nil, Options{})
		if err != nil {
			t.Fatal(err)
		}
		_, late, _, lateU := f.errors(r)
		covered, bare, mean := 0, 0, 0.0
		wrong := make([]float64, len(at))
		for m, p := range at {
			// The true arrival less the one that is assumed is taken for lateness.
			q := p.Sub(ref)
			wrong[m] = -q.Dot(rig.Degrees(35, 0).Unit())/f.speed + q.Dot(c.d.Unit())/c.speed
			mean += wrong[m] / float64(len(at))
		}
		for m := range at {
			if math.Abs(late[m]) <= lateU[m] {
				covered++
			}
			if math.Abs(late[m]) <= 2*r.Channels[m].LateNoise {
				bare++
			}
			if d := late[m] - (wrong[m] - mean); math.Abs(d) > 0.1e-6 {
				t.Errorf("%s wrong, channel %d: late by %.3f µs, want %.3f µs", c.what, m+1, 1e6*late[m], 1e6*(wrong[m]-mean))
			}
		}
		t.Logf("%s wrong: %d of 8 covered, %d by the part of the take itself", c.what, covered, bare)
		if covered != 8 || bare > 3 {
			t.Errorf("%s wrong: %d of 8 delays within what is stated, want all; %d within the part of the take itself, want 3 at most", c.what, covered, bare)
		}
	}
}

// Channels that are alike over frequency get filters that do nothing, and one
// that falls steeply is lifted by no more than 12 dB: what a filter cannot mend
// it must not make loud noise of.
func TestResponseFiltersKeepWithinBounds(t *testing.T) {
	f := makeFaulty(t, solid8(0.08), 45, wideband(40, 0), -60, 0.7, nil)
	transfer := func(taps []float64, hz float64) complex128 {
		half := float64(len(taps)-1) / 2
		return transferOf(taps, hz, float64(f.rate)) * cmplx.Rect(1, 2*math.Pi*hz/float64(f.rate)*half)
	}
	r, err := f.compare(t, 40, 0, nil, Options{Responses: true})
	if err != nil {
		t.Fatal(err)
	}
	worst := 0.0
	for _, c := range r.Channels {
		for hz := 400.0; hz < 15000; hz *= 1.05 {
			worst = math.Max(worst, cmplx.Abs(transfer(c.Response.Taps, hz)-1))
		}
		for _, b := range c.Response.Bands {
			if math.Abs(b.LevelDB) > 3*b.Std+0.01 || math.Abs(b.LeftDB) > 3*b.Std+0.01 {
				t.Errorf("octave of %.0f Hz: %.3f dB, %.3f dB left, ± %.3f dB, of channels that are alike", b.CentreHz, b.LevelDB, b.LeftDB, b.Std)
			}
		}
	}
	t.Logf("filters of channels that are alike differ from 1 by %.4f", worst)
	if worst > 0.03 {
		t.Errorf("filters of channels that are alike differ from 1 by %.4f, want at most 0.03", worst)
	}
	// (1/2 + 1/2·z^-1)^5 falls by cos^5 of half the phase: 25.5 dB at 15 kHz.
	coloured(f.block.Channel(2), []float64{1. / 32, 5. / 32, 10. / 32, 10. / 32, 5. / 32, 1. / 32})
	if r, err = f.compare(t, 40, 0, nil, Options{Responses: true}); err != nil {
		t.Fatal(err)
	}
	most, hz15 := 0.0, 0.0
	for hz := 400.0; hz < 20000; hz *= 1.01 {
		db := 20 * math.Log10(cmplx.Abs(transfer(r.Channels[2].Response.Taps, hz)))
		if most = math.Max(most, db); math.Abs(hz-15000) < 80 {
			hz15 = db + r.Channels[2].LevelDB
		}
	}
	c := r.Channels[2]
	t.Logf("25.5 dB down at 15 kHz: gain %.2f dB, filter %.1f dB there and at most %.1f dB", c.LevelDB, hz15-c.LevelDB, most)
	if most > 12.5 || most < 10 {
		t.Errorf("lifted by up to %.1f dB, want 10 dB or more and the limit of 12 dB within 0.5 dB", most)
	}
}

// What a calibrator may do within its class (IEC 60942:2017, tables 2, 4 and 7)
// changes nothing but what is stated: a frequency 1.6 % off, harmonics of 3 %,
// noise 25 dB below. 94 and 114 dB give one sensitivity, and the class
// is its uncertainty, spread evenly (JCGM 100:2008, 4.3.7).
func TestCalibratorWithinItsClass(t *testing.T) {
	const rate = 48000
	rms := math.Pow(10, (-26-3.0103)/20)
	for _, c := range []struct {
		what                      string
		db, hz, second, noise, by float64 // noise: its root mean square re the tone's; by: largest error, dB
		class                     string
		found                     bool
	}{
		{"as it should be", 94, 1000, 0, 1e-4, 0.002, "LS", true},
		{"20 dB up", 114, 1000, 0, 1e-4, 0.002, "1", true},
		{"1.6 % off", 94, 1016, 0, 1e-4, 0.002, "2", true},
		{"2.4 % off", 94, 1024, 0, 1e-4, 0, "2", false},
		{"3 % of distortion", 94, 1000, 0.03, 1e-4, 0.002, "1", true},
		{"noise 25 dB below", 94, 1000, 0, 0.0562, 0.02, "1", true},
	} {
		size := rms * math.Pow(10, (c.db-94)/20)
		if c.db == 114 {
			size /= 10 // the gain of the input turned down by 20 dB
		}
		b := calibrated([]float64{size, size}, c.hz, 1.5, c.noise*size, rate)
		x := b.Channel(0)
		for i := rate / 2; i < 2*rate; i++ {
			x[i] += float32(c.second * size * math.Sqrt2 * math.Sin(2*math.Pi*2*c.hz*float64(i)/rate))
		}
		tolerance, _ := CalibratorTolerance(c.class)
		tones, err := Tones(audio.FromBlock(rate, b), Calibrator{LevelDB: c.db, Hz: 1000, Tolerance: tolerance}, -1)
		if err != nil {
			t.Fatal(err)
		}
		tone := tones[0]
		if tone.Found != c.found {
			t.Errorf("%s: found %v (%s), want %v", c.what, tone.Found, tone.Why, c.found)
		}
		if !c.found {
			continue
		}
		want := -26.0
		if c.db == 114 {
			want -= 20
		}
		if math.Abs(tone.SensitivityDBFS-want) > c.by {
			t.Errorf("%s: 94 dB reads %.4f dBFS, want %.4f within %g dB", c.what, tone.SensitivityDBFS, want, c.by)
		}
		if u := tolerance / math.Sqrt(3); tone.Std < u || tone.Std > math.Hypot(u, 0.03) {
			t.Errorf("%s: standard uncertainty %.4f dB, want %.4f dB of the class and at most 0.03 dB beside it", c.what, tone.Std, u)
		}
	}
}

// Arrivals and levels of a spherical wave by its definition, and what is no place
// for a source.
func TestExpectedArrivals(t *testing.T) {
	at := []rig.Point{{X: -0.3}, {X: 0.3, Z: 0.1}, {Y: 0.2}}
	ref := rig.Point{X: 0.05, Y: 0.01}
	d := rig.Degrees(50, 20)
	e, err := Expect(at, ref, d, 0.9, 340, Doubt{})
	if err != nil {
		t.Fatal(err)
	}
	s := ref.Add(d.Unit().Scale(0.9))
	for m, p := range at {
		r := math.Sqrt((s.X-p.X)*(s.X-p.X) + (s.Y-p.Y)*(s.Y-p.Y) + (s.Z-p.Z)*(s.Z-p.Z))
		if math.Abs(e.Delay[m]-(r-0.9)/340) > 1e-15 || math.Abs(e.LevelDB[m]+20*math.Log10(r/0.9)) > 1e-12 {
			t.Errorf("microphone %d: %.9g s, %.9g dB, want %.9g s, %.9g dB", m+1, e.Delay[m], e.LevelDB[m], (r-0.9)/340, -20*math.Log10(r/0.9))
		}
	}
	far, err := Expect(at, ref, d, math.Inf(1), 340, Doubt{})
	if err != nil {
		t.Fatal(err)
	}
	for m, p := range at {
		if want := -p.Sub(ref).Dot(d.Unit()) / 340; math.Abs(far.Delay[m]-want) > 1e-15 || far.LevelDB[m] != 0 {
			t.Errorf("microphone %d, far: %.9g s, %g dB, want %.9g s, 0 dB", m+1, far.Delay[m], far.LevelDB[m], want)
		}
	}
	for _, c := range []struct{ distance, speed float64 }{{0.005, 340}, {math.NaN(), 340}, {-1, 340}, {1, 0}, {1, -3}, {1, math.NaN()}, {1, math.Inf(1)}} {
		if _, err := Expect(at, ref, d, c.distance, c.speed, Doubt{}); err == nil {
			t.Errorf("a source %g m away in air of %g m/s is taken", c.distance, c.speed)
		}
	}
	if _, err := Expect(at, rig.Point{X: -0.3, Y: -1}, rig.Degrees(90, 0), 1.004, 340, Doubt{}); err == nil {
		t.Error("a source 4 mm from a microphone is taken")
	}
}
