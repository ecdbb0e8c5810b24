package report

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"strings"
	"testing"
)

// RFC 4180, read by encoding/csv: every cell against the JSON report.
func TestCSVCarriesTheFiguresOfTheReport(t *testing.T) {
	r := goodTake()
	r.Bands[2].SNRGainDB = nil
	r.Bands[2].SNRGainCI95 = nil
	var b bytes.Buffer
	if err := CSV(&b, r); err != nil {
		t.Fatal(err)
	}
	rows, err := csv.NewReader(&b).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var doc map[string]any
	if err := json.Unmarshal(reportText(t, r), &doc); err != nil {
		t.Fatal(err)
	}
	thirds, octaves := doc["bands"].([]any), doc["octave_bands"].([]any)
	if len(rows) != 1+len(thirds)+len(octaves) {
		t.Fatalf("%d rows, want a header, %d thirds, %d octaves", len(rows), len(thirds), len(octaves))
	}
	checked := 0
	for i, band := range append(thirds, octaves...) {
		row := rows[1+i]
		wantSet := "third-octave"
		if i >= len(thirds) {
			wantSet = "octave"
		}
		if row[0] != wantSet {
			t.Errorf("row %d is %s, want %s", i+1, row[0], wantSet)
		}
		fields := band.(map[string]any)
		for c, header := range rows[0] {
			if c == 0 {
				continue
			}
			var want any
			switch {
			case strings.HasSuffix(header, "_low_db"), strings.HasSuffix(header, "_high_db"):
				end := 0
				if strings.HasSuffix(header, "_high_db") {
					end = 1
				}
				key := strings.TrimSuffix(strings.TrimSuffix(header, "_low_db"), "_high_db") + "_db"
				if ci, ok := fields[key].([]any); ok {
					want = ci[end]
				} else if fields[key] != nil {
					t.Fatalf("%s is %v", key, fields[key])
				}
			case header == "flags":
				var flags []string
				for _, f := range fields["flags"].([]any) {
					flags = append(flags, f.(string))
				}
				if row[c] != strings.Join(flags, " ") {
					t.Errorf("row %d: flags %q, want %v", i+1, row[c], flags)
				}
				continue
			default:
				want = fields[header]
			}
			if want == nil {
				if row[c] != "" {
					t.Errorf("row %d, %s: %q, want an empty cell", i+1, header, row[c])
				}
				continue
			}
			text, err := json.Marshal(want)
			if err != nil {
				t.Fatal(err)
			}
			if row[c] != string(text) {
				t.Errorf("row %d, %s: %q, want %s", i+1, header, row[c], text)
			}
			checked++
		}
	}
	if checked < 600 {
		t.Errorf("only %d cells compared", checked)
	}
	for _, header := range rows[0][1:] {
		if header != "flags" && !strings.HasSuffix(header, "_hz") && !strings.HasSuffix(header, "_db") && !strings.HasSuffix(header, "_dbfs") {
			t.Errorf("column %s does not name its unit", header)
		}
	}
}

func TestCSVOfNothingIsAHeader(t *testing.T) {
	var b bytes.Buffer
	r := goodTake()
	r.Bands, r.OctaveBands = nil, nil
	if err := CSV(&b, r); err != nil {
		t.Fatal(err)
	}
	if strings.Count(b.String(), "\n") != 1 || !strings.HasPrefix(b.String(), "bands,nominal_hz,") {
		t.Errorf("got %q", b.String())
	}
}
