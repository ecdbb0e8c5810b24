package wav

import (
	"encoding/json"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"
)

// K3: the offsets in bext (EBU Tech 3285 v2, 2011, 2.3; confirmed by a second
// source, sums recomputed).
func TestBextFieldsStandAtTheirOffsets(t *testing.T) {
	sizes := []int{256, 32, 32, 10, 8, 4, 4, 2, 64, 2, 2, 2, 2, 2, 180}
	offsets := []int{0, 256, 288, 320, 330, 338, 342, 346, 348, 412, 414, 416, 418, 420, 422, 602}
	at := 0
	for k, n := range sizes {
		if at != offsets[k] {
			t.Errorf("field %d stands at %d, want %d", k, at, offsets[k])
		}
		at += n
	}
	b := make([]byte, at)
	copy(b[0:], "a description")
	copy(b[256:], "an originator of more than 32 ch")
	copy(b[288:], "a reference")
	copy(b[320:], "2026-05-17")
	copy(b[330:], "09:59:30")
	le.PutUint32(b[338:], 0x9BFCC000)
	le.PutUint32(b[342:], 1)
	le.PutUint16(b[346:], 2)
	for k := range 64 {
		b[348+k] = byte(k + 1)
	}
	for k, v := range []int16{-2264, 512, -100, 0x7FFF, -1999} {
		le.PutUint16(b[412+2*k:], uint16(v))
	}
	b = append(b, "A=PCM,F=192000,W=24,M=multitrack,T=x\r\n"...)
	x := parseBext(b)
	value := func(v float64) *float64 { return &v }
	want := &Bext{Description: "a description", Originator: "an originator of more than 32 ch", OriginatorReference: "a reference",
		OriginationDate: "2026-05-17", OriginationTime: "09:59:30", TimeReference: 6912000000, Version: 2, UMID: x.UMID,
		LoudnessValueLUFS: value(-22.64), LoudnessRangeLU: value(5.12), MaxTruePeakDBTP: value(-1), MaxShortTermLoudnessLU: value(-19.99),
		CodingHistory: "A=PCM,F=192000,W=24,M=multitrack,T=x\r\n"}
	if !reflect.DeepEqual(x, want) {
		t.Errorf("%+v, want %+v", x, want)
	}
	if !strings.HasPrefix(x.UMID, "0102030405") || !strings.HasSuffix(x.UMID, "3E3F40") {
		t.Errorf("UMID %s", x.UMID)
	}
	// Written again, all but the UMID stands where it stood.
	clear(b[348 : 348+64])
	if again := x.body(); !slices.Equal(again, b) {
		t.Errorf("% x, want % x", again, b)
	}
}

// K6: 10:00:00 at 48 kHz is 1 728 000 000 = 66FF3000h, at 192 kHz 6 912 000 000
// = 1 in the high and 9BFCC000h in the low word (EBU Tech 3285; recomputed).
func TestTimeReferenceIsSamplesSinceMidnight(t *testing.T) {
	for _, c := range []struct {
		rate      int
		low, high uint32
	}{{48000, 0x66FF3000, 0}, {192000, 0x9BFCC000, 1}} {
		b := (&Bext{TimeReference: 10 * 3600 * int64(c.rate)}).body()
		if le.Uint32(b[338:]) != c.low || le.Uint32(b[342:]) != c.high {
			t.Errorf("%d Hz: % x", c.rate, b[338:346])
		}
		base, ok := (&Metadata{Bext: parseBext(b)}).TimeBase(c.rate)
		if got := base.Time(0); !ok || got != "10:00:00.000" {
			t.Errorf("%d Hz: %s, %v", c.rate, got, ok)
		}
	}
}

// K4: loudness is round(100 v), ties away from zero, unset 7FFFh (EBU Tech 3285
// v2, 2.4).
func TestLoudnessIsRoundedAwayFromZero(t *testing.T) {
	for v, want := range map[float64]int16{-22.644: -2264, -22.645: -2265, -22.646: -2265, 12.764: 1276, 12.765: 1277, 12.766: 1277, 0: 0, -0.005: -1, 99.99: 9999, 100: bextUnset, 1e30: bextUnset} {
		if got := hundredths(v); got != want {
			t.Errorf("%g = %d, want %d", v, got, want)
		}
	}
	if uint16(0xF728) != uint16(0x10000-2264) || uint16(0x04FC) != 1276 {
		t.Error("the table of the standard in hex is another one")
	}
	b := (&Bext{}).body()
	for at := 412; at < 422; at += 2 {
		if le.Uint16(b[at:]) != 0x7FFF {
			t.Errorf("unset loudness at %d is %04X, want 7FFF", at, le.Uint16(b[at:]))
		}
	}
}

