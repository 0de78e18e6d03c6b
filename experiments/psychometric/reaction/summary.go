package reaction

import (
	"errors"
	"math"
	"slices"

	"distal/experiments/psychometric"

	"gonum.org/v1/gonum/stat/distuv"
)

// Summary describes response times in ways that a few slow ones do not upset. Seconds.
type Summary struct {
	Count  int     `json:"count"`
	Median float64 `json:"median_s"`
	// MedianInterval is the interval of the median from order statistics, of at least the
	// confidence asked for; it is open for fewer than 6 times at 95%.
	MedianInterval psychometric.Interval `json:"median_interval_s"`
	Quartiles      [2]float64            `json:"quartiles_s"`
	// MAD is the median absolute deviation times 1.4826, which estimates the standard
	// deviation of a normal distribution.
	MAD float64 `json:"mad_s"`
	// Trimmed is the mean without the fastest and slowest 20%, TrimmedSE its standard error
	// from the winsorised variance (Yuen KK 1974, Biometrika 61:165–170); 0 for fewer than 5 times.
	Trimmed       float64 `json:"trimmed_mean_s"`
	TrimmedSE     float64 `json:"trimmed_se_s"`
	Mean          float64 `json:"mean_s"`
	SD            float64 `json:"sd_s"`
	GeometricMean float64 `json:"geometric_mean_s"`
}

// ErrNoTimes says that there is no time to summarise, ErrBadTime that one is not above 0.
var (
	ErrNoTimes = errors.New("no response times")
	ErrBadTime = errors.New("a response time is not a number above 0")
)

// Summarise response times in seconds. confidence 0 means 0.95.
func Summarise(times []float64, confidence float64) (*Summary, error) {
	if len(times) == 0 {
		return nil, ErrNoTimes
	}
	if confidence == 0 {
		confidence = 0.95
	}
	x := slices.Clone(times)
	slices.Sort(x)
	s := &Summary{Count: len(x)}
	for _, t := range x {
		if !(t > 0) || math.IsInf(t, 0) {
			return nil, ErrBadTime
		}
		s.GeometricMean += math.Log(t) / float64(len(x))
	}
	s.GeometricMean = math.Exp(s.GeometricMean)
	var variance float64
	s.Mean, variance = moments(x)
	s.SD = math.Sqrt(variance)
	s.Median = sortedQuantile(x, 0.5)
	s.Quartiles = [2]float64{sortedQuantile(x, 0.25), sortedQuantile(x, 0.75)}
	s.MAD = mad(x, s.Median)
	s.MedianInterval = medianInterval(x, confidence)
	s.trim(x)
	return s, nil
}

// sortedQuantile interpolates linearly between order statistics (type 7 of Hyndman and
// Fan 1996, Am Stat 50:361–365).
func sortedQuantile(x []float64, p float64) float64 {
	rank := p * float64(len(x)-1)
	i := min(int(rank), len(x)-1)
	if i == len(x)-1 {
		return x[i]
	}
	return x[i] + (rank-float64(i))*(x[i+1]-x[i])
}

func mad(x []float64, median float64) float64 {
	d := make([]float64, len(x))
	for i, t := range x {
		d[i] = math.Abs(t - median)
	}
	slices.Sort(d)
	return 1.4826 * sortedQuantile(d, 0.5)
}

func medianInterval(x []float64, confidence float64) psychometric.Interval {
	n := len(x)
	b := distuv.Binomial{N: float64(n), P: 0.5}
	// The largest k with P(fewer than k of n below the median) ≤ tail.
	k := 0
	for k < n/2 && b.CDF(float64(k)) <= (1-confidence)/2 {
		k++
	}
	if k == 0 {
		return psychometric.Interval{Low: 0, High: math.Inf(1), OpenLow: true, OpenHigh: true}
	}
	return psychometric.Interval{Low: x[k-1], High: x[n-k]}
}

func (s *Summary) trim(x []float64) {
	n := len(x)
	if n < 5 {
		s.Trimmed = s.Mean
		return
	}
	g := n / 5
	kept := x[g : n-g]
	s.Trimmed, _ = moments(kept)
	winsorised := slices.Clone(x)
	for i := range g {
		winsorised[i], winsorised[n-1-i] = x[g], x[n-1-g]
	}
	_, variance := moments(winsorised)
	h := float64(len(kept))
	s.TrimmedSE = math.Sqrt(variance * float64(n-1) / (h * (h - 1)))
}
