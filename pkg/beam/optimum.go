package beam

import (
	"errors"
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam/internal/hermitian"
)

// optimum finds, bin by bin, the weights that minimise
//
//	wᴴRw - 2 Re wᴴp    subject to    Cᴴw = (1, 0, 0, ...)
//
// with as little diagonal loading ε of R as brings the white noise gain up to
// its floor [Cox 1986], [Cox 1987]. C holds the steering vector and one vector
// a null. With B an orthonormal basis of what is orthogonal to C, and w0 =
// C(CᴴC)⁻¹(1, 0, ...)ᵀ,
//
//	w = w0 - B(BᴴRB + ε)⁻¹Bᴴ(Rw0 - p)
//
// and wᴴw falls as ε grows, from which ε is found by bisection over the
// eigenvalues of BᴴRB.
type optimum struct {
	name  string // of the design, for errors
	task  Task
	floor float64           // smallest white noise gain, power ratio; 0 is none
	nulls []acoustics.Wave  // exact zeros where the floor allows them
	model func(bin *binJob) // fills r and p of bin.k
}

// binJob is the work on one bin.
type binJob struct {
	k int
	r []complex128 // R[m*M+n]
	p []complex128

	mics           int
	c, d           []complex128 // constraint vectors c[j*M+m]; the steering vector
	w0, residual   []complex128
	columns, basis []complex128
	s, vectors     []complex128
	rho            []complex128
	values         []float64
	gram           hermitian.Cholesky
}

// Parameters of the solution.
const (
	// floorMarginDB is kept above the floor, so that what the filters' finite
	// length does to the weights does not take them below it.
	floorMarginDB = 0.1
	// leastLoading and mostLoading bound ε, as a part of the mean power of R.
	leastLoading = 1e-15
	mostLoading  = 1e15
	// rounding is that of the sums behind the solution, re their largest term.
	rounding = 1e-15
	// nullPenalty is the power of a source in the direction of each null, re
	// the mean power of R, that stands for the null where it cannot be exact.
	nullPenalty = 1e6
	// noFloor is the white noise gain below which nulls are given up even where
	// no floor was asked for: a millionth.
	noFloor = 1e-6
)

// floorOf turns a floor in dB into the power ratio that a design aims at; -Inf
// is no floor.
func floorOf(db float64) float64 {
	if math.IsInf(db, -1) {
		return 0
	}
	return math.Pow(10, (db+floorMarginDB)/10)
}

// weights solves every bin.
func (o *optimum) weights(floorDB float64) (*Weights, error) {
	t := o.task
	if err := t.Validate(); err != nil {
		return nil, err
	}
	mics := len(t.Mics)
	if err := o.check(floorDB); err != nil {
		return nil, err
	}
	w := newWeights(t)
	w.Loading = make([]float64, w.Bins())
	power := 0.0
	for m, p := range t.Mics {
		w.level[m] = t.Look.Spreading(p, t.Reference)
		power += w.level[m] * w.level[m]
	}
	for m := range w.rest {
		w.rest[m] = w.level[m] / power
	}
	o.floor = floorOf(floorDB)
	if most := math.Pow(10, floorMarginDB/10) * power; o.floor > most {
		return nil, refuse(ErrFloorOutOfReach, "beam: %s: white noise gain floor of %g dB: %d microphones reach %.2f dB at most", o.name, floorDB, mics, 10*math.Log10(power))
	}
	o.floor = math.Min(o.floor, power*(1-1e-9))
	type arrival struct{ delays, spreading []float64 }
	arrivals := make([]arrival, 1+len(o.nulls))
	for j, wave := range append([]acoustics.Wave{t.Look}, o.nulls...) {
		a := arrival{acoustics.Delays(nil, wave, t.Mics, t.Reference, t.Speed), make([]float64, mics)}
		for m, p := range t.Mics {
			a.spreading[m] = wave.Spreading(p, t.Reference)
		}
		arrivals[j] = a
	}
	if len(o.nulls) > 0 {
		w.Held = make([]bool, w.Bins())
	}
	job := newBinJob(mics, 1+len(o.nulls))
	for k := range w.Bins() {
		job.k = k
		for j, a := range arrivals {
			copy(job.c[j*mics:], acoustics.Steering(job.d, a.delays, a.spreading, 2*math.Pi*t.Hz(k)))
		}
		clear(job.p)
		o.model(job)
		held, loading, err := job.solve(o.floor, w.Bin(k))
		if err != nil {
			return nil, fmt.Errorf("beam: %s: bin %d (%.1f Hz): %w", o.name, k, t.Hz(k), err)
		}
		w.Loading[k] = loading
		if w.Held != nil {
			w.Held[k] = held && k >= fadeBins
		}
	}
	return w, o.checkHeld(w, floorDB)
}

