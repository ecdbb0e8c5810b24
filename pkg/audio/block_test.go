package audio_test

import (
	"math/rand/v2"
	"strings"
	"testing"
	"unsafe"

	"alidade/pkg/audio"
)

// noise is a block of seeded noise, different on each channel.
func noise(seed uint64, channels, frames int) audio.Block {
	rng := rand.New(rand.NewPCG(seed, 1))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		x := b.Channel(ch)
		for i := range x {
			x[i] = float32(rng.Float64()*2 - 1)
		}
	}
	return b
}

// panics returns the text that f panics with, empty if it does not.
func panics(f func()) (text string) {
	defer func() {
		if v := recover(); v != nil {
			text, _ = v.(string)
		}
	}()
	f()
	return ""
}

func TestANewBlockIsSilent(t *testing.T) {
	for _, size := range [][2]int{{0, 0}, {0, 5}, {3, 0}, {1, 1}, {1, 255}, {2, 255}, {2, 256}, {5, 257}, {3, 4096}} {
		b := audio.NewBlock(size[0], size[1])
		if b.Channels() != size[0] || b.Frames() != size[1] {
			t.Fatalf("NewBlock(%d, %d) has %d channels and %d frames", size[0], size[1], b.Channels(), b.Frames())
		}
		for ch := range b.Channels() {
			x := b.Channel(ch)
			if len(x) != size[1] || cap(x) != size[1] {
				t.Errorf("NewBlock(%d, %d).Channel(%d): len %d, cap %d", size[0], size[1], ch, len(x), cap(x))
			}
			for i, v := range x {
				if v != 0 {
					t.Errorf("channel %d, frame %d = %v, want 0", ch, i, v)
				}
			}
		}
	}
}

func TestChannelsDoNotOverlap(t *testing.T) {
	for _, frames := range []int{1, 2, 255, 256, 257, 1000} {
		b := audio.NewBlock(4, frames)
		for ch := range 4 {
			x := b.Channel(ch)
			for i := range x {
				x[i] = float32(10000*ch + i)
			}
		}
		for ch := range 4 {
			for i, v := range b.Channel(ch) {
				if v != float32(10000*ch+i) {
					t.Fatalf("%d frames: channel %d, frame %d = %v", frames, ch, i, v)
				}
			}
		}
	}
}

// Channels of a power-of-two length that lay back to back would start on the
// same cache sets of 4 kB and push each other out.
func TestChannelsOfAPowerOfTwoDoNotStartOnOneCacheSet(t *testing.T) {
	b := audio.NewBlock(3, 4096)
	for ch := 1; ch < 3; ch++ {
		step := uintptr(unsafe.Pointer(&b.Channel(ch)[0])) - uintptr(unsafe.Pointer(&b.Channel(ch - 1)[0]))
		if step%4096 == 0 {
			t.Errorf("channel %d starts %d bytes after channel %d, a multiple of 4096", ch, step, ch-1)
		}
	}
}

func TestASliceSharesItsFramesAndOnlyThose(t *testing.T) {
	b := noise(1, 3, 1000)
	was := b.Channel(2)[399]
	part := b.Slice(400, 700).Slice(10, 110)
	if part.Channels() != 3 || part.Frames() != 100 {
		t.Fatalf("slice has %d channels and %d frames", part.Channels(), part.Frames())
	}
	for ch := range 3 {
		for i, v := range part.Channel(ch) {
			if v != b.Channel(ch)[410+i] {
				t.Fatalf("channel %d, frame %d of the slice = %v, want %v", ch, i, v, b.Channel(ch)[410+i])
			}
		}
	}
	part.Channel(2)[0] = 7
	if b.Channel(2)[410] != 7 {
		t.Error("a write into the slice did not reach the block")
	}
	part.Clear()
	if b.Channel(2)[410] != 0 || b.Channel(2)[509] != 0 {
		t.Error("Clear of the slice left its frames")
	}
	if b.Channel(2)[399] != was || b.Channel(2)[510] == 0 {
		t.Error("Clear of the slice went past its ends")
	}
	if n := part.Slice(100, 100).Frames(); n != 0 {
		t.Errorf("an empty slice at the end has %d frames", n)
	}
	if a := testing.AllocsPerRun(100, func() { part = b.Slice(1, 900).Slice(2, 3) }); a != 0 {
		t.Errorf("slicing allocates %g times", a)
	}
}

func TestCopyFromCopiesTheShorterLength(t *testing.T) {
	src := noise(2, 2, 10)
	for _, frames := range []int{0, 4, 10, 15} {
		dst := noise(3, 2, frames)
		before := noise(3, 2, frames)
		n := dst.CopyFrom(src)
		if n != min(frames, 10) {
			t.Errorf("CopyFrom into %d frames = %d", frames, n)
		}
		for ch := range 2 {
			for i, v := range dst.Channel(ch) {
				want := before.Channel(ch)[i]
				if i < n {
					want = src.Channel(ch)[i]
				}
				if v != want {
					t.Errorf("%d frames: channel %d, frame %d = %v, want %v", frames, ch, i, v, want)
				}
			}
		}
	}
}

func TestMisuseOfABlockPanicsWithNumbers(t *testing.T) {
	b := audio.NewBlock(2, 10)
	for _, c := range []struct {
		what string
		do   func()
		text string
	}{
		{"negative channels", func() { audio.NewBlock(-1, 3) }, "audio: block of -1 channels and 3 frames"},
		{"negative frames", func() { audio.NewBlock(1, -3) }, "audio: block of 1 channels and -3 frames"},
		{"channel below", func() { b.Channel(-1) }, "audio: channel -1 of a block of 2 channels"},
		{"channel above", func() { b.Channel(2) }, "audio: channel 2 of a block of 2 channels"},
		{"slice past the end", func() { b.Slice(3, 11) }, "audio: slice 3:11 of a block of 10 frames"},
		{"slice before the start", func() { b.Slice(-1, 2) }, "audio: slice -1:2"},
		{"slice backwards", func() { b.Slice(5, 4) }, "audio: slice 5:4"},
		{"slice of a slice past its end", func() { b.Slice(2, 6).Slice(0, 5) }, "audio: slice 0:5 of a block of 4 frames"},
		{"copy of other channels", func() { b.CopyFrom(audio.NewBlock(3, 10)) }, "audio: copy of 3 channels into 2"},
	} {
		if got := panics(c.do); !strings.Contains(got, c.text) {
			t.Errorf("%s: panics with %q, want %q", c.what, got, c.text)
		}
	}
}
