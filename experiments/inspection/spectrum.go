package inspection

import (
	"math"

	"gonum.org/v1/gonum/dsp/fourier"
)

// Peak is where the spatio-temporal spectrum of a cut is largest.
type Peak struct {
	FrequencyCPD    float64 // spatial, above 0
	FrequencyHz     float64 // temporal; above 0 moves in the cut's direction
	SpeedDegPerSec  float64 // FrequencyHz ÷ FrequencyCPD
	ShareOfVariance float64 // of the light's variance, in the peak's bin
}

// SpectrumPeak finds the drifting sinusoid that holds most of a space-time picture:
// the largest bin of its two-dimensional discrete Fourier transform with a
// spatial frequency above 0. ok is false for a picture without any variation in space.
func SpectrumPeak(p SpaceTime) (peak Peak, ok bool) {
	rows := len(p.Light)
	if rows < 2 || len(p.Light[0]) < 2 {
		return Peak{}, false
	}
	columns := len(p.Light[0])
	along, over := fourier.NewFFT(columns), fourier.NewCmplxFFT(rows)
	spectra := make([][]complex128, rows)
	for n, row := range p.Light {
		spectra[n] = along.Coefficients(nil, row)
	}
	total, largest := 0.0, 0.0
	column := make([]complex128, rows)
	for k := 1; k < len(spectra[0]); k++ {
		for n := range spectra {
			column[n] = spectra[n][k]
		}
		for m, c := range over.Coefficients(nil, column) {
			power := real(c)*real(c) + imag(c)*imag(c)
			total += power
			if power <= largest {
				continue
			}
			largest = power
			// A pattern moving forward has a phase that falls with time.
			hz := -over.Freq(m) / (p.IntervalMs / 1000)
			peak.FrequencyCPD, peak.FrequencyHz = along.Freq(k)/p.StepDeg, hz
		}
	}
	if total < 1e-12*float64(rows*columns) {
		return Peak{}, false
	}
	peak.SpeedDegPerSec, peak.ShareOfVariance = peak.FrequencyHz/peak.FrequencyCPD, largest/total
	return peak, true
}

// GreyLevels counts the distinct values among 8-bit pixels and gives the Michelson
// contrast in light between the brightest and the darkest of them.
func GreyLevels(grey []uint8) (levels int, contrast float64) {
	var seen [256]bool
	for _, g := range grey {
		seen[g] = true
	}
	low, high := -1, 0
	for g, yes := range seen {
		if !yes {
			continue
		}
		levels++
		high = g
		if low < 0 {
			low = g
		}
	}
	if levels == 0 {
		return 0, 0
	}
	a, b := Luminance(uint8(low), uint8(low), uint8(low)), Luminance(uint8(high), uint8(high), uint8(high))
	if math.Abs(a+b) == 0 {
		return levels, 0
	}
	return levels, (b - a) / (b + a)
}
