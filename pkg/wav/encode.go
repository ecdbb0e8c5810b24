package wav

import (
	"encoding/binary"
	"math"

	"alidade/pkg/kernel"
)

// The integer encoders turn channel ch of a block into interleaved samples:
// sample i of src goes to dst[i*stride:]. They return sum continued over the
// integers written (mix), so that a reader can be held against what was meant
// and not against the bytes.

// mix continues a running sum over the samples of one channel. For a given v
// it is a bijection of sum, so one wrong sample always changes the end.
func mix(sum uint64, v uint32) uint64 {
	sum = (sum ^ uint64(v)) * 0x9E3779B97F4A7C15
	return sum ^ sum>>29
}

// encode16 adds triangular noise of ±1 least significant bit before it rounds
// (TPDF dither: the error then has neither mean nor power that depends on the
// signal [Lipshitz et al. 1992]). The noise of sample number at + i*step comes
// from that number and the seed alone.
func encode16(dst []byte, src []float32, stride int, sum, seed, at, step uint64) uint64 {
	p := 0
	for i, x := range src {
		v := clamp(math.RoundToEven(float64(x)*(1<<15)+tpdf(seed, at+uint64(i)*step)), 1<<15)
		binary.LittleEndian.PutUint16(dst[p:], uint16(v))
		sum = mix(sum, uint32(v))
		p += stride
	}
	return sum
}

func encode24(dst []byte, src []float32, stride int, sum uint64) uint64 {
	p := 0
	var whole [256]int32
	for len(src) > 0 {
		n := min(len(src), len(whole))
		kernel.Quantise(whole[:n], src[:n], 1<<23)
		for _, v := range whole[:n] {
			b := dst[p : p+3 : p+3]
			b[0], b[1], b[2] = byte(v), byte(v>>8), byte(v>>16)
			sum = mix(sum, uint32(v))
			p += stride
		}
		src = src[n:]
	}
	return sum
}

func encodeFloat32(dst []byte, src []float32, stride int, sum uint64) uint64 {
	p := 0
	for _, x := range src {
		u := math.Float32bits(x)
		binary.LittleEndian.PutUint32(dst[p:], u)
		sum = mix(sum, u)
		p += stride
	}
	return sum
}

// clamp limits v to -full..full-1.
func clamp(v, full float64) int32 {
	if v >= full {
		return int32(full - 1)
	}
	if v < -full {
		return int32(-full)
	}
	return int32(v)
}

// tpdf is noise number k of the seed: the difference of two uniform numbers,
// triangular in -1..1. The mixing is that of SplitMix64 [Steele et al. 2014].
func tpdf(seed, k uint64) float64 {
	z := seed + (k+1)*0x9E3779B97F4A7C15
	z = (z ^ z>>30) * 0xBF58476D1CE4E5B9
	z = (z ^ z>>27) * 0x94D049BB133111EB
	z ^= z >> 31
	return (float64(uint32(z)) - float64(uint32(z>>32))) * (1.0 / (1 << 32))
}
