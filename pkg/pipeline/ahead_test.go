package pipeline

import (
	"context"
	"errors"
	"runtime"
	"testing"

	"alidade/pkg/audio"
	"alidade/pkg/bearing"
	"alidade/pkg/wav"
)

// failing is a sink whose third write fails.
type failing struct {
	writes int
	err    error
}

// Write implements audio.Sink.
func (f *failing) Write(audio.Block) error {
	if f.writes++; f.writes == 3 {
		return f.err
	}
	return nil
}

// A pass that fails leaves nothing behind that still reads the take: what its
// progress is told can be looked at once it has returned, with plain memory and
// under the race detector. The same of a search whose take cannot be
// read further.
func TestAPassThatFailsReadsNoMore(t *testing.T) {
	if was := runtime.GOMAXPROCS(0); was == 1 {
		runtime.GOMAXPROCS(2)
		defer runtime.GOMAXPROCS(was)
	}
	s := newScene(t, 12, wav.Float32)
	spec := Spec{Take: []string{s.take}, RigPath: s.rig, Options: Options{Toward: "70", BlockFrames: 512}}
	set, err := spec.Options.resolve()
	if err != nil {
		t.Fatal(err)
	}
	l, err := loadRig(spec.RigPath, spec.Options)
	if err != nil {
		t.Fatal(err)
	}
	told := 0
	r := &run{ctx: context.Background(), spec: spec, set: set, rig: l, watch: Watch{Progress: func(string, int64, int64) { told++ }}}
	if r.take, err = openTake(spec.Take, set.joining(), false); err != nil {
		t.Fatal(err)
	}
	defer r.take.close()
	if r.line, err = newBeamline(l, set, sceneRate); err != nil {
		t.Fatal(err)
	}
	broken := errors.New("full")
	for _, work := range []func() error{
		func() error {
			_, err := r.drive(r.toBeHeard("steering"), r.line.steered, &failing{err: broken})
			return err
		},
		func() error {
			_, err := r.searched(audio.Tee(r.toBeHeard("listening"), &failing{err: broken}), bearing.Options{})
			return err
		},
	} {
		if err := r.take.rewind(); err != nil {
			t.Fatal(err)
		}
		told = 0
		err := work()
		before := told
		if !errors.Is(err, broken) {
			t.Fatalf("error %v, want %v", err, broken)
		}
		for range 1000 {
			runtime.Gosched()
		}
		if before == 0 || told != before {
			t.Errorf("told %d times when it returned, then %d", before, told)
		}
	}
}

// One core means one: nothing reads ahead.
func TestOneCoreReadsNothingAhead(t *testing.T) {
	src := audio.FromBlock(8000, audio.NewBlock(1, 10))
	r := &run{spec: Spec{OneCore: true}}
	got, stop := r.ahead(src)
	stop()
	if got != audio.Source(src) {
		t.Errorf("%T instead of the source itself", got)
	}
}
