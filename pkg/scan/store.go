package scan

// store keeps the powers of some bands over time in bounded memory: when it is
// full, neighbouring entries are merged in pairs and stand for twice the time.
type store struct {
	windows int // of the analysis in one entry
	most    int // entries kept at most, even
	filled  int // windows in sum
	sum     []float64
	power   [][]float32 // power[band][entry]
	all     []float64   // sums over all windows
	count   int         // of all windows
}

func newStore(bands, most int) *store {
	s := &store{windows: 1, most: max(64, most&^1), sum: make([]float64, bands), power: make([][]float32, bands), all: make([]float64, bands)}
	s.grow(min(64, s.most))
	return s
}

// grow moves the powers to a backing array with room for entries each.
func (s *store) grow(entries int) {
	all := make([]float32, len(s.power)*entries)
	for b, p := range s.power {
		room := all[b*entries : (b+1)*entries : (b+1)*entries]
		s.power[b] = room[:copy(room, p)]
	}
}

// add takes the powers of one window.
func (s *store) add(power []float64) {
	for b, p := range power {
		s.sum[b] += p
		s.all[b] += p
	}
	s.count++
	if s.filled++; s.filled < s.windows {
		return
	}
	if n := len(s.power[0]); n == cap(s.power[0]) {
		s.grow(min(2*n, s.most))
	}
	scale := 1 / float64(s.filled)
	for b, p := range s.sum {
		s.power[b] = append(s.power[b], float32(p*scale))
		s.sum[b] = 0
	}
	s.filled = 0
	if len(s.power[0]) < s.most {
		return
	}
	for b, p := range s.power {
		for j := range len(p) / 2 {
			p[j] = 0.5 * (p[2*j] + p[2*j+1])
		}
		s.power[b] = p[:len(p)/2]
	}
	s.windows *= 2
}
