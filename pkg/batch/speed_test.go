package batch

import (
	"context"
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"
	"time"
)

// Two workers have the same night done in little more than half the time: what
// the batch itself adds to a take is small, and no worker waits for another.
// Work that waits stands for work that computes, so that the figure is that of
// the batch and not of the machine's load. The two are compared within a round,
// and the median is taken of a fixed number of rounds.
func TestTwoWorkersShareTheWork(t *testing.T) {
	takes := map[string]string{}
	for k := range 12 {
		takes[fmt.Sprintf("t%02d.wav", k)] = "sound"
	}
	b := newBench(t, takes)
	wait := func(ctx context.Context, a Assignment) (Report, error) {
		time.Sleep(30 * time.Millisecond)
		return capitals(ctx, a)
	}
	var rounds []float64
	for range 5 {
		var took [3]time.Duration
		for _, workers := range []int{1, 2} {
			if err := os.RemoveAll(b.out); err != nil {
				t.Fatal(err)
			}
			s := b.settings()
			s.Workers = workers
			begun := time.Now()
			if tally, err := b.run(wait, s); err != nil || tally.Done != len(takes) {
				t.Fatalf("%+v, %v", tally, err)
			}
			took[workers] = time.Since(begun)
		}
		rounds = append(rounds, took[1].Seconds()/(2*took[2].Seconds()))
	}
	slices.Sort(rounds)
	t.Logf("efficiency of two workers: %.2f", rounds)
	if median := rounds[len(rounds)/2]; median < 0.8 {
		t.Errorf("efficiency %.2f in the middle of %.2f, want at least 0.8", median, rounds)
	}
}

// A night that is done is found to be so quickly, with the ledgers and without.
// ALIDADE_LONG=1 does so with twenty thousand takes.
func TestANightThatIsDoneIsSeenToBeQuickly(t *testing.T) {
	n, most := 300, 2*time.Second
	if os.Getenv("ALIDADE_LONG") == "1" {
		n, most = 20_000, 5*time.Second
	}
	takes := map[string]string{}
	for k := range n {
		takes[fmt.Sprintf("d%02d/t%05d.wav", k%40, k)] = strings.Repeat("a", k%7+1)
	}
	b := newBench(t, takes)
	begun := time.Now()
	if tally, err := b.run(capitals, b.settings()); err != nil || tally.Done != n {
		t.Fatalf("%+v, %v", tally, err)
	}
	made := time.Since(begun)
	for _, ledgers := range []bool{true, false} {
		if !ledgers {
			if err := os.RemoveAll(b.out + "/" + ledgerFolder); err != nil {
				t.Fatal(err)
			}
		}
		begun = time.Now()
		tally, err := b.run(capitals, b.settings())
		took := time.Since(begun)
		if err != nil || tally.Standing != n || tally.Open != 0 {
			t.Fatalf("%+v, %v", tally, err)
		}
		t.Logf("%d takes made in %s; seen to be done in %s, ledgers: %v", n, made.Round(time.Millisecond), took.Round(time.Millisecond), ledgers)
		if took > most {
			t.Errorf("%s, want at most %s (ledgers: %v)", took, most, ledgers)
		}
	}
}