// What a design refuses and other options may allow; match with errors.Is.
var (
	ErrFloorOutOfReach    = errors.New("floor on white noise gain out of reach")
	ErrTooManyConstraints = errors.New("more constraints than microphones")
	ErrNullsNotHeld       = errors.New("nulls that no frequency can hold")
)

// refusal is an error of a cause with the numbers of the case.
type refusal struct {
	cause error
	text  string
}

func (r *refusal) Error() string { return r.text }

func (r *refusal) Unwrap() error { return r.cause }

func refuse(cause error, format string, args ...any) error {
	return &refusal{cause, fmt.Sprintf(format, args...)}
}

// check refuses what cannot be designed at any frequency.
func (o *optimum) check(floorDB float64) error {
	mics := len(o.task.Mics)
	switch {
	case math.IsNaN(floorDB) || math.IsInf(floorDB, 1):
		return fmt.Errorf("beam: %s: white noise gain floor of %g dB", o.name, floorDB)
	case mics < 2:
		return fmt.Errorf("beam: %s: %d live microphone: want at least 2", o.name, mics)
	case 1+len(o.nulls) > mics:
		return refuse(ErrTooManyConstraints, "beam: %s: %d nulls and the steered direction are %d constraints, more than the %d microphones", o.name, len(o.nulls), 1+len(o.nulls), mics)
	}
	var faults []error
	t := o.task
	for _, null := range o.nulls {
		if null == nil {
			faults = append(faults, fmt.Errorf("beam: %s: a null without a direction", o.name))
			continue
		}
		for m, p := range t.Mics {
			if g, x := null.Spreading(p, t.Reference), null.Delay(p, t.Reference, t.Speed); !(g > 1e-6 && g < 1e6) || math.IsNaN(x) || math.IsInf(x, 0) {
				faults = append(faults, fmt.Errorf("beam: %s: the null lies at microphone %d or at the reference point", o.name, m+1))
				break
			}
		}
	}
	return errors.Join(faults...)
}

// checkHeld refuses nulls that no bin can hold: they lie in the steered
// direction, or within the beam for all frequencies.
func (o *optimum) checkHeld(w *Weights, floorDB float64) error {
	if w.Held == nil {
		return nil
	}
	for _, held := range w.Held[:w.Bins()*4/5] {
		if held {
			return nil
		}
	}
	text := ""
	for _, null := range o.nulls {
		d := null.Direction(o.task.Reference)
		text += fmt.Sprintf(" azimuth %.1f° elevation %.1f°,", d.AzimuthDeg(), d.ElevationDeg())
	}
	look := o.task.Look.Direction(o.task.Reference)
	return refuse(ErrNullsNotHeld, "beam: %s: nulls at%s steered to azimuth %.1f° elevation %.1f°: to these microphones a null lies in the steered direction or on another null, and no frequency can hold them with a white noise gain of %g dB",
		o.name, text, look.AzimuthDeg(), look.ElevationDeg(), floorDB)
}

// newBinJob returns the scratch for mics microphones and constraints.
func newBinJob(mics, constraints int) *binJob {
	free := mics - 1 // with the steering constraint alone
	return &binJob{
		mics: mics,
		r:    make([]complex128, mics*mics), p: make([]complex128, mics),
		c: make([]complex128, constraints*mics), d: make([]complex128, mics),
		w0: make([]complex128, mics), residual: make([]complex128, mics),
		columns: make([]complex128, mics*constraints), basis: make([]complex128, mics*free),
		s: make([]complex128, free*free), vectors: make([]complex128, free*free),
		rho: make([]complex128, free), values: make([]float64, free),
	}
}

// solve sets w to the weights of the bin and returns whether the nulls are
// exact and the loading re the mean power of R.
func (b *binJob) solve(floor float64, w []complex128) (held bool, loading float64, err error) {
	power := 0.0
	for m := range b.mics {
		power += real(b.r[m*b.mics+m]) / float64(b.mics)
	}
	if !(power >= 0) || math.IsInf(power, 0) {
		return false, 0, fmt.Errorf("mean noise power is %g", power)
	}
	if power == 0 {
		power = 1
	}
	nulls := len(b.c)/b.mics - 1
	if nulls > 0 {
		if norm, ok := b.quiescent(1 + nulls); ok && norm*math.Max(floor, noFloor) <= 1 {
			return true, b.descend(1+nulls, floor, power, w), nil
		}
		// The nulls would cost more white noise gain than there is: strong
		// sources in their directions stand for them, and the loading weighs
		// them against the floor.
		for j := 1; j <= nulls; j++ {
			v := b.c[j*b.mics : (j+1)*b.mics]
			for m := range v {
				for n := range v {
					b.r[m*b.mics+n] += complex(nullPenalty*power, 0) * v[m] * complex(real(v[n]), -imag(v[n]))
				}
			}
		}
	}
	if _, ok := b.quiescent(1); !ok {
		return false, 0, errors.New("the steering vector is zero")
	}
	return nulls == 0, b.descend(1, math.Max(floor, 0), power, w), nil
}

