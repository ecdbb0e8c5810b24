package bearing

import (
	"math"
	"math/rand/v2"
	"os"
	"runtime"
	"sync"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
)

// long says whether the statistical tests run in full.
func long() bool { return os.Getenv("ALIDADE_LONG") == "1" }

// each calls do for 0..n-1 on all processors.
func each(n int, do func(i int)) {
	var wait sync.WaitGroup
	next := make(chan int)
	for range runtime.GOMAXPROCS(0) {
		wait.Add(1)
		go func() {
			defer wait.Done()
			for i := range next {
				do(i)
			}
		}()
	}
	for i := range n {
		next <- i
	}
	close(next)
	wait.Wait()
}

// badTake is one of four kinds of take that deserve no trust: silence, noise
// without a source, one dead channel, one swapped pair.
func badTake(i int, mics []rig.Point, rate, frames int) (b audio.Block, az float64, kind string) {
	r := rand.New(rand.NewPCG(uint64(i), 4))
	m := newMixture(mics, float64(rate), frames)
	az = -180 + 360*r.Float64()
	if rig.Spread(mics).Shape == rig.ShapeLine {
		az = math.Abs(az)
	}
	from := rig.Degrees(az, 0)
	voice := bursts(frames, float64(rate), uint64(i))
	switch i % 5 {
	case 0:
		if i%2 == 0 {
			m.noise(1e-4, uint64(i)) // a recorder's own, near one step of 16 bits
		}
		return m.block(), math.NaN(), "silence"
	case 1:
		return m.noise(1, uint64(i)).block(), math.NaN(), "noise alone"
	case 2:
		// Diffuse: 200 waves from all sides.
		m.planes(200, func(w int) ([]float64, rig.Direction) {
			z := -1 + 2*(float64(w)+0.5)/200
			return white(frames, uint64(i*1000+w)), rig.Direction{Azimuth: 2.399963 * float64(w), Elevation: math.Asin(z)}
		}, 0.07)
		return m.noise(0.1, uint64(i)).block(), math.NaN(), "diffuse noise"
	case 3:
		m.plane(voice, from, 1).noise(0.1, uint64(i))
		clear(m.x[r.IntN(len(mics))])
		return m.block(), az, "dead channel"
	default:
		m.plane(voice, from, 1).noise(0.1, uint64(i))
		a := r.IntN(len(mics))
		c := (a + 1 + r.IntN(len(mics)-1)) % len(mics)
		m.x[a], m.x[c] = m.x[c], m.x[a]
		return m.block(), az, "swapped pair"
	}
}

// Issue "Where the sound comes from": none of 200 such takes gives a
// confidence of 0.5 or more with an error over 10°.
func TestBadTakesGiveNoConfidentWrongAnswer(t *testing.T) {
	if testing.Short() {
		t.Skip("many takes")
	}
	const rate = 16000
	n := 10
	if long() {
		n = 200
	}
	type outcome struct {
		kind       string
		bad, found bool
		text       Source
		az         float64
		findings   []Finding
	}
	all := make([]outcome, n)
	rigs := [][]rig.Point{lineMics(8, 0.04), ringMics(8, 0.06), solidMics(0.08)}
	each(n, func(i int) {
		mics := rigs[(i/5)%3]
		b, az, kind := badTake(i, mics, rate, 2*rate)
		r := find(t, mics, rate, b, Options{})
		o := outcome{kind: kind, az: az, findings: r.Findings}
		for _, s := range r.Sources {
			o.found = true
			wrong := math.IsNaN(az) || math.Abs(rig.WrapDeg(s.Direction.AzimuthDeg()-az)) > 10
			if s.Confidence >= 0.5 && wrong && !s.Reflection {
				o.bad, o.text = true, s
			}
		}
		all[i] = o
	})
	counts := map[string]int{}
	for i, o := range all {
		if o.found {
			counts[o.kind]++
		}
		if o.bad {
			t.Errorf("take %d (%s, truth %.1f°): %.1f° with confidence %.2f; findings %+v", i, o.kind, o.az, o.text.Direction.AzimuthDeg(), o.text.Confidence, o.findings)
		}
		if !o.found && len(o.findings) == 0 {
			t.Errorf("take %d (%s): nothing found and no reason given", i, o.kind)
		}
	}
	t.Logf("%d takes; with a source found: %v", n, counts)
	if counts["silence"]+counts["noise alone"] > 0 {
		t.Errorf("sources found in silence or independent noise: %v", counts)
	}
}

