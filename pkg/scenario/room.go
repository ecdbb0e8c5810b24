package scenario

import (
	"fmt"
	"math"
	"runtime"
	"sync"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
)

// octavesHz are the octave bands of wall absorption, hertz (nominal mid-band
// frequencies; the exact ones are 1000·10^(3x/10)).
var octavesHz = [...]float64{125, 250, 500, 1000, 2000, 4000, 8000}

// octaveHz returns the exact mid-band frequency of octave b [IEC 61260-1].
func octaveHz(b int) float64 { return 1000 * math.Pow(10, 0.3*float64(b-3)) }

// Room is a box-shaped room. One corner is the origin of its axes, which run
// along the walls; the rig stands in it.
type Room struct {
	SizeM   []float64 `json:"size_m" jsonschema:"minItems=3,maxItems=3" jsonschema_description:"length, width and height, metres"`
	RigAtM  []float64 `json:"rig_at_m" jsonschema:"minItems=3,maxItems=3" jsonschema_description:"where the rig's origin stands, from the corner, metres"`
	TurnDeg float64   `json:"turn_deg,omitempty" jsonschema:"minimum=-360,maximum=360" jsonschema_description:"how far the rig's x axis is turned against the room's, anticlockwise seen from above, degrees"`

	RT60S      []float64 `json:"rt60_s,omitempty" jsonschema:"minItems=1,maxItems=7" jsonschema_description:"wanted reverberation time, seconds: one value, or seven for the octaves 125 Hz to 8 kHz (Eyring)"`
	Absorption []float64 `json:"absorption,omitempty" jsonschema:"minItems=1,maxItems=7" jsonschema_description:"instead: energy absorption of every wall, 0 to 1: one value, or seven for the octaves"`
	Walls      *Walls    `json:"walls,omitempty" jsonschema_description:"walls that differ from absorption"`

	MaxOrder *int    `json:"max_order,omitempty" jsonschema:"minimum=0,maximum=1000" jsonschema_description:"most reflections of one image; as long as length_s lasts if absent"`
	LengthS  float64 `json:"length_s,omitempty" jsonschema:"minimum=0,maximum=20" jsonschema_description:"length of the response, seconds; the longest reverberation time if absent"`
	DryAir   bool    `json:"lossless_air,omitempty" jsonschema_description:"the air absorbs nothing; it does if absent"`
}

// Walls are absorptions of single walls, each one value or seven.
type Walls struct {
	X0      []float64 `json:"x0,omitempty" jsonschema:"minItems=1,maxItems=7"`
	X1      []float64 `json:"x1,omitempty" jsonschema:"minItems=1,maxItems=7"`
	Y0      []float64 `json:"y0,omitempty" jsonschema:"minItems=1,maxItems=7"`
	Y1      []float64 `json:"y1,omitempty" jsonschema:"minItems=1,maxItems=7"`
	Floor   []float64 `json:"floor,omitempty" jsonschema:"minItems=1,maxItems=7"`
	Ceiling []float64 `json:"ceiling,omitempty" jsonschema:"minItems=1,maxItems=7"`
}

// spread returns the value of octave b of a list of one or seven.
func spread(list []float64, b int) float64 {
	if len(list) == 1 {
		return list[0]
	}
	return list[b]
}

// volume and surface of the room, m³ and m².
func (r *Room) volume() float64 { return r.SizeM[0] * r.SizeM[1] * r.SizeM[2] }
func (r *Room) surface() float64 {
	x, y, z := r.SizeM[0], r.SizeM[1], r.SizeM[2]
	return 2 * (x*y + x*z + y*z)
}

// EyringTime returns the reverberation time of a room whose walls absorb the
// share absorption of the energy, air takes airPerM nepers of energy a metre,
// and sound runs at speed m/s: (24 ln 10/c)·V/(-S·ln(1-α) + 4mV)
// [Eyring 1930].
func EyringTime(volume, surface, absorption, airPerM, speed float64) float64 {
	return 24 * math.Ln10 / speed * volume / (-surface*math.Log(1-absorption) + 4*airPerM*volume)
}

