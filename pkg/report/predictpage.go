package report

import (
	"fmt"
	"io"
	"math"
	"strings"

	"alidade/pkg/pipeline"
)

// PredictionHTML writes the page of a prediction: one file that needs nothing
// else. The picture of the response is drawn where the prediction has one.
func PredictionHTML(w io.Writer, p *pipeline.Prediction) error {
	facts := rigFacts(p.Rig, p.Steer)
	for _, b := range p.Bands {
		facts.Bands = append(facts.Bands, pipeline.Band{
			NominalHz: b.NominalHz, CentreHz: b.CentreHz, LowHz: b.LowHz, HighHz: b.HighHz,
			PredictedWhiteDB: b.PredictedWhiteDB, PredictedDiffuseDB: b.PredictedDiffuseDB, Flags: b.Flags,
		})
	}
	facts.Pictures = &pipeline.Pictures{Response: p.Picture}
	for _, f := range p.Findings {
		// Bands by their names.
		list := make([]float64, len(f.Bands))
		for i, hz := range f.Bands {
			list[i] = hz
			for _, b := range p.Bands {
				if math.Abs(hz-b.CentreHz) < 1e-3*hz {
					list[i] = b.NominalHz
				}
			}
		}
		f.Bands = list
		facts.Findings = append(facts.Findings, f)
	}
	v := &plainView{
		Version: clean(p.Version), Name: shorten(clean(p.Rig.Name), 120), Stamp: stamp(facts),
		Facts:      fmt.Sprintf("%d of %d microphones, predicted: no take is in it", p.Rig.MicrophonesUsed, len(p.Rig.Mics)),
		Heading:    "What this rig can do toward " + shortDirection(facts),
		Quiet:      sentence(shorten(clean(p.Steer.Ambiguity), 400)),
		Findings:   findingViews(facts),
		NoFindings: "No findings.",
		MadeKind:   "From the filters as a run would build them and the places of the microphones alone",
	}
	for _, a := range p.Answer {
		v.Lead = append(v.Lead, shorten(clean(a), 400))
	}
	if len(v.Lead) > 3 {
		v.Lead = v.Lead[:3]
	}
	bands := plainSection{ID: "bands", Heading: bandHeading(facts), Kind: "Gain in each one-third octave band, for noise of even spectrum in it", Rig: rigPicture(facts)}
	for _, c := range bandCharts(facts) {
		c.Key = "predicted"
		c.Caption = "Diamonds are predicted for noise from everywhere, rings for noise that differs from microphone to microphone."
		bands.Charts = append(bands.Charts, c)
	}
	for _, note := range flagNotes {
		if where := flaggedRanges(facts.Bands, note.flag); where != "" {
			bands.Flags = append(bands.Flags, flagView{note.flag, where, sentence(note.long) + "."})
		}
	}
	v.Sections = append(v.Sections, bands)
	angles := plainSection{ID: "angles", Heading: "What the beam lets in, and from where", Kind: "Microphones taken as omnidirectional in a free field", Polars: polarCharts(facts),
		Note: clean(reachWords(p)), Table: frequencyTable(p)}
	c, err := responseChart(facts)
	if err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	if c != nil {
		angles.Charts = append(angles.Charts, *c)
	}
	v.Sections = append(v.Sections, angles)
	if t := p.Tolerance; t != nil {
		v.Sections = append(v.Sections, plainSection{ID: "tolerance", Heading: "What errors of the rig do", Kind: "Rigs drawn at random that differ from the rig file", Note: clean(toleranceWords(t)), Table: tolerancePage(p)})
	}
	v.Made = madeOf(
		"Rig", fmt.Sprintf("%s, a %s rig", p.Rig.Name, p.Rig.Shape), "Rig file, SHA-256", p.Rig.SHA256,
		"Direction", directionWords(facts), "Method", p.Steer.Method, "Weights", p.Steer.Weights+", taper "+p.Steer.Taper,
		"Air and speed of sound", fmt.Sprintf("%s: %s m/s by %s", p.Rig.Air, decimals(p.SpeedOfSoundMS, 2), p.Rig.SpeedRule),
		"Rate", fmt.Sprintf("%d Hz", p.SampleRateHz), "Program", "alidade "+p.Version)
	v.Definitions = append(definitionsOf("Bands", "Predicted", "Directions"),
		named{Name: "Beamwidth", Value: "The angle between the half-power points on both sides of the steered direction; not defined where one of them does not exist."},
		named{Name: "Directivity index", Value: "10·log10 of the response in the steered direction over its mean over the sphere, both as power (Van Trees 2002, section 2.6)."},
		named{Name: "White noise gain", Value: "10·log10 of the response in the steered direction over the sum of the squared weights (Van Trees 2002, section 2.6)."},
		named{Name: "Grating lobe", Value: "Of a line of equal spacings d a lobe at cos θ = cos θ0 - mλ/d (Van Trees 2002, section 2.4); of other rigs a lobe of at least half the power of the steered direction."})
	return v.write(w)
}

// frequencyTable is the figures at each frequency.
func frequencyTable(p *pipeline.Prediction) *plainTableView {
	t := &plainTableView{ID: "frequencies", Name: "Figures by frequency", Fold: "Figures by frequency", Caption: "Angles in degrees, levels in dB. A dash: not defined.",
		Head: []string{"Frequency", "Beamwidth", "First nulls", "Highest side lobe", "Side lobes", "Grating lobes", "Directivity index", "White noise gain", "Diffuse noise reduction", "Near field up to, m"}}
	name := nominalOf(p)
	for _, f := range p.Frequencies {
		side := "none"
		if f.HighestSideLobeDB != nil {
			side = Round(*f.HighestSideLobeDB, "x_db")
		}
		t.Rows = append(t.Rows, []string{name(f.Hz), dash(cellText(f.BeamwidthDeg, "x_deg")), degreesList(f.FirstNullsDeg, 4), side, fmt.Sprint(f.SideLobeCount),
			degreesList(f.GratingLobesDeg, 4), dash(cellText(f.DirectivityIndexDB, "x_db")), dash(cellText(f.WhiteNoiseGainDB, "x_db")), dash(cellText(f.DiffuseGainDB, "x_db")), dash(cellText(f.NearFieldReachM, "x_db"))})
	}
	return t
}

// dash stands where a figure is not defined.
func dash(text string) string {
	if strings.TrimSpace(text) == "" {
		return "–"
	}
	return text
}

// tolerancePage is what errors do at each frequency.
func tolerancePage(p *pipeline.Prediction) *plainTableView {
	t := &plainTableView{ID: "errors", Name: "Errors by frequency", Caption: "dB re the steered direction without errors.",
		Head: []string{"Frequency", "Steered, mean", "5 to 95 %", "Highest side lobe, mean", "5 to 95 %", "Floor of errors"}}
	name := nominalOf(p)
	span := func(l *pipeline.TolerantLevel) (mean, percent string) {
		if l == nil {
			return "none", "none"
		}
		return levelText(l.ExpectedDB), levelText(l.P5DB) + " to " + levelText(l.P95DB)
	}
	for i := range p.Tolerance.Frequencies {
		f := &p.Tolerance.Frequencies[i]
		mean, percent := span(&f.Steered)
		side, sidePercent := span(f.HighestSideLobe)
		t.Rows = append(t.Rows, []string{name(f.Hz), mean, percent, side, sidePercent, levelText(f.ErrorFloorDB)})
	}
	return t
}
