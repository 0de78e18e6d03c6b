package procedure

import (
	"math"

	"distal/experiments/exact"
)

// Place is the rule by which a Bayesian procedure chooses the level.
type Place int

// Rules, named in study files as in PlaceNames. Own is the published one:
//
//	quest         Mode of the threshold (Watson AB, Pelli DG 1983, Percept Psychophys 33:113)
//	psi           Entropy of threshold, slope and lapse rate (Kontsevich LL, Tyler CW 1999, Vision Res 39:2729)
//	psi_marginal  Entropy of the threshold, with KeepSlope of threshold and slope (Prins N 2013, J Vis 13(7):3)
//	quest_plus    Entropy of all parameters (Watson 2017), with Nuisance the Variance of log threshold
//
// Median is after Pelli DG (1987, Invest Ophthalmol Vis Sci 28 Suppl:366), Mean
// after King-Smith PE et al. (1994, Vision Res 34:885), both *from memory*.
const (
	Own Place = iota
	Entropy
	Variance
	Mode
	Mean
	Median
)

// PlaceNames are the names in study files, indexed by Place.
var PlaceNames = []string{"own", "entropy", "variance", "mode", "mean", "median"}

// Bayesian tells whether the method keeps a posterior of the threshold.
func (m Method) Bayesian() bool { return m >= QuestPlus && m <= PsiMarginal }

// rule is the rule of placement, and how many of the cells of a threshold are
// summed before an entropy is taken.
func (s *Spec) rule(cells int) (Place, int) {
	rule, width := s.Place, cells
	if s.Method == Psi || s.Method == QuestPlus && !s.Nuisance {
		width = 1
	} else if s.KeepSlope {
		width = len(s.Lapses)
	}
	if rule == Own {
		rule = Entropy
		switch {
		case s.Method == Quest:
			rule = Mode
		case s.Method == QuestPlus && s.Nuisance:
			rule = Variance
		}
	}
	if rule >= Variance {
		width = cells
	}
	return rule, width
}

// telling is where, in log10 units above threshold, a trial tells most about
// it: the least P (1 − P)/P′² (Taylor MM, Creelman CD 1967, J Acoust Soc Am
// 41:782), for the middle one of the slopes and of the lapse rates, to 1/1000
// of the function's spread.
func telling(s Spec) float64 {
	slope, lapse := s.Slopes[len(s.Slopes)/2], s.Lapses[len(s.Lapses)/2]
	best, least := 0.0, math.Inf(1)
	for i := -1000; i <= 1000; i++ {
		u := float64(i) / 1000
		z := exact.Exp10(u)
		rest := exact.Exp(-z)
		p := s.Guess + float64((1-s.Guess-lapse)*(1-rest))
		if v := float64(p*(1-p)) / float64(z*rest*z*rest); v < least {
			best, least = u/slope, v
		}
	}
	return best
}

// aim is the log threshold that a rule of its own kind takes the posterior for.
func (q *questPlus) aim() float64 {
	sum, best := 0.0, 0
	for t, mass := range q.mass {
		if q.rule == Median {
			if sum += mass; sum >= 0.5 {
				return q.thresholds[t]
			}
		}
		if mass > q.mass[best] {
			best = t
		}
	}
	if q.rule == Mode {
		return q.thresholds[best]
	}
	mean := 0.0
	for t, mass := range q.mass {
		mean += float64(mass * q.thresholds[t])
	}
	return mean
}

// entropyBits is the entropy of the posterior of the threshold alone.
func (q *questPlus) entropyBits() float64 {
	sum := 0.0
	for t := range q.thresholds {
		mass := 0.0
		for _, p := range q.posterior[t*q.cells : (t+1)*q.cells] {
			mass += p
		}
		sum += plogp(mass)
	}
	return sum / exact.Ln2
}

// FillModel puts in the parameters that a Bayesian method considers where none
// are given: for quest those of Watson and Pelli (1983), slope 3.5 and 1 %
// answered blindly, so that a wrong answer far above threshold has chance
// 0.01 (1 − guess); for psi slopes evenly in their logarithm (Kontsevich and
// Tyler 1999; the range is common practice, no source) and one lapse rate.
func (s *Spec) FillModel() {
	slopes, lapses := DefaultSlopes, DefaultLapses
	switch s.Method {
	case Quest:
		slopes = func() []float64 { return []float64{3.5} }
		lapses = func() []float64 { return []float64{float64(0.01 * (1 - s.Guess))} }
	case Psi, PsiMarginal:
		slopes = func() []float64 { return []float64{0.7, 1, 1.4, 2, 2.8, 4, 5.6, 8, 11, 16} }
		if s.Method == Psi {
			lapses = func() []float64 { return []float64{0.02} }
		}
	}
	if len(s.Slopes) == 0 {
		s.Slopes = slopes()
	}
	if len(s.Lapses) == 0 {
		s.Lapses = lapses()
	}
	if s.Prior == Normal && s.PriorMean == 0 {
		s.PriorMean = (s.ThresholdMin + s.ThresholdMax) / 2
		if s.Scale == Log10 {
			s.PriorMean = math.Sqrt(max(0, float64(s.ThresholdMin*s.ThresholdMax)))
		}
	}
	if s.Second != "" && len(s.Gradients) == 0 {
		s.Gradients = []float64{-1, -0.75, -0.5, -0.25, 0, 0.25, 0.5, 0.75, 1}
	}
}
