package bearing

import (
	"math"
	"testing"

	"alidade/pkg/rig"
)

// walk adds a source that goes round from az0 to az1 degrees in the take, its
// delays gliding sample by sample (linear interpolation of an eightfold
// upsampled signal: below -60 dB in the range used).
func (m *mixture) walk(s []float64, az func(t float64) float64, gain float64) *mixture {
	const over = 8
	fine := upsample(s, over)
	for c, p := range m.mics {
		for i := range s {
			u := rig.Degrees(az(float64(i)/m.rate), 0).Unit()
			x := (float64(i) + p.Dot(u)/testSpeed*m.rate) * over
			k := int(math.Floor(x))
			if k < 0 || k+1 >= len(fine) {
				continue
			}
			f := x - float64(k)
			m.x[c][i] += gain * ((1-f)*fine[k] + f*fine[k+1])
		}
	}
	return m
}

// Issue "Where the sound comes from": a source walking through 90° in 10 s is
// tracked within 3° RMS.
func TestWalkingSourceIsTracked(t *testing.T) {
	const rate, seconds = 16000, 10
	for _, g := range []struct {
		name string
		mics []rig.Point
		from float64
	}{{"line", lineMics(8, 0.04), 45}, {"ring", ringMics(8, 0.06), 135}, {"solid", solidMics(0.08), -45}} {
		path := func(t float64) float64 { return g.from + 9*t }
		m := newMixture(g.mics, rate, seconds*rate).walk(bursts(seconds*rate, rate, 31), path, 1).noise(0.3, 8)
		r := find(t, g.mics, rate, m.block(), Options{})
		if len(r.Tracks) == 0 {
			t.Errorf("%s: no track; %+v", g.name, r.Findings)
			continue
		}
		track := r.Tracks[0]
		sum, n := 0.0, 0
		for x := 0.5; x < seconds-0.5; x += 0.05 {
			e := rig.WrapDeg(track.At(x).AzimuthDeg() - path(x))
			sum += e * e
			n++
		}
		rms := math.Sqrt(sum / float64(n))
		t.Logf("%s: RMS error of the track %.2f°, %d knots, %d heard, %d tracks", g.name, rms, len(track.Knots), track.Heard, len(r.Tracks))
		if rms > 3 {
			t.Errorf("%s: track is off by %.2f° RMS, want at most 3°", g.name, rms)
		}
		if len(r.Sources) == 0 || !r.Sources[0].Moves {
			t.Errorf("%s: the first source is not said to move: %+v", g.name, r.Sources)
		} else if r.Sources[0].Track != 0 {
			t.Errorf("%s: the source that moves is said to be track %d, want 0", g.name, r.Sources[0].Track)
		}
	}
}

// A silence of 2.5 s in the middle of a walk, and clicks from elsewhere, do not
// end or bend the track.
func TestTrackSurvivesSilenceAndOutliers(t *testing.T) {
	const rate, seconds = 16000, 9
	mics := ringMics(8, 0.06)
	voice := bursts(seconds*rate, rate, 77)
	clear(voice[int(3.5*rate) : 6*rate])
	path := func(t float64) float64 { return 20 + 6*t }
	m := newMixture(mics, rate, seconds*rate).walk(voice, path, 1).noise(0.1, 4)
	click := make([]float64, seconds*rate)
	for _, at := range []float64{2.1, 7.3} {
		copy(click[int(at*rate):], white(rate/20, 99))
	}
	m.plane(click, rig.Degrees(-120, 0), 2)
	r := find(t, mics, rate, m.block(), Options{})
	if len(r.Tracks) == 0 {
		t.Fatalf("no track; %+v", r.Findings)
	}
	track := r.Tracks[0]
	worst := 0.0
	for x := 0.5; x < seconds-0.7; x += 0.1 {
		worst = math.Max(worst, math.Abs(rig.WrapDeg(track.At(x).AzimuthDeg()-path(x))))
	}
	first, last := track.Knots[0].Time, track.Knots[len(track.Knots)-1].Time
	if first > 1 || last < seconds-1 {
		t.Errorf("track runs from %.1f to %.1f s of %d s", first, last, seconds)
	}
	if worst > 6 {
		t.Errorf("track is off by %.1f°, want at most 6° through the silence", worst)
	}
	silent := 0
	for _, k := range track.Knots {
		if !k.Heard {
			silent++
		}
		if k.StandardError <= 0 || math.IsNaN(k.StandardError) {
			t.Fatalf("knot %+v without a standard error", k)
		}
	}
	if silent < 5 {
		t.Errorf("%d knots are marked as carried over, want those of the silence", silent)
	}
}

