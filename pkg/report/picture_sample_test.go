package report

import (
	"bytes"
	"encoding/binary"
	"math"
	"math/rand/v2"

	"alidade/pkg/pipeline"
)

// logSpaced returns n frequencies evenly spaced on a logarithmic axis.
func logSpaced(from, to float64, n int) []float64 {
	hz := make([]float64, n)
	for i := range hz {
		hz[i] = from * math.Pow(to/from, float64(i)/float64(n-1))
	}
	return hz
}

func grid(rows, columns int, low, high float64, level func(row, column int) float64) pipeline.Levels {
	l := pipeline.Levels{Rows: rows, Columns: columns, LowDB: low, HighDB: high, Bytes: make([]byte, rows*columns)}
	for i := range l.Bytes {
		x := 255 * (level(i/columns, i%columns) - low) / (high - low)
		l.Bytes[i] = byte(math.Round(math.Min(255, math.Max(0, x))))
	}
	return l
}

// lineResponse is the response of eight microphones 40 mm apart, steered to 60
// degrees: sin(N psi/2) / (N sin(psi/2)) with
// psi = k d (cos az - cos 60 degrees), Van Trees 2002, formula 2.96.
func lineResponse() *pipeline.Response {
	hz := logSpaced(100, 16000, 160)
	angles := make([]float64, 361)
	for i := range angles {
		angles[i] = float64(i - 180)
	}
	at := func(f, az float64) float64 {
		psi := 2 * math.Pi * f / 343.2 * 0.04 * (math.Cos(az*math.Pi/180) - 0.5)
		d := 8 * math.Sin(psi/2)
		if math.Abs(d) < 1e-9 {
			return 0
		}
		return 20 * math.Log10(math.Max(math.Abs(math.Sin(4*psi)/d), 1e-6))
	}
	r := &pipeline.Response{AnglesDeg: angles, Hz: hz, GratingFreeBelowHz: f(343.2 / 0.04 / 1.5)}
	r.Levels = grid(len(hz), len(angles), -40, 0, func(row, column int) float64 { return at(hz[row], angles[column]) })
	for _, g := range []float64{6000, 8000, 10000, 12500} {
		// A grating lobe where psi is a whole turn: cos az = 0.5 - c/(f d).
		if c := 0.5 - 343.2/(g*0.04); c >= -1 {
			az := math.Acos(c) * 180 / math.Pi
			r.Lobes = append(r.Lobes, pipeline.Lobe{Hz: g, AzimuthDeg: az, LevelDB: at(g, az), Kind: "grating"}, pipeline.Lobe{Hz: g, AzimuthDeg: -az, LevelDB: at(g, -az), Kind: "grating"})
		}
	}
	for _, g := range []float64{1000, 2000, 4000} {
		if c := 0.5 - 1.43*343.2/(8*g*0.04); c >= -1 {
			az := math.Acos(c) * 180 / math.Pi
			r.Lobes = append(r.Lobes, pipeline.Lobe{Hz: g, AzimuthDeg: az, LevelDB: at(g, az), Kind: "side"})
		}
	}
	return r
}

// picturedTake is the good take with everything that a page can show.
func picturedTake() *pipeline.Result {
	r := goodTake()
	for i := range r.Bands {
		r.Bands[i].PredictedInNoiseDB = f(*r.Bands[i].SNRGainDB + 0.0625*float64(i%5))
	}
	rng := rand.New(rand.NewPCG(7, 8))
	hz := logSpaced(50, 16000, 96)
	spectrogram := func(down float64) *pipeline.Spectrogram {
		s := &pipeline.Spectrogram{StepS: 0.05, Hz: hz}
		s.Levels = grid(len(hz), 600, -100, -30, func(row, column int) float64 {
			t, octave := float64(column)*0.05, math.Log2(hz[row]/100)
			noise := -55 - 4*octave + 5*rng.NormFloat64() - down*(1-math.Exp(-hz[row]/700))
			voice := -200.0
			if t > 8.5 && t < 20 && math.Sin(5*t) > -0.3 {
				voice = -45 - 3*math.Abs(octave-3) + 6*math.Sin(9*octave+2*math.Sin(3*t))
			}
			return math.Max(noise, voice)
		})
		return s
	}
	r.Pictures = &pipeline.Pictures{Reference: spectrogram(0), Output: spectrogram(9), Response: lineResponse()}
	scan := &pipeline.Scan{NominalHz: nominal}
	for a := 0.0; a <= 180; a += 5 {
		d := a - 60
		scan.AnglesDeg = append(scan.AnglesDeg, a)
		scan.LevelDBFS = append(scan.LevelDBFS, f(-30-6*(1-math.Exp(-d*d/300))))
		scan.SNRGainDB = append(scan.SNRGainDB, f(7.9-9*(1-math.Exp(-d*d/300))))
	}
	scan.SNRGainDB[3] = nil
	scan.Levels = grid(len(nominal), len(scan.AnglesDeg), -70, -30, func(row, column int) float64 {
		d := scan.AnglesDeg[column] - 60
		return -40 - float64(row)/2 - 12*(1-math.Exp(-d*d*nominal[row]/1e6))
	})
	r.Pictures.Scan = scan
	r.Preview = preview(rng)
	return r
}

