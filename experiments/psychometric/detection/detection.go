// Package detection is the theory of signal detection: sensitivity d′ and criterion for
// yes/no, m-alternative forced-choice and same/different tasks, with intervals.
//
// Sensitivity is the distance between the means of two unit-variance normal distributions.
// References: Green DM, Swets JA (1966) Signal detection theory and psychophysics; Macmillan
// NA, Creelman CD (2005) Detection theory: a user's guide, 2nd ed.
package detection

import (
	"fmt"
	"math"

	"distal/experiments/psychometric"

	"gonum.org/v1/gonum/stat/distuv"
)

func phi(z float64) float64      { return math.Exp(-z*z/2) / math.Sqrt(2*math.Pi) }
func cdf(z float64) float64      { return 0.5 * math.Erfc(-z/math.Sqrt2) }
func quantile(p float64) float64 { return -math.Sqrt2 * math.Erfcinv(2*p) }

// Counts of a task with two kinds of trial: yes/no (signal and noise), same/different
// (different and same), or two-interval (signal in the first, in the second).
type Counts struct {
	Hits         int // "yes" to a signal, "different" to a different pair, "first" to the first
	SignalTrials int
	FalseAlarms  int // the same response in the other kind of trial
	NoiseTrials  int
}

// Check says what is impossible about the counts.
func (c Counts) Check() error {
	switch {
	case c.SignalTrials < 1 || c.NoiseTrials < 1:
		return fmt.Errorf("%d signal and %d noise trials: both kinds are needed", c.SignalTrials, c.NoiseTrials)
	case c.Hits < 0 || c.Hits > c.SignalTrials:
		return fmt.Errorf("%d hits in %d signal trials are impossible", c.Hits, c.SignalTrials)
	case c.FalseAlarms < 0 || c.FalseAlarms > c.NoiseTrials:
		return fmt.Errorf("%d false alarms in %d noise trials are impossible", c.FalseAlarms, c.NoiseTrials)
	}
	return nil
}

// Rates are the plain hit and false-alarm rates.
func (c Counts) Rates() (hit, falseAlarm float64) {
	return float64(c.Hits) / float64(c.SignalTrials), float64(c.FalseAlarms) / float64(c.NoiseTrials)
}

// LogLinear are the rates with half a response added and one trial, in every data set
// whether extreme or not: (hits + ½)/(signals + 1), (false alarms + ½)/(noises + 1).
// Hautus MJ (1995) Corrections for extreme proportions and their biasing effects on
// estimated values of d′. Behav Res Methods Instrum Comput 27:46–51.
func (c Counts) LogLinear() (hit, falseAlarm float64) {
	return (float64(c.Hits) + 0.5) / (float64(c.SignalTrials) + 1), (float64(c.FalseAlarms) + 0.5) / (float64(c.NoiseTrials) + 1)
}

// extreme says whether a plain rate is 0 or 1.
func (c Counts) extreme() bool {
	return c.Hits == 0 || c.Hits == c.SignalTrials || c.FalseAlarms == 0 || c.FalseAlarms == c.NoiseTrials
}

// Sensitivity is the outcome of an analysis. Estimates use the log-linear correction and
// are always finite; intervals are profile-likelihood intervals of the uncorrected counts
// and are open where the counts set no limit.
type Sensitivity struct {
	HitRate        float64 `json:"hit_rate"` // corrected
	FalseAlarmRate float64 `json:"false_alarm_rate"`
	// DPrime is d′; its standard error is that of Gourevitch V, Galanter E (1967)
	// Psychometrika 32:25–33, at the corrected rates.
	DPrime psychometric.Estimate `json:"d_prime"`
	// Criterion is c, in standard deviations from the neutral point towards saying no.
	Criterion psychometric.Estimate `json:"criterion"`
	// LnBeta is c d′, the logarithm of the likelihood ratio at the criterion.
	LnBeta float64 `json:"ln_beta"`
	// Corrected says that a plain rate was 0 or 1, so that only the correction keeps d′ finite.
	Corrected bool `json:"extreme_rates"`
}

// YesNo is d′ = z(H) − z(F), c = −(z(H) + z(F))/2. confidence of the intervals: 0 means 0.95.
func YesNo(c Counts, confidence float64) (*Sensitivity, error) {
	return normalPair(c, confidence, 1)
}

// TwoInterval is the same for two-interval (or two-alternative) forced choice from
// responses by interval: d′ = (z(H) − z(F))/√2, which allows for a bias towards one interval.
func TwoInterval(c Counts, confidence float64) (*Sensitivity, error) {
	return normalPair(c, confidence, math.Sqrt2)
}