func TestOlderBextGivesNoLoudnessAndNoUMID(t *testing.T) {
	b := make([]byte, 602)
	for k := 348; k < 422; k++ {
		b[k] = 9
	}
	for version, umid := range map[int]bool{0: false, 1: true} {
		b[346] = byte(version)
		x := parseBext(b)
		if x.LoudnessValueLUFS != nil || x.MaxShortTermLoudnessLU != nil || (x.UMID != "") != umid {
			t.Errorf("version %d: %+v", version, x)
		}
	}
}

// sampleIXML is an iXML of a recorder of our own invention.
const sampleIXML = `<?xml version="1.0" encoding="UTF-8"?>
<BWFXML>
	<IXML_VERSION>2.0</IXML_VERSION>
	<PROJECT>Herons &amp; reeds</PROJECT>
	<SCENE>12A</SCENE>
	<TAKE>3</TAKE>
	<TAPE>260517</TAPE>
	<CIRCLED>TRUE</CIRCLED>
	<FILE_UID>ABC123</FILE_UID>
	<NOTE>wind from the left, Ana's dog</NOTE>
	<SPEED>
		<NOTE></NOTE>
		<MASTER_SPEED>25/1</MASTER_SPEED>
		<TIMECODE_RATE>30000/1001</TIMECODE_RATE>
		<TIMECODE_FLAG>DF</TIMECODE_FLAG>
		<FILE_SAMPLE_RATE>48000</FILE_SAMPLE_RATE>
		<AUDIO_BIT_DEPTH>24</AUDIO_BIT_DEPTH>
		<DIGITIZER_SAMPLE_RATE>48000</DIGITIZER_SAMPLE_RATE>
		<TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI>0</TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_HI>
		<TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO>1728000000</TIMESTAMP_SAMPLES_SINCE_MIDNIGHT_LO>
		<TIMESTAMP_SAMPLE_RATE>48000</TIMESTAMP_SAMPLE_RATE>
	</SPEED>
	<TRACK_LIST>
		<TRACK_COUNT>2</TRACK_COUNT>
		<TRACK><CHANNEL_INDEX>5</CHANNEL_INDEX><INTERLEAVE_INDEX>2</INTERLEAVE_INDEX><NAME>right</NAME><FUNCTION></FUNCTION></TRACK>
		<TRACK><CHANNEL_INDEX>4</CHANNEL_INDEX><INTERLEAVE_INDEX>1</INTERLEAVE_INDEX><NAME>left</NAME></TRACK>
	</TRACK_LIST>
	<FILE_SET><TOTAL_FILES>2</TOTAL_FILES><FAMILY_UID>F77</FAMILY_UID><FAMILY_NAME>roof</FAMILY_NAME><FILE_SET_INDEX>A</FILE_SET_INDEX></FILE_SET>
	<LOCATION><LOCATION_NAME>Ana's garden</LOCATION_NAME><LOCATION_GPS>47.1, 9.2</LOCATION_GPS></LOCATION>
	<USER>recordist: Ana</USER>
	<BEXT><BWF_TIME_REFERENCE_LOW>1728000000</BWF_TIME_REFERENCE_LOW></BEXT>
	<HUMIDITY unit="%">63</HUMIDITY>
</BWFXML>`

