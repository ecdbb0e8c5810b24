package pipeline

import (
	"errors"
	"fmt"
	"io/fs"
	"path/filepath"
	"syscall"
)

// unreadable adds to an error of opening or reading a file what helps.
func unreadable(err error) error {
	hint := ""
	switch {
	case err == nil:
		return nil
	case errors.Is(err, fs.ErrNotExist):
		hint = "look for a slip in the name; a name without a leading / counts from the current folder"
	case errors.Is(err, fs.ErrPermission):
		hint = "let this user read it, or copy it to where it can be read"
	case errors.Is(err, syscall.ELOOP):
		hint = "the link leads round in a circle: name the file itself"
	case errors.Is(err, syscall.ENAMETOOLONG):
		hint = "systems end names at 255 bytes: put names that {ch} should stand for in quotes, and give several files as several words"
	case errors.Is(err, syscall.ENOTDIR):
		hint = "part of the path is a file, not a folder"
	case errors.Is(err, syscall.EIO):
		hint = "the disk or its cable gives errors: copy the file to another disk"
	default:
		return err
	}
	return &HintedError{Err: err, Hint: hint}
}

// unwritable says that the output final cannot be made, and what helps.
func unwritable(final string, err error) error {
	var p *fs.PathError
	if errors.As(err, &p) {
		err = p.Err
	}
	hint := "give another --out"
	where := final
	switch {
	case errors.Is(err, fs.ErrNotExist):
		where, hint = filepath.Dir(final), "make that folder first, or end --out in / to have it made"
	case errors.Is(err, fs.ErrPermission), errors.Is(err, syscall.EROFS):
		where, hint = filepath.Dir(final), "give --out in a folder that this user may write to"
	case errors.Is(err, syscall.ENOSPC), errors.Is(err, syscall.EDQUOT):
		hint = "free some room or give --out on another disk"
	}
	return &HintedError{Err: fmt.Errorf("%s: %w", where, err), Hint: hint}
}

// fits holds the take against the rig: every microphone in use has a channel.
func (r *run) fits() error {
	channels := r.take.header.Channels
	if r.rig.CheckTake(channels) == nil {
		return nil
	}
	var missing []int
	for _, m := range r.rig.Used() {
		if ch := r.rig.Mics[m].Channel; ch > channels {
			missing = append(missing, ch)
		}
	}
	const most = 4
	rest := ""
	if n := len(missing); n > most {
		missing, rest = missing[:most], fmt.Sprintf(", and %d more", n-most)
	}
	has := fmt.Sprintf("%d channels", channels)
	hint := "name the take's own rig file, or correct channel in it (use: false leaves a microphone out)"
	if channels == 1 {
		has = "1 channel"
		hint = "a set of one-channel files is named by a pattern, \"NAME_" + channelMark + ".wav\", or with --set"
	}
	return &UsageError{
		Err: fmt.Errorf("%s: the take has %s, the rig %s has microphones on %s%s",
			r.take.path(), has, r.rig.Name, plural(missing, "channel %s", "channels %s"), rest),
		Hint: hint,
	}
}
