package kernel

import (
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// sample is the definition of Deinterleave for one sample.
func sample(b []byte, layout Layout) float32 {
	switch layout {
	case Int16:
		return float32(int16(binary.LittleEndian.Uint16(b))) / (1 << 15)
	case Int24:
		return float32(int32(uint32(b[0])<<8|uint32(b[1])<<16|uint32(b[2])<<24)>>8) / (1 << 23)
	case Int32:
		return float32(int32(binary.LittleEndian.Uint32(b))) / (1 << 31)
	}
	return math.Float32frombits(binary.LittleEndian.Uint32(b))
}

// tryDeinterleave holds the samples that come out against the definition, to the
// bit, and what lies around them.
func tryDeinterleave(t *testing.T, r *rand.Rand, channels, n, spare, after int, layout Layout) int {
	t.Helper()
	frame := channels*layout.Bytes() + spare
	src := make([]byte, n*frame+after)
	for i := range src {
		src[i] = byte(r.Uint32())
	}
	if layout == Float32 {
		for i := range n {
			for ch := range channels {
				binary.LittleEndian.PutUint32(src[i*frame+4*ch:], math.Float32bits(float32(r.NormFloat64())))
			}
		}
	}
	dst, ok := make([][]float32, channels), make([]func() bool, channels)
	for ch := range dst {
		dst[ch], ok[ch] = guarded(r, n)
	}
	before := make([][]float32, channels)
	for ch := range before {
		before[ch] = slices.Clone(dst[ch])
	}
	done := Deinterleave(dst, src, frame, layout)
	if done < 0 || done > n {
		t.Fatalf("%d of %d frames done", done, n)
	}
	for ch := range dst {
		if !ok[ch]() {
			t.Fatalf("%d channels, %d frames: written outside channel %d", channels, n, ch)
		}
		for i, got := range dst[ch] {
			want := before[ch][i]
			if i < done {
				want = sample(src[i*frame+ch*layout.Bytes():], layout)
			}
			if math.Float32bits(got) != math.Float32bits(want) {
				t.Fatalf("layout %d, %d channels, %d frames: channel %d, frame %d is %g, want %g", layout, channels, n, ch, i, got, want)
			}
		}
	}
	return done
}

func TestDeinterleaveIsTheDefinition(t *testing.T) {
	bothSets(t, func(t *testing.T) {
		r := rand.New(rand.NewPCG(11, 1))
		for _, layout := range []Layout{Int16, Int24, Int32, Float32} {
			for _, channels := range []int{1, 3, 4, 5, 7, 8, 9, 12, 15, 16, 17, 33, 256} {
				for _, n := range []int{0, 1, 7, 8, 9, 16, 31, 64} {
					done := tryDeinterleave(t, r, channels, n, 0, 0, layout)
					if Name() == Plain || channels < 4 {
						if done != 0 {
							t.Errorf("%s, %d channels: %d frames done", Name(), channels, done)
						}
					} else if n >= 9 && done < n-1 {
						t.Errorf("%d channels, layout %d: only %d of %d frames done", channels, layout, done, n)
					}
					tryDeinterleave(t, r, channels, n, r.IntN(5), r.IntN(20), layout)
				}
			}
		}
	})
}

// Nothing is done where a sample is not finite or none of sound, wherever it stands.
func TestDeinterleaveLeavesWhatIsNotFinite(t *testing.T) {
	best := bestSet(t)
	under(t, best, func() {
		for _, bad := range []float32{float32(math.NaN()), float32(math.Inf(1)), float32(math.Inf(-1)), LargestSample, -LargestSample, 1e38} {
			for _, channels := range []int{4, 8, 13} {
				const n = 16
				for place := range n * channels {
					src := make([]byte, 4*n*channels)
					binary.LittleEndian.PutUint32(src[4*place:], math.Float32bits(bad))
					dst := make([][]float32, channels)
					for ch := range dst {
						dst[ch] = make([]float32, n)
					}
					if done := Deinterleave(dst, src, 4*channels, Float32); done != 0 {
						t.Fatalf("%d channels, %g at sample %d: %d frames done", channels, bad, place, done)
					}
				}
			}
		}
	})
}

func TestDeinterleaveRefusesWhatDoesNotFit(t *testing.T) {
	v := func(n int) []float32 { return make([]float32, n) }
	for what, f := range map[string]func(){
		"too few bytes":   func() { Deinterleave([][]float32{v(8), v(8)}, make([]byte, 47), 6, Int24) },
		"frame too short": func() { Deinterleave([][]float32{v(8), v(8)}, make([]byte, 48), 5, Int24) },
		"ragged":          func() { Deinterleave([][]float32{v(8), v(7)}, make([]byte, 48), 6, Int24) },
	} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("%s: no panic", what)
				}
			}()
			f()
		}()
	}
	if Deinterleave(nil, nil, 0, Int24) != 0 {
		t.Error("no channels: frames done")
	}
}

func TestKernelsDoNotAllocate(t *testing.T) {
	dst := make([][]float32, 16)
	for ch := range dst {
		dst[ch] = make([]float32, 64)
	}
	src := make([]byte, 64*48)
	if a := testing.AllocsPerRun(10, func() { Deinterleave(dst, src, 48, Int24) }); a != 0 {
		t.Errorf("deinterleave: %g allocations", a)
	}
	tw := NewTwiddles[float32](64, 1)
	if a := testing.AllocsPerRun(10, func() { FirstStep(dst[0], dst[1], dst[2], dst[3], tw) }); a != 0 {
		t.Errorf("first step: %g allocations", a)
	}
}

func FuzzDeinterleave(f *testing.F) {
	f.Add(uint64(1), uint8(16), uint8(40), uint8(0), uint8(1))
	f.Add(uint64(2), uint8(5), uint8(9), uint8(3), uint8(3))
	f.Fuzz(func(t *testing.T, seed uint64, channels, n, spare, layout uint8) {
		if channels == 0 {
			return
		}
		tryDeinterleave(t, rand.New(rand.NewPCG(seed, 2)), int(channels), int(n), int(spare%32), int(seed%16), Layout(layout%4))
	})
}

func BenchmarkDeinterleave(b *testing.B) {
	for _, layout := range []Layout{Int16, Int24, Int32, Float32} {
		b.Run(fmt.Sprint(8*layout.Bytes()), func(b *testing.B) {
			dst := make([][]float32, 16)
			for ch := range dst {
				dst[ch] = make([]float32, 256)
			}
			src := make([]byte, 256*16*layout.Bytes())
			b.SetBytes(256 * 16)
			for b.Loop() {
				Deinterleave(dst, src, 16*layout.Bytes(), layout)
			}
		})
	}
}
