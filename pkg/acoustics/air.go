package acoustics

import (
	"errors"
	"fmt"
	"math"
	"strings"
)

// Air is the air that sound travels through. The zero value is not useful:
// start from DryAir.
type Air struct {
	TemperatureC float64 // degrees Celsius
	// HumidityPct is the relative humidity in per cent. 0 is dry air, and then
	// the speed follows the dry rule.
	HumidityPct float64
	PressureKPa float64 // kilopascals
}

// StandardPressureKPa is the reference ambient pressure of ISO 9613-1.
const StandardPressureKPa = 101.325

// DryAir is dry air of the given temperature at standard pressure.
func DryAir(temperatureC float64) Air {
	return Air{TemperatureC: temperatureC, PressureKPa: StandardPressureKPa}
}

// Validate reports every value that is outside what the formulas cover.
func (a Air) Validate() error {
	var faults []error
	for _, v := range []struct {
		name        string
		value       float64
		low, high   float64
		unit, cause string
	}{
		{"temperature", a.TemperatureC, -50, 60, "°C", "the speed of sound is given for -50 to 60 °C"},
		{"humidity", a.HumidityPct, 0, 100, "%", "relative humidity runs from 0 to 100 %"},
		{"pressure", a.PressureKPa, 50, 110, "kPa", "air pressure at the ground lies between 50 and 110 kPa"},
	} {
		if !(v.value >= v.low && v.value <= v.high) {
			faults = append(faults, fmt.Errorf("%s %g %s: %s", v.name, v.value, v.unit, v.cause))
		}
	}
	return errors.Join(faults...)
}

// Speed returns the speed of sound, m/s. Dry air (HumidityPct 0) follows
// c = 343.2·sqrt(T/293.15) [ISO 9613-1]; humid air the polynomial of
// [Cramer 1993] for a carbon dioxide fraction of 0.0004, stated by its author
// for 0 to 30 °C and to be good to 300 parts per million.
func (a Air) Speed() float64 {
	if a.HumidityPct == 0 {
		return 343.2 * math.Sqrt((a.TemperatureC+273.15)/293.15)
	}
	return a.cramerSpeed(0.0004)
}

// cramerSpeed is the polynomial of [Cramer 1993], table III, with the water
// vapour pressure of the CIPM-81/91 formula; xc is the mole fraction of carbon
// dioxide.
func (a Air) cramerSpeed(xc float64) float64 {
	t := a.TemperatureC
	kelvin := t + 273.15
	p := a.PressureKPa * 1000
	// Saturation vapour pressure, Pa, and enhancement factor: CIPM-81/91.
	psv := math.Exp(1.2378847e-5*kelvin*kelvin - 1.9121316e-2*kelvin + 33.93711047 - 6.3431645e3/kelvin)
	f := 1.00062 + 3.14e-8*p + 5.6e-7*t*t
	xw := a.HumidityPct / 100 * f * psv / p
	return 331.5024 + 0.603055*t - 0.000528*t*t +
		(51.471935+0.1495874*t-0.000782*t*t)*xw +
		(-1.82e-7+3.73e-8*t-2.93e-10*t*t)*p +
		(-85.20931-0.228525*t+5.91e-5*t*t)*xc -
		2.835149*xw*xw - 2.15e-13*p*p + 29.179762*xc*xc + 0.000486*xw*p*xc
}

// SpeedRule names the rule that Speed follows, for reports.
func (a Air) SpeedRule() string {
	if a.HumidityPct == 0 {
		return "343.2·√(T/293.15 K), dry air (ISO 9613-1)"
	}
	return "humid air (Cramer 1993, CO2 400 ppm)"
}

// Absorption returns the pure-tone attenuation of air at frequency hz, dB per
// metre [ISO 9613-1, formulas 3 to 5 and B.1 to B.3]. Dry air is taken as it
// is: 0 % humidity.
func (a Air) Absorption(hz float64) float64 {
	const (
		t0  = 293.15
		t01 = 273.16
	)
	kelvin := a.TemperatureC + 273.15
	pr := a.PressureKPa / StandardPressureKPa
	psat := math.Pow(10, -6.8346*math.Pow(t01/kelvin, 1.261)+4.6151)
	h := a.HumidityPct * psat / pr
	frO := pr * (24 + 4.04e4*h*(0.02+h)/(0.391+h))
	frN := pr * math.Pow(kelvin/t0, -0.5) * (9 + 280*h*math.Exp(-4.170*(math.Pow(kelvin/t0, -1.0/3)-1)))
	return 8.686 * hz * hz * (1.84e-11/pr*math.Sqrt(kelvin/t0) +
		math.Pow(kelvin/t0, -2.5)*(0.01275*math.Exp(-2239.1/kelvin)/(frO+hz*hz/frO)+
			0.1068*math.Exp(-3352/kelvin)/(frN+hz*hz/frN)))
}

// String returns the air in words: "18 °C, 55 % humidity, 101.3 kPa".
func (a Air) String() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%.4g °C, ", a.TemperatureC)
	if a.HumidityPct == 0 {
		b.WriteString("dry, ")
	} else {
		fmt.Fprintf(&b, "%.3g %% humidity, ", a.HumidityPct)
	}
	fmt.Fprintf(&b, "%.4g kPa", a.PressureKPa)
	return b.String()
}
