//go:build linux

package main

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
	"testing"
)

// sounding is a take of four channels, 16 bits, as its samples by frame: a
// source of noise at 60° of a line of 50 mm spacing, and a hiss of each
// microphone's own.
func sounding(frames int) [][4]int16 {
	rng := rand.New(rand.NewPCG(4, 60))
	const up, spacing, c = 16, 0.05, 343.2
	source := make([]float64, (frames+64)*up)
	var low [2]float64
	for i := range source { // smooth enough to be read between its samples
		low[0] += 0.06 * (rng.NormFloat64() - low[0])
		low[1] += 0.06 * (low[0] - low[1])
		source[i] = low[1]
	}
	list := make([][4]int16, frames)
	for n := range list {
		for m := range 4 {
			late := -(float64(m) - 1.5) * spacing * math.Cos(math.Pi/3) / c * 48000
			x := source[int(math.Round((float64(n)+32-late)*up))]
			list[n][m] = int16(math.Round(20000*x + 20*rng.NormFloat64()))
		}
	}
	return list
}

// cutOut is the WAV file of some channels and frames of a take. Extra chunks
// come before the sound.
func cutOut(take [][4]int16, channels []int, from, to int, extra ...body) []byte {
	var b []byte
	for _, f := range take[from:to] {
		for _, ch := range channels {
			b = le.AppendUint16(b, uint16(f[ch]))
		}
	}
	parts := append([]body{format(1, len(channels), 48000, 16)}, extra...)
	return riff("RIFF", append(parts, body{"data", -1, b})...)
}

// withoutFiles takes out of a document what names files, and the time of day
// that only some of them know.
func withoutFiles(t *testing.T, text string) map[string]any {
	t.Helper()
	var doc map[string]any
	if err := json.Unmarshal([]byte(text), &doc); err != nil {
		t.Fatalf("%v\n%s", err, text)
	}
	for _, key := range []string{"take", "output", "provenance"} {
		delete(doc, key)
	}
	if s, ok := doc["segments"].(map[string]any); ok {
		delete(s, "noise_time")
		delete(s, "target_time")
	}
	if list, ok := doc["findings"].([]any); ok {
		doc["findings"] = slices.DeleteFunc(list, func(f any) bool {
			code := f.(map[string]any)["code"]
			return code == "set-found" || code == "chain-found" || code == "metadata-left-out"
		})
	}
	return doc
}

