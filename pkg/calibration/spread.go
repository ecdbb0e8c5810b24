package calibration

import "math"

// spread is what stands behind a fit.
type spread struct {
	gain, delay   float64 // standard errors: share of the gain, seconds
	snr           float64 // of the channel, power
	groups        int
	lowHz, highHz float64 // where the middle 90 % of the information lies
}

// spreadGroups is the number of groups of lines whose spread shows what the
// theory of noise does not know: reflections, and channels that differ over
// frequency.
const spreadGroups = 16

// errors returns the standard error of every heard channel, by place in heard:
// the larger of what the noise explains and what the groups of lines show,
// each against the mean over the channels.
func (f *factor) errors() []spread {
	count := len(f.heard)
	out := make([]spread, count)
	type sums struct{ info, infoW, gain, delay float64 }
	groups := make([][]sums, count)
	edges := f.groupEdges()
	for i, m := range f.heard {
		f.instrument(m)
		groups[i] = make([]sums, len(edges)-1)
		var power float64
		for g := range groups[i] {
			s := &groups[i][g]
			for j := edges[g]; j < edges[g+1]; j++ {
				w, q := f.c.omega(j), f.weights(m, j)
				re := f.cr[j]*f.cos[m][j] - f.ci[j]*f.sn[m][j]
				im := f.cr[j]*f.sn[m][j] + f.ci[j]*f.cos[m][j]
				info := q * f.p[j] * f.b[j]
				s.info += info
				s.infoW += info * w * w
				s.gain += q*re/f.g[m] - info
				s.delay -= q * w * im / f.g[m]
				power += f.g[m] * f.g[m] * f.p[j]
			}
		}
		out[i].snr = power / math.Max(f.rest[m], 1e-6*power)
		out[i].groups = len(groups[i])
	}
	// What a group says of one channel against the mean of all: the chance of
	// the source's own spectrum is the same in all.
	n := float64(count)
	for g := range len(edges) - 1 {
		var mg, md float64
		for i := range groups {
			s := &groups[i][g]
			mg += s.gain / s.info / n
			md += s.delay / s.infoW / n
		}
		for i := range groups {
			s := &groups[i][g]
			s.gain = s.gain/s.info - mg
			s.delay = s.delay/s.infoW - md
		}
	}
	theoryG, theoryD := make([]float64, count), make([]float64, count)
	var allG, allD float64
	for i, m := range f.heard {
		var info, infoW float64
		for _, s := range groups[i] {
			info += s.info
			infoW += s.infoW
		}
		// The instrument's cross-spectrum is relative to g already.
		g2 := f.g[m] * f.g[m]
		theoryG[i] = 1 / (2 * f.c.weight * info * g2)
		theoryD[i] = 1 / (2 * f.c.weight * infoW * g2)
		allG += theoryG[i] / (n * n)
		allD += theoryD[i] / (n * n)
		var mg, md float64
		for _, s := range groups[i] {
			mg += s.info * s.gain / info
			md += s.infoW * s.delay / infoW
		}
		j := float64(len(groups[i]))
		for _, s := range groups[i] {
			a, b := s.info*(s.gain-mg)/info, s.infoW*(s.delay-md)/infoW
			out[i].gain += a * a * j / (j - 1)
			out[i].delay += b * b * j / (j - 1)
		}
	}
	for i := range out {
		out[i].gain = math.Sqrt(math.Max(out[i].gain, theoryG[i]*(1-2/n)+allG))
		out[i].delay = math.Sqrt(math.Max(out[i].delay, theoryD[i]*(1-2/n)+allD))
		out[i].lowHz, out[i].highHz = f.reachHz()
	}
	return out
}

// information is what line j tells, the same measure for all channels.
func (f *factor) information(j int) float64 {
	snr := 0.0
	for _, m := range f.heard {
		snr += f.smooth[j] * f.g[m] * f.g[m] * f.v[m][j]
	}
	return snr * snr / (1 + snr)
}

// groupEdges cuts the lines into groups of like information.
func (f *factor) groupEdges() []int {
	total := 0.0
	for j := range f.p {
		total += f.information(j)
	}
	groups := min(spreadGroups, len(f.p)/2)
	edges, sum := []int{0}, 0.0
	for j := range f.p {
		sum += f.information(j)
		if len(edges) < groups && sum >= total*float64(len(edges))/float64(groups) && len(f.p)-j-1 >= groups-len(edges) {
			edges = append(edges, j+1)
		}
	}
	return append(edges, len(f.p))
}

// reachHz is where the middle 90 % of the information lies, by the power of each
// line itself: that of a tone lies in its own line.
func (f *factor) reachHz() (low, high float64) {
	told := make([]float64, len(f.p))
	total := 0.0
	for j := range f.p {
		if f.smooth[j] > 0 {
			told[j] = f.information(j) * f.p[j] / f.smooth[j]
		}
		total += told[j]
	}
	low, high = f.c.hz(f.c.from), f.c.hz(f.c.to)
	sum := 0.0
	for j, x := range told {
		if sum += x; sum >= 0.05*total {
			low = f.c.hz(f.c.from + j)
			break
		}
	}
	sum = 0
	for j := len(told) - 1; j >= 0; j-- {
		if sum += told[j]; sum >= 0.05*total {
			high = f.c.hz(f.c.from + j)
			break
		}
	}
	return low, high
}