// A dead channel costs the answer nothing and is named; so is a swapped pair.
func TestDeadAndSwappedChannelsAreNamed(t *testing.T) {
	const rate = 16000
	mics := ringMics(8, 0.06)
	voice := bursts(3*rate, rate, 5)
	m := newMixture(mics, rate, 3*rate).plane(voice, rig.Degrees(50, 0), 1).noise(0.05, 9)
	clear(m.x[3])
	r := find(t, mics, rate, m.block(), Options{})
	if len(r.Sources) == 0 || math.Abs(r.Sources[0].Direction.AzimuthDeg()-50) > 1 {
		t.Errorf("with a dead channel: %+v, want 50°", r.Sources)
	}
	if !hasFinding(r, CodeDeadMic, 3) {
		t.Errorf("findings %+v, want %s for microphone 3", r.Findings, CodeDeadMic)
	}
	m = newMixture(mics, rate, 3*rate).plane(voice, rig.Degrees(50, 0), 1).noise(0.05, 9)
	m.x[1], m.x[4] = m.x[4], m.x[1]
	r = find(t, mics, rate, m.block(), Options{})
	if !hasFinding(r, CodeMisfit, 1) || !hasFinding(r, CodeMisfit, 4) {
		t.Errorf("findings %+v, want %s for microphones 1 and 4", r.Findings, CodeMisfit)
	}
	if len(r.Sources) > 0 && r.Sources[0].Confidence >= 0.9 {
		t.Errorf("confidence %.2f in spite of a swapped pair", r.Sources[0].Confidence)
	}
}

func hasFinding(r *Result, code string, mic int) bool {
	for _, f := range r.Findings {
		if f.Code != code {
			continue
		}
		for _, m := range f.Mics {
			if m == mic {
				return true
			}
		}
	}
	return false
}

// Issue "Where the sound comes from": two talkers 40° apart, 0.3 s, a ring of
// eight: both found in at least 90 % of 50 seeded takes.
func TestTwoTalkersInARoom(t *testing.T) {
	const rate = 16000
	n := 4
	if long() {
		n = 50
	}
	if testing.Short() {
		t.Skip("renders rooms")
	}
	mics := ringMics(8, 0.06)
	ok := make([]bool, n)
	each(n, func(i int) {
		r := rand.New(rand.NewPCG(uint64(i), 11))
		room := shoebox{rig.Point{X: 5 + 2*r.Float64(), Y: 4 + 2*r.Float64(), Z: 2.6}, 0.3, rate}
		centre := rig.Point{X: room.size.X/2 + 0.4*r.Float64(), Y: room.size.Y/2 + 0.3*r.Float64(), Z: 1.2}
		first := -180 + 360*r.Float64()
		m := newMixture(mics, rate, 6*rate)
		want := []float64{first, first + 40}
		for k, az := range want {
			m.in(room, bursts(6*rate, rate, uint64(100*i+k)), centre.Add(rig.Degrees(az, 5).Unit().Scale(1.2+0.3*r.Float64())), centre, 1)
		}
		res := find(t, mics, rate, m.noise(0.05, uint64(i)).block(), Options{})
		hit := 0
		for _, az := range want {
			for _, s := range res.Sources {
				if math.Abs(rig.WrapDeg(s.Direction.AzimuthDeg()-az)) < 8 {
					hit++
					break
				}
			}
		}
		ok[i] = hit == 2
	})
	both := 0
	for _, v := range ok {
		if v {
			both++
		}
	}
	t.Logf("both found in %d of %d", both, n)
	if float64(both) < 0.9*float64(n) {
		t.Errorf("both talkers found in %d of %d takes, want 90 %%", both, n)
	}
}
