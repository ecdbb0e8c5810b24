package render

import (
	"math"
	"testing"

	"alidade/pkg/rig"
)

// play returns what an emitter sounds like over some hops.
func play(e Emitter, mics, hops int) [][]float64 {
	all := make([][]float64, mics)
	for range hops {
		rows := make([][]float64, mics)
		for m := range rows {
			rows[m] = make([]float64, HopFrames)
		}
		e.Add(rows)
		for m := range rows {
			all[m] = append(all[m], rows[m]...)
		}
	}
	return all
}

func sine(omega float64, first int64) Mono {
	return &Indexed{Frame: first, Value: func(i int64) float64 { return math.Sin(omega * float64(i)) }}
}

// differenceDB returns the RMS difference of two signals over the RMS of the
// second, dB.
func differenceDB(got, want []float64) float64 {
	var d, s float64
	for i := range got {
		d += (got[i] - want[i]) * (got[i] - want[i])
		s += want[i] * want[i]
	}
	return 10 * math.Log10(d/s)
}

var places = []rig.Point{{X: -0.3, Y: 0.02}, {X: 0.11, Z: 0.2}, {X: 0.4, Y: -0.1, Z: -0.05}}

// A source that stands still: every microphone hears the sine late by the
// travel time and weak by the distance.
func TestStandingSourceIsDelayedAndSpread(t *testing.T) {
	const rate, speed, hz, first = 48000, 343.0, 4321.0, -500
	at := rig.Point{X: 0.7, Y: 1.9, Z: -0.4}
	tr := &Track{Speed: speed, Times: []float64{0}, Knots: [][3]float64{{at.X, at.Y, at.Z}}, Origin: at.Norm()}
	far := &Track{Far: true, Polar: true, Speed: speed, Times: []float64{0}, Knots: [][3]float64{{1.1, 0.3, 0}}}
	u := rig.Direction{Azimuth: 1.1, Elevation: 0.3}.Unit()
	omega := 2 * math.Pi * hz / rate
	for name, track := range map[string]*Track{"near": tr, "far": far} {
		bank := DirectBank(track, places, rate)
		got := play(NewMixer(bank, []Mono{sine(omega, first-bank.Lead())}), len(places), 2)
		for m, p := range places {
			delay, gain := (at.Distance(p)-at.Norm())/speed, at.Norm()/at.Distance(p)
			if name == "far" {
				delay, gain = -p.Dot(u)/speed, 1
			}
			want := make([]float64, len(got[m]))
			for i := range want {
				want[i] = gain * math.Sin(omega*(float64(first+i)-delay*rate))
			}
			if d := differenceDB(got[m], want); !(d < -115) {
				t.Errorf("%s source, microphone %d: off by %.1f dB", name, m, d)
			}
		}
	}
}

// A point that runs straight at constant speed: the time of emission follows
// from a quadratic equation, c²(t+r0/c-t0)² = |s(t0) - p|² (elementary
// kinematics; Doppler 1842), solved here in closed form. Residual against the
// ideal time-warped tone in every 10 ms window.
func TestMovingToneIsTheIdealTimeWarp(t *testing.T) {
	const rate, speed, hz, first = 48000, 343.0, 3000.0, -4096
	from, velocity := rig.Point{X: -6, Y: 2.5, Z: 0.3}, rig.Point{X: 14, Y: -0.7, Z: 0.2}
	const seconds = 1.2
	to := from.Add(velocity.Scale(seconds))
	tr := &Track{Speed: speed, Times: []float64{0, seconds}, Origin: from.Norm(),
		Knots: [][3]float64{{from.X, from.Y, from.Z}, {to.X, to.Y, to.Z}}}
	omega := 2 * math.Pi * hz / rate
	in := sine(omega, first-MoverLead(tr, places, first, rate))
	got := play(NewMover(tr, places, rate, first, in, DirectTable()), len(places), 28)
	worst := math.Inf(-1)
	for m, p := range places {
		lo, hi := int(0.05*rate)-first, int(1.1*rate)-first // while it moves
		want := make([]float64, hi)
		for i := lo; i < hi; i++ {
			tt := float64(first+i)/rate + from.Norm()/speed // since sound was given off at 0
			q := from.Sub(p)
			a := speed*speed - velocity.Dot(velocity)
			b := speed*speed*tt + q.Dot(velocity)
			c := speed*speed*tt*tt - q.Dot(q)
			t0 := (b - math.Sqrt(b*b-a*c)) / a
			r := from.Add(velocity.Scale(t0)).Distance(p)
			want[i] = from.Norm() / r * math.Sin(omega*t0*rate)
		}
		for i := lo; i+480 <= hi; i += 480 {
			worst = math.Max(worst, differenceDB(got[m][i:i+480], want[i:i+480]))
		}
	}
	if !(worst < -105) {
		t.Errorf("largest residual of a 10 ms window = %.1f dB, want below -105", worst)
	}
	t.Logf("residual %.1f dB", worst)
}

