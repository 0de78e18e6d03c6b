package visual

import (
	"math"

	"distal/experiments/exact"
)

// Refresh describes the frame clock of a screen.
type Refresh struct {
	IntervalMs     float64
	JitterMs       float64 // sd of the intervals that are not late
	DroppedPercent float64 // refreshes missed, of all refreshes
	Frames         int     // intervals measured
}

// LateFactor: an interval longer than so many refresh intervals is late
// (common practice, no source).
const LateFactor = 1.5

// MeasureRefresh estimates the refresh interval from the intervals (ms) between
// successive frames. The start is the median of the intervals, the estimate the mean of those within a quarter
// of it, which resolves far finer than the clock's grain (59.94 from
// 60 Hz: 0.017 ms). It needs at least 10 intervals; otherwise all is NaN.
func MeasureRefresh(intervalsMs []float64) Refresh {
	nan := Refresh{math.NaN(), math.NaN(), math.NaN(), len(intervalsMs)}
	if len(intervalsMs) < 10 {
		return nan
	}
	median := Median(append([]float64(nil), intervalsMs...))
	if !(median > 0) {
		return nan
	}
	var kept []float64
	for _, d := range intervalsMs {
		if math.Abs(d-median) <= median/4 {
			kept = append(kept, d)
		}
	}
	r := Refresh{Frames: len(intervalsMs)}
	r.IntervalMs, r.JitterMs = MeanSD(kept)
	missed, total := 0, 0
	for _, d := range intervalsMs {
		steps := Steps(d, r.IntervalMs)
		total += steps
		missed += steps - 1
	}
	r.DroppedPercent = 100 * float64(missed) / float64(max(1, total))
	return r
}

// Steps is the number of refresh intervals in the time between two presented
// frames, at least 1. One that is not late counts as 1.
func Steps(deltaMs, refreshMs float64) int {
	return max(1, int(exact.Round(deltaMs/refreshMs)))
}

// Frames is the number of refresh intervals nearest to a duration, the larger
// of two equally near, at least 1 for durations above 0.
func Frames(durationMs, refreshMs float64) int {
	if durationMs <= 0 {
		return 0
	}
	return max(1, int(exact.Round(durationMs/refreshMs)))
}

// LinearFromSRGB is the linear-light value, 0 to 1, of an sRGB value, 0 to 1 (IEC 61966-2-1).
func LinearFromSRGB(v float64) float64 {
	if v <= 0.04045 {
		return v / 12.92
	}
	return exact.Pow((v+0.055)/1.055, 2.4)
}

// SRGBFromLinear is the inverse of LinearFromSRGB.
func SRGBFromLinear(l float64) float64 {
	if l <= 0.0031308 {
		return float64(12.92 * l)
	}
	return float64(1.055*exact.Pow(l, 1/2.4)) - 0.055
}
