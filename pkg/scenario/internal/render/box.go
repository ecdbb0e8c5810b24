package render

import (
	"fmt"
	"math"
	"runtime"
	"sync"

	"alidade/pkg/rig"
)

// OctavesHz are the octave bands of wall absorption, hertz (nominal mid-band
// frequencies; the exact ones are 1000·10^(3x/10)).
var OctavesHz = [...]float64{125, 250, 500, 1000, 2000, 4000, 8000}

// OctaveHz returns the exact mid-band frequency of octave b [IEC 61260-1].
func OctaveHz(b int) float64 { return 1000 * math.Pow(10, 0.3*float64(b-3)) }

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
// metres away (one of the two must set a bound), in the order of the lattice [Allen & Berkley 1979, formula 10].
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
	type Line struct {
		at    float64
		order int
		gain  []float64
	}
	var axes [3][]Line
	for a := range 3 {
		// The nearest image of row n is at least (2|n|-2)·L away.
		rows := maxDistance/(2*size[a]) + 2
		if maxOrder >= 0 {
			rows = math.Min(rows, float64(maxOrder/2+1))
		}
		most := int(rows)
		for n := -most; n <= most; n++ {
			for q := range 2 {
				l := Line{at: float64(1-2*q)*src[a] + 2*float64(n)*size[a], gain: make([]float64, bands)}
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

// Chamber is a room with everything that responses are made of.
type Chamber struct {
	Box      Box
	AirDB    []float64 // absorption by the air in each band, dB a metre
	MaxOrder int       // most reflections, -1: any
	Seconds  float64   // length of the responses
	Speed    float64   // of sound, m/s
	Rate     int
	Origin   rig.Point // of the rig, room axes
	Turn     float64   // of the rig's x axis against the room's, radians anticlockwise

	kernel *Table
	split  *bandSplit  // nil: one band
	air    [][]float64 // air[b][i], amplitude left after i·airStep metres; nil: all
}

// airStep is the distance between the points that the loss by the air is
// interpolated from, metres: an error below 1e-6 for losses up to 1 dB a metre.
const airStep = 0.02

// airGain returns the amplitude that the air leaves in band b after d metres.
func (c *Chamber) airGain(b int, d float64) float64 {
	if c.air[b] == nil {
		return 1
	}
	i := min(int(d/airStep), len(c.air[b])-2)
	w := d/airStep - float64(i)
	return c.air[b][i] + w*(c.air[b][i+1]-c.air[b][i])
}

// maxImages and maxRoomFrames bound the work of one response.
const (
	maxImages     = 2e7
	maxRoomFrames = 400000 // below half of the longest transform, with room for the split
)

// Prepare makes a chamber whose exported fields are set ready for Responses.
// Box.Beta and AirDB hold one value for every octave of OctavesHz; octaves that
// lie beyond the rate, and all but one if they are alike, are dropped. It
// returns an error if the responses would be too long or too dense.
func (c *Chamber) Prepare() error {
	alike := true
	for b := range c.Box.Beta {
		alike = alike && c.Box.Beta[b] == c.Box.Beta[0] && c.AirDB[b] == 0
	}
	bands := len(c.Box.Beta)
	if alike {
		bands = 1
	} else {
		for bands > 1 && OctaveHz(bands-2) >= float64(c.Rate)/2 {
			bands-- // no sound there
		}
		c.split = &bandSplit{rate: c.Rate, ring: c.Rate / 50}
	}
	c.Box.Beta, c.AirDB = c.Box.Beta[:bands], c.AirDB[:bands]
	if frames := c.Seconds * float64(c.Rate); !(frames <= maxRoomFrames) {
		return fmt.Errorf("a response of %.3g s has %.3g frames, more than %d: state a shorter length_s", c.Seconds, frames, maxRoomFrames)
	}
	reach := c.Speed * c.Seconds
	images := 4.0 / 3 * math.Pi * reach * reach * reach / (c.Box.Size.X * c.Box.Size.Y * c.Box.Size.Z)
	if n := float64(c.MaxOrder); n >= 0 {
		images = math.Min(images, (2*n+1)*(2*n*n+2*n+3)/3)
	}
	if images > maxImages {
		return fmt.Errorf("a response of %.3g s needs %.2g images, more than %.2g: state a shorter length_s or a max_order", c.Seconds, images, float64(maxImages))
	}
	c.air = make([][]float64, bands)
	for b, db := range c.AirDB {
		if db == 0 {
			continue
		}
		// Images lie at most this far: the response's length and the room's size.
		far := reach + 2*(c.Box.Size.X+c.Box.Size.Y+c.Box.Size.Z)
		for i := range int(far/airStep) + 2 {
			c.air[b] = append(c.air[b], math.Pow(10, -db*airStep*float64(i)/20))
		}
	}
	c.kernel = reflectionTable()
	return nil
}

// inRoom returns the room coordinates of a place given in rig coordinates.
func (c *Chamber) inRoom(p rig.Point) rig.Point {
	sin, cos := math.Sincos(c.Turn)
	return c.Origin.Add(rig.Point{X: cos*p.X - sin*p.Y, Y: sin*p.X + cos*p.Y, Z: p.Z})
}

// Holds reports whether a place given in rig coordinates lies in the room.
func (c *Chamber) Holds(p rig.Point) bool {
	q := c.inRoom(p)
	return q.X > 0 && q.X < c.Box.Size.X && q.Y > 0 && q.Y < c.Box.Size.Y && q.Z > 0 && q.Z < c.Box.Size.Z
}

// Responses returns the response from a source to each microphone, both in rig
// coordinates, without its direct sound and without what lies below hearing, in
// amplitudes against the direct sound
// at a distance of unit metres and with that distance's delay taken off. All
// have the same start and length, whatever the place of the source.
func (c *Chamber) Responses(source rig.Point, mics []rig.Point, unit float64) *Bank {
	start, length := c.shape(unit)
	bank := &Bank{Start: start, Taps: make([][][]float64, len(mics))}
	shift := -float64(start) - unit/c.Speed*float64(c.Rate)
	src := c.inRoom(source)
	var weights [][]float64
	var size int
	if c.split != nil {
		weights, size = c.split.weights(len(c.Box.Beta), length)
	}
	one := func(m int) {
		rcv := c.inRoom(mics[m])
		bands := make([][]float64, len(c.Box.Beta))
		for b := range bands {
			bands[b] = make([]float64, length)
		}
		c.Box.each(src, rcv, c.MaxOrder, c.Speed*c.Seconds+unit, func(at rig.Point, order int, gain []float64) {
			if order == 0 {
				return
			}
			d := at.Distance(rcv)
			delay := d/c.Speed*float64(c.Rate) + shift
			for b := range gain {
				gain[b] *= unit / d * c.airGain(b, d)
			}
			c.kernel.add(bands, delay, gain)
		})
		taps := bands[0]
		if c.split != nil {
			taps = join(bands, weights, size)
		}
		highPass(taps, roomLowHz/float64(c.Rate))
		bank.Taps[m] = [][]float64{taps}
	}
	parallel(len(mics), one)
	return bank
}

// shape returns the start and length of the responses, which do not depend on
// the place of the source: reflections can come earlier than sound at the
// distance unit by as much, and the band split rings a little around each.
func (c *Chamber) shape(unit float64) (start, length int) {
	before := int(math.Ceil(unit/c.Speed*float64(c.Rate))) + reflectionTaps/2
	pad := 0
	if c.split != nil {
		pad = c.split.ring
	}
	return -before - pad, before + int(c.Seconds*float64(c.Rate)) + reflectionTaps/2 + 2*pad
}

// roomLowHz is where the reflections of a room begin. Walls that reflect every
// frequency without turning it over pile up pressure at 0 Hz; as [Allen &
// Berkley 1979] do, a high-pass takes that away, here at the edge of hearing.
const roomLowHz = 20

// highPass runs a Butterworth high-pass of order 2 over x, its cutoff in cycles
// a frame, made by the bilinear transform [Oppenheim & Schafer].
func highPass(x []float64, cutoff float64) {
	k := math.Tan(math.Pi * cutoff)
	g := 1 / (1 + math.Sqrt2*k + k*k)
	a1, a2 := 2*g*(k*k-1), g*(1-math.Sqrt2*k+k*k)
	var x1, x2, y1, y2 float64
	for i, v := range x {
		y := g*(v-2*x1+x2) - a1*y1 - a2*y2
		x2, x1, y2, y1 = x1, v, y1, y
		x[i] = y
	}
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
