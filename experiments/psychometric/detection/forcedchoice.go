package detection

import (
	"fmt"
	"math"

	"distal/experiments/psychometric"

	"gonum.org/v1/gonum/mathext"
)

// ProportionCorrect is that of an unbiased observer of sensitivity d′ in m-alternative
// forced choice (m ≥ 2), pc = ∫ φ(t − d′) Φ(t)^(m−1) dt (Green and Swets 1966), to 1e-10.
// A negative d′ gives less than 1/m. It panics for m < 2.
func ProportionCorrect(dPrime float64, m int) float64 {
	if m < 2 {
		panic("detection: forced choice needs two alternatives or more")
	}
	// The trapezoidal rule converges exponentially for such an integrand; beyond 9 standard
	// deviations of φ there is less than 1e-18.
	const h, reach = 0.1, 9.0
	sum := 0.0
	for x := -reach; x <= reach; x += h {
		sum += phi(x) * math.Pow(cdf(x+dPrime), float64(m-1))
	}
	return math.Min(sum*h, 1)
}

// maxDPrime bounds the search; pc differs from 1 by less than 1e-15 there.
const maxDPrime = 12.0

// DPrime is the inverse of ProportionCorrect, for 0 < pc < 1; it returns an error otherwise.
func DPrime(pc float64, m int) (float64, error) {
	if m < 2 {
		return 0, fmt.Errorf("%d alternatives: forced choice needs two or more", m)
	}
	if !(pc > 0 && pc < 1) {
		return 0, fmt.Errorf("proportion correct %g: d′ is finite only between 0 and 1", pc)
	}
	low, high := -maxDPrime, maxDPrime
	for range 70 {
		middle := (low + high) / 2
		if ProportionCorrect(middle, m) < pc {
			low = middle
		} else {
			high = middle
		}
	}
	return (low + high) / 2, nil
}

// ForcedChoice is the analysis of correct of n trials with m alternatives. The estimate
// is of (correct + ½)/(n + 1), Hautus's log-linear correction applied to the one
// proportion, so that it is finite; its standard error is by the delta method. The
// interval is the Clopper–Pearson interval (Biometrika 1934, 26:404–413) of the proportion
// turned into d′, open where all or no responses are correct.
func ForcedChoice(correct, n, m int, confidence float64) (psychometric.Estimate, error) {
	var e psychometric.Estimate
	level, err := checkConfidence(confidence)
	if err != nil {
		return e, err
	}
	if m < 2 || n < 1 || correct < 0 || correct > n {
		return e, fmt.Errorf("%d correct of %d trials with %d alternatives is impossible", correct, n, m)
	}
	pc := (float64(correct) + 0.5) / (float64(n) + 1)
	if e.Value, err = DPrime(pc, m); err != nil {
		return e, err
	}
	e.Valid = true
	const h = 1e-4
	slope := (ProportionCorrect(e.Value+h, m) - ProportionCorrect(e.Value-h, m)) / (2 * h)
	e.SE = math.Sqrt(pc*(1-pc)/float64(n)) / slope
	e.SEObserved = e.SE
	e.Interval = psychometric.Interval{Low: math.Inf(-1), High: math.Inf(1), OpenLow: true, OpenHigh: true}
	tail := (1 - level) / 2
	k, wrong := float64(correct), float64(n-correct)
	if correct > 0 {
		e.Interval.OpenLow = false
		if e.Interval.Low, err = DPrime(mathext.InvRegIncBeta(k, wrong+1, tail), m); err != nil {
			return e, err
		}
	}
	if correct < n {
		e.Interval.OpenHigh = false
		if e.Interval.High, err = DPrime(mathext.InvRegIncBeta(k+1, wrong, 1-tail), m); err != nil {
			return e, err
		}
	}
	return e, nil
}
