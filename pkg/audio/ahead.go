package audio

import (
	"errors"
	"fmt"
	"io"
	"runtime"
)

// Ahead returns a source that yields what src yields, read in blocks of frames
// by goroutines of its own, up to one block further than what has been asked
// for: what src does and what its reader does go on at the same time. With one
// processor it is src itself. The samples are the same either way.
//
// Nothing else may use src, or what src passes its frames to, until the source
// has come to its end or to a failure, or stop has returned: it waits for the
// read of src that is under way and begins no other. Every reader calls it when
// it is done, however it ends (once is enough, from the goroutine that reads);
// a Read afterwards is an error. It panics if frames is not positive.
func Ahead(src Source, frames int) (ahead Source, stop func()) {
	if frames <= 0 {
		panic(fmt.Sprintf("audio: read ahead by %d frames", frames))
	}
	if runtime.GOMAXPROCS(0) == 1 {
		return src, func() {}
	}
	a := newAhead(src, frames)
	return a, a.stop
}

var errStopped = errors.New("audio: read from a source that was stopped")

func newAhead(src Source, frames int) *ahead {
	channels := src.Format().Channels
	a := &ahead{src: src, next: loaded{block: NewBlock(channels, frames)}, now: loaded{block: NewBlock(channels, frames)}, ready: make(chan struct{}, 1)}
	a.load = a.fill
	return a
}

type ahead struct {
	src     Source
	now     loaded // being given
	at      int    // frames of now that were given
	next    loaded // being read while begun
	begun   bool
	ready   chan struct{} // next was read
	load    func()        // fill, made once: a go statement of it allocates nothing
	stopped error         // what every further Read returns
}

// loaded is a block with what reading it gave.
type loaded struct {
	block Block
	n     int
	err   error
}

// fill reads the next block whole.
func (a *ahead) fill() {
	l := &a.next
	l.n, l.err = 0, nil
	for idle := 0; l.err == nil && l.n < l.block.Frames(); {
		n, err := a.src.Read(l.block.Slice(l.n, l.block.Frames()))
		l.n += n
		l.err = err
		if idle++; n > 0 {
			idle = 0
		} else if err == nil && idle == 100 {
			l.err = io.ErrNoProgress
		}
	}
	a.ready <- struct{}{}
}

func (a *ahead) begin() {
	a.begun = true
	go a.load()
}

// Format implements Source.
func (a *ahead) Format() Format { return a.src.Format() }

// Read implements Source.
func (a *ahead) Read(dst Block) (int, error) {
	if dst.Channels() != a.now.block.Channels() {
		panic(fmt.Sprintf("audio: read of %d channels into a block of %d", a.now.block.Channels(), dst.Channels()))
	}
	if dst.Frames() == 0 && a.stopped == nil {
		return 0, nil
	}
	n := 0
	for a.stopped == nil && n < dst.Frames() {
		if a.at == a.now.n {
			if a.now.err == nil {
				a.turn()
				continue
			}
			a.stopped = a.now.err
			break
		}
		k := dst.Slice(n, dst.Frames()).CopyFrom(a.now.block.Slice(a.at, a.now.n))
		a.at += k
		n += k
	}
	// A failure comes with the frames before it, the end after them.
	if a.stopped == nil && a.at == a.now.n && a.now.err != nil && a.now.err != io.EOF {
		a.stopped = a.now.err
	}
	if n > 0 && a.stopped == io.EOF {
		return n, nil
	}
	return n, a.stopped
}

// stop waits for the block being read and lets it go.
func (a *ahead) stop() {
	if a.begun {
		<-a.ready
		a.begun = false
	}
	if a.stopped == nil {
		a.stopped = errStopped
	}
}

// turn waits for the next block, takes it, and has the one after it read.
func (a *ahead) turn() {
	if !a.begun {
		a.begin()
	}
	<-a.ready
	a.begun = false
	a.now, a.next = a.next, a.now
	a.at = 0
	if a.now.err == nil {
		a.begin()
	}
}
