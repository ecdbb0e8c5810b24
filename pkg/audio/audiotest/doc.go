// Package audiotest is the contract of package audio as a test.
//
// TestSource reads a source in blocks of many sizes and checks all that
// package audio promises of a Source: full blocks until the end, 0 and io.EOF
// at the end and for ever after, nothing touched past n or outside dst, dst not
// kept, the same bits from blocks of any size, a format that does not change,
// no allocation once warm. TestStage checks the same of a source made from a
// source, and that a failure upstream comes out as that failure. TestSink is
// the same for the other end. Failing makes the faulty upstream.
//
// AllocsPerRun of package testing counts the allocations of the whole process,
// so none of these may run in a parallel test.
//
// # Use
//
//	func TestLowpassKeepsTheContract(t *testing.T) {
//		in := noise(3, 5000)
//		want := lowpassByHand(in)
//		stage := func(up audio.Source) audio.Source { return NewLowpass(up, 1000) }
//		audiotest.TestStage(t, 48000, in, stage, want, audiotest.Options{
//			Tolerance: 1e-6,        // float32 rounding of 24 additions
//			Sizes:     []int{1024}, // the stage's inner block
//			Lookahead: 1024 + 24,   // what it cannot give when upstream fails
//		})
//	}
package audiotest
