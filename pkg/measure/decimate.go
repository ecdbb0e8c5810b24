package measure

import "alidade/pkg/kernel"

// decimator makes every factor-th sample of the filtered signal and keeps the
// last ones in a row. Sample i of its output stands at sample i·factor of its
// input: the filter is symmetric and its delay is taken out. Before the first
// sample of the input there is silence.
type decimator struct {
	taps   []float32
	factor int
	x      []float32 // input not yet done with
	n      int       // samples in x
	next   int       // place in x of the first sample under the filter
	fresh  []float32 // output not yet advanced over
	made   int       // samples in fresh
	row    []float32 // the last samples advanced over
}

// newDecimator takes at most chunk samples at a time and keeps a row of row
// samples.
func newDecimator(taps []float32, factor, chunk, row int) decimator {
	half := len(taps) / 2
	return decimator{
		taps: taps, factor: factor,
		x:     make([]float32, len(taps)+factor+max(chunk, half)),
		n:     half, // silence before the first sample
		fresh: make([]float32, row+max(chunk, half)/factor+2),
		row:   make([]float32, row),
	}
}

// add takes samples and makes what they complete.
func (d *decimator) add(x []float32) {
	d.n += copy(d.x[d.n:], x)
	for d.next+len(d.taps) <= d.n {
		d.fresh[d.made] = kernel.Dot(d.taps, d.x[d.next:d.next+len(d.taps)])
		d.made++
		d.next += d.factor
	}
	// What lies before next is done with; next may lie past the end.
	done := min(d.next, d.n)
	copy(d.x, d.x[done:d.n])
	d.n -= done
	d.next -= done
}

// flush adds the silence that the filter looks ahead into.
func (d *decimator) flush() { d.add(make([]float32, len(d.taps)/2)) }

// ready is the number of output samples not yet advanced over.
func (d *decimator) ready() int { return d.made }

// advance moves the row on by n output samples.
func (d *decimator) advance(n int) {
	copy(d.row, d.row[n:])
	copy(d.row[len(d.row)-n:], d.fresh[:n])
	copy(d.fresh, d.fresh[n:d.made])
	d.made -= n
}

// last returns the last n samples advanced over, shared.
func (d *decimator) last(n int) []float32 { return d.row[len(d.row)-n:] }
