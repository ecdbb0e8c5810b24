// Package audio is the io of multichannel sound: blocks of frames, and the
// sources and sinks that pass them on.
//
// A sample is one number, a frame is one sample of every channel, a block is a
// run of frames. Samples are float32 with full scale at 1.0, stored planar:
// all frames of a channel lie next to each other. Whatever is designed, fitted
// or averaged from samples is float64 and lives in other packages.
//
// # Contracts
//
// Source: Read fills all of dst unless the stream ends or fails; then it
// returns the shorter n. The end is 0, io.EOF, for ever. A failure is returned
// at once, together with the frames that were good before it, and for ever
// after with n = 0. Frames of dst past n are untouched. dst is not kept.
//
// Sink: Write takes all of src or returns an error. It neither keeps nor
// changes src. Finishing a sink is Close on the concrete type.
//
// Time: frame i out of a stage describes the instant of frame i in. A stage
// hides its own delay and flushes its own tail, so lengths are equal.
//
// Blocks of any size give the same samples. Package audiotest checks all of
// this for any Source.
//
// # Use
//
//	src := audio.Map(take, rigOrder, gains) // a Source from a Source
//	block := audio.NewBlock(src.Format().Channels, 4096)
//	for {
//		n, err := src.Read(block)
//		use(block.Slice(0, n))
//		if err != nil {
//			break // io.EOF at the end
//		}
//	}
package audio
