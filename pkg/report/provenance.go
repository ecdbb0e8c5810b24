package report

import (
	"fmt"
	"strings"

	"alidade/pkg/pipeline"
)

// made is the settings behind a take, one by one.
func made(r *pipeline.Result) []named {
	var list []named
	add := func(name, value string) {
		if value != "" {
			list = append(list, named{Name: name, Value: shorten(clean(value), 400)})
		}
	}
	for i, f := range r.Take.Files {
		if i == 8 {
			add("Take", fmt.Sprintf("and %d more files", len(r.Take.Files)-i))
			break
		}
		add("Take", f.Path)
		add("Its SHA-256", f.SHA256)
	}
	add("Recorded", fmt.Sprintf("%d channels, %d Hz, %s, %d frames", r.Take.Channels, r.Take.SampleRateHz, r.Take.Encoding, r.Take.Frames))
	add("Rig", fmt.Sprintf("%s, %d of %d microphones in use, a %s rig", r.Rig.Name, r.Rig.MicrophonesUsed, len(r.Rig.Mics), r.Rig.Shape))
	add("Rig file, SHA-256", r.Rig.SHA256)
	add("Reference point", fmt.Sprintf("%s at %s, %s, %s m", r.Rig.Reference, Round(r.Rig.ReferencePointM[0], "x_m"), Round(r.Rig.ReferencePointM[1], "x_m"), Round(r.Rig.ReferencePointM[2], "x_m")))
	add("Air and speed of sound", fmt.Sprintf("%s: %s m/s by %s", r.Rig.Air, decimals(r.Rig.SpeedOfSoundMS, 2), r.Rig.SpeedRule))
	s := r.Steer
	kinds := map[string]string{"given": "as given", "focus": "at a point as given", "estimated": "found", "focus-estimated": "at a point that was found", "followed": "followed"}
	kind, known := kinds[s.Kind]
	if !known {
		kind = s.Kind
	}
	add("Direction", fmt.Sprintf("%s, %s", directionWords(r), kind))
	add("Method", fmt.Sprintf("%s, largest error %s dB against the signal", s.Method, decimals(s.MethodErrorDB, 0)))
	add("Weights", fmt.Sprintf("%s, taper %s", s.Weights, s.Taper))
	if p := s.Predicted; p != nil {
		add("Predicted overall", fmt.Sprintf("%s dB in noise from all sides, %s dB in noise of each microphone, %s dB in the noise as it was measured, by the measured levels of the bands", levelText(p.DiffuseDB), levelText(p.WhiteDB), levelText(p.MeasuredNoiseDB)))
	}
	var extras []string
	if s.UndoSpreading {
		extras = append(extras, "spreading undone")
	}
	if c := s.Changes; c != nil {
		extras = append(extras, fmt.Sprintf("weights found again every %s s, %d sets, handed over in %s s", Round(c.EveryS, "every_s"), len(c.FromS), Round(c.CrossFadeS, "cross_fade_s")))
	}
	if p := s.Postfilter; p != nil {
		extras = append(extras, fmt.Sprintf("postfilter %s, gains from %s dB to 0, found over %s s", p.Kind, decimals(p.FloorDB, 1), Round(p.AverageS, "average_s")))
	}
	if s.HighpassHz != nil {
		extras = append(extras, "high-pass "+frequencyWords(*s.HighpassHz)+" on reference and track alike")
	}
	if s.GainDB != 0 {
		extras = append(extras, decimals(s.GainDB, 1)+" dB of gain on the track, taken out of every level here")
	}
	add("Besides", strings.Join(extras, "; "))
	for _, o := range append([]pipeline.Output{r.Output}, r.OtherOutputs...) {
		if o.Path == "" {
			continue
		}
		text := fmt.Sprintf("%s: %s, %d frames", o.Path, o.Format, o.Frames)
		if o.PeakDBFS != nil {
			text += ", peak " + levelText(o.PeakDBFS) + " dBFS"
		}
		add("Written", text)
		add("Its SHA-256", o.SHA256)
		add("Read back", o.ReadBack)
	}
	add("Program", "alidade "+r.Version)
	if r.Provenance != nil {
		add("Kernels", r.Provenance.Kernel)
	}
	add("Made", r.CreatedUTC)
	return list
}

// definitions say how the figures of the page are defined, with sources.
var definitions = []named{
	{"", "Levels", "RMS and band levels are in dBFS after AES17: a full-scale sine reads 0 dBFS. Peaks are re 1.0."},
	{"", "Bands", "One-third octaves of IEC 61260-1:2014, base ten, named by their nominal mid-band frequencies; no claim of conformity."},
	{"", "Reference", "The mean of the band powers of the microphones in use, corrected for gain; the best single microphone is given beside it."},
	{"", "Noise reduction", "Noise level at the reference minus noise level in the track, weights as they are, nothing renormalised."},
	{"", "Target change", "Target level in the track minus at the reference; 0 dB is distortionless. Target power is the power in the stretches with the target minus the power in those with noise alone."},
	{"", "SNR gain", "Noise reduction plus target change."},
	{"", "Intervals", "95 %, for the expected gain of these weights in this noise field, not for the noise that happened to sound."},
	{"", "Postfilter", "Where one is used its gains follow the sound, and no figure is that of a fixed filter: they are found on the mix and run through the noise alone and the target alone where those were given (shadow filtering); else only the noise in the pauses is measured (Zelinski 1988; McCowan and Bourlard 2003)."},
	{"", "Predicted", "For the weights in force, without a postfilter: in spatially white noise, 1/wᴴw, and in spherically isotropic noise, wᴴΓw with Γ = sin(kd)/kd (Van Trees 2002; Brandstein and Ward 2001)."},
	{"", "Predicted in the measured noise", "For the weights in force and the spatial covariance R of the noise stretches (at most 8 s of them): tr R/(M·wᴴRw), for a target where the beam points. A measured gain below it is a loss of target."},
	{"", "Speech-weighted SNR gain", "Band gains weighted with the band-importance function of ANSI S3.5 (Greenberg, Peterson and Zurek 1993). Not a measure of intelligibility."},
	{"", "A-weighted noise reduction", "Noise powers weighted with the A curve of IEC 61672-1:2013 before they are summed."},
	{"", "Directions", "Azimuth from the rig's right-hand axis towards its front, elevation from the horizontal up. Microphones are taken as omnidirectional in a free field: body, baffle, windshield and foam are not modelled."},
}
