package pipeline

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"

	"alidade/pkg/rig"
)

// names are where the outputs of a take go.
type names struct {
	track     string
	reference string // of --with-reference
	json, csv string
	html      string
}

// outputNames follows --out: a folder if it exists or ends in a separator,
// else the track's name; without --out the track stands beside the take.
func outputNames(takePath, out string, toward string) (names, error) {
	base := strings.TrimSuffix(filepath.Base(takePath), filepath.Ext(takePath)) + toward + ".wav"
	track := filepath.Join(filepath.Dir(takePath), base)
	if out != "" {
		info, err := os.Stat(out)
		switch {
		case err == nil && info.IsDir():
			track = filepath.Join(out, base)
		case strings.HasSuffix(out, "/") || strings.HasSuffix(out, string(filepath.Separator)):
			if err := os.MkdirAll(out, 0o777); err != nil {
				return names{}, unwritable(out, err)
			}
			track = filepath.Join(out, base)
		default:
			track = out
		}
	}
	stem := strings.TrimSuffix(track, filepath.Ext(track))
	if !strings.EqualFold(filepath.Ext(track), ".wav") {
		stem = track
	}
	return names{
		track:     track,
		reference: stem + ".reference.wav",
		json:      stem + ".report.json",
		csv:       stem + ".bands.csv",
		html:      stem + ".html",
	}, nil
}

// report is the name of a report file.
func (n names) report(kind string) string {
	switch kind {
	case ReportCSV:
		return n.csv
	case ReportHTML:
		return n.html
	}
	return n.json
}

// towardName is the part of an output's name that says where the beam points.
func (s *settings) towardName() string {
	if s.aim != aimGiven {
		return s.aimName()
	}
	if s.point != nil {
		return pointName(*s.point)
	}
	return directionName(*s.direction)
}

func directionName(d rig.Direction) string {
	name := fmt.Sprintf("_az%+06.1f", rounded(d.AzimuthDeg(), 1))
	if el := rounded(d.ElevationDeg(), 1); el != 0 {
		name += fmt.Sprintf("_el%+05.1f", el)
	}
	return name
}

func pointName(p rig.Point) string {
	return fmt.Sprintf("_x%.2f_y%.2f_z%.2f", rounded(p.X, 2), rounded(p.Y, 2), rounded(p.Z, 2))
}

// rounded returns v rounded to that many decimals, and never a negative zero.
func rounded(v float64, decimals int) float64 {
	p := math.Pow10(decimals)
	return math.Round(v*p)/p + 0
}
