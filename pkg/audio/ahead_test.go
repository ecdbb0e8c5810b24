package audio_test

import (
	"errors"
	"io"
	"math/rand/v2"
	"runtime"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/audio/audiotest"
)

// several makes two processors of one for the time of a test.
func several(t *testing.T) {
	if was := runtime.GOMAXPROCS(0); was == 1 {
		runtime.GOMAXPROCS(2)
		t.Cleanup(func() { runtime.GOMAXPROCS(was) })
	}
}

func TestAheadKeepsTheContract(t *testing.T) {
	several(t)
	rng := rand.New(rand.NewPCG(31, 1))
	for _, frames := range []int{0, 1, 63, 64, 65, 128, 500} {
		in := audio.NewBlock(3, frames)
		for ch := range 3 {
			for i := range frames {
				in.Channel(ch)[i] = float32(rng.NormFloat64())
			}
		}
		audiotest.TestStage(t, 8000, in, func(up audio.Source) audio.Source {
			src, stop := audio.Ahead(up, 64)
			t.Cleanup(stop)
			return src
		}, in,
			audiotest.Options{Sizes: []int{64}, Rate: 8000})
	}
}

// Two of them, with a listener between, as a run has them.
func TestAheadTwice(t *testing.T) {
	several(t)
	in := audio.NewBlock(2, 1000)
	for i := range 1000 {
		in.Channel(0)[i], in.Channel(1)[i] = float32(i), float32(-i)
	}
	audiotest.TestStage(t, 8000, in, func(up audio.Source) audio.Source {
		inner, stopInner := audio.Ahead(up, 100)
		t.Cleanup(stopInner)
		outer, stopOuter := audio.Ahead(audio.Tee(inner, listener{}), 70)
		t.Cleanup(stopOuter) // before the inner one: clean-up goes backwards
		return outer
	}, in, audiotest.Options{Sizes: []int{70, 100}})
}

type listener struct{}

func (listener) Write(src audio.Block) error { return nil }

// A reader that gives up leaves no read of the source behind once it has
// stopped it: what the source counts can be read at once, which the race
// detector watches.
func TestAheadEndsWhenNobodyReads(t *testing.T) {
	several(t)
	before := runtime.NumGoroutine()
	for range 50 {
		from := &counted{}
		src, stop := audio.Ahead(from, 64)
		if n, err := src.Read(audio.NewBlock(2, 10)); n != 10 || err != nil {
			t.Fatalf("%d frames, %v", n, err)
		}
		stop()
		reads := from.reads
		stop()
		if n, err := src.Read(audio.NewBlock(2, 10)); n != 0 || err == nil {
			t.Fatalf("%d frames, %v after the stop", n, err)
		}
		if reads < 1 || from.reads != reads {
			t.Fatalf("%d reads, then %d", reads, from.reads)
		}
	}
	for i := 0; runtime.NumGoroutine() > before; i++ {
		if i == 1_000_000 {
			t.Fatalf("%d goroutines, %d before", runtime.NumGoroutine(), before)
		}
		runtime.Gosched()
	}
}

func TestAheadAllocatesNothingInRead(t *testing.T) {
	several(t)
	src, stop := audio.Ahead(tireless{}, 64)
	defer stop()
	block := audio.NewBlock(2, 100)
	if a := testing.AllocsPerRun(100, func() {
		if n, err := src.Read(block); n != 100 || err != nil {
			t.Fatalf("%d frames, %v", n, err)
		}
	}); a != 0 {
		t.Errorf("%g allocations a read", a)
	}
}

type tireless struct{}

func (tireless) Format() audio.Format              { return audio.Format{Rate: 8000, Channels: 2} }
func (tireless) Read(dst audio.Block) (int, error) { return dst.Frames(), nil }

// A source that yields neither frames nor an error does not hang it.
func TestAheadStopsASourceWithoutProgress(t *testing.T) {
	several(t)
	src, stop := audio.Ahead(halted{}, 64)
	defer stop()
	if _, err := src.Read(audio.NewBlock(2, 10)); !errors.Is(err, io.ErrNoProgress) {
		t.Errorf("error %v", err)
	}
}

type halted struct{ tireless }

func (halted) Read(audio.Block) (int, error) { return 0, nil }

// counted counts its reads.
type counted struct {
	tireless
	reads int
}

func (c *counted) Read(dst audio.Block) (int, error) {
	c.reads++
	return dst.Frames(), nil
}
