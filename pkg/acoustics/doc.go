// Package acoustics says how a wavefront reaches a rig, near or far: the speed
// of sound, the delay and level of a wave at each microphone, absorption by
// the air, and the coherence of diffuse sound.
//
// Delays are seconds against the reference point: positive where the wave
// arrives later than at the reference point. Time factor e^{+j omega t}.
//
// # Sources
//
// [ISO 9613-1] ISO 9613-1:1993, Attenuation of sound during propagation
// outdoors, part 1: absorption by the atmosphere. Speed: formula A.5 (clause
// number from memory); absorption: formulas 3 to 5.
//
// [Cramer 1993] O. Cramer, The variation of the specific heat ratio and the
// speed of sound in air with temperature, pressure, humidity, and CO2
// concentration, J. Acoust. Soc. Am. 93 (1993), p. 2510; the same coefficients
// stand in IEC 61094-2:2009, annex F.
//
// [Eyring 1930] C. F. Eyring, Reverberation time in "dead" rooms, J. Acoust.
// Soc. Am. 1 (1930), p. 217.
package acoustics
