package measure

// store keeps several power tracks that advance together in bounded memory.
// When it is full, neighbouring entries are merged in pairs and from then on
// an entry stands for twice as many frames of the analysis.
type store struct {
	frames int         // frames of the analysis in one entry
	most   int         // entries kept at most, even
	sum    []float64   // sum[s], of the entry that is being filled
	filled int         // frames in sum
	power  [][]float32 // power[s][entry], all of one backing array
}

// firstRoom is the number of entries that a new store has room for.
const firstRoom = 512

// newStore keeps tracks series within bytes of memory, frames frames of the
// analysis to an entry at first.
func newStore(tracks, frames, bytes int) *store {
	s := &store{frames: frames, most: 64, sum: make([]float64, tracks), power: make([][]float32, tracks)}
	if tracks > 0 {
		s.most = max(s.most, bytes/(4*tracks)&^1)
	}
	s.grow(min(firstRoom, s.most))
	return s
}

// grow moves the tracks to a backing array with room for entries each.
func (s *store) grow(entries int) {
	all := make([]float32, len(s.power)*entries)
	for i, p := range s.power {
		room := all[i*entries : (i+1)*entries : (i+1)*entries]
		s.power[i] = room[:copy(room, p)]
	}
}

// add takes the powers of one frame of the analysis.
func (s *store) add(power []float64) {
	for i, p := range power {
		s.sum[i] += p
	}
	s.filled++
	if s.filled < s.frames || len(s.power) == 0 {
		return
	}
	if n := len(s.power[0]); n == cap(s.power[0]) {
		s.grow(min(2*n, s.most))
	}
	scale := 1 / float64(s.filled)
	for i, p := range s.sum {
		s.power[i] = append(s.power[i], float32(p*scale))
		s.sum[i] = 0
	}
	s.filled = 0
	if len(s.power[0]) < s.most {
		return
	}
	for i, p := range s.power {
		for j := range len(p) / 2 {
			p[j] = 0.5 * (p[2*j] + p[2*j+1])
		}
		s.power[i] = p[:len(p)/2]
	}
	s.frames *= 2
}