func TestIXMLIsRead(t *testing.T) {
	x, whole := parseIXML([]byte(sampleIXML + strings.Repeat(" \x00", 50)))
	if x == nil || !whole {
		t.Fatal(x, whole)
	}
	ref := int64(1728000000)
	want := &IXML{Project: "Herons & reeds", Scene: "12A", Take: "3", Tape: "260517", Note: "wind from the left, Ana's dog", Circled: "TRUE", FileUID: "ABC123",
		Speed:   Speed{FileSampleRate: 48000, DigitizerSampleRate: 48000, BitDepth: 24, TimecodeRate: "30000/1001", TimecodeFlag: "DF", Timestamp: &ref, TimestampRate: 48000},
		Tracks:  []Track{{5, 2, "right", ""}, {4, 1, "left", ""}},
		FileSet: FileSet{2, "F77", "roof", "A"}, root: x.root}
	if !reflect.DeepEqual(x, want) {
		t.Errorf("%+v, want %+v", x, want)
	}
	if names := (&Metadata{IXML: x}).TrackNames(3); !slices.Equal(names, []string{"left", "right", ""}) {
		t.Errorf("names by interleave index %q", names)
	}
	// What is written reads the same, unknown elements and attributes included.
	again, whole := parseIXML(x.body())
	if again == nil || !whole || !reflect.DeepEqual(again, x) {
		t.Errorf("written and read again: %s", x.body())
	}
	if body := string(x.body()); !strings.Contains(body, `<HUMIDITY unit="%">63</HUMIDITY>`) || !strings.Contains(body, "Herons &amp; reeds") {
		t.Error(body)
	}
}

func TestIXMLIsForgiven(t *testing.T) {
	for text, want := range map[string]string{
		"\xef\xbb\xbf<BWFXML><SCENE>1</SCENE></BWFXML>":                                "1",
		"<?xml version='1.0' encoding='ISO-8859-1'?><bwfxml><scene>2</scene></bwfxml>": "2",
		"<BWFXML><SCENE>3</BWFXML>":                                                    "3",
		"<BWFXML><SCENE>4 & 5</SCENE></BWFXML>":                                        "4 & 5",
		"<BWFXML><SCENE>6</SCENE>":                                                     "6",
		"<BWFXML><A><B></A><SCENE>7</SCENE></BWFXML>":                                  "7",
		"<BWFXML><!-- x --><SCENE><![CDATA[8<]]></SCENE></BWFXML>":                     "8<",
		"<BWFXML><SCENE>\xff9</SCENE></BWFXML>":                                        "ÿ9",
		"<BWFXML><TRACK_LIST/><SCENE> 10 </SCENE></BWFXML>trailing":                    "10",
		"<BWFXML><X><SCENE>no</SCENE></X><SCENE>11</SCENE></BWFXML>\x00":               "11",
	} {
		x, _ := parseIXML([]byte(text))
		if x == nil || x.Scene != want {
			t.Errorf("%q: %+v, want scene %q", text, x, want)
		}
	}
}

func TestTrackNamesFromTheDescription(t *testing.T) {
	m := &Metadata{Bext: &Bext{Description: "sSPEED=025.000-ND\r\nsTRK1=boom\r\nsTRK2= lav \r\nzTRK4=no\nsTRKx=y"}}
	if names := m.TrackNames(3); !slices.Equal(names, []string{"boom", "lav", ""}) {
		t.Errorf("%q", names)
	}
	if names := (&Metadata{}).TrackNames(2); !slices.Equal(names, []string{"", ""}) {
		t.Errorf("%q", names)
	}
}

func TestCuesAndListsAreReadAndWrittenTheSame(t *testing.T) {
	meta := &Metadata{
		Cues: []Cue{{ID: 3, Frame: 0, Label: "noise"}, {ID: 1, Frame: 17, Label: "talk", Note: "odd"}, {ID: 9, Frame: 20, Frames: 15}, {ID: 2, Frame: 40}},
		Info: []InfoEntry{{"INAM", "a take"}, {"IART", "abc"}, {"ISFT", "x"}},
	}
	m, _ := write(t, Format{48000, 1, PCM24}, Option{Metadata: meta}, noise(1, 41), 41)
	r := open(t, m.b)
	if got := r.Metadata(); !reflect.DeepEqual(got, meta) || len(r.Warnings()) > 0 {
		t.Errorf("%+v, want %+v, warnings %v", got, meta, r.Warnings())
	}
}

