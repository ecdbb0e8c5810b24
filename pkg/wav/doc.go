// Package wav is WAV and RF64 files: their samples as sources and sinks of
// sound, and the metadata they carry.
//
// It works on io interfaces and opens no file. Offsets are bytes of the file,
// frames count from 0, channels from 0 in code and from 1 in messages, rates
// are frames per second, times samples since midnight where they come from a
// file. Full scale is 1.0: an integer sample of n bits is divided by 2^(n-1).
//
// # Reading
//
// PCM of 8, 16, 24 and 32 bits, with fewer valid bits in them or not, float of
// 32 and 64, plain and extensible headers, in RIFF, RF64, BW64 and Wave64, 1 to
// 256 channels, 8 to 384 kHz. Sizes are never believed: each is held against
// the file, and what a recorder left that lost power is read as far as it is
// there, with a Warning. What cannot be read is a *FormatError (broken) or an
// *UnsupportedError (named, but not for us), both with the place in the file.
// No input makes Open allocate more than twice its size or 64 MiB, whichever is
// larger.
//
// # Writing
//
// pcm16 (dithered), pcm24 and float32, as RIFF that becomes RF64 when it
// outgrows 4 GiB. Over-range frames are counted, never silent. Verify reads a
// finished file back. The bytes do not depend on the sizes of the blocks.
//
// # Use
//
//	take, err := wav.Open(f, size)       // f is an io.ReaderAt
//	...
//	meta, _ := take.Metadata().Derive(wav.Change{...})
//	w, err := wav.NewWriter(out, wav.Format{Rate: 48000, Channels: 1, Encoding: wav.PCM24}, wav.Option{Metadata: meta})
//	...
//	_, err = audio.Copy(take, 4096, w)   // any stages between
//	...
//	err = w.Close()                      // sizes; syncing and closing are the caller's
//	how, err := wav.Verify(out, w.Written().Bytes, w.Written())
//
// # Size
//
// Longer than 2,000 lines because the format's metadata (bext, iXML,
// cues, what becomes of them in an output, times of day, files that belong
// together) are half of it, and reader and writer share every layout in it.
//
// # Sources
//
//   - IBM/Microsoft, Multimedia Programming Interface and Data Specifications
//     1.0, 1991 (RIFF, fmt, data, fact, cue, LIST INFO, adtl).
//   - Microsoft, WAVEFORMATEX and WAVEFORMATEXTENSIBLE; RFC 2361 (format tags).
//   - EBU Tech 3285 v2, 2011 (bext); EBU R 98, 1999 (coding history).
//   - EBU Tech 3306, 2009 (RF64); ITU-R BS.2088 (BW64).
//   - iXML 2.0 (BWFXML).
//   - SMPTE ST 12-1:2014 (time code, drop frame).
//   - S. Lipshitz, R. Wannamaker, J. Vanderkooy: Quantization and dither, J. Audio
//     Eng. Soc. 40(5), 1992.
//   - G. Steele, D. Lea, C. Flood: Fast splittable pseudorandom number generators,
//     OOPSLA 2014.
package wav
