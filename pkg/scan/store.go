package scan

import "alidade/pkg/measure"

// store keeps the powers of some bands over time, and their sums over all of it.
type store struct {
	*measure.History
	all   []float64 // sums over all windows
	count int       // of all windows
}

func newStore(bands, most int) *store {
	return &store{History: measure.NewHistory(bands, 1, most), all: make([]float64, bands)}
}

// add takes the powers of one window.
func (s *store) add(power []float64) {
	for b, p := range power {
		s.all[b] += p
	}
	s.count++
	s.Add(power)
}