func TestCuesAreReadAsOthersWriteThem(t *testing.T) {
	cue := func(id, position, offset uint32) []byte {
		b := le.AppendUint32(nil, id)
		b = le.AppendUint32(b, position)
		b = append(b, "data\x00\x00\x00\x00\x00\x00\x00\x00"...)
		return le.AppendUint32(b, offset)
	}
	body := []byte{5, 0, 0, 0}
	for _, c := range [][]byte{cue(1, 30, 30), cue(2, 0, 20), cue(3, 10, 0), cue(4, 0, 0), cue(5, 0, 99)} {
		body = append(body, c...)
	}
	// Labels without pads, as some writers leave them, and about no cue.
	adtl := []byte("adtl" + "labl\x07\x00\x00\x00\x02\x00\x00\x00ab\x00" + "note\x06\x00\x00\x00\x02\x00\x00\x00c\x00" + "labl\x06\x00\x00\x00\x63\x00\x00\x00x\x00" +
		"ltxt\x14\x00\x00\x00\x03\x00\x00\x00\x05\x00\x00\x00rgn \x00\x00\x00\x00\x00\x00\x00\x00")
	r := open(t, recipe{before: []rawChunk{{"LIST", adtl}}, after: []rawChunk{{"cue ", body}}}.make().file)
	want := []Cue{{ID: 4}, {ID: 3, Frame: 10, Frames: 5}, {ID: 2, Frame: 20, Label: "ab", Note: "c"}, {ID: 1, Frame: 30}}
	if got := r.Metadata().Cues; !reflect.DeepEqual(got, want) {
		t.Errorf("%+v, want %+v (the one behind the end is left out)", got, want)
	}
}

// carried is the metadata of a take with everything in it.
func carried(t *testing.T) *Metadata {
	t.Helper()
	v := -23.0
	bext := &Bext{Description: "herons at dawn, sTRK1=left", Originator: "Ana", OriginatorReference: "SN 4711", OriginationDate: "2026-12-31",
		OriginationTime: "10:00:00", TimeReference: 1728000000, UMID: "x", LoudnessValueLUFS: &v, CodingHistory: "A=PCM,F=48000,W=24,M=stereo,T=recorder 4711"}
	r := open(t, recipe{bits: 24, frames: 5000,
		before: []rawChunk{{"bext", bext.body()}, {"iXML", []byte(sampleIXML)}, {"Qx7~", []byte("unknown")}, {"PEAK", make([]byte, 24)}},
		after: append(cueChunks([]Cue{{ID: 1, Frame: 100, Label: "talk: Ana", Note: "n"}, {ID: 2, Frame: 1000, Frames: 2000, Label: "r"}, {ID: 3, Frame: 4999}}),
			infoChunk([]InfoEntry{{"IART", "Ana"}, {"ICRD", "2026-12-31"}, {"ISFT", "recorder"}, {"IENG", "Bo"}, {"ICMT", "c"}})...),
	}.make().file)
	if w := r.Warnings(); len(w) > 0 {
		t.Fatal(w)
	}
	return r.Metadata()
}

