package report

import (
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"alidade/pkg/pipeline"
)

// ScanHTML writes the page of a scan: one file that needs nothing else. Level
// and gain are drawn over the azimuths of the elevation where the take is
// loudest; the table has every direction.
func ScanHTML(w io.Writer, r *pipeline.ScanResult) error {
	about := rigFacts(r.Rig, pipeline.Steer{Ambiguity: r.Beam.Ambiguity})
	about.Take, about.Findings, about.Segments = r.Take, r.Findings, r.Segments
	if l := r.Loudest; l != nil {
		about.Steer.Kind, about.Steer.AzimuthDeg, about.Steer.ElevationDeg = "scanned", l.AzimuthDeg, l.ElevationDeg
	}
	v := &plainView{
		Version: clean(r.Version), Name: shorten(takeName(about), 120), Facts: shorten(clean(r.Rig.Name), 120) + ", " + facts(about),
		Heading: scanHeading(r), Lead: scanLead(r), Quiet: sentence(shorten(clean(r.Beam.Ambiguity), 400)), Stamp: stamp(about),
		Findings: findingViews(about), NoFindings: "No findings: nothing about this take or its rig stood out.",
		MadeKind: "Enough to run it again",
	}
	about.Pictures = &pipeline.Pictures{Scan: scanPicture(r)}
	section := plainSection{ID: "scan", Heading: "What is heard from where", Kind: "One analysis of the take, steered to every direction", Table: scanTable(r)}
	section.Rig = rigPicture(about)
	if section.Rig != nil && r.Loudest != nil {
		section.Rig.Caption = strings.Replace(section.Rig.Caption, "The line is the steered direction from the reference point.", "The line points to the loudest direction.", 1)
	}
	charts, err := scanCharts(about)
	if err != nil {
		return fmt.Errorf("report: page: %w", err)
	}
	section.Charts = charts
	v.Sections = append(v.Sections, section)
	if c := segmentChart(about); c != nil {
		v.Sections = append(v.Sections, plainSection{ID: "time", Heading: timeHeading(about), Kind: "Seconds from the take's first frame", Charts: []chart{*c}})
	}
	for _, m := range made(&pipeline.Result{Version: r.Version, Take: r.Take, Rig: r.Rig, CreatedUTC: r.CreatedUTC}) {
		if m.Name != "Direction" && m.Name != "Method" && m.Name != "Weights" {
			v.Made = append(v.Made, m)
		}
	}
	v.Made = append(v.Made, madeOf("Weights", r.Beam.Weights+", taper "+r.Beam.Taper, "Method of the tracks", r.Beam.Method)...)
	v.Definitions = definitionsOf("Levels", "Bands", "Reference", "SNR gain", "Noise reduction", "Target change", "Directions")
	return v.write(w)
}

func scanHeading(r *pipeline.ScanResult) string {
	if r.Loudest == nil {
		return fmt.Sprintf("Scanned %d directions", len(r.Angles))
	}
	return "Loudest from " + placeWords(r.Loudest)
}

func scanLead(r *pipeline.ScanResult) []string {
	var list []string
	if l := r.Loudest; l != nil && l.LevelDBFS != nil {
		text := fmt.Sprintf("Of %d directions the beam hears most from %s: %s dBFS.", len(r.Angles), placeWords(l), decimals(*l.LevelDBFS, 1))
		if r.Reference.LevelDBFS != nil {
			text += fmt.Sprintf(" The mean microphone has %s dBFS.", decimals(*r.Reference.LevelDBFS, 1))
		}
		list = append(list, text)
	}
	if b := r.BestGain; b != nil && b.SNRGainDB != nil {
		list = append(list, fmt.Sprintf("The wanted sound stands out most toward %s: the SNR gain is %s dB there.", placeWords(b), decimals(*b.SNRGainDB, 1)))
	} else {
		list = append(list, "No gain is known in any direction; the findings say why.")
	}
	return list
}

