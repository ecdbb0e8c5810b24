package report

import (
	"encoding/csv"
	"io"
	"strings"

	"alidade/pkg/pipeline"
)

// bandColumn is one column of the table of bands. Its header is a key of the
// report, whose end is the unit.
type bandColumn struct {
	header string
	cell   func(b *pipeline.Band) string
}

func number(key string, v func(b *pipeline.Band) pipeline.Number) bandColumn {
	return bandColumn{key, func(b *pipeline.Band) string { return cellText(v(b), key) }}
}

func interval(key string, v func(b *pipeline.Band) pipeline.Interval) []bandColumn {
	end := func(i int, side string) bandColumn {
		header := strings.TrimSuffix(key, "_db") + "_" + side + "_db"
		return bandColumn{header, func(b *pipeline.Band) string {
			if ci := v(b); ci != nil {
				return cellText(&ci[i], key)
			}
			return ""
		}}
	}
	return []bandColumn{end(0, "low"), end(1, "high")}
}

func frequency(key string, v func(b *pipeline.Band) float64) bandColumn {
	return bandColumn{key, func(b *pipeline.Band) string { return Round(v(b), key) }}
}

// bandColumns are the columns after the first.
func bandColumns() []bandColumn {
	type band = pipeline.Band
	columns := []bandColumn{
		frequency("nominal_hz", func(b *band) float64 { return b.NominalHz }),
		frequency("centre_hz", func(b *band) float64 { return b.CentreHz }),
		frequency("low_hz", func(b *band) float64 { return b.LowHz }),
		frequency("high_hz", func(b *band) float64 { return b.HighHz }),
		number("noise_in_dbfs", func(b *band) pipeline.Number { return b.NoiseInDBFS }),
		number("noise_out_dbfs", func(b *band) pipeline.Number { return b.NoiseOutDBFS }),
		number("noise_reduction_db", func(b *band) pipeline.Number { return b.NoiseReductionDB }),
	}
	columns = append(columns, interval("noise_reduction_ci95_db", func(b *band) pipeline.Interval { return b.NoiseReductionCI95 })...)
	columns = append(columns,
		number("target_in_dbfs", func(b *band) pipeline.Number { return b.TargetInDBFS }),
		number("target_out_dbfs", func(b *band) pipeline.Number { return b.TargetOutDBFS }),
		number("target_change_db", func(b *band) pipeline.Number { return b.TargetChangeDB }))
	columns = append(columns, interval("target_change_ci95_db", func(b *band) pipeline.Interval { return b.TargetChangeCI95 })...)
	columns = append(columns,
		number("snr_in_db", func(b *band) pipeline.Number { return b.SNRInDB }),
		number("snr_out_db", func(b *band) pipeline.Number { return b.SNROutDB }),
		number("snr_gain_db", func(b *band) pipeline.Number { return b.SNRGainDB }))
	columns = append(columns, interval("snr_gain_ci95_db", func(b *band) pipeline.Interval { return b.SNRGainCI95 })...)
	return append(columns,
		number("snr_gain_over_best_microphone_db", func(b *band) pipeline.Number { return b.OverBestMicrophoneDB }),
		number("snr_gain_over_named_microphone_db", func(b *band) pipeline.Number { return b.OverNamedMicrophone }),
		number("predicted_white_db", func(b *band) pipeline.Number { return b.PredictedWhiteDB }),
		number("predicted_diffuse_db", func(b *band) pipeline.Number { return b.PredictedDiffuseDB }),
		number("predicted_measured_noise_db", func(b *band) pipeline.Number { return b.PredictedInNoiseDB }),
		bandColumn{"flags", func(b *band) string { return strings.Join(b.Flags, " ") }})
}

// CSV writes the table of bands: a header line, the one-third octaves, then the
// octaves, told apart by the first column. A quantity that could not be
// measured is an empty cell. Flags are separated by blanks. Levels in dB SPL are
// the last columns, where the rig is calibrated. The figures are
// those of the JSON report.
func CSV(w io.Writer, r *pipeline.Result) error {
	columns := bandColumns()
	if r.Rig.FullScaleDBSPL != nil {
		type band = pipeline.Band
		columns = append(columns,
			number("noise_in_db_spl", func(b *band) pipeline.Number { return b.NoiseInDBSPL }),
			number("noise_out_db_spl", func(b *band) pipeline.Number { return b.NoiseOutDBSPL }),
			number("target_in_db_spl", func(b *band) pipeline.Number { return b.TargetInDBSPL }),
			number("target_out_db_spl", func(b *band) pipeline.Number { return b.TargetOutDBSPL }))
	}
	out := csv.NewWriter(w)
	row := []string{"bands"}
	for _, c := range columns {
		row = append(row, c.header)
	}
	if err := out.Write(row); err != nil {
		return err
	}
	for _, set := range []struct {
		name  string
		bands []pipeline.Band
	}{{"third-octave", r.Bands}, {"octave", r.OctaveBands}} {
		for i := range set.bands {
			row = append(row[:0], set.name)
			for _, c := range columns {
				row = append(row, c.cell(&set.bands[i]))
			}
			if err := out.Write(row); err != nil {
				return err
			}
		}
	}
	out.Flush()
	return out.Error()
}