func TestWhatStillHoldsIsCarriedAndWhatDoesNotIsChanged(t *testing.T) {
	m := carried(t)
	before, _ := json.Marshal(m)
	out, dropped := m.Derive(Change{Output: Format{48000, 1, PCM16}, TakeFrames: 5000, Frames: 5000, TrackName: "az +60.0", Software: "alidade 1.2", Settings: "toward 60,0; spectral"})
	if after, _ := json.Marshal(m); string(after) != string(before) {
		t.Error("the take's metadata were changed")
	}
	b := out.Bext
	if b.Description != m.Bext.Description || b.Originator != "Ana" || b.OriginatorReference != "SN 4711" || b.TimeReference != 1728000000 || b.OriginationDate != "2026-12-31" ||
		b.UMID != "" || b.LoudnessValueLUFS != nil || b.Version != 2 {
		t.Errorf("bext %+v", b)
	}
	if want := "A=PCM,F=48000,W=24,M=stereo,T=recorder 4711\r\nA=PCM,F=48000,W=16,M=mono,T=alidade 1.2; toward 60;0; spectral\r\n"; b.CodingHistory != want {
		t.Errorf("coding history %q, want %q", b.CodingHistory, want)
	}
	x := out.IXML
	if x.Project != "Herons & reeds" || x.Scene != "12A" || x.Take != "3" || x.Note == "" || x.Speed.BitDepth != 16 || *x.Speed.Timestamp != 1728000000 ||
		x.Speed.TimecodeRate != "30000/1001" || x.FileSet != (FileSet{}) || x.FileUID != "" || !reflect.DeepEqual(x.Tracks, []Track{{1, 1, "az +60.0", ""}}) {
		t.Errorf("iXML %+v", x)
	}
	if body := string(x.body()); !strings.Contains(body, "Ana&#39;s garden") || !strings.Contains(body, "<TRACK_COUNT>1</TRACK_COUNT>") || !strings.Contains(body, "HUMIDITY") || strings.Contains(body, "<BEXT>") {
		t.Error(body)
	}
	if !reflect.DeepEqual(out.Cues, m.Cues) || len(out.other) != 1 || out.other[0].id != "Qx7~" {
		t.Errorf("cues %+v, other %+v", out.Cues, out.other)
	}
	if want := []InfoEntry{{"IART", "Ana"}, {"ICRD", "2026-12-31"}, {"IENG", "Bo"}, {"ICMT", "c"}, {"ISFT", "alidade 1.2"}}; !reflect.DeepEqual(out.Info, want) {
		t.Errorf("INFO %+v", out.Info)
	}
	if want := []string{"iXML FILE_SET", "iXML FILE_UID", "iXML BEXT"}; !slices.Equal(dropped, want) {
		t.Errorf("dropped %q, want %q", dropped, want)
	}
	// All of it can be written and read again.
	f, _ := write(t, Format{48000, 1, PCM16}, Option{Metadata: out}, noise(1, 5000), 5000)
	r := open(t, f.b)
	got, _ := json.Marshal(r.Metadata())
	want, _ := json.Marshal(out)
	if string(got) != string(want) || len(r.Warnings()) > 0 || !reflect.DeepEqual(r.Metadata().other, out.other) {
		t.Errorf("%s, want %s, warnings %v", got, want, r.Warnings())
	}
}

func TestAnExcerptMovesTimesAndCues(t *testing.T) {
	m := carried(t)
	out, dropped := m.Derive(Change{Output: Format{48000, 1, PCM24}, TakeFrames: 5000, FirstFrame: 2000, Frames: 500})
	if out.Bext.TimeReference != 1728002000 || *out.IXML.Speed.Timestamp != 1728002000 {
		t.Errorf("time references %d, %d, want 1728002000", out.Bext.TimeReference, *out.IXML.Speed.Timestamp)
	}
	if want := []Cue{{ID: 2, Frame: 0, Frames: 500, Label: "r"}}; !reflect.DeepEqual(out.Cues, want) {
		t.Errorf("cues %+v, want %+v", out.Cues, want)
	}
	if len(out.other) != 0 || !slices.Contains(dropped, "Qx7~") || !slices.Contains(dropped, "cue 1") || !slices.Contains(dropped, "cue 3") {
		t.Errorf("other %v, dropped %q", out.other, dropped)
	}
	for _, c := range []struct {
		cue         Cue
		first, size int64
		want        Cue
		ok          bool
	}{
		{Cue{Frame: 10}, 10, 5, Cue{Frame: 0}, true}, {Cue{Frame: 14}, 10, 5, Cue{Frame: 4}, true}, {Cue{Frame: 15}, 10, 5, Cue{}, false}, {Cue{Frame: 9}, 10, 5, Cue{}, false},
		{Cue{Frame: 5, Frames: 5}, 10, 5, Cue{}, false}, {Cue{Frame: 5, Frames: 6}, 10, 5, Cue{Frame: 0, Frames: 1}, true}, {Cue{Frame: 14, Frames: 9}, 10, 5, Cue{Frame: 4, Frames: 1}, true},
		{Cue{Frame: 0, Frames: 99}, 10, 5, Cue{Frame: 0, Frames: 5}, true},
	} {
		got, ok := c.cue.moved(Change{FirstFrame: c.first, Frames: c.size})
		if ok != c.ok || ok && got != c.want {
			t.Errorf("%+v from %d: %+v, %v, want %+v, %v", c.cue, c.first, got, ok, c.want, c.ok)
		}
	}
}

