package report

import (
	"encoding/csv"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"alidade/pkg/pipeline"
)

// ScanRows is the most lines of directions that ScanSummary draws.
const ScanRows = 46

// ScanSummary writes a scan for a person at a terminal of the given width in
// cells (80 where it is 0, never less than 60): the loudest direction and that
// of the largest gain, then the level against the angle as a picture, a line an
// azimuth, or where there are several elevations a field of them.
func ScanSummary(w io.Writer, r *pipeline.ScanResult, width int) error {
	if width == 0 {
		width = 80
	}
	width = max(width, 60)
	first := fmt.Sprintf("%s, %d directions", clean(r.Rig.Name), len(r.Angles))
	if p := r.Loudest; p != nil {
		first += fmt.Sprintf(": loudest at %s, %s dBFS", placeWords(p), levelText(p.LevelDBFS))
	}
	if p := r.BestGain; p != nil {
		first += fmt.Sprintf("; largest SNR gain at %s, %s dB", placeWords(p), levelText(p.SNRGainDB))
	} else {
		first += "; gain not measured"
	}
	lines := wrap(first, width, "  ", 3)
	if l := r.Reference.LevelDBFS; l != nil {
		lines = append(lines, wrap(fmt.Sprintf("mean of the microphones %s dBFS; %s, taper %s", levelText(l), r.Beam.Weights, r.Beam.Taper), width, "  ", 2)...)
	}
	if a := r.Beam.Ambiguity; a != "" {
		lines = append(lines, wrap(sentence(clean(a)), width, "  ", 3)...)
	}
	lines = append(lines, "")
	if rows, columns := scanGrid(r); len(rows) > 1 && len(rows)*len(columns) == len(r.Angles) {
		lines = append(lines, scanField(r, width)...)
	} else {
		lines = append(lines, scanBars(r, width)...)
	}
	tracks, kept := 0, 0
	for _, a := range r.Angles {
		if a.Track != nil {
			tracks++
			if a.Track.Kept {
				kept++
			}
		}
	}
	if tracks > 0 {
		lines = append(lines, "", fmt.Sprintf("%d tracks, %d of them there already", tracks, kept))
	}
	for _, f := range r.Findings {
		lines = append(lines, wrap(string(f.Severity)+": "+clean(f.Message), width, "  ", 4)...)
	}
	_, err := io.WriteString(w, strings.Join(lines, "\n")+"\n")
	return err
}

// placeWords is a direction that stands out.
func placeWords(p *pipeline.ScanPlace) string { return angleWords(p.AzimuthDeg, p.ElevationDeg) }

// angleWords is an azimuth, with the elevation where there is one.
func angleWords(azimuth, elevation float64) string {
	text := decimals(azimuth, 1) + "°"
	if math.Abs(elevation) >= 0.05 {
		text += fmt.Sprintf(" elevation %s°", decimals(elevation, 1))
	}
	return text
}

// scanGrid are the elevations of a scan from the top, and its azimuths.
func scanGrid(r *pipeline.ScanResult) (rows, columns []float64) {
	for _, a := range r.Angles {
		rows, columns = append(rows, a.ElevationDeg), append(columns, a.AzimuthDeg)
	}
	slices.Sort(rows)
	slices.Sort(columns)
	rows, columns = slices.Compact(rows), slices.Compact(columns)
	slices.Reverse(rows)
	return rows, columns
}

// levelRange is the lowest and the highest level of a scan, false without any.
func levelRange(r *pipeline.ScanResult) (low, high float64, ok bool) {
	low, high = math.Inf(1), math.Inf(-1)
	for _, a := range r.Angles {
		if a.LevelDBFS != nil {
			low, high = math.Min(low, *a.LevelDBFS), math.Max(high, *a.LevelDBFS)
		}
	}
	return low, high, low <= high
}