// scanPicture is the scan over azimuth at the elevation of the loudest
// direction; nil where fewer than two azimuths stand there.
func scanPicture(r *pipeline.ScanResult) *pipeline.Scan {
	elevation := 0.0
	if r.Loudest != nil {
		elevation = r.Loudest.ElevationDeg
	} else if len(r.Angles) > 0 {
		elevation = r.Angles[0].ElevationDeg
	}
	var list []pipeline.ScanAngle
	for _, a := range r.Angles {
		if math.Abs(a.ElevationDeg-elevation) < 1e-6 {
			list = append(list, a)
		}
	}
	slices.SortStableFunc(list, func(a, b pipeline.ScanAngle) int {
		switch {
		case a.AzimuthDeg < b.AzimuthDeg:
			return -1
		case a.AzimuthDeg > b.AzimuthDeg:
			return 1
		}
		return 0
	})
	list = slices.CompactFunc(list, func(a, b pipeline.ScanAngle) bool { return a.AzimuthDeg == b.AzimuthDeg })
	if len(list) < 2 {
		return nil
	}
	p := &pipeline.Scan{}
	even := true
	step := list[1].AzimuthDeg - list[0].AzimuthDeg
	low, high := math.Inf(1), math.Inf(-1)
	for i, a := range list {
		p.AnglesDeg = append(p.AnglesDeg, a.AzimuthDeg)
		p.LevelDBFS = append(p.LevelDBFS, a.LevelDBFS)
		p.SNRGainDB = append(p.SNRGainDB, a.SNRGainDB)
		even = even && (i == 0 || math.Abs(a.AzimuthDeg-list[i-1].AzimuthDeg-step) < 1e-6) && len(a.Bands) == len(list[0].Bands)
		for _, b := range a.Bands {
			if b.LevelDBFS != nil {
				low, high = math.Min(low, *b.LevelDBFS), math.Max(high, *b.LevelDBFS)
			}
		}
	}
	if !even || low > high {
		return p // the map needs even steps
	}
	const most = 60 // dB on the scale
	high = 5 * math.Ceil(high/5)
	low = math.Max(5*math.Floor(low/5), high-most)
	if high == low {
		low -= 5
	}
	for _, b := range list[0].Bands {
		p.NominalHz = append(p.NominalHz, b.NominalHz)
	}
	p.Levels = pipeline.Levels{Rows: len(p.NominalHz), Columns: len(list), LowDB: low, HighDB: high, Bytes: make([]byte, len(p.NominalHz)*len(list))}
	for column, a := range list {
		for row, b := range a.Bands {
			if b.LevelDBFS != nil {
				p.Levels.Bytes[row*len(list)+column] = byte(math.Round(255 * math.Min(1, math.Max(0, (*b.LevelDBFS-low)/(high-low)))))
			}
		}
	}
	return p
}

// mostScanRows bounds the table of a page; the JSON form has all.
const mostScanRows = 1000

// scanTable is the figures of each direction.
func scanTable(r *pipeline.ScanResult) *plainTableView {
	t := &plainTableView{ID: "directions", Name: "Figures by direction", Fold: "Figures by direction", Caption: "All one-third octaves together. A dash: not measured.",
		Head: []string{"Azimuth, °", "Elevation, °", "Level, dBFS", "Noise reduction, dB", "Target change, dB", "SNR gain, dB", "interval"}}
	for i, a := range r.Angles {
		if i == mostScanRows {
			t.Caption += fmt.Sprintf(" The first %d of %d directions.", mostScanRows, len(r.Angles))
			break
		}
		interval := "–"
		if ci := a.SNRGainCI95; ci != nil {
			interval = Round(ci[0], "x_db") + " to " + Round(ci[1], "x_db")
		}
		t.Rows = append(t.Rows, []string{Round(a.AzimuthDeg, "x_deg"), Round(a.ElevationDeg, "x_deg"), dash(cellText(a.LevelDBFS, "x_dbfs")),
			dash(cellText(a.NoiseReductionDB, "x_db")), dash(cellText(a.TargetChangeDB, "x_db")), dash(cellText(a.SNRGainDB, "x_db")), interval})
	}
	return t
}
