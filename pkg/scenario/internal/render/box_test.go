package render

import (
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"alidade/pkg/rig"
)

// allenBerkley is the example room of Allen & Berkley, J. Acoust. Soc. Am. 65
// (1979), p. 943, fig. 1, in sample lengths (from memory, with a secondary
// source): 80 x 120 x 100, walls 0.9, floor and ceiling 0.7.
var (
	allenBerkley = Box{Size: rig.Point{X: 80, Y: 120, Z: 100}, Beta: [][6]float64{{0.9, 0.9, 0.9, 0.9, 0.7, 0.7}}}
	abSource     = rig.Point{X: 30, Y: 100, Z: 40}
	abReceiver   = rig.Point{X: 50, Y: 10, Z: 60}
)

func sorted(images []Image) []Image {
	slices.SortFunc(images, func(a, b Image) int {
		switch {
		case a.Order != b.Order:
			return a.Order - b.Order
		case a.Distance < b.Distance:
			return -1
		case a.Distance > b.Distance:
			return 1
		}
		return 0
	})
	return images
}

// I1 and I2: Allen & Berkley 1979, fig. 1 and formula 10: direct sound and the
// six images of first order, distance in samples and amplitude.
func TestAllenBerkleyRoom(t *testing.T) {
	want := [][2]float64{{94.33981, 0.0008435187},
		{113.5782, 0.0006305765}, {122.0656, 0.0005867316}, {122.0656, 0.0005867316},
		{133.0413, 0.0005383268}, {136.0147, 0.0004095456}, {136.0147, 0.0004095456}}
	got := sorted(allenBerkley.Images(abSource, abReceiver, 1, 1000))
	if len(got) != len(want) {
		t.Fatalf("%d images, want %d", len(got), len(want))
	}
	for i, w := range want {
		if math.Abs(got[i].Distance-w[0]) > 1e-4 || math.Abs(got[i].Amplitude[0]-w[1]) > 1e-9 {
			t.Errorf("image %d = %.5f, %.10f, want %.5f, %.10f", i, got[i].Distance, got[i].Amplitude[0], w[0], w[1])
		}
	}
}

// I3: images up to total order n: (2n+1)(2n²+2n+3)/3, the centred octahedral
// numbers.
func TestNumberOfImagesIsOctahedral(t *testing.T) {
	for n, want := range []int{1, 7, 25, 63, 129} {
		if got := len(allenBerkley.Images(abSource, abReceiver, n, math.Inf(1))); got != want {
			t.Errorf("images up to order %d = %d, want %d", n, got, want)
		}
	}
}

// I4: energy of orders 0..1 and 0..2 of that room against the direct sound.
func TestEarlyEnergyOfAllenBerkleyRoom(t *testing.T) {
	for _, v := range []struct {
		order int
		want  float64
	}{{1, 5.321472}, {2, 8.068331}} {
		var energy, direct float64
		for _, im := range allenBerkley.Images(abSource, abReceiver, v.order, math.Inf(1)) {
			e := im.Amplitude[0] * im.Amplitude[0]
			energy += e
			if im.Order == 0 {
				direct = e
			}
		}
		if got := 10 * math.Log10(energy/direct); !(math.Abs(got-v.want) <= 0.001) {
			t.Errorf("energy up to order %d = %.6f dB, want %.6f", v.order, got, v.want)
		}
	}
}

