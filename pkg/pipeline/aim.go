package pipeline

import "strings"

// AimName is how the names of outputs say where the beam points, such as
// az+060.0 or x1.20_y0.80_z0.00. The error is that of Validate.
func (o Options) AimName() (string, error) {
	s, err := o.resolve()
	if err != nil {
		return "", err
	}
	return strings.TrimPrefix(s.towardName(), "_"), nil
}
