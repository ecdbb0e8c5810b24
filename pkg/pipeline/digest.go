package pipeline

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"hash"
	"io"
	"io/fs"
	"os"
)

// digestGap is the largest hole between two reads that is filled on the way
// when a file is hashed while it is read, bytes.
const digestGap = 1 << 20

// input is a regular file open for reading at any place. If it is asked for a
// hash, what is read in order is hashed while it is in the processor's cache;
// the rest is read at the end.
type input struct {
	*os.File
	info fs.FileInfo
	sum  hash.Hash // nil: not hashed
	next int64     // bytes hashed so far
}

// openInput opens the regular file path.
func openInput(path string, hashed bool) (*input, error) {
	// Looked at before it is opened: opening a pipe would wait for its writer.
	info, err := os.Stat(path)
	if err != nil {
		return nil, unreadable(err)
	}
	if info.IsDir() {
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: is a folder, not a file", path),
			Hint: "name the file in it that is meant; alidade batch does a whole folder of takes",
		}
	}
	if !info.Mode().IsRegular() {
		return nil, &HintedError{
			Err:  fmt.Errorf("%s: is %s, but a take is read more than once and from any place", path, kindOf(info.Mode())),
			Hint: "save it to a file first",
		}
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, unreadable(err)
	}
	if info, err = f.Stat(); err != nil {
		f.Close()
		return nil, err
	}
	in := &input{File: f, info: info}
	if hashed {
		in.sum = sha256.New()
	}
	return in, nil
}

// sameInput reports whether two inputs are one file, by whatever name.
func sameInput(a, b *input) bool { return os.SameFile(a.info, b.info) }

// ReadAt implements io.ReaderAt.
func (in *input) ReadAt(p []byte, off int64) (int, error) {
	n, err := in.File.ReadAt(p, off)
	if in.sum != nil && n > 0 {
		if gap := off - in.next; gap > 0 && gap <= digestGap {
			if cerr := in.hashUpTo(off); cerr != nil {
				return n, cerr
			}
		}
		if off <= in.next && off+int64(n) > in.next {
			in.sum.Write(p[in.next-off : n])
			in.next = off + int64(n)
		}
	}
	return n, err
}

// hashUpTo reads and hashes what lies before end and was not hashed yet.
func (in *input) hashUpTo(end int64) error {
	n, err := io.Copy(in.sum, io.NewSectionReader(in.File, in.next, end-in.next))
	in.next += n
	if err != nil {
		return err
	}
	if in.next < end {
		return fmt.Errorf("%s: ends at byte %d, was %d bytes long before", in.Name(), in.next, end)
	}
	return nil
}

// digest returns the SHA-256 of the whole file, in hexadecimal, and empty if
// it is not hashed. It fails if the file changed since it was opened.
func (in *input) digest() (string, error) {
	if err := in.unchanged(); err != nil {
		return "", err
	}
	if in.sum == nil {
		return "", nil
	}
	if err := in.hashUpTo(in.info.Size()); err != nil {
		return "", err
	}
	return hex.EncodeToString(in.sum.Sum(nil)), nil
}

// unchanged reports a file whose size or time changed since it was opened.
func (in *input) unchanged() error {
	now, err := in.Stat()
	if err != nil {
		return err
	}
	if now.Size() != in.info.Size() || !now.ModTime().Equal(in.info.ModTime()) {
		return &HintedError{
			Err:  fmt.Errorf("%s: changed while it was read: %d bytes before, %d now", in.Name(), in.info.Size(), now.Size()),
			Hint: "wait until the recorder or the copy has finished, and run again",
		}
	}
	return nil
}

// digestOf returns the SHA-256 of data, in hexadecimal.
func digestOf(data []byte) string {
	sum := sha256.Sum256(data)
	return hex.EncodeToString(sum[:])
}

// digestFile returns the SHA-256 of the whole of r.
func digestFile(r io.Reader) (string, error) {
	h := sha256.New()
	if _, err := io.Copy(h, r); err != nil {
		return "", err
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}
