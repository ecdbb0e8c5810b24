package scenario

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/rig"
	"alidade/pkg/scenario/internal/render"
)

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

// eyringBands returns the absorption of each octave that rt60_s asks for.
func (r *Room) eyringBands(air acoustics.Air) ([]float64, error) {
	alphas := make([]float64, len(render.OctavesHz))
	for b := range alphas {
		alpha, err := acoustics.EyringAbsorption(r.volume(), r.surface(), spread(r.RT60S, b), r.airLoss(air, b), air.Speed())
		if err != nil {
			return nil, fmt.Errorf("octave %g Hz: %w", render.OctavesHz[b], err)
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
	return air.Absorption(render.OctaveHz(b)) * math.Ln10 / 10
}

// newChamber returns the room of a valid scenario, ready to give responses.
func newChamber(r *Room, air acoustics.Air, rate int) (*render.Chamber, error) {
	c := &render.Chamber{Speed: air.Speed(), Rate: rate, MaxOrder: -1, Turn: r.TurnDeg * math.Pi / 180,
		Origin: rig.Point{X: r.RigAtM[0], Y: r.RigAtM[1], Z: r.RigAtM[2]}}
	c.Box.Size = rig.Point{X: r.SizeM[0], Y: r.SizeM[1], Z: r.SizeM[2]}
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
	var longest float64
	for b := range render.OctavesHz {
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
		c.Box.Beta = append(c.Box.Beta, beta)
		loss := r.airLoss(air, b)
		c.AirDB = append(c.AirDB, loss*10/math.Ln10)
		longest = math.Max(longest, acoustics.EyringTime(r.volume(), r.surface(), math.Min(absorbed, 0.9999), loss, c.Speed))
	}
	if r.MaxOrder != nil {
		c.MaxOrder = *r.MaxOrder
	}
	c.Seconds = or(r.LengthS, longest)
	return c, c.Prepare()
}
