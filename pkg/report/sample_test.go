package report

import (
	"math"

	"alidade/pkg/pipeline"
)

func f(v float64) *float64 { return &v }

// nominal are the nominal mid-band frequencies from 50 Hz to 16 kHz, one-third
// octaves: IEC 61260-1:2014, table E.1.
var nominal = []float64{50, 63, 80, 100, 125, 160, 200, 250, 315, 400, 500, 630, 800, 1000, 1250, 1600,
	2000, 2500, 3150, 4000, 5000, 6300, 8000, 10000, 12500, 16000}

// goodTake is the result of an invented take whose figures all were measured.
// Every figure differs from every other, so that a swapped column shows.
func goodTake() *pipeline.Result {
	r := &pipeline.Result{
		Schema: pipeline.ReportSchema, Version: "0.1.0",
		Take: pipeline.Take{
			Files:    []pipeline.File{{Path: "takes/yard_03.wav", SHA256: "5b0d3f"}},
			Channels: 8, SampleRateHz: 48000, Frames: 1440000, DurationS: 30, StartTime: "21:14:03.500", Encoding: "pcm24",
		},
		Rig: pipeline.RigSummary{
			Name: "roof line of eight", SHA256: "77aa", MicrophonesUsed: 7, Reference: "centre",
			SpeedOfSoundMS: 342.0251234, SpeedRule: "343.2·√(T/293.15 K), dry air (ISO 9613-1)", Air: "18 °C dry", Shape: "line",
		},
		Steer: pipeline.Steer{
			Kind: "given", AzimuthDeg: 60, CompassDeg: f(42), Ambiguity: "a line of microphones hears every direction of a cone around its axis alike: front and back, above and below cannot be told apart",
			Method: "spectral", MethodErrorDB: -118.4, Weights: "delay-and-sum", Taper: "uniform", FilterTaps: 255,
		},
		Segments: pipeline.Segments{Source: "given", Noise: [][2]float64{{0, 8.25}, {20.1234567, 30}}, Target: [][2]float64{{8.5, 20}}},
		Overall: pipeline.Overall{
			SNRGainDB: f(7.9123456), SNRGainCI95: &[2]float64{7.24, 8.61}, SpeechWeightedSNRGainDB: f(8.3), NoiseReductionDB: f(8.1), NoiseReductionCI95: &[2]float64{7.6, 8.6},
			NoiseReductionADB: f(8.45), TargetChangeDB: f(-0.19), TargetChangeCI95: &[2]float64{-0.4, 0.02}, BestMicrophone: "M4", OverBestMicrophoneDB: f(7.1),
		},
		Findings: []pipeline.Finding{
			{Code: "spread", Severity: pipeline.Info, Message: "the source is 1.2 m away: levels differ by 2.1 dB along the rig"},
			{Code: "channel-quiet", Severity: pipeline.Warning, Message: "channel 6 (M6) is 11.4 dB below the others: check its gain, or run calibrate", Channels: []int{6}},
		},
		Output:     pipeline.Output{Path: "out/yard_03_az+060.0.wav", SHA256: "91c2", Format: "pcm24", Frames: 1440000, PeakDBFS: f(-11.24), ReadBack: "compared"},
		Provenance: &pipeline.Provenance{Command: []string{"alidade", "steer", "takes/yard_03.wav"}, Kernel: "generic"},
	}
	for m := range 8 {
		used := m != 2
		r.Rig.Mics = append(r.Rig.Mics, pipeline.RigMic{Name: "M" + string(rune('1'+m)), Channel: m + 1, AtM: [3]float64{0.04*float64(m) - 0.14}, GainDB: 0.1 * float64(m), DelayUS: 3.1, Polarity: "normal", Used: used})
		r.Channels = append(r.Channels, pipeline.Channel{Channel: m + 1, Name: "M" + string(rune('1'+m)), Used: used, RMSDBFS: f(-31.5 - float64(m)), PeakDBFS: f(-9.25 - float64(m)), DC: 1.25e-5})
	}
	r.Bands = sampleBands(nominal, 10)
	r.OctaveBands = sampleBands([]float64{63, 125, 250, 500, 1000, 2000, 4000, 8000}, 10.0/3)
	return r
}

func sampleBands(names []float64, perDecade float64) []pipeline.Band {
	var bands []pipeline.Band
	for i, hz := range names {
		g := math.Pow(10, 0.3/(2*perDecade*0.3))
		gain := 9 * (1 - math.Exp(-hz/700))
		x := float64(i)
		b := pipeline.Band{
			NominalHz: hz, CentreHz: 1000 * math.Pow(10, math.Round(perDecade*math.Log10(hz/1000))/perDecade),
			NoiseInDBFS: f(-48 - x), NoiseOutDBFS: f(-48 - x - gain), NoiseReductionDB: f(gain), NoiseReductionCI95: &[2]float64{gain - 0.41, gain + 0.42},
			TargetInDBFS: f(-40.5 - x), TargetOutDBFS: f(-40.7 - x), TargetChangeDB: f(-0.2), TargetChangeCI95: &[2]float64{-0.5, 0.11},
			SNRInDB: f(7.5), SNROutDB: f(7.3 + gain), SNRGainDB: f(gain - 0.2), SNRGainCI95: &[2]float64{gain - 0.83, gain + 0.44},
			OverBestMicrophoneDB: f(gain - 0.9), PredictedWhiteDB: f(8.451), PredictedDiffuseDB: f(gain + 0.3),
		}
		b.LowHz, b.HighHz = b.CentreHz/g, b.CentreHz*g
		if *b.PredictedDiffuseDB < 1 {
			b.Flags = append(b.Flags, "no-aperture")
		}
		if hz >= 5000 {
			b.Flags = append(b.Flags, "grating")
		}
		bands = append(bands, b)
	}
	return bands
}

// bareTake is the result of a take of which nothing could be measured.
func bareTake() *pipeline.Result {
	r := goodTake()
	r.Overall = pipeline.Overall{}
	r.Segments = pipeline.Segments{Source: "none"}
	for _, set := range [][]pipeline.Band{r.Bands, r.OctaveBands} {
		for i, b := range set {
			set[i] = pipeline.Band{NominalHz: b.NominalHz, CentreHz: b.CentreHz, LowHz: b.LowHz, HighHz: b.HighHz,
				PredictedWhiteDB: b.PredictedWhiteDB, PredictedDiffuseDB: b.PredictedDiffuseDB}
		}
	}
	r.Findings = []pipeline.Finding{{Code: "no-noise", Severity: pipeline.Warning, Message: "no stretch of noise alone was found: give --noise A..B, or record one"}}
	return r
}