// Two sources that begin and end at different times are two tracks.
func TestBirthsAndDeathsOfSources(t *testing.T) {
	const rate, seconds = 16000, 12
	mics := ringMics(8, 0.06)
	a, b := bursts(seconds*rate, rate, 1), bursts(seconds*rate, rate, 2)
	clear(a[5*rate:])
	clear(b[:6*rate])
	m := newMixture(mics, rate, seconds*rate).plane(a, rig.Degrees(-30, 0), 1).plane(b, rig.Degrees(70, 0), 1).noise(0.1, 3)
	r := find(t, mics, rate, m.block(), Options{})
	for _, c := range []struct{ az, from, to float64 }{{-30, 0, 5.2}, {70, 5.8, 12}} {
		ok := false
		for _, k := range r.Tracks {
			first, last := k.Knots[0], k.Knots[len(k.Knots)-1]
			if math.Abs(rig.WrapDeg(first.Direction.AzimuthDeg()-c.az)) < 3 && first.Time > c.from-0.1 && first.Time < c.from+1.5 && last.Time < c.to+0.1 && last.Time > c.to-1.5 {
				ok = true
			}
		}
		if !ok {
			t.Errorf("no track at %.0f° from %.1f to %.1f s: %d tracks", c.az, c.from, c.to, len(r.Tracks))
		}
	}
	if len(r.Sources) != 2 {
		t.Fatalf("%d sources, want 2: %+v", len(r.Sources), r.Sources)
	}
	for i, s := range r.Sources {
		if s.Track < 0 || s.Track >= len(r.Tracks) {
			t.Fatalf("source %d is track %d of %d", i+1, s.Track, len(r.Tracks))
		}
		if e := rig.AngleBetween(r.Tracks[s.Track].Knots[0].Direction, s.Direction) / deg; e > 3 {
			t.Errorf("source %d lies %.1f° from its track %d", i+1, e, s.Track)
		}
	}
}

// The smoother against the batch solution: the path of least squares for the
// same motion and sightings (plain normal equations).
func TestSmootherIsTheLeastSquaresPath(t *testing.T) {
	const n, dt = 12, 0.2
	y := white(n, 6)
	r := 0.01
	f := &Finder{space: newSpace(lineMics(4, 0.1), rig.Point{}, testSpeed, nil), set: settings{sections: 1}, look: &looker{set: &settings{}}}
	f.look.space = f.space
	tr := &trail{latest: n - 1}
	for i := range n {
		f.windows = append(f.windows, Window{Start: float64(i) * dt, End: float64(i+1) * dt})
		s := sighting{window: i, at: place{y: [3]float64{0.1 * y[i]}}}
		s.info[0][0] = 1 / (r - trackFloor*trackFloor)
		s.value, s.rest = 1, 0
		f.sightings = append(f.sightings, s)
		tr.heard = append(tr.heard, i)
	}
	track := f.smoothTrail(tr)
	// Unknowns x_i, v_i; prior on the first, process noise between, sightings.
	size := 2 * n
	a := make([][]float64, size)
	for i := range a {
		a[i] = make([]float64, size+1)
	}
	addRow := func(cols []int, coef []float64, want, weight float64) {
		for p, i := range cols {
			for q, j := range cols {
				a[i][j] += weight * coef[p] * coef[q]
			}
			a[i][size] += weight * coef[p] * want
		}
	}
	addRow([]int{0}, []float64{1}, 0.1*y[0], 1/(4*r))
	addRow([]int{1}, []float64{1}, 0, 1/(trackRate0*trackRate0))
	next, b, e := state{}.predict(dt)
	det := next.pxx*next.pvv - next.pxv*next.pxv
	for i := 1; i < n; i++ {
		// (x_i - x - b v, v_i - e v) weighted with the inverse process noise,
		// by its Cholesky factor.
		i00, i01, i11 := next.pvv/det, -next.pxv/det, next.pxx/det
		l00 := math.Sqrt(i00)
		l10 := i01 / l00
		l11 := math.Sqrt(i11 - l10*l10)
		cols := []int{2*i - 2, 2*i - 1, 2 * i, 2*i + 1}
		dx, dv := []float64{-1, -b, 1, 0}, []float64{0, -e, 0, 1}
		one, two := make([]float64, 4), make([]float64, 4)
		for k := range 4 {
			one[k] = l00*dx[k] + l10*dv[k]
			two[k] = l11 * dv[k]
		}
		addRow(cols, one, 0, 1)
		addRow(cols, two, 0, 1)
	}
	for i := range n {
		addRow([]int{2 * i}, []float64{1}, 0.1*y[i], 1/r)
	}
	for i := range size {
		for j := i + 1; j < size; j++ {
			g := a[j][i] / a[i][i]
			for k := i; k <= size; k++ {
				a[j][k] -= g * a[i][k]
			}
		}
	}
	x := make([]float64, size)
	for i := size - 1; i >= 0; i-- {
		sum := a[i][size]
		for j := i + 1; j < size; j++ {
			sum -= a[i][j] * x[j]
		}
		x[i] = sum / a[i][i]
	}
	for i, k := range track.Knots {
		if got := math.Cos(k.Direction.Azimuth); math.Abs(got-x[2*i]) > 1e-6 {
			t.Errorf("knot %d: cosine %.8f, least squares %.8f", i, got, x[2*i])
		}
	}
}

func TestTrackAtInterpolatesAndHoldsItsEnds(t *testing.T) {
	k := Track{Knots: []Knot{{Time: 1, Direction: rig.Degrees(170, 0)}, {Time: 2, Direction: rig.Degrees(-170, 0)}}}
	for _, c := range []struct{ at, want float64 }{{0, 170}, {1, 170}, {1.5, 180}, {1.75, -175}, {2, -170}, {9, -170}} {
		if got := k.At(c.at).AzimuthDeg(); math.Abs(rig.WrapDeg(got-c.want)) > 1e-9 {
			t.Errorf("At(%g) = %g°, want %g°", c.at, got, c.want)
		}
	}
	if got := (Track{}).At(3); got != (rig.Direction{}) {
		t.Errorf("an empty track gives %v", got)
	}
}
