// Package dsp turns samples into readings: it finds the tone of the
// standard-frequency carrier and the tone of the local oscillator in receiver
// audio and gives their signed difference, the beat, once a second.
//
// # Model and signs
//
// An upper-sideband receiver makes tone = rf - dial, a lower-sideband one
// tone = dial - rf; s is +1 or -1 accordingly. With e the fractional error of
// the sample clock (true rate = nominal rate * (1+e)),
//
//	beat  D = s * (local tone - carrier tone) * (1 + e)    Hz, > 0: local is high
//	error   = D - D0,   D0 = fL - fC the declared set-off   Hz
//	offset  = error / fL                                    dimensionless
//
// Levels are in dB of a full-scale sine; signal strength is C/N0 in dB-Hz,
// which does not depend on any bandwidth.
package dsp
