package quality

import (
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/rig"
	"alidade/pkg/spectral"
)

// directGains are the levels, dB, at which microphones hear the direct sound of
// a source at a place, with the spreading of its spherical wave undone, against
// the middle one: the transfer from the others, lined up and added, to each
// (Welch's method, Hann windows of 4096 frames that overlap by half), its impulse
// response cut to half a millisecond around the direct sound, the mean of its
// level in dB from 500 Hz to 8 kHz. Nothing of it comes from what is tested.
func directGains(t *testing.T, rate int, b audio.Block, at []rig.Point, source rig.Point) []float64 {
	t.Helper()
	const size, speed, gate = 4096, 343.2, 0.5e-3
	fft, err := spectral.NewFFT[float64](size)
	if err != nil {
		t.Fatal(err)
	}
	n, bins := len(at), size/2+1
	hz := func(k int) float64 { return float64(k) * float64(rate) / size }
	far := make([]float64, n)
	for m, p := range at {
		far[m] = p.Distance(source)
	}
	cross, own := make([][]complex128, n), make([][]float64, n)
	for m := range n {
		cross[m], own[m] = make([]complex128, bins), make([]float64, bins)
	}
	x, re, im := make([]float64, size), make([]float64, bins), make([]float64, bins)
	window := spectral.Periodic(size, spectral.Hann)
	lined := make([][]complex128, n)
	for from := 0; from+size <= b.Frames(); from += size / 2 {
		all := make([]complex128, bins)
		for m := range n {
			for i := range x {
				x[i] = window[i] * float64(b.Channel(m)[from+i])
			}
			fft.Forward(re, im, x)
			lined[m] = make([]complex128, bins)
			for k := range bins {
				lined[m][k] = complex(re[k], im[k]) * cmplx.Rect(far[m], 2*math.Pi*hz(k)*(far[m]-far[0])/speed)
				all[k] += lined[m][k]
			}
		}
		for m := range n {
			for k := range bins {
				others := (all[k] - lined[m][k]) / complex(float64(n-1), 0)
				cross[m][k] += cmplx.Conj(others) * lined[m][k]
				own[m][k] += real(others)*real(others) + imag(others)*imag(others)
			}
		}
	}
	var gains []float64
	for m := range n {
		for k := range bins {
			re[k], im[k] = 0, 0
			if hz(k) >= 300 && hz(k) <= 9000 {
				h := cross[m][k] / complex(own[m][k], 0)
				re[k], im[k] = real(h), imag(h)
			}
		}
		fft.Inverse(x, re, im)
		for i := range x {
			d := math.Abs(float64(min(i, size-i))) / float64(rate)
			x[i] *= math.Pow(math.Cos(math.Pi/2*math.Min(1, d/gate)), 2)
		}
		fft.Forward(re, im, x)
		sum, count := 0.0, 0.0
		for k := range bins {
			if hz(k) > 500 && hz(k) < 8000 {
				sum += 10 * math.Log10(re[k]*re[k]+im[k]*im[k])
				count++
			}
		}
		gains = append(gains, sum/count)
	}
	middle := median(slices.Clone(gains))
	for m := range gains {
		gains[m] -= middle
	}
	return gains
}

// The take whose channels are all alive has one that is louder than the others
// in truth, so that the finding about it is none of the room or of a source close
// by: of the direct sound alone, with its spreading undone, it is 2 dB louder.
// The other take, of a source elsewhere, has the very same seven levels one
// channel further on: they belong to the microphones, plugged in one further on,
// or to their inputs. The places of the sources are those of the data set's
// notes.
func TestRealLineHasALoudMicrophone(t *testing.T) {
	line := rig.Line(8, 0.12)
	takes := []struct {
		name   string
		x, y   float64 // from microphone 1
		from   int     // first channel of the seven
		loud   int
		around []float64
	}{
		{name: "noise_rec_one", x: 0.455, y: 1.154, from: 0, loud: 7},
		{name: "noise_rec_two", x: 1.686, y: 0.892, from: 1, loud: 8},
	}
	for i := range takes {
		c := &takes[i]
		rate, b := recorded(t, "line8-room/"+c.name+".wav")
		seven := audio.NewBlock(7, b.Frames())
		for m := range 7 {
			copy(seven.Channel(m), b.Channel(c.from+m))
		}
		c.around = directGains(t, rate, seven, line[c.from:c.from+7], rig.Point{X: line[0].X + c.x, Y: c.y})
		t.Logf("%s: channels %d to %d: %.2f dB", c.name, c.from+1, c.from+7, c.around)
		if v := c.around[6]; v < 1.5 {
			t.Errorf("%s: channel %d is %.2f dB louder than the middle one, want 1.5 dB or more", c.name, c.loud, v)
		}
		found := false
		for _, f := range inspected(t, microphones(line), rate, b).Findings {
			if f.Code == CodeLevel {
				found = slices.Equal(f.Channels, []int{c.loud})
				t.Logf("%s: %s", c.name, f.Measured)
			}
		}
		if !found {
			t.Errorf("%s: no finding that channel %d is louder, or one about another", c.name, c.loud)
		}
	}
	for m, v := range takes[0].around {
		if d := v - takes[1].around[m]; math.Abs(d) > 0.25 {
			t.Errorf("channel %d of one take and %d of the other are %.2f dB apart, want at most 0.25 dB", m+1, m+2, d)
		}
	}
}