// EyringAbsorption is the inverse of EyringTime. It returns an error if no
// absorption between 0 and 0.99 gives the time.
func EyringAbsorption(volume, surface, seconds, airPerM, speed float64) (float64, error) {
	walls := 24*math.Ln10/speed*volume/seconds - 4*airPerM*volume
	alpha := 1 - math.Exp(-walls/surface)
	if !(alpha >= 0) {
		return 0, fmt.Errorf("reverberation time %.3g s: the air alone gives %.3g s", seconds, 24*math.Ln10/speed/(4*airPerM))
	}
	if alpha > 0.99 {
		return 0, fmt.Errorf("reverberation time %.3g s: too short for a room of %.3g m³ and %.3g m² of wall, even walls that absorb 99 %% give %.3g s",
			seconds, volume, surface, EyringTime(volume, surface, 0.99, airPerM, speed))
	}
	return alpha, nil
}

// Box is a room ready for images: reflection factors of pressure for each wall
// (x0, x1, y0, y1, floor, ceiling) in each band.
type Box struct {
	Size rig.Point
	Beta [][6]float64 // Beta[b][wall]
}

// Image is one image of a source in a box, as heard at a place.
type Image struct {
	At       rig.Point // where it lies, room axes, metres
	Distance float64   // from the place, metres
	Order    int       // number of reflections
	// Amplitude is the product of its walls' reflection factors over
	// 4·pi·distance, in each band.
	Amplitude []float64
}

// Images returns the images of a source as heard at a receiver, both in room
// axes, of at most maxOrder reflections (-1: any) and at most maxDistance
// metres away, in the order of the lattice [Allen & Berkley 1979, formula 10].
func (b *Box) Images(source, receiver rig.Point, maxOrder int, maxDistance float64) []Image {
	var all []Image
	b.each(source, receiver, maxOrder, maxDistance, func(at rig.Point, order int, gain []float64) {
		d := at.Distance(receiver)
		if d > maxDistance {
			return
		}
		im := Image{At: at, Distance: d, Order: order, Amplitude: make([]float64, len(gain))}
		for i, g := range gain {
			im.Amplitude[i] = g / (4 * math.Pi * d)
		}
		all = append(all, im)
	})
	return all
}

// each calls visit for every image that can lie within maxDistance of the
// receiver; gain, one a band, is reused.
func (b *Box) each(source, receiver rig.Point, maxOrder int, maxDistance float64, visit func(at rig.Point, order int, gain []float64)) {
	size := [3]float64{b.Size.X, b.Size.Y, b.Size.Z}
	src := [3]float64{source.X, source.Y, source.Z}
	rcv := [3]float64{receiver.X, receiver.Y, receiver.Z}
	bands := len(b.Beta)
	// Along one axis image (n, q) lies at (1-2q)·s + 2nL and meets the low wall
	// |n-q| times, the high one |n| times.
	type line struct {
		at    float64
		order int
		gain  []float64
	}
	var axes [3][]line
	for a := range 3 {
		// The nearest image of row n is at least (2|n|-2)·L away.
		most := int(maxDistance/(2*size[a])) + 2
		if maxOrder >= 0 {
			most = min(most, maxOrder/2+1)
		}
		for n := -most; n <= most; n++ {
			for q := range 2 {
				l := line{at: float64(1-2*q)*src[a] + 2*float64(n)*size[a], gain: make([]float64, bands)}
				low, high := n-q, n
				if low < 0 {
					low = -low
				}
				if high < 0 {
					high = -high
				}
				l.order = low + high
				if math.Abs(l.at-rcv[a]) > maxDistance || maxOrder >= 0 && l.order > maxOrder {
					continue
				}
				for i := range bands {
					l.gain[i] = math.Pow(b.Beta[i][2*a], float64(low)) * math.Pow(b.Beta[i][2*a+1], float64(high))
				}
				axes[a] = append(axes[a], l)
			}
		}
	}
	gain := make([]float64, bands)
	limit := maxDistance * maxDistance
	for _, x := range axes[0] {
		dx := (x.at - rcv[0]) * (x.at - rcv[0])
		for _, y := range axes[1] {
			dxy := dx + (y.at-rcv[1])*(y.at-rcv[1])
			if dxy > limit || maxOrder >= 0 && x.order+y.order > maxOrder {
				continue
			}
			for _, z := range axes[2] {
				order := x.order + y.order + z.order
				if dxy+(z.at-rcv[2])*(z.at-rcv[2]) > limit || maxOrder >= 0 && order > maxOrder {
					continue
				}
				for i := range gain {
					gain[i] = x.gain[i] * y.gain[i] * z.gain[i]
				}
				visit(rig.Point{X: x.at, Y: y.at, Z: z.at}, order, gain)
			}
		}
	}
}

