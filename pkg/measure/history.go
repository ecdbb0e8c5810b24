package measure

// History keeps the powers of several tracks that advance together, in bounded
// memory. When it is full, neighbouring entries are merged in pairs and from then
// on an entry stands for twice as many windows of the analysis.
type History struct {
	windows int         // of the analysis in one entry
	most    int         // entries kept at most, even
	sum     []float64   // sum[track], of the entry that is being filled
	filled  int         // windows in sum
	power   [][]float32 // power[track][entry], all of one backing array
}

// Rooms of a History, entries.
const (
	firstRoom    = 64
	leastEntries = 64 // that can be asked for
)

// NewHistory keeps so many tracks with at most so many entries each (64 at
// least), windows windows of the analysis to an entry at first.
func NewHistory(tracks, windows, entries int) *History {
	h := &History{windows: windows, most: max(leastEntries, entries&^1), sum: make([]float64, tracks), power: make([][]float32, tracks)}
	h.grow(min(firstRoom, h.most))
	return h
}

// Windows is how many windows of the analysis one entry stands for.
func (h *History) Windows() int { return h.windows }

// Power is the mean power of a track in each entry. It stays valid until the next
// Add.
func (h *History) Power(track int) []float32 { return h.power[track] }

// grow moves the tracks to a backing array with room for entries each.
func (h *History) grow(entries int) {
	all := make([]float32, len(h.power)*entries)
	for i, p := range h.power {
		room := all[i*entries : (i+1)*entries : (i+1)*entries]
		h.power[i] = room[:copy(room, p)]
	}
}

// Add takes the powers of one window of the analysis, one a track.
func (h *History) Add(power []float64) {
	for i, p := range power {
		h.sum[i] += p
	}
	h.filled++
	if h.filled < h.windows || len(h.power) == 0 {
		return
	}
	if n := len(h.power[0]); n == cap(h.power[0]) {
		h.grow(min(2*n, h.most))
	}
	scale := 1 / float64(h.filled)
	for i, p := range h.sum {
		h.power[i] = append(h.power[i], float32(p*scale))
		h.sum[i] = 0
	}
	h.filled = 0
	if len(h.power[0]) < h.most {
		return
	}
	for i, p := range h.power {
		for j := range len(p) / 2 {
			p[j] = 0.5 * (p[2*j] + p[2*j+1])
		}
		h.power[i] = p[:len(p)/2]
	}
	h.windows *= 2
}
