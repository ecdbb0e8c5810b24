package kernel

import "fmt"

// Layout is how samples lie in a file, each little-endian.
type Layout int

// The layouts that Deinterleave knows.
const (
	Int16   Layout = iota // two's complement, divided by 2^15
	Int24                 // by 2^23
	Int32                 // by 2^31, rounded to float32
	Float32               // as they are, which are all to be below LargestSample
)

// LargestSample is what the size of a sample of Float32 stays below: no sound is
// 193 dB above full scale, floats of integer scale reach 2^31, and powers of
// larger ones would leave the range of float32 in a transform.
const LargestSample = 1 << 32

// Bytes is the size of a sample.
func (l Layout) Bytes() int { return [...]int{2, 3, 4, 4}[l] }

// Deinterleave spreads the first frames of src over the channels of dst, all of
// the same length n: sample i of channel ch comes from src[i·frame + ch·width:],
// width the bytes of a sample. It does as many frames as it can do fast, and
// returns how many those are: the rest is for the caller, and all of it where
// the plain set is in use, frames are fewer than eight or channels than four, or
// one of the samples is not finite or not below LargestSample. It panics if src
// is shorter than n frames or a frame than the channels.
func Deinterleave(dst [][]float32, src []byte, frame int, layout Layout) int {
	channels, width := len(dst), layout.Bytes()
	if channels == 0 {
		return 0
	}
	n := len(dst[0])
	for _, x := range dst {
		if len(x) != n {
			panic(fmt.Sprintf("kernel: channels of %d and %d samples", n, len(x)))
		}
	}
	if frame < channels*width || len(src) < n*frame {
		panic(fmt.Sprintf("kernel: %d frames of %d channels of %d bytes from %d bytes in frames of %d", n, channels, width, len(src), frame))
	}
	if !vector || channels < 4 {
		return 0
	}
	group := min(8, channels&^3)
	if (layout == Int24 || layout == Int16) && group == 4 {
		// Sixteen bytes are read where four samples begin.
		for n > 0 && len(src) < (n-1)*frame+(channels-4)*width+16 {
			n--
		}
	}
	whole := n &^ 7
	if whole == 0 {
		return 0
	}
	// The last group begins such that it ends with the last channel: some
	// channels are done twice. So are some frames, of a last group that ends with
	// the last frame.
	bad := uint32(0)
	for ch := 0; ch < channels; ch += group {
		ch = min(ch, channels-group)
		bad |= spread(dst[ch:ch+group], 0, src[ch*width:], frame, whole, layout)
		if n > whole {
			bad |= spread(dst[ch:ch+group], n-8, src[(n-8)*frame+ch*width:], frame, 8, layout)
		}
	}
	if bad != 0 {
		return 0
	}
	return n
}

// spread does n frames, a multiple of 8, of eight or four channels from frame at
// of dst on.
func spread(dst [][]float32, at int, src []byte, frame, n int, layout Layout) (bad uint32) {
	var to [8]*float32
	for k, x := range dst {
		to[k] = &x[at]
	}
	eight := len(dst) == 8
	switch layout {
	case Int16:
		if eight {
			eightFrom16AVX2(&to[0], &src[0], frame, n)
		} else {
			fourFrom16AVX2(&to[0], &src[0], frame, n)
		}
	case Int24:
		if eight {
			eightFrom24AVX2(&to[0], &src[0], frame, n)
		} else {
			fourFrom24AVX2(&to[0], &src[0], frame, n)
		}
	case Int32:
		if eight {
			eightFrom32AVX2(&to[0], &src[0], frame, n)
		} else {
			fourFrom32AVX2(&to[0], &src[0], frame, n)
		}
	default:
		if eight {
			return eightFromFloat32AVX2(&to[0], &src[0], frame, n)
		}
		return fourFromFloat32AVX2(&to[0], &src[0], frame, n)
	}
	return 0
}