// chamber is a room with everything that responses are made of.
type chamber struct {
	box      Box
	airDB    []float64 // absorption by the air in each band, dB a metre
	maxOrder int
	seconds  float64
	speed    float64
	rate     int
	origin   rig.Point // of the rig, room axes
	cos, sin float64   // of the turn
	kernel   *table
	split    *bandSplit // nil: one band
}

// eyringBands returns the absorption of each octave that rt60_s asks for.
func (r *Room) eyringBands(air acoustics.Air) ([]float64, error) {
	alphas := make([]float64, len(octavesHz))
	for b := range alphas {
		alpha, err := EyringAbsorption(r.volume(), r.surface(), spread(r.RT60S, b), r.airLoss(air, b), air.Speed())
		if err != nil {
			return nil, fmt.Errorf("octave %g Hz: %w", octavesHz[b], err)
		}
		alphas[b] = alpha
	}
	return alphas, nil
}

// airLoss returns the energy attenuation of octave b, nepers a metre.
func (r *Room) airLoss(air acoustics.Air, b int) float64 {
	if r.DryAir {
		return 0
	}
	return air.Absorption(octaveHz(b)) * math.Ln10 / 10
}

// newChamber builds the room of a valid scenario. tail is the longest
// distance of the direct sound, metres.
func newChamber(r *Room, air acoustics.Air, rate int) (*chamber, error) {
	c := &chamber{speed: air.Speed(), rate: rate, maxOrder: -1,
		origin: rig.Point{X: r.RigAtM[0], Y: r.RigAtM[1], Z: r.RigAtM[2]}}
	c.sin, c.cos = math.Sincos(r.TurnDeg * math.Pi / 180)
	c.box.Size = rig.Point{X: r.SizeM[0], Y: r.SizeM[1], Z: r.SizeM[2]}
	base := r.Absorption
	if r.RT60S != nil {
		alphas, err := r.eyringBands(air)
		if err != nil {
			return nil, err
		}
		base = alphas
	}
	w := or(r.Walls, &Walls{})
	x, y, z := r.SizeM[0], r.SizeM[1], r.SizeM[2]
	areas := [6]float64{y * z, y * z, x * z, x * z, x * y, x * y}
	flat := true
	var longest float64
	for b := range octavesHz {
		var beta [6]float64
		var absorbed float64
		for i, list := range [6][]float64{w.X0, w.X1, w.Y0, w.Y1, w.Floor, w.Ceiling} {
			if list == nil {
				list = base
			}
			alpha := spread(list, b)
			beta[i] = math.Sqrt(1 - alpha)
			absorbed += areas[i] * alpha / r.surface()
		}
		c.box.Beta = append(c.box.Beta, beta)
		loss := r.airLoss(air, b)
		c.airDB = append(c.airDB, loss*10/math.Ln10)
		flat = flat && beta == c.box.Beta[0] && loss == 0
		longest = math.Max(longest, EyringTime(r.volume(), r.surface(), math.Min(absorbed, 0.9999), loss, c.speed))
	}
	if flat {
		c.box.Beta, c.airDB = c.box.Beta[:1], c.airDB[:1]
	} else {
		bands := len(octavesHz)
		for bands > 1 && octaveHz(bands-2) >= float64(rate)/2 {
			bands-- // no sound there
		}
		c.box.Beta, c.airDB = c.box.Beta[:bands], c.airDB[:bands]
		c.split = &bandSplit{rate: rate, ring: rate / 50}
	}
	if r.MaxOrder != nil {
		c.maxOrder = *r.MaxOrder
	}
	c.seconds = or(r.LengthS, longest)
	if frames := c.seconds * float64(rate); !(frames <= maxRoomFrames) {
		return nil, fmt.Errorf("a response of %.3g s has %.3g frames, more than %d: state length_s", c.seconds, frames, maxRoomFrames)
	}
	reach := c.speed * c.seconds
	if images := 4.0 / 3 * math.Pi * reach * reach * reach / r.volume(); c.maxOrder < 0 && images > maxImages {
		return nil, fmt.Errorf("a response of %.3g s needs %.2g images, more than %.2g: state a shorter length_s or max_order", c.seconds, images, float64(maxImages))
	}
	if c.maxOrder > 0 {
		n := float64(c.maxOrder)
		reach3 := reach * reach * reach * 4 / 3 * math.Pi / r.volume()
		if images := math.Min((2*n+1)*(2*n*n+2*n+3)/3, reach3); images > maxImages {
			return nil, fmt.Errorf("order %d needs %.2g images, more than %.2g", c.maxOrder, images, float64(maxImages))
		}
	}
	c.kernel = newTable(reflectionTaps, 512, reflectionBeta)
	return c, nil
}

