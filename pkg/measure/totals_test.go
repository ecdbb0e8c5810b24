package measure

import (
	"math"
	"testing"

	"alidade/pkg/audio"
)

func TestTotalsAreTheSameForAnyBlockSize(t *testing.T) {
	b := noiseBlock(2, 10007, 0.5, 3) // peaks reach full scale now and then
	for i := 500; i < 510; i++ {
		b.Channel(1)[i] = 1
	}
	levels := func(size int) []Level {
		all := NewTotals(2)
		for at := 0; at < b.Frames(); at += size {
			if err := all.Write(b.Slice(at, min(at+size, b.Frames()))); err != nil {
				t.Fatal(err)
			}
		}
		return all.Levels()
	}
	want := levels(b.Frames())
	var square, sum float64
	for _, v := range b.Channel(1) {
		sum += float64(v)
		square += float64(v) * float64(v)
	}
	n := float64(b.Frames())
	if d := want[1].RMSDBFS - 10*math.Log10(2*square/n); math.Abs(d) > 1e-10 || math.Abs(want[1].DC-sum/n) > 1e-12 {
		t.Errorf("RMS is %g dB off, DC %g, want %g", d, want[1].DC, sum/n)
	}
	if want[1].ClippedFrames < 10 {
		t.Errorf("%d clipped frames, want at least the 10 in a row", want[1].ClippedFrames)
	}
	for _, size := range []int{1, 2, 3, 7, 505, 4096} {
		got := levels(size)
		for ch := range got {
			got[ch].AWeightedDBFS, want[ch].AWeightedDBFS = 0, 0 // not measured, NaN
			if got[ch] != want[ch] {
				t.Errorf("blocks of %d, channel %d: %+v, want %+v", size, ch+1, got[ch], want[ch])
			}
		}
	}
}

func TestTotalsRefuseWhatIsNoNumber(t *testing.T) {
	all := NewTotals(1)
	b := audio.NewBlock(1, 10)
	if err := all.Write(b); err != nil {
		t.Fatal(err)
	}
	b.Channel(0)[3] = float32(math.Inf(-1))
	err := all.Write(b)
	if err == nil || err.Error() != "measure: channel 1: frame 13: sample is -Inf" {
		t.Errorf("error is %v", err)
	}
}
