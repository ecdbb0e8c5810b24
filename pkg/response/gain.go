package response

import (
	"fmt"
	"math"

	"alidade/pkg/acoustics"
	"alidade/pkg/beam"
	"alidade/pkg/rig"
)

// BandGains returns what filters f do in the band low..high, Hz, to noise of
// flat spectrum in that band and to a target:
//
//	whiteDB         -10·log10 of the mean over the band of Σ|G_m|²: level of
//	                spatially white noise at a microphone minus in the output
//	diffuseDB       the same for spherically isotropic noise, GᴴΓG
//	targetChangeDB  level of the wave look in the output minus its mean level
//	                (of power) over the microphones, in dB; 0 is distortionless
//	                for a far source
//
// The two gains are noise reductions: with targetChangeDB added they are SNR
// gains. look is the wave that the target really sends, so a near source shows
// the loss of a beam that is steered with plane waves. ref is the reference
// point, speed the speed of sound in m/s. Output that holds nothing reads +Inf
// for a gain and -Inf for a target change.
//
// It panics if the number of filters and of microphones differ or if
// 0 <= low < high does not hold.
func BandGains(f *beam.Filters, mics []rig.Point, look acoustics.Wave, ref rig.Point, speed, low, high float64) (whiteDB, diffuseDB, targetChangeDB float64) {
	if f.Mics() != len(mics) {
		panic(fmt.Sprintf("response: %d filters for %d microphones", f.Mics(), len(mics)))
	}
	if !(low >= 0 && high > low) {
		panic(fmt.Sprintf("response: band from %g to %g Hz", low, high))
	}
	delays := acoustics.Delays(nil, look, mics, ref, speed)
	spreading, meanSquare := make([]float64, len(mics)), 0.0
	for m, p := range mics {
		spreading[m] = look.Spreading(p, ref)
		meanSquare += spreading[m] * spreading[m] / float64(len(mics))
	}
	apart := distances(mics)
	var g, d []complex128
	var white, diffuse, target float64
	n := bandPoints(f, mics, speed, high-low)
	for i := range n {
		hz := low + (high-low)*(float64(i)+0.5)/float64(n)
		g = f.Response(g, hz)
		d = acoustics.Steering(d, delays, spreading, 2*math.Pi*hz)
		white += sumSquares(g) / float64(n)
		diffuse += diffusePower(g, apart, hz, speed) / float64(n)
		var y complex128
		for m := range g {
			y += g[m] * d[m]
		}
		target += (real(y)*real(y) + imag(y)*imag(y)) / float64(n)
	}
	return -10 * math.Log10(white), -10 * math.Log10(diffuse), 10 * math.Log10(target/meanSquare)
}

// bandPoints is the number of midpoints that average a band of width hertz:
// two a cycle of the fastest ripple that filters and rig can make over
// frequency, and at least 16.
func bandPoints(f *beam.Filters, mics []rig.Point, speed, width float64) int {
	longest := 0
	for _, h := range f.H {
		longest = max(longest, len(h))
	}
	ripple := float64(longest)/float64(f.Rate) + 2*rig.Spread(mics).Extent/speed
	return max(16, int(math.Ceil(2*width*ripple)))
}

// distances returns the distances of all pairs of microphones, metres, as
// apart[m*M+n].
func distances(mics []rig.Point) []float64 {
	apart := make([]float64, len(mics)*len(mics))
	for m, p := range mics {
		for n, q := range mics {
			apart[m*len(mics)+n] = p.Distance(q)
		}
	}
	return apart
}

// sumSquares returns Σ|g_m|².
func sumSquares(g []complex128) float64 {
	var sum float64
	for _, v := range g {
		sum += real(v)*real(v) + imag(v)*imag(v)
	}
	return sum
}

// diffusePower returns the power of spherically isotropic noise of unit power
// at every microphone behind the responses g at frequency hz: Σ_mn G_m Γ_mn
// G_n*.
func diffusePower(g []complex128, apart []float64, hz, speed float64) float64 {
	var sum float64
	for m := range g {
		sum += real(g[m])*real(g[m]) + imag(g[m])*imag(g[m])
		for n := range m {
			re := real(g[m])*real(g[n]) + imag(g[m])*imag(g[n])
			sum += 2 * re * acoustics.DiffuseCoherence(apart[m*len(g)+n], hz, speed)
		}
	}
	return sum
}
