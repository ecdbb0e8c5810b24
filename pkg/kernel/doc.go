// Package kernel holds the inner loops that most time goes into, each as a
// plain Go function, which is its definition, and for processors that have it
// as a vector function.
//
// The set is chosen once, when the program starts, by what the processor has:
// "avx2" (AVX2 and FMA) on amd64, else "plain". Name says which. Use takes
// another one. Results of the sets differ by rounding only, below -120 dB of
// the result; within one set they are the same bits wherever a slice lies in
// memory.
//
// The vector functions are written by scripts/kernels:
//
//	go generate ./pkg/kernel
//
// # Use
//
//	kernel.AddFIR(y, x, reversed) // y[i] += Σ_t reversed[t]·x[i+t]
//
// The steps of the transform are for package spectral, which makes plans of
// them: FirstStep, Step and a last step, SplitHalves and JoinHalves for real
// signals. Deinterleave is for package wav.
//
// # Sources
//
// Oppenheim & Schafer, Discrete-Time Signal Processing, Prentice Hall 1989:
// convolution (2.3).
//
// [Van Loan 1992] C. Van Loan, Computational Frameworks for the Fast Fourier
// Transform, SIAM 1992, section 1.7: the autosort transform of Stockham, whose
// steps of radix 4 and 8 are here. The rest is elementary.
package kernel

//go:generate go run ../../scripts/kernels -out vector_amd64_gen.s -stubs vector_amd64_gen.go -pkg kernel