// normalPair analyses H = Φ(scale d′/2 − c), F = Φ(−scale d′/2 − c).
func normalPair(c Counts, confidence, scale float64) (*Sensitivity, error) {
	if err := c.Check(); err != nil {
		return nil, err
	}
	level, err := checkConfidence(confidence)
	if err != nil {
		return nil, err
	}
	s := &Sensitivity{Corrected: c.extreme()}
	s.HitRate, s.FalseAlarmRate = c.LogLinear()
	zh, zf := quantile(s.HitRate), quantile(s.FalseAlarmRate)
	s.DPrime.Valid, s.DPrime.Value = true, (zh-zf)/scale
	s.Criterion.Valid, s.Criterion.Value = true, -(zh+zf)/2
	s.LnBeta = s.Criterion.Value * s.DPrime.Value * scale
	vh := variance(s.HitRate, zh, c.SignalTrials)
	vf := variance(s.FalseAlarmRate, zf, c.NoiseTrials)
	s.DPrime.SE = math.Sqrt(vh+vf) / scale
	s.Criterion.SE = math.Sqrt(vh+vf) / 2
	s.DPrime.SEObserved, s.Criterion.SEObserved = s.DPrime.SE, s.Criterion.SE
	rates := func(d, k float64) (hit, falseAlarm float64) { return scale*d/2 - k, -scale*d/2 - k }
	s.DPrime.Interval = c.interval(level, s.DPrime.Value, -20, 20, func(d float64) float64 {
		return c.best(s.Criterion.Value, func(k float64) (float64, float64) { return rates(d, k) })
	})
	s.Criterion.Interval = c.interval(level, s.Criterion.Value, -10, 10, func(k float64) float64 {
		return c.best(s.DPrime.Value, func(d float64) (float64, float64) { return rates(d, k) })
	})
	return s, nil
}

func checkConfidence(confidence float64) (float64, error) {
	if confidence == 0 {
		return 0.95, nil
	}
	if !(confidence > 0 && confidence < 1) {
		return 0, fmt.Errorf("confidence %g is not between 0 and 1", confidence)
	}
	return confidence, nil
}

// variance of z(p): p (1 − p)/(n φ²).
func variance(p, z float64, n int) float64 {
	return p * (1 - p) / (float64(n) * phi(z) * phi(z))
}

// logLikelihood of the counts for two normal quantiles, accurate in the tails.
func (c Counts) logLikelihood(hit, falseAlarm float64) float64 {
	term := func(k, n int, z float64) float64 {
		l := 0.0
		if k > 0 {
			l += float64(k) * math.Log(math.Max(cdf(z), 1e-300))
		}
		if k < n {
			l += float64(n-k) * math.Log(math.Max(cdf(-z), 1e-300))
		}
		return l
	}
	return term(c.Hits, c.SignalTrials, hit) + term(c.FalseAlarms, c.NoiseTrials, falseAlarm)
}

// saturated is the highest log-likelihood that rates can give.
func (c Counts) saturated() float64 {
	h, f := c.Rates()
	return c.logLikelihood(quantile(h), quantile(f))
}

// best is the log-likelihood maximised over a nuisance parameter about start. The
// likelihood is log-concave in it.
func (c Counts) best(start float64, rates func(float64) (float64, float64)) float64 {
	f := func(x float64) float64 {
		h, fa := rates(x)
		return -c.logLikelihood(h, fa)
	}
	return -f(minimise(f, start-30, start+30))
}

// interval is where a profile stays within half the χ²(1) quantile of its maximum.
func (c Counts) interval(level, estimate, low, high float64, profile func(float64) float64) psychometric.Interval {
	target := c.saturated() - distuv.ChiSquared{K: 1}.Quantile(level)/2
	i := psychometric.Interval{Low: math.Inf(-1), High: math.Inf(1), OpenLow: true, OpenHigh: true}
	if profile(low) < target {
		i.Low, i.OpenLow = cross(profile, target, estimate, low), false
	}
	if profile(high) < target {
		i.High, i.OpenHigh = cross(profile, target, estimate, high), false
	}
	return i
}

// cross is where f falls below target between inside and outside, by bisection.
func cross(f func(float64) float64, target, inside, outside float64) float64 {
	if f(inside) < target { // the corrected estimate can lie outside the interval of small samples
		return inside
	}
	for range 60 {
		middle := (inside + outside) / 2
		if f(middle) >= target {
			inside = middle
		} else {
			outside = middle
		}
	}
	return inside
}

// minimise finds the minimum of a convex function by golden section.
func minimise(f func(float64) float64, a, b float64) float64 {
	ratio := (math.Sqrt(5) - 1) / 2
	c, d := b-ratio*(b-a), a+ratio*(b-a)
	fc, fd := f(c), f(d)
	for b-a > 1e-8 {
		if fc < fd {
			b, d, fd = d, c, fc
			c = b - ratio*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + ratio*(b-a)
			fd = f(d)
		}
	}
	return (a + b) / 2
}
