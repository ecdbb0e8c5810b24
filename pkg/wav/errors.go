package wav

import "fmt"

// FormatError says that a file breaks the format, and where. Its text is
// "where at byte offset: what".
type FormatError struct {
	Where  string // "data chunk", "file"
	Offset int64  // byte in the file at which Where starts
	What   string // the fact, with numbers
}

// Error implements error.
func (e *FormatError) Error() string {
	return fmt.Sprintf("%s at byte %d: %s", e.Where, e.Offset, e.What)
}

// UnsupportedError says that a file is sound in its form but holds what this
// package does not read, and where.
type UnsupportedError struct {
	Where  string
	Offset int64
	What   string // names the thing, "MPEG layer 3 in WAV (format tag 0x0055)"
}

// Error implements error.
func (e *UnsupportedError) Error() string {
	return fmt.Sprintf("%s at byte %d: %s", e.Where, e.Offset, e.What)
}

// Warning is something about a file that a person should know although the
// file was read. Its JSON form is part of the description of a file.
type Warning struct {
	Code    string `json:"code"`    // one of the constants below
	Message string `json:"message"` // what, with numbers
	Offset  int64  `json:"offset"`  // byte in the file it is about
}

// String returns the message with its place.
func (w Warning) String() string { return fmt.Sprintf("byte %d: %s", w.Offset, w.Message) }

// The codes of warnings.
const (
	WarnPrefix        = "prefix"            // bytes before the RIFF header were skipped
	WarnRIFFSize      = "riff-size"         // the RIFF size field does not fit the file
	WarnTruncated     = "truncated"         // a chunk declares more than the file has left
	WarnSizeUnknown   = "size-unknown"      // the data size is 0xFFFFFFFF: read to the end of the file
	WarnSizeZero      = "size-zero"         // the data size is 0 but samples follow: read to the end of the file
	WarnSizeWrapped   = "size-wrapped"      // the data size is the true one modulo 4 GiB
	WarnSizeStale     = "size-stale"        // sound goes on behind the end that the header gives
	WarnNoDS64        = "no-ds64"           // RF64 or BW64 without a usable ds64 chunk
	WarnPartialFrame  = "partial-frame"     // the data end within a frame
	WarnNoPad         = "no-pad"            // an odd chunk is not padded
	WarnTrailing      = "trailing-bytes"    // bytes at the end are no chunks
	WarnTwice         = "twice"             // a second fmt or data chunk was left out
	WarnTooManyChunks = "too-many-chunks"   // the walk stopped
	WarnBlockAlign    = "block-align"       // the block align field does not fit the bits
	WarnValidBits     = "valid-bits"        // more valid bits than the container has
	WarnFact          = "fact"              // the fact chunk gives another number of frames
	WarnNoFrames      = "no-frames"         // the file holds no sound
	WarnMetadata      = "metadata"          // a metadata chunk was read in part or not at all
	WarnTime          = "time-reference"    // bext and iXML give different times
	WarnNonFinite     = "non-finite-sample" // samples that are not numbers were read as 0
)
