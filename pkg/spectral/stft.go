package spectral

import (
	"fmt"

	"alidade/pkg/audio"
	"alidade/pkg/kernel"
)

// Spectra are the spectra of one frame of an STFT. They belong to the STFT and
// hold only until the function they were given to returns.
type Spectra struct {
	Re, Im [][]float32 // [ch][k], k = 0..size/2
}

// Channels is the number of channels.
func (s *Spectra) Channels() int { return len(s.Re) }

// Bins is the number of bins of a channel.
func (s *Spectra) Bins() int {
	if len(s.Re) == 0 {
		return 0
	}
	return len(s.Re[0])
}

// STFT is a sink that cuts a stream into overlapping frames and gives the
// spectra of all channels of each to a function. Frame j covers the samples
// j·hop to j·hop+size, half-open. Nothing is scaled: bin k is
// Σ_i window[i]·x[j·hop+i]·e^{-j2πki/size}.
type STFT struct {
	channels, size, hop int
	window              []float32
	emit                func(frame int64, spec *Spectra) error
	fft                 *FFT[float32]
	in                  audio.Block // the samples from the next frame's first on
	filled              int
	skip                int // samples still to drop, where hop > size
	frame               int64
	pending             bool // samples came that no frame has covered yet
	windowed            []float32
	spec                Spectra
	err                 error
}

// NewSTFT returns an STFT of the given number of channels. Size is a power of
// two, MinSize to MaxSize, hop is at least 1 and may be larger than size. A nil
// window is a rectangle; another one has size values. Emit is called from Write
// and Flush, with frames 0, 1, 2 in turn; an error it returns becomes that of
// Write and ends the STFT.
func NewSTFT(channels, size, hop int, window []float64, emit func(frame int64, spec *Spectra) error) (*STFT, error) {
	if channels < 1 {
		return nil, fmt.Errorf("spectral: frames of %d channels", channels)
	}
	if hop < 1 {
		return nil, fmt.Errorf("spectral: hop of %d samples: want at least 1", hop)
	}
	if window != nil && len(window) != size {
		return nil, fmt.Errorf("spectral: window of %d values for frames of %d samples", len(window), size)
	}
	fft, err := NewFFT[float32](size)
	if err != nil {
		return nil, err
	}
	s := &STFT{
		channels: channels, size: size, hop: hop, emit: emit, fft: fft,
		in:       audio.NewBlock(channels, size),
		windowed: make([]float32, size),
	}
	if window != nil {
		s.window = make([]float32, size)
		for i, w := range window {
			s.window[i] = float32(w)
		}
	}
	for range channels {
		re, im := pair[float32](fft.Bins())
		s.spec.Re = append(s.spec.Re, re)
		s.spec.Im = append(s.spec.Im, im)
	}
	return s, nil
}

// Write implements audio.Sink. It panics if src has another number of channels.
func (s *STFT) Write(src audio.Block) error {
	if src.Channels() != s.channels {
		panic(fmt.Sprintf("spectral: block of %d channels for frames of %d", src.Channels(), s.channels))
	}
	for s.err == nil && src.Frames() > 0 {
		if s.skip > 0 {
			n := min(s.skip, src.Frames())
			s.skip -= n
			src = src.Slice(n, src.Frames())
			continue
		}
		n := s.in.Slice(s.filled, s.size).CopyFrom(src)
		s.filled += n
		s.pending = true
		src = src.Slice(n, src.Frames())
		if s.filled == s.size {
			s.err = s.transform()
		}
	}
	return s.err
}

// Flush gives the frames that hold samples which no frame has covered yet, with
// silence after the end of the stream. A stream that ended on the end of a
// frame, or an empty one, gives none. Write must not be called after it.
func (s *STFT) Flush() error {
	for s.err == nil && s.pending {
		s.in.Slice(s.filled, s.size).Clear()
		s.err = s.transform()
	}
	return s.err
}

// Frames is the number of frames given so far.
func (s *STFT) Frames() int64 { return s.frame }

// transform gives the frame that lies in s.in and moves on by a hop.
func (s *STFT) transform() error {
	for ch := range s.channels {
		x := s.in.Channel(ch)
		if s.window != nil {
			kernel.Multiply(s.windowed, x, s.window)
			x = s.windowed
		}
		s.fft.Forward(s.spec.Re[ch], s.spec.Im[ch], x)
	}
	if err := s.emit(s.frame, &s.spec); err != nil {
		return err
	}
	s.frame++
	s.pending = false
	if s.hop >= s.size {
		s.filled, s.skip = 0, s.hop-s.size
		return nil
	}
	for ch := range s.channels {
		x := s.in.Channel(ch)
		copy(x, x[s.hop:])
	}
	s.filled = max(0, s.filled-s.hop)
	return nil
}
