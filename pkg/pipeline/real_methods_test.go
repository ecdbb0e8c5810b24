package pipeline

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"alidade/pkg/wav"
)

// Speech and a running tap through measured responses of a room to an open ring
// of seven, 100 mm across: delay-and-sum, superdirective and minimum-variance
// weights side by side. Minimum variance learns from two seconds of the take
// before the speech begins; the gains are those of the speech alone and of other
// noise than the weights have heard.
func TestWeightsSideBySideInARealRoom(t *testing.T) {
	data := dataDir(t)
	long := os.Getenv("ALIDADE_LONG") == "1"
	const rate, quiet = 48000, 2 * 48000
	parts, cases, most := []string{"0870"}, 1, 4*rate
	if long {
		parts, cases, most = []string{"0870", "0880", "0890", "0920", "0930"}, 3, 40*rate
	} else {
		if testing.Short() {
			t.Skip("half a minute of 7 channels")
		}
		t.Log("2 s of speech in the absorbent room; ALIDADE_LONG=1 runs half a minute in both rooms")
	}
	speech := make([]float64, quiet)
	for _, part := range parts {
		x, _ := readWAV(t, filepath.Join(data, "speech", "sense_and_sensibility_01_austen_64kb-"+part+".wav"))
		dry := x.Channel(0)
		speech = append(speech, threefold(t, dry[:min(len(dry), (most-len(speech))/3)])...)
	}
	tap, _ := readWAV(t, filepath.Join(data, "noise", "running_tap.wav"))
	dry := tap.Channel(0)
	if !long {
		dry = dry[:(len(speech)+2*rate)/3]
	}
	noise := threefold(t, dry)
	floor := -6.0
	for _, room := range []struct{ name, source, corner, toward string }{
		{"absorbent, speech at -90°", "100_S090-200", "100_SBG1", "-90"},
		{"absorbent, speech at 150°", "100_S210-200", "100_SBG1", "150"},
		{"reflective, speech at -60°", "000_S060-200", "000_SBG1", "-60"},
	}[:cases] {
		dir := t.TempDir()
		rigPath := ring7File(t, data, dir)
		target := convolved(speech, roomResponse(t, data, room.source))
		all := convolved(noise, roomResponse(t, data, room.corner))
		n := target.Frames()
		heard, fresh := all.Slice(0, n), all.Slice(n, all.Frames())
		const snrDB = 6
		gain := math.Sqrt(meanPower(target)/meanPower(heard)) * math.Pow(10, -snrDB/20)
		path := func(kind string) string { return filepath.Join(dir, kind+".wav") }
		writeWAV(t, path("mix"), rate, wav.Float32, add(target, gain, heard))
		writeWAV(t, path("target"), rate, wav.Float32, target)
		writeWAV(t, path("noise"), rate, wav.Float32, fresh)
		results := map[string]*Result{}
		var log strings.Builder
		fmt.Fprintf(&log, "%s, tap in the corner, %.0f s of speech and %.0f s of other noise\n%-18s SNR gain  noise red.  target change  speech-weighted  over best mic | SNR gain at", room.name, float64(n-quiet)/rate, float64(fresh.Frames())/rate, "")
		octaves := []float64{125, 250, 500, 1000, 2000, 4000, 8000}
		for _, hz := range octaves {
			fmt.Fprintf(&log, " %5g", hz)
		}
		for _, weights := range []string{WeightsDelayAndSum, WeightsSuperdirective, WeightsMinimumVariance} {
			o := Options{Toward: room.toward, Weights: weights, IsolatedNoise: path("noise"), IsolatedTarget: path("target"), Out: path(weights)}
			if weights != WeightsDelayAndSum {
				o.WhiteNoiseGainFloorDB = &floor
			}
			if weights == WeightsMinimumVariance {
				o.Noise = "0..1.95"
			}
			r := steer(t, path("mix"), rigPath, o)
			results[weights] = r
			v := r.Overall
			fmt.Fprintf(&log, "\n%-18s %8s  %10s  %13s  %15s  %13s |            ", weights, show(v.SNRGainDB), show(v.NoiseReductionDB), show(v.TargetChangeDB), show(v.SpeechWeightedSNRGainDB), show(v.OverBestMicrophoneDB))
			for _, hz := range octaves {
				for _, b := range r.OctaveBands {
					if b.NominalHz == hz {
						fmt.Fprintf(&log, " %5s", show(b.SNRGainDB))
					}
				}
			}
		}
		t.Log(log.String())
		plain, super, learned := results[WeightsDelayAndSum].Overall, results[WeightsSuperdirective].Overall, results[WeightsMinimumVariance].Overall
		if *learned.SNRGainDB < *plain.SNRGainDB+3 || *learned.SpeechWeightedSNRGainDB < *super.SpeechWeightedSNRGainDB+1 || *super.SpeechWeightedSNRGainDB < *plain.SpeechWeightedSNRGainDB+0.5 {
			t.Errorf("%s: SNR gain %.2f dB of minimum variance, %.2f of superdirective, %.2f of delay-and-sum; speech-weighted %.2f, %.2f, %.2f: want the first 3 dB above the last, and speech-weighted 1 dB above the second and that 0.5 dB above the last", room.name,
				*learned.SNRGainDB, *super.SNRGainDB, *plain.SNRGainDB, *learned.SpeechWeightedSNRGainDB, *super.SpeechWeightedSNRGainDB, *plain.SpeechWeightedSNRGainDB)
		}
		// In a room 2 to 4 dB of the target's own reverberation go.
		for weights, r := range results {
			if tc := *r.Overall.TargetChangeDB; tc < -5 || tc > 1 {
				t.Errorf("%s, %s: target change %.2f dB, want -5 to 1", room.name, weights, tc)
			}
		}
	}
}