func TestDaysAreReadWithTheSeparatorsThatFilesHave(t *testing.T) {
	for text, want := range map[string]string{
		"2026-05-17": "2026-05-17", "2026_05_17": "2026-05-17", "2026:05:17": "2026-05-17", "2026.05.17": "2026-05-17", "2026 05 17": "2026-05-17",
		"2026-05-17T09:59": "2026-05-17", "2024-02-29": "2024-02-29",
		"2026-02-29": "", "2026-13-01": "", "2026-00-10": "", "2026-05-00": "", "2026-05-32": "", "0000-01-01": "", "0000-00-00": "",
		"2026-05-171": "", "20260517": "", "2026/05/17": "", "17.05.2026": "", "2026": "", "": "", "2026-05-\u0661\u0667": "",
	} {
		day, ok := ParseDay(text)
		if ok != (want != "") || ok && day.Format(time.DateOnly) != want {
			t.Errorf("%q: %s, %v, want %q", text, day.Format(time.DateOnly), ok, want)
		}
	}
}

func TestTimeReferencesPassMidnight(t *testing.T) {
	day := int64(24 * 3600 * 48000)
	m := carried(t)
	m.Bext.TimeReference = day - 100
	*m.IXML.Speed.Timestamp = day - 100
	out, _ := m.Derive(Change{Output: Format{48000, 1, PCM24}, TakeFrames: 5000, FirstFrame: 300, Frames: 4700})
	if out.Bext.TimeReference != 200 || out.Bext.OriginationDate != "2027-01-01" || *out.IXML.Speed.Timestamp != 200 {
		t.Errorf("%+v, %d", out.Bext, *out.IXML.Speed.Timestamp)
	}
	// An excerpt of a long take from the day after the next, in a leap year.
	m.Bext.OriginationDate = "2024.02.28"
	out, _ = m.Derive(Change{Output: Format{48000, 1, PCM24}, TakeFrames: 3 * day, FirstFrame: day + 300, Frames: 4700})
	if out.Bext.TimeReference != 200 || out.Bext.OriginationDate != "2024-03-01" || *out.IXML.Speed.Timestamp != 200 {
		t.Errorf("%+v, %d", out.Bext, *out.IXML.Speed.Timestamp)
	}
}

// A pulled recording: 48,048 frames a second in a file marked 48,000.
func TestTheTimestampMovesByTheDigitizersRate(t *testing.T) {
	m := carried(t)
	speed := m.IXML.root.child("SPEED")
	speed.set("DIGITIZER_SAMPLE_RATE", "48048")
	speed.set("TIMESTAMP_SAMPLE_RATE", "48000")
	m.IXML = viewIXML(m.IXML.root)
	out, _ := m.Derive(Change{Output: Format{48000, 1, PCM24}, TakeFrames: 1 << 20, FirstFrame: 480480, Frames: 10})
	for name, got := range map[string]int64{"iXML": *out.IXML.Speed.Timestamp, "bext": out.Bext.TimeReference} {
		if got != 1728000000+480000 {
			t.Errorf("%s moved by %d, want ten seconds of 48000", name, got-1728000000)
		}
	}
}

func TestPrivateMetadataNameNoPeoplePlacesOrMachines(t *testing.T) {
	m := carried(t)
	out, dropped := m.Derive(Change{Output: Format{48000, 1, PCM24}, TakeFrames: 5000, Frames: 5000, TrackName: "az +60.0", Software: "alidade 1.2", Settings: "toward 60", Private: true})
	f, _ := write(t, Format{48000, 1, PCM24}, Option{Metadata: out}, noise(1, 10), 10)
	for _, word := range []string{"Ana", "4711", "garden", "47.1", "Bo", "herons", "Herons", "dog", "wind", "recorder", "recordist", "talk", "unknown", "260517", "ABC123", "roof", "HUMIDITY"} {
		if strings.Contains(string(f.b), word) {
			t.Errorf("%q is in the file", word)
		}
	}
	x := out.IXML
	if x.Scene != "12A" || x.Take != "3" || x.Speed.TimecodeRate != "30000/1001" || *x.Speed.Timestamp != 1728000000 || out.Bext.TimeReference != 1728000000 || out.Bext.OriginationDate != "2026-12-31" {
		t.Errorf("what is harmless is gone: %+v, %+v", x, out.Bext)
	}
	if len(out.Cues) != 3 || out.Cues[1].Frames != 2000 || out.Bext.CodingHistory != "A=PCM,F=48000,W=24,M=mono,T=alidade 1.2; toward 60\r\n" {
		t.Errorf("cues %+v, history %q", out.Cues, out.Bext.CodingHistory)
	}
	for _, want := range []string{"iXML LOCATION", "iXML USER", "iXML PROJECT", "INFO IART", "Qx7~", "iXML MASTER_SPEED"} {
		if !slices.Contains(dropped, want) {
			t.Errorf("dropped %q lack %s", dropped, want)
		}
	}
}

