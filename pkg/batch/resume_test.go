package batch

import (
	"context"
	"os"
	"path/filepath"
	"slices"
	"testing"
)

// A take whose output somebody took away, or cut, is made again, with the
// ledger and without; what is whole stands.
func TestATakeWithoutItsOutputsIsMadeAgain(t *testing.T) {
	b := newBench(t, map[string]string{"a.wav": "one", "b.wav": "two"})
	s := b.settings()
	s.Workers = 1
	var made []string
	again := func(what string, want ...string) {
		t.Helper()
		made = nil
		_, err := b.run(func(ctx context.Context, a Assignment) (Report, error) {
			made = append(made, a.Take.Key)
			return capitals(ctx, a)
		}, s)
		if err != nil || !slices.Equal(made, want) {
			t.Errorf("%s: made %v, %v, want %v", what, made, err, want)
		}
	}
	track := func(take string) string { return filepath.Join(b.out, take, "track") }
	again("first", "a", "b")
	if err := os.Remove(track("a")); err != nil {
		t.Fatal(err)
	}
	again("an output is gone", "a")
	if got := b.all()["a/track"]; got != "ONE" {
		t.Errorf("track %q, want ONE", got)
	}
	if err := os.Truncate(track("b"), 1); err != nil {
		t.Fatal(err)
	}
	again("an output is cut", "b")
	if err := os.RemoveAll(filepath.Join(b.out, ledgerFolder)); err != nil {
		t.Fatal(err)
	}
	if err := os.Truncate(track("b"), 1); err != nil {
		t.Fatal(err)
	}
	again("an output is cut, no ledger", "b")
	again("all whole")
}