// I14: decay of a 6 x 5 x 4 m room, absorption 0.3 everywhere, all images to
// 0.5 s, summed as energies: T20 0.4027728 s, T30 0.4170613 s. (Eyring says
// 0.3663 s: image sources of a plain box decay slower, Lehmann & Johansson, J.
// Acoust. Soc. Am. 124 (2008), p. 269.)
func TestDecayOfAUniformRoom(t *testing.T) {
	const c, rate = 343.0, 4000.0
	beta := math.Sqrt(0.7)
	box := Box{Size: rig.Point{X: 6, Y: 5, Z: 4}, Beta: [][6]float64{{beta, beta, beta, beta, beta, beta}}}
	src := rig.Point{X: 0.37 * 6, Y: 0.61 * 5, Z: 0.44 * 4}
	rcv := rig.Point{X: 0.72 * 6, Y: 0.23 * 5, Z: 0.58 * 4}
	bins := make([]float64, int(0.5*rate))
	for _, im := range box.Images(src, rcv, -1, 0.5*c) {
		if k := int(im.Distance / c * rate); k < len(bins) {
			bins[k] += im.Amplitude[0] * im.Amplitude[0]
		}
	}
	for k := len(bins) - 2; k >= 0; k-- { // backward integration, Schroeder 1965
		bins[k] += bins[k+1]
	}
	// The regression of ISO 3382-2 from -5 dB down.
	fit := func(to float64) float64 {
		var n, sx, sy, sxx, sxy float64
		for k, e := range bins {
			level := 10 * math.Log10(e/bins[0])
			if level > -5 || level < to {
				continue
			}
			x := float64(k) / rate
			n, sx, sy, sxx, sxy = n+1, sx+x, sy+level, sxx+x*x, sxy+x*level
		}
		return -60 / ((n*sxy - sx*sy) / (n*sxx - sx*sx))
	}
	for _, v := range []struct{ to, want float64 }{{-25, 0.4027728}, {-35, 0.4170613}} {
		if got := fit(v.to); !(math.Abs(got-v.want) <= 0.002) {
			t.Errorf("decay from -5 to %g dB gives %.4f s, want %.4f", v.to, got, v.want)
		}
	}
}

// I5: free field at 48 kHz and 343 m/s: delay in samples and 1/(4πr). Here a
// room that absorbs everything.
func TestDirectImageIsTheFreeField(t *testing.T) {
	dead := Box{Size: rig.Point{X: 10, Y: 10, Z: 10}, Beta: [][6]float64{{}}}
	for _, v := range []struct{ r, samples, amplitude float64 }{
		{1, 139.9417, 0.07957747}, {2, 279.8834, 0.03978874}, {3.43, 480, 0.02320043},
	} {
		images := dead.Images(rig.Point{X: 1, Y: 5, Z: 5}, rig.Point{X: 1 + v.r, Y: 5, Z: 5}, 0, 100)
		if len(images) != 1 {
			t.Fatalf("%d images, want the direct one", len(images))
		}
		got := images[0]
		if math.Abs(got.Distance/343*48000-v.samples) > 1e-4 || math.Abs(got.Amplitude[0]-v.amplitude) > 1e-8 {
			t.Errorf("at %g m: %.4f samples, %.8f, want %.4f, %.8f", v.r, got.Distance/343*48000, got.Amplitude[0], v.samples, v.amplitude)
		}
	}
}

// chamberOf returns a prepared chamber; beta and airDB hold one value or one
// an octave.
func chamberOf(t *testing.T, beta, airDB []float64, order int, seconds float64, rate int) *Chamber {
	t.Helper()
	c := &Chamber{Speed: 343, Rate: rate, MaxOrder: order, Seconds: seconds,
		Box: Box{Size: rig.Point{X: 5, Y: 4, Z: 3}}, Origin: rig.Point{X: 2, Y: 1.5, Z: 1.2}, Turn: 0.4}
	for b := range OctavesHz {
		g, a := beta[min(b, len(beta)-1)], airDB[min(b, len(airDB)-1)]
		c.Box.Beta = append(c.Box.Beta, [6]float64{g, g, g, g, g, g})
		c.AirDB = append(c.AirDB, a)
	}
	if err := c.Prepare(); err != nil {
		t.Fatal(err)
	}
	return c
}

