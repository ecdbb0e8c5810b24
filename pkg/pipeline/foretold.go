package pipeline

import (
	"fmt"
	"slices"
)

// foretold refuses, before any work is done on the take, what its header and
// the rig tell to be wrong with what is to be measured: stretches that lie
// beyond its end or on one another, labels that no cue has, a microphone to
// compare to that is none, isolated takes that do not fit.
func (r *run) foretold() error {
	if r.set.NoMeasure {
		return nil
	}
	if _, err := r.comparedTo(); err != nil {
		return err
	}
	isolated := false
	for _, path := range []string{r.set.IsolatedNoise, r.set.IsolatedTarget} {
		if path == "" {
			continue
		}
		isolated = true
		t, err := openTake([]string{path}, r.isolatedJoining(), false)
		if err != nil {
			return err
		}
		if err := joinErrors(r.fitsTake(path, t), t.close()); err != nil {
			return err
		}
	}
	if isolated {
		return nil
	}
	said := len(r.findings)
	_, _, _, err := r.known()
	r.findings = r.findings[:said] // they are said where the figures are made
	return err
}

// comparedTo is the place of the microphone of --compare-to among the used
// ones, -1 for none or where it was left out as dead.
func (r *run) comparedTo() (int, error) {
	name := r.set.CompareTo
	if name == "" {
		return -1, nil
	}
	m, found := r.rig.Find(name)
	named := slices.Index(r.rig.Used(), m)
	if found && slices.Contains(r.left, m) {
		return -1, nil
	}
	if !found || named < 0 {
		return -1, &UsageError{Err: fmt.Errorf("--compare-to %q: no used microphone of rig %s has that name", name, r.rig.Name), Hint: r.rig.namesHint()}
	}
	return named, nil
}

// fitsTake refuses an isolated take that is not of the take's channels and rate
// or, for what follows the sound, of its length.
func (r *run) fitsTake(path string, t *take) error {
	mix := r.take.header
	if t.header.Rate != mix.Rate || t.header.Channels != mix.Channels {
		return &UsageError{Err: fmt.Errorf("%s: %d channels at %d Hz, but %s has %d at %d Hz: isolated takes are recorded with the same rig and settings",
			path, t.header.Channels, t.header.Rate, r.take.path(), mix.Channels, mix.Rate), Hint: "give a take that fits, or leave the option out"}
	}
	if r.set.followsSound() && t.header.Frames != mix.Frames {
		return &UsageError{Err: fmt.Errorf("%s: %d frames, but %s has %d: what follows the sound of the take (--postfilter, --reestimate-every, --toward follow) can only be measured on takes that lie frame by frame on it",
			path, t.header.Frames, r.take.path(), mix.Frames), Hint: "give takes cut like this one, or leave the option out"}
	}
	return nil
}
