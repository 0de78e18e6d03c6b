package detection

import (
	"fmt"
	"math"

	"distal/experiments/psychometric"
)

// Strategy is how an observer decides whether two stimuli differ.
type Strategy int

const (
	// Differencing compares the difference of the two observations with a criterion, as when
	// the stimuli roam over a range (Sorkin RD 1962, J Acoust Soc Am 34:1745–1751).
	Differencing Strategy = iota
	// Independent classifies either observation and then compares: the optimal rule for two
	// fixed stimuli (Noreen DL 1981; Macmillan and Creelman 2005, chapter 9).
	Independent
)

// SameDifferent is the analysis of a same/different task: hits are "different" to pairs
// that differ, false alarms "different" to pairs that are the same. For Differencing,
//
//	H = Φ((d′ − k)/√2) + Φ((−d′ − k)/√2),  F = 2 Φ(−k/√2),
//
// with the criterion k in standard deviations of one observation. For Independent, the
// unbiased proportion correct p = Φ((z(H) − z(F))/2) gives d′ = 2 z(½ (1 + √(2p − 1))),
// from p = q² + (1 − q)² with q = Φ(d′/2); the criterion is then that of YesNo. Where
// "different" is no more frequent for different pairs, d′ is 0.
func SameDifferent(c Counts, s Strategy, confidence float64) (*Sensitivity, error) {
	if err := c.Check(); err != nil {
		return nil, err
	}
	level, err := checkConfidence(confidence)
	if err != nil {
		return nil, err
	}
	switch s {
	case Differencing:
		return differencing(c, level), nil
	case Independent:
		return independent(c, level)
	}
	return nil, fmt.Errorf("unknown same/different strategy %d", int(s))
}

// differenceRates are H and F for the differencing rule.
func differenceRates(d, k float64) (hit, falseAlarm float64) {
	return cdf((d-k)/math.Sqrt2) + cdf((-d-k)/math.Sqrt2), 2 * cdf(-k/math.Sqrt2)
}

func differencing(c Counts, level float64) *Sensitivity {
	s := &Sensitivity{Corrected: c.extreme()}
	s.HitRate, s.FalseAlarmRate = c.LogLinear()
	k := -math.Sqrt2 * quantile(s.FalseAlarmRate/2)
	s.Criterion.Valid, s.Criterion.Value = true, k
	s.DPrime.Valid, s.DPrime.Value = true, solveDifference(s.HitRate, k)
	rates := func(d, k float64) (float64, float64) {
		h, f := differenceRates(d, k)
		return quantile(clampRate(h)), quantile(clampRate(f))
	}
	s.DPrime.Interval = c.positive(level, s.DPrime.Value, func(d float64) float64 {
		return c.best1(func(k float64) (float64, float64) { return rates(d, k) })
	})
	s.Criterion.Interval = c.positive(level, k, func(k float64) float64 {
		return c.best1(func(d float64) (float64, float64) { return rates(d, k) })
	})
	return s
}

func clampRate(p float64) float64 { return math.Min(math.Max(p, 1e-300), 1-1e-16) }

// solveDifference is the d′ ≥ 0 with the given hit rate at criterion k.
func solveDifference(hit, k float64) float64 {
	low, high := 0.0, 40.0
	for range 80 {
		middle := (low + high) / 2
		if h, _ := differenceRates(middle, k); h < hit {
			low = middle
		} else {
			high = middle
		}
	}
	if low == 0 {
		return 0
	}
	return (low + high) / 2
}

// best1 maximises over a nuisance parameter of 0 to 40, coarsely and then finely: the
// likelihood of the differencing rule need not be concave.
func (c Counts) best1(rates func(float64) (float64, float64)) float64 {
	f := func(x float64) float64 {
		h, fa := rates(x)
		return -c.logLikelihood(h, fa)
	}
	const steps = 80
	least := 0
	for i := range steps + 1 {
		if f(0.5*float64(i)) < f(0.5*float64(least)) {
			least = i
		}
	}
	at := minimise(f, math.Max(0.5*float64(least-1), 0), 0.5*float64(least+1))
	return -math.Min(f(at), math.Min(f(0), f(0.5*float64(least))))
}

// positive is an interval of a parameter that cannot be below 0. Its maximum is that of
// the profile, since a hit rate below the false-alarm rate cannot be reached.
func (c Counts) positive(level, estimate float64, profile func(float64) float64) psychometric.Interval {
	const high = 40.0
	top, at := profile(estimate), estimate
	for i := range 81 {
		if v := profile(high / 80 * float64(i)); v > top {
			top, at = v, high/80*float64(i)
		}
	}
	target := top - quantile((1+level)/2)*quantile((1+level)/2)/2
	i := psychometric.Interval{Low: 0, High: math.Inf(1), OpenHigh: true}
	if profile(0) < target {
		i.Low = cross(profile, target, at, 0)
	}
	if profile(high) < target {
		i.High, i.OpenHigh = cross(profile, target, at, high), false
	}
	i.Low, i.High = math.Min(i.Low, estimate), math.Max(i.High, estimate)
	return i
}

func independent(c Counts, level float64) (*Sensitivity, error) {
	s, err := YesNo(c, level)
	if err != nil {
		return nil, err
	}
	turn := func(d float64) float64 {
		p := cdf(d / 2)
		if math.IsInf(d, 1) {
			return d
		}
		if p <= 0.5 {
			return 0
		}
		return 2 * quantile(math.Min((1+math.Sqrt(2*p-1))/2, 1-1e-16))
	}
	d, se := s.DPrime.Value, s.DPrime.SE
	s.DPrime.Value = turn(d)
	s.DPrime.SE = 0 // the transformation has an infinite slope at chance
	if d > 0.1 {
		s.DPrime.SE = se * (turn(d+1e-4) - turn(d-1e-4)) / 2e-4
	}
	s.DPrime.SEObserved = s.DPrime.SE
	s.DPrime.Interval.Low, s.DPrime.Interval.OpenLow = turn(s.DPrime.Interval.Low), false
	s.DPrime.Interval.High = turn(s.DPrime.Interval.High)
	s.LnBeta = s.Criterion.Value * d
	return s, nil
}
