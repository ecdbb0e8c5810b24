package scenario

import (
	"encoding/json"
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// stationary is noise whose covariance is known, through channels that are
// each wrong in their own way, and a standing target in a room.
func stationary() *Scenario {
	r := lineRig(4, 0.07)
	r.Mics[1].GainDB = 2   // the rig file is right about this
	r.Mics[2].Delay = 3e-5 // and this
	r.Mics[3].Inverted = true
	return &Scenario{
		Name: "stationary", RateHz: 16000, DurationS: 30, Seed: 8, Rig: r, SensorDBFS: number(-45),
		Room: &Room{SizeM: []float64{5, 4, 3}, RigAtM: []float64{2, 1.6, 1.1}, Absorption: []float64{0.5}, DryAir: true, MaxOrder: new(2)},
		Sources: []Source{
			{Name: "voice", Kind: KindTalker, At: at(40, 1.1), LevelDBFS: number(-30)},
			{Name: "fan", Role: RoleInterferer, Kind: KindNoise, Spectrum: SpectrumPink, At: at(130, 1.4), LevelDBFS: number(-38)},
		},
		Diffuse: []Diffuse{{LevelDBFS: -40, Spectrum: SpectrumSpeech}},
		Faults:  []Fault{{Channels: []int{1}, SwapWith: 3}, {Channels: []int{4}, GainDB: -1.5}},
	}
}

// The stated covariance against the noise itself: 60 s of fresh noise, averaged
// into matrices at some bins. A term R_mn of n averages spreads by
// sqrt(R_mm·R_nn/n).
func TestNoiseHasTheStatedCovariance(t *testing.T) {
	const size = 512
	r := rendered(t, stationary())
	src, err := r.FreshNoise(60, 4)
	if err != nil {
		t.Fatal(err)
	}
	channels := r.Format().Channels
	bins := []int{2, 5, 11, 31, 64, 100, 180}
	sum := make([][]complex128, len(bins))
	for i := range sum {
		sum[i] = make([]complex128, channels*channels)
	}
	window := spectral.Periodic(size, spectral.Hann)
	var power float64
	for _, w := range window {
		power += w * w
	}
	averages := 0
	stft, err := spectral.NewSTFT(channels, size, size, window, func(_ int64, s *spectral.Spectra) error {
		averages++
		for i, k := range bins {
			for a := range channels {
				for b := range channels {
					x := complex(float64(s.Re[a][k]), float64(s.Im[a][k]))
					y := complex(float64(s.Re[b][k]), float64(s.Im[b][k]))
					sum[i][a*channels+b] += x * cmplx.Conj(y) / complex(power, 0)
				}
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := audio.Copy(src, 4096, stft); err != nil {
		t.Fatal(err)
	}
	for i, k := range bins {
		// What a Hann window sees of bin k is spread over its main lobe.
		want := make([]complex128, channels*channels)
		var total float64
		for d := -1.5; d <= 1.5; d += 0.125 {
			w := lobe(d)
			total += w
			one, err := r.NoiseCovariance(nil, (float64(k)+d)*16000/size)
			if err != nil {
				t.Fatal(err)
			}
			for j, v := range one {
				want[j] += complex(w, 0) * v
			}
		}
		for a := range channels {
			for b := range channels {
				j := a*channels + b
				got, w := sum[i][j]/complex(float64(averages), 0), want[j]/complex(total, 0)
				scale := math.Sqrt(real(want[a*channels+a])*real(want[b*channels+b])) / total
				if e := cmplx.Abs(got-w) / scale; e > 4.5/math.Sqrt(float64(averages)) {
					t.Errorf("bin %d, channels %d and %d: %.3g, want %.3g: off by %.3f of the levels", k, a+1, b+1, got, w, e)
				}
			}
		}
	}
}

// lobe is the power of a Hann window's main lobe d bins from its middle.
func lobe(d float64) float64 {
	if d == 0 {
		return 1
	}
	if math.Abs(math.Abs(d)-1) < 1e-9 {
		return 0.25
	}
	v := math.Sin(math.Pi*d) / (math.Pi * d * (1 - d*d))
	return v * v
}

// Parseval: the mean of the density over all frequencies is the power of the
// noise.
func TestCovarianceAddsUpToThePowerOfTheNoise(t *testing.T) {
	sc := stationary()
	sc.Room = nil
	sc.Sources[1].At = at(130, 0)
	sc.Faults = nil
	for m := range sc.Rig.Mics {
		sc.Rig.Mics[m].GainDB = 0
	}
	r := rendered(t, sc)
	var total float64
	const points = 800
	for i := range points {
		cov, err := r.NoiseCovariance(nil, (float64(i)+0.5)*8000/points)
		if err != nil {
			t.Fatal(err)
		}
		total += real(cov[0]) / points
	}
	want := math.Pow(10, -4.5) + math.Pow(10, -3.8) + math.Pow(10, -4)
	if got := 10*math.Log10(2*total) - 10*math.Log10(want); math.Abs(got) > 0.05 {
		t.Errorf("the density adds up to %.3f dB more than the levels", got)
	}
}

func TestCovarianceSaysWhyThereIsNone(t *testing.T) {
	for want, change := range map[string]func(s *Scenario){
		"not stationary": func(s *Scenario) { s.Sources[1].Kind, s.Sources[1].Spectrum = KindTalker, "" },
		"moves": func(s *Scenario) {
			s.Sources[1].At = nil
			s.Sources[1].Path = []Waypoint{{0, *at(100, 1)}, {1, *at(101, 1)}}
		},
		"all the time": func(s *Scenario) { s.Sources[1].OnS = [][]float64{{0, 1}} },
		"drifts":       func(s *Scenario) { s.Faults[1].ClockPPM = 1 },
		"dead":         func(s *Scenario) { s.Faults[1].Dead = true },
		"clips":        func(s *Scenario) { s.Faults[1].ClipDBFS = number(-3) },
		"of its own":   func(s *Scenario) { s.Faults[1].HumDBFS = number(-50) },
		"drops out":    func(s *Scenario) { s.Faults[1].DropOuts = 1 },
	} {
		sc := stationary()
		sc.DurationS = 1
		sc.Room.MaxOrder = new(0)
		change(sc)
		r := rendered(t, sc)
		if _, err := r.NoiseCovariance(nil, 500); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("covariance: %v, want a word on %q", err, want)
		}
		if r.Truth().CovarianceWhy == "" {
			t.Errorf("%s: the truth does not say why", want)
		}
	}
}

// The transfer of a tone's source is what the channels show of the tone.
func TestTransferIsWhatChannelsShow(t *testing.T) {
	const hz = 1234.0
	sc := stationary()
	sc.DurationS = 1
	sc.Sources[0].Kind, sc.Sources[0].Hz = KindTone, hz
	r := rendered(t, sc)
	want, err := r.Transfer(nil, "voice", hz)
	if err != nil {
		t.Fatal(err)
	}
	target := whole(t, r.Target())
	amplitude := math.Pow(10, -30.0/20)
	for ch := range target.Channels() {
		var got complex128
		const from, n = 4000, 8000 // 617 periods
		for i := from; i < from+n; i++ {
			got += complex(float64(target.Channel(ch)[i]), 0) * cmplx.Rect(2.0/n, -2*math.Pi*hz*float64(i)/16000)
		}
		got *= complex(0, 1/amplitude) // the tone is a sine: -j in phasors
		if cmplx.Abs(got-want[ch]) > 1e-4*cmplx.Abs(want[ch]) {
			t.Errorf("channel %d: %.5f, want %.5f", ch+1, got, want[ch])
		}
	}
	if _, err := r.Transfer(nil, "nobody", hz); err == nil {
		t.Error("transfer of a source that is not there: no error")
	}
}

func TestTruthFollowsThePath(t *testing.T) {
	sc := roomy()
	sc.Room = nil
	sc.DurationS = 1
	sc.Sources[0].Path = []Waypoint{{AtS: 0.2, Place: *at(170, 0)}, {AtS: 0.8, Place: *at(-160, 0)}}
	r := rendered(t, sc)
	track := r.Truth().Sources[0].Track
	if len(track) != 21 || track[0].AzimuthDeg < 169.99 || track[0].DistanceM != nil {
		t.Fatalf("track of %d points from %+v", len(track), track[0])
	}
	// The short way round: 30° in 0.6 s, over the back.
	for _, p := range track {
		want := rig.WrapDeg(170 + 30*math.Min(1, math.Max(0, (p.TimeS-0.2)/0.6)))
		if math.Abs(rig.WrapDeg(p.AzimuthDeg-want)) > 1e-6 {
			t.Errorf("azimuth at %g s = %.4f°, want %.4f°", p.TimeS, p.AzimuthDeg, want)
		}
		d, err := r.Heard("walker", p.TimeS)
		if err != nil || math.Abs(d.AzimuthDeg()-p.AzimuthDeg) > 1e-9 {
			t.Errorf("heard at %g s from %.4f°, %v", p.TimeS, d.AzimuthDeg(), err)
		}
	}
	if _, err := r.Heard("nobody", 0); err == nil {
		t.Error("a source that is not there is heard")
	}
}

// Sound of a point that recedes at v is heard where it was given off: after
// t·c/(c+v) (Doppler 1842).
func TestTruthIsWhereSoundWasGivenOff(t *testing.T) {
	sc := roomy()
	sc.Room = nil
	sc.DurationS = 2
	sc.Sources[0].Path = []Waypoint{{AtS: 0, Place: Place{PointM: []float64{0, 10, 0}}}, {AtS: 4, Place: Place{PointM: []float64{0, 130, 0}}}}
	r := rendered(t, sc)
	for _, p := range r.Truth().Sources[0].Track {
		want := 10 + 30*p.TimeS*r.Speed()/(r.Speed()+30)
		if p.DistanceM == nil || math.Abs(*p.DistanceM-want) > 1e-6 {
			t.Fatalf("distance at %g s = %v, want %.5f m", p.TimeS, p.DistanceM, want)
		}
	}
}

// I13: direct and reverberant energy are equal at the reverberation distance
// sqrt(A/16π) (Kuttruff, Room Acoustics); a plain box with few absorbing walls
// comes near it, 3 dB either way.
func TestDirectToReverberantRatioIsNearTheory(t *testing.T) {
	sc := roomy()
	sc.Room = &Room{SizeM: []float64{6, 5, 4}, RigAtM: []float64{2.6, 2.3, 1.7}, Absorption: []float64{0.3}, DryAir: true}
	area := 0.3 * 2 * (30 + 24 + 20) / (1 - 0.3) // the room constant: what is left after the first reflection
	critical := math.Sqrt(area / (16 * math.Pi))
	sc.Sources = []Source{{Name: "s", Kind: KindNoise, LevelDBFS: number(-30), At: at(50, critical)}}
	got := rendered(t, sc).Truth().Sources[0].DirectToReverberantDB
	if got == nil || math.Abs(*got) > 3 {
		t.Errorf("direct to reverberant energy at %.2f m = %v dB, want 0 within 3", critical, got)
	}
}

func TestTruthIsPlainData(t *testing.T) {
	r := both(t)["busy"]
	m := r.NewMeter()
	if err := r.Each(func(mix, target, noise audio.Block) error { m.Add(mix, target, noise); return nil }); err != nil {
		t.Fatal(err)
	}
	truth := m.Truth()
	text, err := json.Marshal(truth)
	if err != nil {
		t.Fatal(err)
	}
	var back Truth
	if err := json.Unmarshal(text, &back); err != nil {
		t.Fatal(err)
	}
	again, _ := json.Marshal(&back)
	if string(again) != string(text) {
		t.Error("the truth changes on its way through JSON")
	}
	c := truth.ChannelTruth
	if c[0].Microphone != "D" || c[3].Microphone != "A" {
		t.Errorf("channels 1 and 4 are fed by %q and %q, want the swapped D and A", c[0].Microphone, c[3].Microphone)
	}
	if !c[1].Inverted || math.Abs(c[1].GainDB+3) > 1e-9 || math.Abs(c[1].DelayUS-40) > 1e-9 || c[2].ClockPPM != 200 {
		t.Errorf("channel truth %+v and %+v does not state the faults", c[1], c[2])
	}
	if n := c[0].ClippedFrames; n == nil || *n < 112 || *n > 114 { // 1 % of 11200, and those at the level itself
		t.Errorf("clipped frames of channel 1 = %v, want 113", n)
	}
	if n := c[1].ClippedFrames; n == nil || *n != 0 {
		t.Errorf("clipped frames of channel 2 = %v, want 0", n)
	}
	if before := r.Truth().ChannelTruth[0]; before.SNRDB != nil || before.ClippedFrames != nil {
		t.Error("levels are stated before they were measured")
	}
}
