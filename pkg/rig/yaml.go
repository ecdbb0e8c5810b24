package rig

import (
	"bytes"
	"encoding/json"
	"fmt"
	"strconv"
	"strings"
)

// YAML returns the rig as a rig file, its microphones as a list, one a line.
// Load reads the text back into an equal rig. Keys at their default are left
// out.
func (r *Rig) YAML() []byte { return r.Annotated(nil, nil) }

// Annotated is YAML with comments: the lines of head before everything, and
// behind each microphone what note says of it, where that is not empty. Line
// breaks in them become spaces. A nil note says nothing.
func (r *Rig) Annotated(head []string, note func(m int) string) []byte {
	var b bytes.Buffer
	oneLine := func(text string) string { return strings.Join(strings.Fields(text), " ") }
	for _, line := range head {
		fmt.Fprintf(&b, "# %s\n", oneLine(line))
	}
	fmt.Fprintf(&b, "rig: %s\n", quote(r.Name))
	var air []string
	for _, v := range []struct {
		key   string
		value *float64
	}{
		{"temperature_c", r.Air.TemperatureC}, {"humidity_pct", r.Air.HumidityPct}, {"pressure_kpa", r.Air.PressureKPa},
	} {
		if v.value != nil {
			air = append(air, v.key+": "+numberText(*v.value))
		}
	}
	if len(air) > 0 {
		fmt.Fprintf(&b, "air: {%s}\n", strings.Join(air, ", "))
	}
	if r.Reference != "" && r.Reference != CentreReference {
		fmt.Fprintf(&b, "reference: %s\n", quote(r.Reference))
	}
	if r.HeadingDeg != nil {
		fmt.Fprintf(&b, "heading_deg: %s\n", numberText(*r.HeadingDeg))
	}
	if r.Limits != (Limits{}) {
		if text, err := json.Marshal(r.Limits); err == nil { // JSON is YAML; numbers marshal
			fmt.Fprintf(&b, "limits: %s\n", text)
		}
	}
	b.WriteString("microphones:\n")
	for i, m := range r.Mics {
		fmt.Fprintf(&b, "  - {name: %s, channel: %d, at_mm: [%s, %s, %s]", quote(m.Name), m.Channel,
			shifted(m.At.X, 3), shifted(m.At.Y, 3), shifted(m.At.Z, 3))
		optional := func(key string, v float64, text string) {
			if v != 0 {
				fmt.Fprintf(&b, ", %s: %s", key, text)
			}
		}
		optional("gain_db", m.GainDB, numberText(m.GainDB))
		optional("delay_us", m.Delay, shifted(m.Delay, 6))
		if m.Inverted {
			b.WriteString(", polarity: inverted")
		}
		if !m.Use {
			b.WriteString(", use: false")
		}
		optional("sensitivity_mv_pa", m.SensitivityMVPa, numberText(m.SensitivityMVPa))
		if v := m.SensitivityDBFS; v != nil {
			fmt.Fprintf(&b, ", sensitivity_dbfs: %s", numberText(*v))
		}
		if v := m.Response; v != nil {
			fmt.Fprintf(&b, ", response: {rate_hz: %d, taps: [", v.RateHz)
			for k, tap := range v.Taps {
				if k > 0 {
					b.WriteString(", ")
				}
				b.WriteString(numberText(tap))
			}
			b.WriteString("]}")
		}
		optional("clock_ppm", m.ClockPPM, numberText(m.ClockPPM))
		b.WriteString("}")
		if note != nil {
			if text := oneLine(note(i)); text != "" {
				b.WriteString("  # " + text)
			}
		}
		b.WriteString("\n")
	}
	return b.Bytes()
}

// shifted returns v·10^places as decimal text: the digits of v with the point
// moved, so that moving it back gives v.
func shifted(v float64, places int) string {
	mantissa, exponent, _ := strings.Cut(strconv.FormatFloat(v, 'e', -1, 64), "e")
	e, err := strconv.Atoi(exponent)
	if err != nil || v == 0 { // not a finite number, or zero without its sign
		return "0"
	}
	sign := ""
	if strings.HasPrefix(mantissa, "-") {
		sign, mantissa = "-", mantissa[1:]
	}
	digits := strings.Replace(mantissa, ".", "", 1)
	point := 1 + e + places // digits before the decimal point
	switch {
	case point <= 0:
		return sign + "0." + strings.Repeat("0", -point) + digits
	case point >= len(digits):
		return sign + digits + strings.Repeat("0", point-len(digits))
	}
	return sign + digits[:point] + "." + digits[point:]
}

// quote returns text as a YAML scalar: plain where that is safe, else in double
// quotes with the escapes of JSON, which YAML reads.
func quote(text string) string {
	plain := text != "" && text == strings.TrimSpace(text)
	for i, r := range text {
		letter := r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r > 0x7f && strconv.IsPrint(r)
		other := r == ' ' || r == '_' || r >= '0' && r <= '9' || r == '-' && i > 0
		if !(letter || other && i > 0) {
			plain = false
		}
	}
	switch strings.ToLower(text) {
	case "null", "true", "false", "yes", "no", "on", "off", "y", "n":
		plain = false
	}
	if plain {
		return text
	}
	quoted, err := json.Marshal(text)
	if err != nil {
		return strconv.Quote(text)
	}
	return string(quoted)
}
