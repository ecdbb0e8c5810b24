package audio_test

import (
	"errors"
	"io"
	"math/rand/v2"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

func ramp(channels, frames int) audio.Block {
	b := audio.NewBlock(channels, frames)
	rng := rand.New(rand.NewPCG(4, 2))
	for ch := range channels {
		for i := range b.Channel(ch) {
			b.Channel(ch)[i] = float32(rng.IntN(2000) - 1000)
		}
	}
	return b
}

// around is y0[i] = x0[i-before] + x1[i+after], y1 = x1 - x0: whole numbers, so
// that equality is exact.
func around(before, after int) func(out, in audio.Block, first int64) error {
	return func(out, in audio.Block, _ int64) error {
		x0, x1 := in.Channel(0), in.Channel(1)
		for i := range out.Frames() {
			out.Channel(0)[i] = x0[i] + x1[i+before+after]
			out.Channel(1)[i] = x1[i+before] - x0[i+before]
		}
		return nil
	}
}

func TestHopsKeepTheContractForEveryReach(t *testing.T) {
	const frames = 500
	in := ramp(2, frames)
	at := func(ch, i int) float32 {
		if i < 0 || i >= frames {
			return 0
		}
		return in.Channel(ch)[i]
	}
	for _, shape := range []audio.Hop{
		{Channels: 2, Frames: 64},
		{Channels: 2, Frames: 64, Before: 5, After: 9},
		{Channels: 2, Frames: 16, Before: 40, After: 70},
		{Channels: 2, Frames: 1, Before: 3, After: 2},
		{Channels: 2, Frames: 500, Before: 1},
		{Channels: 2, Frames: 512, After: 600},
	} {
		want := audio.NewBlock(2, frames)
		for i := range frames {
			want.Channel(0)[i] = at(0, i-shape.Before) + at(1, i+shape.After)
			want.Channel(1)[i] = at(1, i) - at(0, i)
		}
		stage := func(up audio.Source) audio.Source {
			return audio.Hops(up, shape, around(shape.Before, shape.After))
		}
		audiotest.TestStage(t, 48000, in, stage, want, audiotest.Options{Sizes: []int{shape.Frames}, Lookahead: shape.After, Rate: 48000})
	}
}

func TestHopsOfAnEmptySourceAreEmpty(t *testing.T) {
	calls := 0
	src := audio.Hops(audio.FromBlock(8000, audio.NewBlock(2, 0)), audio.Hop{Channels: 1, Frames: 8, Before: 3, After: 3},
		func(out, in audio.Block, first int64) error { calls++; return nil })
	for range 3 {
		if n, err := src.Read(audio.NewBlock(1, 4)); n != 0 || err != io.EOF {
			t.Fatalf("Read = %d, %v, want 0, io.EOF", n, err)
		}
	}
	if calls != 0 {
		t.Errorf("run was called %d times for no frames", calls)
	}
}

func TestHopsPassOnTheErrorOfRun(t *testing.T) {
	broken := errors.New("hop 2 is broken")
	src := audio.Hops(audio.FromBlock(8000, ramp(1, 100)), audio.Hop{Channels: 1, Frames: 10},
		func(out, in audio.Block, first int64) error {
			if first == 20 {
				return broken
			}
			out.CopyFrom(in)
			return nil
		})
	dst := audio.NewBlock(1, 64)
	if n, err := src.Read(dst); n != 20 || !errors.Is(err, broken) {
		t.Fatalf("Read = %d, %v, want 20 frames and the error of run", n, err)
	}
	for range 2 {
		if n, err := src.Read(dst); n != 0 || !errors.Is(err, broken) {
			t.Fatalf("Read after it = %d, %v, want 0 and the same error", n, err)
		}
	}
}

// idle gives neither frames nor an error.
type idle struct{}

func (idle) Format() audio.Format                 { return audio.Format{Rate: 8000, Channels: 1} }
func (idle) Read(audio.Block) (int, error)        { return 0, nil }
func identity(out, in audio.Block, _ int64) error { out.CopyFrom(in); return nil }

func TestHopsDoNotHangOnASourceThatGivesNothing(t *testing.T) {
	src := audio.Hops(idle{}, audio.Hop{Channels: 1, Frames: 8}, identity)
	if n, err := src.Read(audio.NewBlock(1, 8)); n != 0 || !errors.Is(err, io.ErrNoProgress) {
		t.Errorf("Read = %d, %v, want 0 and io.ErrNoProgress", n, err)
	}
}

func TestHopsRefuseAShapeThatCannotBe(t *testing.T) {
	for _, shape := range []audio.Hop{{Frames: 8}, {Channels: 1}, {Channels: 1, Frames: 8, Before: -1}, {Channels: 1, Frames: 8, After: -1}} {
		func() {
			defer func() {
				if recover() == nil {
					t.Errorf("shape %+v was taken", shape)
				}
			}()
			audio.Hops(idle{}, shape, identity)
		}()
	}
}
