package render

// Field is a stretch of sound at the microphones.
type Field struct {
	emitters []Emitter
	Base     int64       // frame of Rows[m][0]
	Rows     [][]float64 // Rows[m]
	hop      [][]float64
}

// NewField returns an empty stretch before frame first, where the emitters
// begin.
func NewField(emitters []Emitter, mics int, first int64) *Field {
	f := &Field{emitters: emitters, Base: first}
	for range mics {
		f.Rows = append(f.Rows, make([]float64, 0, 4*HopFrames))
		f.hop = append(f.hop, make([]float64, HopFrames))
	}
	return f
}

// Hold makes the frames from..to (half-open) available and lets go of those
// before from. From never goes back.
func (f *Field) Hold(from, to int64) {
	if drop := from - f.Base; drop > 0 {
		drop = min(drop, int64(len(f.Rows[0])))
		for m := range f.Rows {
			f.Rows[m] = f.Rows[m][:copy(f.Rows[m], f.Rows[m][drop:])]
		}
		f.Base += drop
	}
	for f.Base+int64(len(f.Rows[0])) < to {
		for m := range f.hop {
			clear(f.hop[m])
		}
		for _, e := range f.emitters {
			e.Add(f.hop)
		}
		for m := range f.Rows {
			f.Rows[m] = append(f.Rows[m], f.hop[m]...)
		}
	}
}
