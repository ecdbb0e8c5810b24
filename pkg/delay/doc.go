// Package delay shifts signals by fractions of a sample.
//
// # Conventions
//
// A positive delay makes a signal later, a negative one earlier: the ideal
// filter for a delay of D samples is e^{-jωD}. Filters are finite and have no
// latency of their own: their first tap stands at a stated place, which may lie
// before zero.
//
//	y[i] = Σ_t taps[t]·x[i - start - t]
//
// The error of a kernel is |H(f) - e^{-j2πfD}|, complex, the largest over
// frequency and delay. From 0 to 0.4 of the rate (0.8 of Nyquist), before any
// rounding to float32:
//
//	Sinc,  16 taps   -43 dB
//	Sinc,  32 taps   -93 dB
//	Sinc,  64 taps  -123 dB
//	Sinc, 128 taps  -121 dB (to 0.465 of the rate)
//	Farrow, 32 taps, order 6   -94 dB
//
// # Use
//
//	kernel, err := delay.NewSinc(64)
//	start, taps := kernel.Taps(nil, 3.37)                     // 3.37 samples later
//	late, err := delay.NewShift(src, kernel, []float64{0, 12e-6}) // seconds, one a channel
//
// Channels of several clocks are brought to one by NewDrift, a Farrow delay that
// moves along.
//
// # Sources
//
// [Laakso et al. 1996] T. I. Laakso, V. Välimäki, M. Karjalainen and U. K.
// Laine, Splitting the unit delay, IEEE Signal Processing Magazine 13 (1996),
// no. 1, pp. 30-60.
//
// [Farrow 1988] C. W. Farrow, A continuously variable digital delay element,
// Proc. IEEE Int. Symp. Circuits and Systems (1988), pp. 2641-2645.
//
// [Kaiser 1974] J. F. Kaiser, Nonrecursive digital filter design using the
// I0-sinh window function, Proc. IEEE Int. Symp. Circuits and Systems (1974),
// pp. 20-23.
//
// [Thiran 1971] J.-P. Thiran, Recursive digital filters with maximally flat
// group delay, IEEE Trans. Circuit Theory 18 (1971), pp. 659-664.
//
// [Lawson 1961] C. L. Lawson, Contributions to the theory of linear least
// maximum approximation, thesis, UCLA 1961.
package delay
