package batch

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

// ledgerFolder holds the ledgers, below the output folder.
const ledgerFolder = ".ledger"

// The events of a ledger.
const (
	EventBegun     = "begun"     // a run
	EventCommitted = "committed" // a take
	EventLeft      = "left"      // a take that stays open, for trouble with storage
	EventEnded     = "ended"     // a run
)

// Line is one line of a ledger.
type Line struct {
	At     string  `json:"at"` // RFC 3339, by the clock of the machine that wrote it
	Event  string  `json:"event"`
	PlanID string  `json:"plan_id,omitempty"`
	Take   string  `json:"take,omitempty"`
	Recipe string  `json:"recipe,omitempty"`
	State  State   `json:"state,omitempty"`
	Cause  string  `json:"cause,omitempty"`
	Error  string  `json:"error,omitempty"`
	Files  []File  `json:"files,omitempty"`
	Size   int64   `json:"outcome_bytes,omitempty"`
	Things int     `json:"folder_entries,omitempty"` // in the take's folder
	Bytes  int64   `json:"folder_bytes,omitempty"`   // of the outputs that lie in it
	Took   float64 `json:"took_s,omitempty"`
}

// sealedLine is a line as it is written.
type sealedLine struct {
	Sum  string          `json:"sum"` // CRC-32C of line
	Line json.RawMessage `json:"line"`
}

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// Ledger is the ledger of one run. Its file is made with the first line, so
// that a run with nothing to do leaves none.
type Ledger struct {
	out  string
	run  string
	file *os.File
}

// Append writes a line and makes it last.
func (l *Ledger) Append(line Line) error {
	text, err := json.Marshal(line)
	if err != nil {
		return fmt.Errorf("ledger: %w", err)
	}
	sealed, err := json.Marshal(sealedLine{fmt.Sprintf("%08x", crc32.Checksum(text, castagnoli)), text})
	if err != nil {
		return fmt.Errorf("ledger: %w", err)
	}
	if l.file == nil {
		dir := filepath.Join(l.out, ledgerFolder)
		if err := os.MkdirAll(dir, 0o777); err != nil {
			return err
		}
		// A name of its own: appends of two machines to one file get lost on
		// network file systems.
		if l.file, err = os.OpenFile(filepath.Join(dir, l.run+".jsonl"), os.O_WRONLY|os.O_APPEND|os.O_CREATE|os.O_EXCL, 0o666); err != nil {
			return err
		}
		syncFolder(dir)
	}
	if _, err := l.file.Write(append(sealed, '\n')); err != nil {
		return err
	}
	return l.file.Sync()
}

// Close closes the file.
func (l *Ledger) Close() error {
	if l.file == nil {
		return nil
	}
	return l.file.Close()
}

// ReadLedgers returns the sound lines of all ledgers of an output folder, in
// the order of their times, and how many lines were damaged (a run that lost
// its power leaves half a line).
func ReadLedgers(out string) (lines []Line, damaged int, err error) {
	dir := filepath.Join(out, ledgerFolder)
	entries, err := os.ReadDir(dir)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, 0, nil
	}
	if err != nil {
		return nil, 0, err
	}
	for _, e := range entries {
		if !strings.HasSuffix(e.Name(), ".jsonl") {
			continue
		}
		text, err := os.ReadFile(filepath.Join(dir, e.Name()))
		if err != nil {
			return nil, 0, err
		}
		for one := range bytes.Lines(text) {
			line, ok := unseal(one)
			if ok {
				lines = append(lines, line)
			} else {
				damaged++
			}
		}
	}
	slices.SortStableFunc(lines, func(a, b Line) int { return strings.Compare(a.At, b.At) })
	return lines, damaged, nil
}

func unseal(text []byte) (line Line, ok bool) {
	var s sealedLine
	if json.Unmarshal(text, &s) != nil || fmt.Sprintf("%08x", crc32.Checksum(s.Line, castagnoli)) != s.Sum {
		return line, false
	}
	return line, json.Unmarshal(s.Line, &line) == nil
}