// maxImages and maxRoomFrames bound the work of one response.
const (
	maxImages     = 2e7
	maxRoomFrames = 400000 // below half of the longest transform, with room for the split
)

// inRoom returns the room coordinates of a place given in rig coordinates.
func (c *chamber) inRoom(p rig.Point) rig.Point {
	return c.origin.Add(rig.Point{X: c.cos*p.X - c.sin*p.Y, Y: c.sin*p.X + c.cos*p.Y, Z: p.Z})
}

// holds reports whether a place given in rig coordinates lies in the room.
func (c *chamber) holds(p rig.Point) bool {
	q := c.inRoom(p)
	return q.X > 0 && q.X < c.box.Size.X && q.Y > 0 && q.Y < c.box.Size.Y && q.Z > 0 && q.Z < c.box.Size.Z
}

// responses returns the response from a source to each microphone, both in rig
// coordinates, without its direct sound, in amplitudes against the direct sound
// at a distance of unit metres and with that distance's delay taken off. All
// have the same start and length, whatever the place of the source.
func (c *chamber) responses(source rig.Point, mics []rig.Point, unit float64) *filterBank {
	start, length := c.shape(unit)
	bank := &filterBank{start: start, taps: make([][][]float64, len(mics))}
	shift := -float64(start) - unit/c.speed*float64(c.rate)
	src := c.inRoom(source)
	one := func(m int) {
		rcv := c.inRoom(mics[m])
		bands := make([][]float64, len(c.box.Beta))
		for b := range bands {
			bands[b] = make([]float64, length)
		}
		c.box.each(src, rcv, c.maxOrder, c.speed*c.seconds+unit, func(at rig.Point, order int, gain []float64) {
			if order == 0 {
				return
			}
			d := at.Distance(rcv)
			delay := d/c.speed*float64(c.rate) + shift
			for b, g := range gain {
				a := g * unit / d
				if c.airDB[b] != 0 {
					a *= math.Exp(-c.airDB[b] * d * (math.Ln10 / 20))
				}
				c.kernel.add(bands[b], delay, a)
			}
		})
		taps := bands[0]
		if c.split != nil {
			taps = c.split.join(bands)
		}
		bank.taps[m] = [][]float64{taps}
	}
	parallel(len(mics), one)
	return bank
}

// shape returns the start and length of the responses, which do not depend on
// the place of the source: reflections can come earlier than sound at the
// distance unit by as much, and the band split rings a little around each.
func (c *chamber) shape(unit float64) (start, length int) {
	before := int(math.Ceil(unit/c.speed*float64(c.rate))) + reflectionTaps/2
	pad := 0
	if c.split != nil {
		pad = c.split.ring
	}
	return -before - pad, before + int(c.seconds*float64(c.rate)) + reflectionTaps/2 + 2*pad
}

// parallel calls do for 0..n-1 on all processors. Each call works on its own
// data, so the result does not depend on their number.
func parallel(n int, do func(i int)) {
	workers := min(n, runtime.GOMAXPROCS(0))
	var wait sync.WaitGroup
	for w := range workers {
		wait.Add(1)
		go func() {
			defer wait.Done()
			for i := w; i < n; i += workers {
				do(i)
			}
		}()
	}
	wait.Wait()
}