// The response against its definition: the sum over images of amplitude times
// e^{-jωd/c}, at frequencies where walls and air are known exactly.
func TestResponsesAreTheSumOverImages(t *testing.T) {
	mics := []rig.Point{{X: 0.1, Y: 0.05}, {X: -0.3, Z: 0.2}}
	source := rig.Point{X: 1.1, Y: 0.9, Z: 0.3}
	unit := source.Distance(rig.Point{})
	octaveBeta := []float64{0.9, 0.85, 0.8, 0.7, 0.75, 0.6, 0.5}
	octaveAir := []float64{0.001, 0.002, 0.004, 0.01, 0.02, 0.05, 0.1}
	for _, v := range []struct {
		name        string
		beta, airDB []float64
		hz          []float64
		bound       float64 // of the sum of all amplitudes
	}{
		{"one band", []float64{0.8}, []float64{0}, []float64{60, 333, 1000, 5000, 9000}, 3e-4},
		// Between octaves the split holds what is between; at the octaves it is
		// exact but for the ringing that is cut off.
		{"octaves", octaveBeta, octaveAir, []float64{OctaveHz(1), OctaveHz(3), OctaveHz(5)}, 2e-3},
	} {
		c := chamberOf(t, v.beta, v.airDB, 3, 0.12, 24000)
		bank := c.Responses(source, mics, unit)
		for m, p := range mics {
			for _, hz := range v.hz {
				band := 0
				if len(v.beta) > 1 {
					band = int(math.Round(math.Log10(hz/OctaveHz(0)) / 0.3))
				}
				one := Box{Size: c.Box.Size, Beta: [][6]float64{c.Box.Beta[band]}}
				var want complex128
				var scale float64
				for _, im := range one.Images(c.inRoom(source), c.inRoom(p), 3, 0.12*343+unit) {
					if im.Order == 0 {
						continue
					}
					a := im.Amplitude[0] * 4 * math.Pi * unit * math.Pow(10, -c.AirDB[band]*im.Distance/20)
					want += cmplx.Rect(a, -2*math.Pi*hz*(im.Distance-unit)/343)
					scale += a
				}
				// The high-pass: s²/(s² + √2·s + 1) at s = j·tan(πf/rate)/tan(π·20/rate).
				s := complex(0, math.Tan(math.Pi*hz/24000)/math.Tan(math.Pi*20/24000))
				want *= s * s / (s*s + complex(math.Sqrt2, 0)*s + 1)
				got := bank.Response(m, 0, 2*math.Pi*hz/24000)
				if e := cmplx.Abs(got-want) / scale; e > v.bound {
					t.Errorf("%s, microphone %d, %.0f Hz: %.5f, want %.5f, off by %.1g of all amplitudes", v.name, m, hz, got, want, e)
				}
			}
		}
	}
}

func TestBandWeightsAddUpToOne(t *testing.T) {
	s := &bandSplit{rate: 48000}
	for _, hz := range []float64{0, 20, 125, 180, 707, 1000, 3333, 8000, 20000} {
		var total float64
		for b := range 7 {
			total += s.weight(b, 7, hz)
		}
		if math.Abs(total-1) > 1e-12 {
			t.Errorf("weights at %g Hz add up to %g", hz, total)
		}
	}
	if w := s.weight(3, 7, 1000); math.Abs(w-1) > 1e-12 {
		t.Errorf("weight of the 1 kHz octave at 1 kHz = %g", w)
	}
}

func TestRoomTurnsWithTheRig(t *testing.T) {
	c := &Chamber{Origin: rig.Point{X: 1, Y: 2, Z: 3}, Turn: math.Pi / 2}
	got := c.inRoom(rig.Point{X: 1}) // the rig's x axis runs along the room's y
	if got.Distance(rig.Point{X: 1, Y: 3, Z: 3}) > 1e-12 {
		t.Errorf("one metre along the turned x axis lies at %v", got)
	}
}

func TestTooDenseResponsesAreRefused(t *testing.T) {
	make := func(seconds float64, order, rate int) error {
		c := &Chamber{Speed: 343, Rate: rate, MaxOrder: order, Seconds: seconds,
			Box: Box{Size: rig.Point{X: 3, Y: 3, Z: 2}, Beta: [][6]float64{{}}}, AirDB: []float64{0}}
		return c.Prepare()
	}
	if make(5, -1, 48000) == nil {
		t.Error("5 s in 18 m³: no error")
	}
	if make(0.4, 900, 48000) != nil {
		t.Error("high order, but few images in 0.4 s: refused")
	}
	if make(10, 2, 48000) == nil {
		t.Error("480000 frames: no error")
	}
}
