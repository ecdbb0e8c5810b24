package batch

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"testing"
)

// A merge that finds everything done leaves the staging folder of a run that is
// at work here alone.
func TestAMergeLeavesARunAtWorkItsFolder(t *testing.T) {
	if runtime.GOOS != "linux" {
		t.Skip("whether another process runs is known on Linux alone")
	}
	b := newBench(t, map[string]string{"a.wav": "one"})
	var kept error
	do := func(ctx context.Context, a Assignment) (Report, error) {
		// Another run makes the same take and sums up meanwhile.
		if tally, err := b.run(capitals, b.settings()); err != nil || tally.Done != 1 {
			t.Errorf("the other run: %+v, %v", tally, err)
		}
		if s := mergeOf(b); !s.Complete() {
			t.Errorf("%+v", s)
		}
		_, kept = os.Stat(a.Folder)
		return capitals(ctx, a)
	}
	tally, err := b.run(do, b.settings())
	if err != nil || tally.Others != 1 || tally.Done != 0 || kept != nil {
		t.Errorf("%+v, %v; its folder: %v", tally, err, kept)
	}
	if _, err := os.Stat(filepath.Join(b.out, stagingFolder)); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("staging is left: %v", err)
	}
}

// A run on another machine writes while a merge here takes its folder away:
// neither ends in an error that names a folder that is not empty, and what that
// run has not committed stays open, not failed.
func TestAMergeAndARunElsewhereDoNotMeet(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one"})
	if _, err := b.run(capitals, b.settings()); err != nil {
		t.Fatal(err)
	}
	for k := range 200 {
		foreign := filepath.Join(b.out, stagingFolder, fmt.Sprintf("elsewhere-1-1-%d", k), "take")
		if err := os.MkdirAll(foreign, 0o777); err != nil {
			t.Fatal(err)
		}
		stop := make(chan struct{})
		var writers sync.WaitGroup
		writers.Go(func() {
			for i := 0; ; i++ {
				select {
				case <-stop:
					return
				default:
				}
				if err := os.WriteFile(filepath.Join(foreign, fmt.Sprint(i)), nil, 0o666); err != nil {
					return
				}
			}
		})
		s, err := Merge(b.plan, MergeSettings{Out: b.out, Verify: true})
		close(stop)
		writers.Wait()
		if err != nil || !s.Complete() {
			t.Fatalf("%+v, %v", s, err)
		}
		if _, err := os.Stat(filepath.Dir(foreign)); !errors.Is(err, os.ErrNotExist) {
			t.Fatalf("the folder is left: %v", err)
		}
	}
}

func TestARunWhoseFolderWentAwayBlamesNoTake(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two"})
	do := func(ctx context.Context, a Assignment) (Report, error) {
		if a.Take.Key == "a" {
			if err := os.RemoveAll(filepath.Join(b.out, stagingFolder)); err != nil {
				t.Error(err)
			}
		}
		return capitals(ctx, a)
	}
	s := b.settings()
	s.Workers = 1
	tally, err := b.run(do, s)
	var trouble *TroubleError
	if !errors.As(err, &trouble) || !strings.Contains(err.Error(), "went away during the work") || tally.Failed != 0 || tally.Done != 1 || tally.Open != 1 {
		t.Errorf("%+v, %v", tally, err)
	}
	if tally, err = b.run(capitals, b.settings()); err != nil || tally.Done != 1 || tally.Standing != 1 {
		t.Errorf("again: %+v, %v", tally, err)
	}
}