// followedTake is a take whose source was followed.
func followedTake() *pipeline.Result {
	r := picturedTake()
	r.Pictures.Scan = nil
	r.Steer.Kind = "followed"
	d := &pipeline.Direction{AzimuthDeg: 60, StandardErrorDeg: f(0.8), Confidence: f(0.9)}
	rng := rand.New(rand.NewPCG(9, 9))
	for t := 0.0; t < 30; t += 0.5 {
		w := pipeline.DirectionWindow{StartS: t, EndS: t + 1}
		if t > 8 && t < 20 {
			w.AzimuthDeg, w.ElevationDeg = f(40+2.5*(t-8)+rng.NormFloat64()), f(0)
			w.StandardErrorDeg, w.Confidence = f(0.6+rng.Float64()), f(rng.Float64())
		}
		d.Windows = append(d.Windows, w)
	}
	r.Direction = d
	return r
}

// badRig is a take of a rig in a poor state.
func badRig() *pipeline.Result {
	r := goodTake()
	r.Findings = append(r.Findings,
		pipeline.Finding{Code: "channel-silent", Severity: pipeline.Error, Message: "channel 1 is silent: check its cable, or leave it out with use: false", Channels: []int{1}},
		pipeline.Finding{Code: "polarity", Severity: pipeline.Error, Message: "channel 4 looks inverted: set polarity: inverted, or check its wiring", Channels: []int{4}},
		pipeline.Finding{Code: "swapped", Severity: pipeline.Warning, Message: "channels 7 and 8 fit better the other way round", Channels: []int{7, 8}},
		pipeline.Finding{Code: "gain-below-prediction", Severity: pipeline.Warning, Message: "the measured gain lies more than 2 dB below what was predicted in 9 bands", Bands: []float64{500, 630, 4000}})
	r.Channels[0].RMSDBFS, r.Channels[0].PeakDBFS, r.Channels[0].Flags = nil, nil, []string{"silent"}
	r.Channels[3].Flags = []string{"inverted"}
	r.Channels[6].Flags = []string{"swapped"}
	r.Channels[4].ClippedFrames, r.Channels[4].Flags = 412, []string{"clipped"}
	r.Overall.SNRGainDB, r.Overall.SNRGainCI95 = f(-1.2), &[2]float64{-2.4, 0.1}
	for i := range r.Bands {
		*r.Bands[i].SNRGainDB -= 6
		r.Bands[i].SNRGainCI95[0] -= 7
		r.Bands[i].SNRGainCI95[1] -= 5
	}
	return r
}

// rampSlope is by how much the samples of a ramp rise a second; they begin at
// as much.
const rampSlope = 0.1

// ramps are an excerpt whose samples say where they stand: t seconds from its
// beginning the reference is rampSlope·(1 + t), the track the opposite.
func ramps() *pipeline.Preview {
	const rate, frames = 48000, 3 * 48000
	clip := func(sign float64) pipeline.Clip {
		x := make([]int16, frames)
		for i := range x {
			x[i] = int16(math.Round(32767 * sign * rampSlope * (1 + float64(i)/rate)))
		}
		return pipeline.Clip{LevelDBFS: -10, PeakDBFS: -8, Audio: wavFile(rate, x)}
	}
	return &pipeline.Preview{StartS: 9, EndS: 12, SampleRateHz: rate, Reference: clip(1), Output: clip(-1)}
}

// preview is three seconds of noise before, less of it after, as 16 bit WAV.
func preview(rng *rand.Rand) *pipeline.Preview {
	const rate, frames = 16000, 48000
	clip := func(noise float64) pipeline.Clip {
		x := make([]int16, frames)
		sum, peak := 0.0, 0.0
		for i := range x {
			v := 0.2*math.Sin(2*math.Pi*440*float64(i)/rate) + noise*rng.NormFloat64()
			v = math.Max(-0.5, math.Min(0.5, v)) * math.Min(1, float64(i)/800)
			sum, peak = sum+v*v, math.Max(peak, math.Abs(v))
			x[i] = int16(math.Round(32767 * v))
		}
		return pipeline.Clip{LevelDBFS: 10*math.Log10(2*sum/frames) + 0, PeakDBFS: 20 * math.Log10(peak), Audio: wavFile(rate, x)}
	}
	return &pipeline.Preview{StartS: 9, EndS: 12, SampleRateHz: rate, GainDB: -3, Reference: clip(0.08), Output: clip(0.02)}
}

// wavFile is a WAV file of one channel of 16 bit.
func wavFile(rate uint32, x []int16) []byte {
	var b bytes.Buffer
	size := uint32(2 * len(x))
	head := struct {
		Riff             [4]byte
		Size             uint32
		Wave, Fmt        [4]byte
		FmtSize          uint32
		Format, Channels uint16
		Rate, ByteRate   uint32
		Align, Bits      uint16
		Data             [4]byte
		DataSize         uint32
	}{[4]byte([]byte("RIFF")), 36 + size, [4]byte([]byte("WAVE")), [4]byte([]byte("fmt ")), 16, 1, 1, rate, 2 * rate, 2, 16, [4]byte([]byte("data")), size}
	// Neither can fail on a buffer.
	_ = binary.Write(&b, binary.LittleEndian, head)
	_ = binary.Write(&b, binary.LittleEndian, x)
	return b.Bytes()
}