// quiescent sets w0 for the first l constraints and returns its squared norm;
// ok is false if the constraints depend on each other.
func (b *binJob) quiescent(l int) (norm float64, ok bool) {
	m := b.mics
	gram, unit, x := make([]complex128, l*l), make([]complex128, l), make([]complex128, l)
	for i := range l {
		for j := range l {
			for t := range m {
				gram[i*l+j] += conj(b.c[i*m+t]) * b.c[j*m+t]
			}
		}
	}
	if err := b.gram.Factor(gram, l); err != nil {
		return 0, false
	}
	unit[0] = 1
	b.gram.Solve(x, unit)
	clear(b.w0)
	for t := range m {
		for j := range l {
			b.w0[t] += b.c[j*m+t] * x[j]
		}
		norm += abs2(b.w0[t])
	}
	return norm, true
}

// descend sets w to the solution for the first l constraints with the least
// loading that keeps the floor, and returns that loading re power.
func (b *binJob) descend(l int, floor, power float64, w []complex128) float64 {
	m, free := b.mics, b.mics-l
	copy(w, b.w0)
	if free == 0 {
		return 0
	}
	columns, basis := b.columns[:m*l], b.basis[:m*free]
	for t := range m {
		for j := range l {
			columns[t*l+j] = b.c[j*m+t]
		}
	}
	hermitian.NullSpace(basis, columns, m, l)
	// residual = R w0 - p, rho = Uᴴ Bᴴ residual, S = Bᴴ R B = U diag(values) Uᴴ.
	var norm, size float64
	for i := range m {
		b.residual[i] = -b.p[i]
		for j := range m {
			x := b.r[i*m+j] * b.w0[j]
			b.residual[i] += x
			size += math.Abs(real(x)) + math.Abs(imag(x))
		}
		norm += abs2(b.w0[i])
	}
	s, vectors, values := b.s[:free*free], b.vectors[:free*free], b.values[:free]
	clear(s)
	rb := make([]complex128, free)
	for i := range m {
		clear(rb)
		for j := range m {
			for q := range free {
				rb[q] += b.r[i*m+j] * basis[j*free+q]
			}
		}
		for p := range free {
			for q := range p + 1 {
				s[p*free+q] += conj(basis[i*free+p]) * rb[q]
			}
		}
	}
	hermitian.Eigen(values, vectors, s, free)
	projected, rho := rb, b.rho[:free]
	clear(projected)
	for i := range m {
		for q := range free {
			projected[q] += conj(basis[i*free+q]) * b.residual[i]
		}
	}
	for q := range free {
		rho[q] = 0
		for p := range free {
			rho[q] += conj(vectors[p*free+q]) * projected[p]
		}
		// What is left of a sum that cancels is rounding, and divided by a
		// vanishing eigenvalue it would be weights.
		if abs2(rho[q]) < rounding*rounding*size*size {
			rho[q] = 0
		}
	}
	loading := leastLoad(values, rho, norm, floor, power)
	for q := range free {
		rho[q] /= complex(math.Max(values[q], 0)+loading, 0)
	}
	for p := range free {
		var z complex128
		for q := range free {
			z += vectors[p*free+q] * rho[q]
		}
		for i := range m {
			w[i] -= basis[i*free+p] * z
		}
	}
	return loading / power
}

// leastLoad returns the smallest loading at which norm + Σ|ρ|²/(λ+ε)² is at
// most 1/floor.
func leastLoad(values []float64, rho []complex128, norm, floor, power float64) float64 {
	fits := func(e float64) bool {
		sum := norm
		for q, v := range values {
			x := math.Max(v, 0) + e
			sum += abs2(rho[q]) / (x * x)
		}
		return sum*floor <= 1
	}
	low, high := leastLoading*power, mostLoading*power
	if fits(low) {
		return low
	}
	// Bisection over the logarithm: thirty decades to a relative 1e-12.
	for range 46 {
		mid := math.Sqrt(low * high)
		if fits(mid) {
			high = mid
		} else {
			low = mid
		}
	}
	return high
}

func conj(z complex128) complex128 { return complex(real(z), -imag(z)) }

func abs2(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }
