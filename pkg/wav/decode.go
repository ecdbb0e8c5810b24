package wav

import (
	"encoding/binary"
	"math"

	"alidade/pkg/kernel"
)

// decoder turns one channel of interleaved frames into float32: sample i of
// dst comes from src[i*stride:]. It returns how many samples were not finite
// and the index of the first of them; those become 0.
type decoder func(dst []float32, src []byte, stride int) (bad, first int)

func decoderOf(e Encoding) decoder {
	switch e {
	case PCM8:
		return decode8
	case PCM16:
		return decode16
	case PCM24:
		return decode24
	case PCM32:
		return decode32
	case Float32:
		return decodeFloat32
	}
	return decodeFloat64
}

func decode8(dst []float32, src []byte, stride int) (bad, first int) {
	p := 0
	for i := range dst {
		dst[i] = float32(int(src[p])-128) * (1.0 / (1 << 7))
		p += stride
	}
	return 0, 0
}

func decode16(dst []float32, src []byte, stride int) (bad, first int) {
	p := 0
	for i := range dst {
		dst[i] = float32(int16(binary.LittleEndian.Uint16(src[p:]))) * (1.0 / (1 << 15))
		p += stride
	}
	return 0, 0
}

func decode24(dst []float32, src []byte, stride int) (bad, first int) {
	p := 0
	for i := range dst {
		b := src[p : p+3 : p+3]
		dst[i] = float32(int32(uint32(b[0])<<8|uint32(b[1])<<16|uint32(b[2])<<24)) * (1.0 / (1 << 31))
		p += stride
	}
	return 0, 0
}

func decode32(dst []float32, src []byte, stride int) (bad, first int) {
	p := 0
	for i := range dst {
		dst[i] = float32(int32(binary.LittleEndian.Uint32(src[p:]))) * (1.0 / (1 << 31))
		p += stride
	}
	return 0, 0
}

func decodeFloat32(dst []float32, src []byte, stride int) (bad, first int) {
	const exponent = 0x7f800000
	const largest = (127 + 31) << 23 // of samples below kernel.LargestSample
	p := 0
	for i := range dst {
		u := binary.LittleEndian.Uint32(src[p:])
		if u&exponent > largest {
			if bad == 0 {
				first = i
			}
			bad++
			u = 0
		}
		dst[i] = math.Float32frombits(u)
		p += stride
	}
	return bad, first
}

func decodeFloat64(dst []float32, src []byte, stride int) (bad, first int) {
	p := 0
	for i := range dst {
		x := float32(math.Float64frombits(binary.LittleEndian.Uint64(src[p:])))
		if !(x > -kernel.LargestSample && x < kernel.LargestSample) {
			if bad == 0 {
				first = i
			}
			bad++
			x = 0
		}
		dst[i] = x
		p += stride
	}
	return bad, first
}