// scanBars draws a line a direction, or where there are too many the loudest of
// as many neighbours as it takes.
func scanBars(r *pipeline.ScanResult, width int) []string {
	low, high, ok := levelRange(r)
	if !ok {
		return []string{"no level could be measured"}
	}
	each := (len(r.Angles) + ScanRows - 1) / ScanRows
	rows, _ := scanGrid(r)
	label, heading := 9, "  azimuth   dBFS   gain"
	if len(rows) > 1 {
		label, heading = 15, "      direction   dBFS   gain"
	}
	lines := []string{heading}
	if each > 1 {
		lines[0] += fmt.Sprintf("   (the loudest of %d neighbours each)", each)
	}
	room := width - 16 - label
	name := func(a pipeline.ScanAngle) string {
		if len(rows) > 1 {
			return decimals(a.AzimuthDeg, 1) + "," + decimals(a.ElevationDeg, 1)
		}
		return decimals(a.AzimuthDeg, 1)
	}
	for from := 0; from < len(r.Angles); from += each {
		group := r.Angles[from:min(from+each, len(r.Angles))]
		a := slices.MaxFunc(group, func(a, b pipeline.ScanAngle) int {
			switch {
			case a.LevelDBFS == nil && b.LevelDBFS == nil:
				return 0
			case a.LevelDBFS == nil || b.LevelDBFS != nil && *a.LevelDBFS < *b.LevelDBFS:
				return -1
			case b.LevelDBFS == nil || *a.LevelDBFS > *b.LevelDBFS:
				return 1
			}
			return 0
		})
		bar := 0
		if a.LevelDBFS != nil {
			bar = 1 + int(math.Round(float64(room-1)*(*a.LevelDBFS-low)/math.Max(high-low, 1e-9)))
		}
		if high-low < 0.05 {
			bar = 1
		}
		lines = append(lines, strings.TrimRight(fmt.Sprintf("%*s %6s %6s %s", label, name(a), levelText(a.LevelDBFS), levelText(a.SNRGainDB), strings.Repeat("#", bar)), " "))
	}
	return append(lines, fmt.Sprintf("%*s%s dBFS to %s dBFS", label+16, "", decimals(low, 1), decimals(high, 1)))
}

// shades are levels from the lowest to the highest.
const shades = " .:-=+*#%@"

// scanField draws the directions as a field, elevations upwards.
func scanField(r *pipeline.ScanResult, width int) []string {
	low, high, ok := levelRange(r)
	if !ok {
		return []string{"no level could be measured"}
	}
	rows, columns := scanGrid(r)
	const margin = 8
	tall, wide := (len(rows)+ScanRows-1)/ScanRows, (len(columns)+width-margin-2)/(width-margin-1)
	field := map[[2]int]float64{}
	for _, a := range r.Angles {
		if a.LevelDBFS == nil {
			continue
		}
		at := [2]int{slices.Index(rows, a.ElevationDeg) / tall, slices.Index(columns, a.AzimuthDeg) / wide}
		if v, ok := field[at]; !ok || *a.LevelDBFS > v {
			field[at] = *a.LevelDBFS
		}
	}
	lines := wrap(fmt.Sprintf("elevation up, azimuth %s° to %s° to the right; from %s dBFS (blank) to %s dBFS (@)",
		decimals(columns[0], 1), decimals(columns[len(columns)-1], 1), decimals(low, 1), decimals(high, 1)), width, "  ", 2)
	for y := 0; y*tall < len(rows); y++ {
		var b strings.Builder
		fmt.Fprintf(&b, "%6s |", decimals(rows[y*tall], 1))
		for x := 0; x*wide < len(columns); x++ {
			v, ok := field[[2]int{y, x}]
			if !ok {
				b.WriteByte(' ')
				continue
			}
			b.WriteByte(shades[int(math.Min(9, math.Floor(10*(v-low)/math.Max(high-low, 1e-9))))])
		}
		lines = append(lines, cut(strings.TrimRight(b.String(), " "), width))
	}
	return lines
}

// ScanCSV writes a scan as a table: a row each direction and band, before them
// one for all bands together, whose nominal_hz is empty. What could not be
// measured is an empty cell; flags are separated by blanks.
func ScanCSV(w io.Writer, r *pipeline.ScanResult) error {
	out := csv.NewWriter(w)
	if err := out.Write([]string{"azimuth_deg", "elevation_deg", "nominal_hz", "centre_hz", "level_dbfs", "noise_reduction_db", "target_change_db",
		"snr_gain_db", "snr_gain_ci95_low_db", "snr_gain_ci95_high_db", "flags"}); err != nil {
		return err
	}
	ends := func(ci pipeline.Interval) (low, high string) {
		if ci == nil {
			return "", ""
		}
		return cellText(&ci[0], "_db"), cellText(&ci[1], "_db")
	}
	for _, a := range r.Angles {
		azimuth, elevation := Round(a.AzimuthDeg, "_deg"), Round(a.ElevationDeg, "_deg")
		low, high := ends(a.SNRGainCI95)
		if err := out.Write([]string{azimuth, elevation, "", "", cellText(a.LevelDBFS, "_dbfs"), cellText(a.NoiseReductionDB, "_db"),
			cellText(a.TargetChangeDB, "_db"), cellText(a.SNRGainDB, "_db"), low, high, ""}); err != nil {
			return err
		}
		for _, b := range a.Bands {
			low, high := ends(b.SNRGainCI95)
			if err := out.Write([]string{azimuth, elevation, Round(b.NominalHz, "_hz"), Round(b.CentreHz, "_hz"), cellText(b.LevelDBFS, "_dbfs"),
				cellText(b.NoiseReductionDB, "_db"), cellText(b.TargetChangeDB, "_db"), cellText(b.SNRGainDB, "_db"), low, high, strings.Join(b.Flags, " ")}); err != nil {
				return err
			}
		}
	}
	out.Flush()
	return out.Error()
}