func TestATakeWithoutMetadataGetsTheSoftwareOnly(t *testing.T) {
	for _, m := range []*Metadata{nil, {}} {
		out, dropped := m.Derive(Change{Output: Format{48000, 1, Float32}, Software: "alidade 1.2"})
		if out.Bext != nil || out.IXML != nil || len(out.Cues) != 0 || !reflect.DeepEqual(out.Info, []InfoEntry{{"ISFT", "alidade 1.2"}}) || dropped != nil {
			t.Errorf("%+v, %q", out, dropped)
		}
	}
}

func TestTextsAreCutAtWholeCharacters(t *testing.T) {
	x := &Bext{Originator: strings.Repeat("ä", 20), OriginationDate: "2026-01-02T03"}
	got := parseBext(x.body())
	if got.Originator != strings.Repeat("ä", 16) || got.OriginationDate != "2026-01-02" {
		t.Errorf("%+v", got)
	}
	x.Originator = "x" + strings.Repeat("ä", 20)
	if got := parseBext(x.body()); got.Originator != "x"+strings.Repeat("ä", 15) {
		t.Errorf("%q", got.Originator)
	}
	if got := textOf([]byte("M\xfcnchen\x00rest")); got != "München" {
		t.Errorf("Latin-1 is read as %q", got)
	}
}

// The keys that scripts rely on.
func TestDescriptionHasTheStableKeys(t *testing.T) {
	f, _ := write(t, Format{48000, 1, PCM24}, Option{Metadata: carried(t)}, noise(1, 5000), 5000)
	text, err := json.Marshal(open(t, f.b).Describe("takes/07.wav"))
	if err != nil {
		t.Fatal(err)
	}
	var d map[string]any
	if err := json.Unmarshal(text, &d); err != nil {
		t.Fatal(err)
	}
	want := map[string]any{"path": "takes/07.wav", "container": "RIFF", "encoding": "pcm24", "bits": 24.0, "valid_bits": 24.0, "channels": 1.0, "sample_rate_hz": 48000.0,
		"frames": 5000.0, "start_time": "10:00:00.000", "timecode": "10:00:00;01", "extensible": true}
	for key, v := range want {
		if d[key] != v {
			t.Errorf("%s = %v, want %v", key, d[key], v)
		}
	}
	for _, key := range []string{"bext", "ixml", "cues", "chunks", "warnings", "info", "track_names"} {
		if d[key] == nil {
			t.Errorf("no %s in %s", key, text)
		}
	}
	plain, _ := json.Marshal(open(t, recipe{}.make().file).Describe("x"))
	for _, key := range []string{`"cues":[]`, `"warnings":[]`} {
		if !strings.Contains(string(plain), key) {
			t.Errorf("no %s in %s", key, plain)
		}
	}
	if strings.Contains(string(plain), "bext") || strings.Contains(string(plain), "start_time") {
		t.Errorf("what is not there is shown: %s", plain)
	}
}

func TestBextAndIXMLThatDisagreeAreTold(t *testing.T) {
	ref := &Bext{TimeReference: 5000}
	r := open(t, recipe{before: []rawChunk{{"bext", ref.body()}, {"iXML", []byte(sampleIXML)}}}.make().file)
	if codes(r.Warnings()) != WarnTime {
		t.Errorf("%v", r.Warnings())
	}
	if base, ok := r.Metadata().TimeBase(48000); !ok || base.Reference != 5000 {
		t.Errorf("%+v, %v", base, ok)
	}
}
