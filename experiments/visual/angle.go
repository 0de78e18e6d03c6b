// Package visual holds the physics between a participant's eye and the screen:
// visual angle, the card and blind-spot calibrations, refresh intervals and
// luminance. Plain functions over numbers; the browser runs them too.
package visual

import (
	"math"

	"distal/experiments/exact"
)

// SizeDeg is the visual angle of an object of sizeMm centred on the line of
// sight at distanceMm: 2 atan(s/2D).
func SizeDeg(sizeMm, distanceMm float64) float64 {
	return float64(2 * exact.Degrees(exact.Atan(sizeMm/(2*distanceMm))))
}

// EccentricityDeg is the angle between the line of sight and a point offsetMm
// beside it on a flat screen at distanceMm: atan(s/D).
func EccentricityDeg(offsetMm, distanceMm float64) float64 {
	return exact.Degrees(exact.Atan(offsetMm / distanceMm))
}

// OffsetMm is the inverse of EccentricityDeg: D tan(e).
func OffsetMm(eccentricityDeg, distanceMm float64) float64 {
	return float64(distanceMm * exact.Tan(exact.Radians(eccentricityDeg)))
}

// The ID-1 card (ISO/IEC 7810): 85.60 mm × 53.98 mm, corners of 2.88 to 3.48 mm radius.
const (
	CardWidthMm  = 85.60
	CardHeightMm = 53.98
)

// Plausible densities of screens in device pixels per mm: from a large
// projection-like television to a small telephone (common practice, no source).
const (
	MinDevicePxPerMm = 1.5
	MaxDevicePxPerMm = 32
)

// Centre of the blind spot, temporal on the horizontal, and its standard deviation from eye to
// eye: 15.5 ± 1.1 deg (Rohrschneider K 2004, Determination of the location of
// the fovea on the fundus. Invest Ophthalmol Vis Sci 45:3257).
const (
	BlindSpotDeg   = 15.5
	BlindSpotSDDeg = 1.1
)

// BlindSpotDistance is the viewing distance at which the blind spot's centre
// lies offsetMm from fixation, D = d / tan(e), with its standard deviation
// from eye to eye: sd(D)/D = 2 sd(e) / sin(2e), sd(e) in radians.
func BlindSpotDistance(offsetMm float64) (distanceMm, sdMm float64) {
	e := exact.Radians(BlindSpotDeg)
	distanceMm = offsetMm / exact.Tan(e)
	return distanceMm, distanceMm * 2 * exact.Radians(BlindSpotSDDeg) / exact.Sin(float64(2*e))
}

// MeanSD gives mean and standard deviation (n−1) of x; NaN mean of none, sd 0 of one.
func MeanSD(x []float64) (mean, sd float64) {
	if len(x) == 0 {
		return math.NaN(), math.NaN()
	}
	for _, v := range x {
		mean += v
	}
	mean /= float64(len(x))
	if len(x) == 1 {
		return mean, 0
	}
	for _, v := range x {
		sd += float64((v - mean) * (v - mean))
	}
	return mean, math.Sqrt(sd / float64(len(x)-1))
}

// Median of x, which is sorted in place; NaN of none.
func Median(x []float64) float64 {
	if len(x) == 0 {
		return math.NaN()
	}
	sortFloats(x)
	n := len(x)
	return (x[(n-1)/2] + x[n/2]) / 2
}

// sortFloats is a heap sort: small in WebAssembly and without recursion.
func sortFloats(x []float64) {
	n := len(x)
	for i := n/2 - 1; i >= 0; i-- {
		sift(x, i, n)
	}
	for end := n - 1; end > 0; end-- {
		x[0], x[end] = x[end], x[0]
		sift(x, 0, end)
	}
}

func sift(x []float64, i, n int) {
	for {
		child := 2*i + 1
		if child >= n {
			return
		}
		if child+1 < n && x[child+1] > x[child] {
			child++
		}
		if x[i] >= x[child] {
			return
		}
		x[i], x[child] = x[child], x[i]
		i = child
	}
}