// For a far source that swings round, a beam whose delays are those of the
// wavefront finds the signal again: x(t + τ(t)) = s(t) for every microphone.
func TestSwingingFarSourceAlignsByItsWavefronts(t *testing.T) {
	const rate, speed, first = 48000, 343.0, -4096
	tr := &Track{Far: true, Polar: true, Speed: speed, Times: []float64{0, 1}, Knots: [][3]float64{{0.2, 0, 0}, {1.8, 0.4, 0}}}
	omega := 2 * math.Pi * 5000.0 / rate
	in := sine(omega, first-MoverLead(tr, places, first, rate))
	table := DirectTable()
	got := play(NewMover(tr, places, rate, first, in, table), len(places), 26)
	for m, p := range places {
		var have, want []float64
		for i := 2000; i < 46000; i++ {
			tau, _ := tr.Reach(float64(i)/rate, p)
			at := float64(i) + tau*rate - first
			whole := math.Floor(at)
			have = append(have, table.At(got[m][int(whole)-KernelTaps/2+1:], at-whole))
			want = append(want, math.Sin(omega*float64(i)))
		}
		if d := differenceDB(have, want); !(d < -105) {
			t.Errorf("microphone %d: off by %.1f dB", m, d)
		}
	}
}

func TestMoverThatStandsIsTheStandingSource(t *testing.T) {
	const rate, first = 16000, -4096
	at := rig.Point{X: 2, Y: 1}
	still := &Track{Speed: 340, Times: []float64{0}, Knots: [][3]float64{{at.X, at.Y, 0}}, Origin: at.Norm()}
	bank := DirectBank(still, places, rate)
	want := play(NewMixer(bank, []Mono{sine(0.7, first-bank.Lead())}), len(places), 3)
	got := play(NewMover(still, places, rate, first, sine(0.7, first-MoverLead(still, places, first, rate)), DirectTable()), len(places), 3)
	for m := range places {
		if d := differenceDB(got[m], want[m]); !(d < -110) {
			t.Errorf("microphone %d: off by %.1f dB", m, d)
		}
	}
}

// Reflections of a source that moves: while it stands, before and after its
// path, they are those of its first and last place.
func TestWalkerStartsAndEndsAsTheStandingSource(t *testing.T) {
	const rate, first = 8000, -4096
	c := chamberOf(t, []float64{0.7}, []float64{0}, -1, 0.1, rate)
	from, to := rig.Point{X: 0.8, Y: 0.7}, rig.Point{X: 1, Y: 0.75}
	tr := &Track{Speed: 343, Times: []float64{0.5, 0.9}, Origin: from.Norm(), Knots: [][3]float64{{from.X, from.Y, 0}, {to.X, to.Y, 0}}}
	omega := 0.31
	got := play(NewWalker(c, tr, places, first, sine(omega, first-WalkLead(c, tr))), len(places), 10)
	for _, v := range []struct {
		name     string
		at       rig.Point
		from, to int
	}{{"before", from, 0, 3500}, {"after", to, int(1.1 * rate), 2 * rate}} {
		bank := c.Responses(v.at, places, tr.Origin)
		want := play(NewMixer(bank, []Mono{sine(omega, first-bank.Lead())}), len(places), 10)
		for m := range places {
			if d := differenceDB(got[m][v.from-first:v.to-first], want[m][v.from-first:v.to-first]); !(d < -200) {
				t.Errorf("%s the walk, microphone %d: off by %.1f dB", v.name, m, d)
			}
		}
	}
	// On the way the weights share out the sound: nothing is lost or doubled.
	w := NewWalker(c, tr, places, first, sine(omega, first-WalkLead(c, tr)))
	for _, at := range []float64{0, 0.5, 0.61, 0.7, 0.89, 0.9, 3} {
		var total float64
		for k := range w.times {
			total += w.weight(k, at)
		}
		if math.Abs(total-1) > 1e-12 {
			t.Errorf("weights at %g s add up to %g", at, total)
		}
	}
}
