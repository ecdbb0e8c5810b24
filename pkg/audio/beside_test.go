package audio_test

import (
	"errors"
	"io"
	"math/rand/v2"
	"strings"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func random(channels, frames int, seed uint64) audio.Block {
	r := rand.New(rand.NewPCG(seed, 9))
	b := audio.NewBlock(channels, frames)
	for ch := range channels {
		for i := range b.Channel(ch) {
			b.Channel(ch)[i] = float32(r.NormFloat64())
		}
	}
	return b
}

// stack puts the channels of blocks of one length under each other.
func stack(list ...audio.Block) audio.Block {
	n := 0
	for _, b := range list {
		n += b.Channels()
	}
	out := audio.NewBlock(n, list[0].Frames())
	at := 0
	for _, b := range list {
		out.Part(at, at+b.Channels()).CopyFrom(b)
		at += b.Channels()
	}
	return out
}

func TestBesideKeepsTheContract(t *testing.T) {
	a, b := random(2, 5003, 1), random(3, 5003, 2)
	stage := func(up audio.Source) audio.Source {
		s, err := audio.Beside(up, audio.FromBlock(48000, b))
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, 48000, a, stage, stack(a, b), audiotest.Options{Sizes: []int{512}})
	// The other way round it is b that fails.
	stage = func(up audio.Source) audio.Source {
		s, err := audio.Beside(audio.FromBlock(48000, b), up)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, 48000, a, stage, stack(b, a), audiotest.Options{Sizes: []int{512}})
}

func TestBesideRefusesWhatDoesNotFit(t *testing.T) {
	a, b := random(2, 100, 1), random(1, 101, 2)
	if _, err := audio.Beside(audio.FromBlock(48000, a), audio.FromBlock(44100, b)); err == nil {
		t.Error("two rates beside each other: no error")
	}
	for _, pair := range [][2]audio.Block{{a, b}, {b, a}} {
		s, err := audio.Beside(audio.FromBlock(48000, pair[0]), audio.FromBlock(48000, pair[1]))
		if err != nil {
			t.Fatal(err)
		}
		got, err := audio.ReadAll(s)
		if err == nil || errors.Is(err, io.EOF) || !strings.Contains(err.Error(), "100 frames beside a longer one") {
			t.Errorf("100 frames beside 101: %v", err)
		}
		if got.Frames() != 100 {
			t.Errorf("%d good frames, want 100", got.Frames())
		}
	}
}

// ahead is a stage that gives frame i once it has read frame i+37.
func ahead(src audio.Source) (audio.Source, error) {
	return audio.Hops(src, audio.Hop{Channels: 1, Frames: 64, Before: 3, After: 37}, func(out, in audio.Block, _ int64) error {
		for i := range out.Channel(0) {
			out.Channel(0)[i] = in.Channel(0)[i+3] + in.Channel(1)[i+40]
		}
		return nil
	}), nil
}

func TestWithKeepsTheContract(t *testing.T) {
	in := random(2, 5003, 3)
	y, err := ahead(audio.FromBlock(48000, in))
	if err != nil {
		t.Fatal(err)
	}
	made, err := audio.ReadAll(y)
	if err != nil {
		t.Fatal(err)
	}
	stage := func(up audio.Source) audio.Source {
		s, err := audio.With(up, ahead)
		if err != nil {
			t.Fatal(err)
		}
		return s
	}
	audiotest.TestStage(t, 48000, in, stage, stack(in, made), audiotest.Options{Sizes: []int{64, 512}, Lookahead: 64 + 37})
}

func TestPartOfABlock(t *testing.T) {
	b := random(5, 300, 4)
	p := b.Slice(10, 200).Part(1, 4).Slice(5, 100).Part(1, 3)
	if p.Channels() != 2 || p.Frames() != 95 {
		t.Fatalf("part of %d channels and %d frames, want 2 and 95", p.Channels(), p.Frames())
	}
	for ch := range 2 {
		for i, x := range p.Channel(ch) {
			if want := b.Channel(2 + ch)[15+i]; x != want {
				t.Fatalf("channel %d frame %d: %g, want %g", ch, i, x, want)
			}
		}
	}
	p.Clear()
	if b.Channel(1)[20] == 0 || b.Channel(4)[20] == 0 || b.Channel(3)[20] != 0 {
		t.Error("clearing a part cleared other channels, or not its own")
	}
}
