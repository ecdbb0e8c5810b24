//go:build linux

package main

import (
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"
)

// tagged is a good take whose bext and iXML name these things; an empty date
// leaves bext out. The fields lie where EBU Tech 3285 puts them.
func tagged(channels int, originator, date, scene string) []byte {
	parts := []body{format(1, channels, 48000, 16)}
	if date != "" {
		bext := make([]byte, 602)
		copy(bext, "evening/two")
		copy(bext[256:], originator)
		copy(bext[320:], date)
		copy(bext[330:], "22:10:00")
		parts = append(parts, body{"bext", -1, bext})
	}
	if scene != "" {
		parts = append(parts, body{"iXML", -1, []byte("<BWFXML><SCENE>" + scene + "</SCENE><TAKE>4</TAKE></BWFXML>")})
	}
	return riff("RIFF", append(parts, hiss(channels, 9600))...)
}

func TestANightChoosesRigsAndNamesByMetadata(t *testing.T) {
	y := newYard(t)
	for _, name := range []string{"north", "south", "six", "rest"} {
		channels := 4
		if name == "six" {
			channels = 6
		}
		y.put("rigs/"+name+".yaml", []byte(fmt.Sprintf("rig: %s\nline: {count: %d, spacing_mm: 40}\n", name, channels)))
	}
	info := body{"LIST", -1, append([]byte("INFOICRD\x0b\x00\x00\x00"), "2026-05-03\x00\x00"...)}
	y.put("takes/a.wav", tagged(4, "north mast", "2026-05-01", "1A"))
	y.put("takes/b.wav", tagged(4, "south mast", "2026:05:02", "1A"))
	y.put("takes/c.wav", tagged(6, "north mast", "2026-05-02", "1A"))
	y.put("takes/d.wav", tagged(4, "", "", "1B"))
	y.put("takes/e.wav", riff("RIFF", format(1, 4, 48000, 16), info, hiss(4, 9600)))
	y.put("takes/f.wav", tagged(4, "south mast", "2026-13-02", "2"))
	y.put("takes/broken.wav", []byte("RIFF"))
	job := `takes: ["takes/*.wav"]
steer: {toward: "60,10"}
limits: {fail_on: never}
outputs: {name: "{date}/{rig}/{direction}/{file}", reports: [json]}
rigs:
  - {match: "*.wav", metadata: {channels: 6}, rig: rigs/six.yaml}
  - {metadata: {originator: "north*", scene: "1?", description: "evening/*"}, rig: rigs/north.yaml}
  - {metadata: {originator: "south*", sample_rate_hz: 48000}, rig: rigs/south.yaml}
`
	// Those that say nothing of themselves fit none.
	y.put("night.yaml", []byte(job))
	if code, _, errs := y.batch("night.yaml"); code != 2 || !strings.Contains(errs, "takes/d.wav: no entry of rigs matches it, and no rig is given for the others") {
		t.Errorf("exit code %d\n%s", code, errs)
	}
	y.put("night.yaml", []byte(job+"rig: rigs/rest.yaml\n"))
	code, out, errs := y.batch("night.yaml", "--quiet")
	if code != 3 || !strings.Contains(out, "7 takes, 6 done, 0 missed a limit, 1 failed") {
		t.Fatalf("exit code %d\n%s%s", code, out, errs)
	}
	var tracks []string
	for name := range y.tree("out") {
		if strings.HasSuffix(name, ".wav") {
			tracks = append(tracks, name)
		}
	}
	slices.Sort(tracks)
	want := []string{
		"2026-05-01/north/az+060.0_el+10.0/a/a_az+060.0_el+10.0.wav", "2026-05-02/six/az+060.0_el+10.0/c/c_az+060.0_el+10.0.wav",
		"2026-05-02/south/az+060.0_el+10.0/b/b_az+060.0_el+10.0.wav", "2026-05-03/rest/az+060.0_el+10.0/e/e_az+060.0_el+10.0.wav",
		"undated/rest/az+060.0_el+10.0/d/d_az+060.0_el+10.0.wav", "undated/south/az+060.0_el+10.0/f/f_az+060.0_el+10.0.wav",
	}
	if !slices.Equal(tracks, want) {
		t.Errorf("tracks\n%s\nwant\n%s", strings.Join(tracks, "\n"), strings.Join(want, "\n"))
	}
	// A file that says nothing because it cannot be read does not end the night,
	// even where no rig is given for it.
	y.check(os.Remove(y.at("takes/d.wav")))
	y.check(os.Remove(y.at("takes/e.wav")))
	y.put("night.yaml", []byte(job))
	if code, out, errs := y.batch("night.yaml", "--quiet", "--out", "again"); code != 3 || !strings.Contains(out, "5 takes, 4 done, 0 missed a limit, 1 failed") {
		t.Errorf("exit code %d\n%s%s", code, out, errs)
	}
}
