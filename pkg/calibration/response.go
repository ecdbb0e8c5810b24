package calibration

// Response is how a channel differs from the mean of all over frequency, as a
// short filter that undoes it.
type Response struct{}

func (f *factor) responses(r *Relative) {}