// A take is one take in whatever files it comes: as one, as a set of one-channel
// files by pattern, list or metadata, as a chain that a recorder split, and as a
// set of chains. Steer, locate, check and batch say the same of it.
func TestEveryCommandTakesSetsAndChains(t *testing.T) {
	const frames, first, second = 96000, 30000, 41001
	take := sounding(frames)
	y := newYard(t)
	all := []int{0, 1, 2, 3}
	y.put("whole.wav", cutOut(take, all, 0, frames))
	ends := []int{0, first, first + second, frames}
	for k := range 3 {
		// The reference counts on: EBU Tech 3285.
		bext := make([]byte, 602)
		copy(bext[320:], "2026-05-0110:00:00")
		le.PutUint64(bext[338:], uint64(36000*48000+ends[k]))
		y.put(fmt.Sprintf("split_%03d.wav", k+1), cutOut(take, all, ends[k], ends[k+1], body{"bext", -1, bext}))
	}
	for ch := range 4 {
		ixml := fmt.Sprintf("<BWFXML><FILE_SET><TOTAL_FILES>4</TOTAL_FILES><FAMILY_UID>F7</FAMILY_UID><FILE_SET_INDEX>%d</FILE_SET_INDEX></FILE_SET></BWFXML>", ch+1)
		y.put(fmt.Sprintf("set/s%d.wav", ch+1), cutOut(take, []int{ch}, 0, frames))
		y.put(fmt.Sprintf("family/%c.wav", 'd'-byte(ch)), cutOut(take, []int{ch}, 0, frames, body{"iXML", -1, []byte(ixml)}))
		for k := range 3 {
			y.put(fmt.Sprintf("both/c%d_%03d.wav", ch+1, k+1), cutOut(take, []int{ch}, ends[k], ends[k+1]))
		}
	}
	shapes := map[string][]string{
		"set by pattern": {"set/s{ch}.wav"}, "set by list": {"--set", "set/s1.wav", "set/s2.wav", "set/s3.wav", "set/s4.wav"},
		"set by metadata": {"--find-set", "family/b.wav"}, "chain by list": {"--chain", "split_001.wav", "split_002.wav", "split_003.wav"},
		"chain that is found": {"--find-chain", "split_001.wav"}, "set of chains": {"--chain", "both/c{ch}_001.wav", "both/c{ch}_002.wav", "both/c{ch}_003.wav"},
	}
	for verb, options := range map[string][]string{
		"steer": {"--toward", "60", "--noise", "0..0.5", "--reproducible", "--reports", "none"}, "locate": nil, "check": nil,
	} {
		run := func(name string, files []string) (map[string]any, string) {
			args := append([]string{verb, "--rig", "rig.yaml", "--quiet", "--json"}, options...)
			track := ""
			if verb == "steer" {
				track = filepath.Join("tracks", strings.ReplaceAll(name, " ", "_")+".wav")
				args = append(args, "--out", track)
			}
			o := y.alidade(append(args, files...)...)
			if o.code != 0 {
				t.Fatalf("%s of a %s: exit code %d\n%s", verb, name, o.code, o.stderr)
			}
			return withoutFiles(t, o.stdout), track
		}
		y.check(os.MkdirAll(y.at("tracks"), 0o777))
		want, wantTrack := run("whole", []string{"whole.wav"})
		if verb == "locate" {
			sources, _ := want["sources"].([]any)
			if len(sources) == 0 {
				t.Fatalf("nothing heard: %v", want)
			}
			if az := sources[0].(map[string]any)["azimuth_deg"].(float64); math.Abs(math.Abs(az)-60) > 2 {
				t.Errorf("heard at %g°, want 60°", az)
			}
		}
		for name, files := range shapes {
			got, track := run(name, files)
			if !reflect.DeepEqual(got, want) {
				for key := range want {
					if !reflect.DeepEqual(got[key], want[key]) {
						t.Errorf("%s of a %s: %s is\n%v\nwant\n%v", verb, name, key, got[key], want[key])
					}
				}
			}
			if track != "" {
				a, b := soundOf(t, y.at(track)), soundOf(t, y.at(wantTrack))
				if len(b) != 3*frames || a != b {
					t.Errorf("%s of a %s: another track", verb, name)
				}
			}
		}
	}
	// The same in a job, each by the rules of its folder.
	y.put("night.yaml", []byte(`rig: rig.yaml
takes: ["whole.wav", "set/s{ch}.wav", "family/*.wav", "split_*.wav"]
steer: {toward: 60, find_chain: true, no_measure: true}
limits: {fail_on: never}
outputs: {format: pcm24, reports: [json]}
`))
	code, out, errs := y.batch("night.yaml", "--quiet")
	if code != 0 || !strings.Contains(out, "4 takes, 4 done") {
		t.Fatalf("exit code %d\n%s%s", code, out, errs)
	}
	want := ""
	for _, key := range []string{"whole", "set/s", "family/a", "split_001"} {
		found, err := filepath.Glob(y.at("out/" + key + "/*.wav"))
		y.check(err)
		if len(found) != 1 {
			t.Fatalf("%s: tracks %v", key, found)
		}
		if sound := soundOf(t, found[0]); want == "" {
			want = sound
		} else if sound != want {
			t.Errorf("%s: another track", key)
		}
	}
}

// soundOf is the data chunk of a RIFF file.
func soundOf(t *testing.T, name string) string {
	t.Helper()
	b, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	for at := 12; at+8 <= len(b); {
		size := int(le.Uint32(b[at+4:]))
		if string(b[at:at+4]) == "data" {
			return string(b[at+8 : at+8+size])
		}
		at += 8 + size + size%2
	}
	t.Fatalf("%s: no data chunk", name)
	return ""
}
