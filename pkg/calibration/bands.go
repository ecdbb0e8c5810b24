package calibration

import "math"

// leastBandLines is the fewest lines an octave is judged by, and bandParts into
// how many parts of it are told apart to see what its own figure is good to.
const (
	leastBandLines = 16
	bandParts      = 8
)

// bandFigure is what one octave says of a channel: a figure and its variance.
type bandFigure struct{ value, variance float64 }

// disagreement is the variance between octaves that their own variances do not
// explain, by the method of moments of random effects [DerSimonian & Laird
// 1986]; 0 where chance explains it in more than one of a hundred takes.
func disagreement(bands []bandFigure) float64 {
	var sum, squares, mean float64
	for _, b := range bands {
		w := 1 / b.variance
		sum += w
		squares += w * w
		mean += w * b.value
	}
	mean /= sum
	var q float64
	for _, b := range bands {
		q += sqr(b.value-mean) / b.variance
	}
	free, room := float64(len(bands)-1), sum-squares/sum
	if !(room > 0) || q <= chiSquareLimit(free) {
		return 0
	}
	return (q - free) / room
}

// chiSquareLimit is what chi-square of so many degrees of freedom passes by
// chance once in a hundred times [Wilson & Hilferty 1931].
func chiSquareLimit(free float64) float64 {
	const z = 2.3263 // of the normal distribution, 99 %
	c := 2 / (9 * free)
	root := 1 - c + z*math.Sqrt(c)
	return free * root * root * root
}

// bandEdges cuts the lines into octaves from the top down, what is left below
// the last joined to it, by place in the lines.
func (f *factor) bandEdges() []int {
	last := len(f.p)
	edges := []int{last}
	for {
		next := (f.c.from+last+1)/2 - f.c.from
		if next < leastBandLines || last-next < leastBandLines {
			break
		}
		edges = append(edges, next)
		last = next
	}
	if last >= leastBandLines || len(edges) == 1 {
		edges = append(edges, 0)
	} else {
		edges[len(edges)-1] = 0
	}
	for i, j := 0, len(edges)-1; i < j; i, j = i+1, j-1 {
		edges[i], edges[j] = edges[j], edges[i]
	}
	return edges
}

// overBands returns for every heard channel, by place in heard, the standard
// deviation of its gain between octaves beyond what noise and the spread within
// each octave explain, as a share of the gain. A microphone that is louder in
// one octave than in another has no one gain that is known better than that.
func (f *factor) overBands() []float64 {
	edges := f.bandEdges()
	out := make([]float64, len(f.heard))
	if len(edges) < 3 {
		return out
	}
	n := float64(len(f.heard))
	type part struct{ info, gain float64 }
	parts := make([][][]part, len(f.heard)) // [channel][band][part]
	for i, m := range f.heard {
		f.instrument(m)
		parts[i] = make([][]part, len(edges)-1)
		for b := range parts[i] {
			from, to := edges[b], edges[b+1]
			parts[i][b] = make([]part, bandParts)
			for k := range parts[i][b] {
				p := &parts[i][b][k]
				for j := from + (to-from)*k/bandParts; j < from+(to-from)*(k+1)/bandParts; j++ {
					q := f.weights(m, j)
					info := q * f.p[j] * f.b[j]
					p.info += info
					p.gain += q*(f.cr[j]*f.cos[m][j]-f.ci[j]*f.sn[m][j])/f.g[m] - info
				}
			}
		}
	}
	// Each part against the mean over the channels, as in errors. A part in which
	// a channel tells nothing is left out in all.
	for b := range len(edges) - 1 {
		for k := range bandParts {
			mean, told := 0.0, true
			for i := range parts {
				p := &parts[i][b][k]
				told = told && p.info > 0
				mean += p.gain / p.info / n
			}
			for i := range parts {
				p := &parts[i][b][k]
				if !told || math.IsNaN(mean) || math.IsInf(mean, 0) {
					*p = part{}
					continue
				}
				p.gain = p.gain/p.info - mean
			}
		}
	}
	for i := range parts {
		var bands []bandFigure
		for b := range parts[i] {
			var info, mean, count, spread, all float64
			for _, p := range parts[i][b] {
				if p.info > 0 {
					info += p.info
					mean += p.info * p.gain
					count++
				}
			}
			if count < bandParts/2 {
				continue
			}
			mean /= info
			for _, p := range parts[i][b] {
				spread += sqr(p.info * (p.gain - mean) / info)
			}
			for l, m := range f.heard {
				told := 0.0
				for _, p := range parts[l][b] {
					told += p.info
				}
				t := 1 / (2 * f.c.weight * told * f.g[m] * f.g[m])
				all += t / (n * n)
				if l == i {
					all += t * (1 - 2/n)
				}
			}
			// The larger of what the parts show and what noise explains, as in errors.
			if v := math.Max(spread*count/(count-1), all); v > 0 && !math.IsInf(v, 0) {
				bands = append(bands, bandFigure{mean, v})
			}
		}
		if len(bands) > 1 {
			out[i] = math.Sqrt(disagreement(bands))
		}
	}
	return out
}
