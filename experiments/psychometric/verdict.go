package psychometric

import (
	"fmt"
	"math"
)

// Status is the verdict on a fit.
type Status int

// The verdicts, from best to worst understood.
const (
	// OK: threshold and interval are determined by the data.
	OK Status = iota
	// Open: there is an estimate, but the interval of the threshold is open on a side.
	Open
	// Outside: the threshold lies beyond the levels that were tested.
	Outside
	// Separable: the best function is a step. The threshold lies between two levels (or at
	// one), and the slope has a lower limit but no value.
	Separable
	// Flat: the data do not show that performance changes with the level in the expected direction.
	Flat
	// AllCorrect: every response was correct, so the threshold has an upper limit only
	// (a lower limit only where performance falls with the level).
	AllCorrect
	// AllWrong: every response was wrong.
	AllWrong
	// TooFew: not enough trials or levels for the parameters asked for.
	TooFew
)

var statusNames = []string{"ok", "open", "outside", "separable", "flat", "all_correct", "all_wrong", "too_few"}

// String is the name used in files.
func (s Status) String() string {
	if s < 0 || int(s) >= len(statusNames) {
		return fmt.Sprintf("status %d", int(s))
	}
	return statusNames[s]
}

// MarshalText writes the name.
func (s Status) MarshalText() ([]byte, error) { return []byte(s.String()), nil }

// tooFew handles data that no search is worth.
func (r *Result) tooFew(p *problem) bool {
	from, to := p.finite()
	switch {
	case r.Trials == 0:
		r.Explanation = "There are no trials."
	case to == from:
		r.Explanation = "All trials are at level 0, which a log10 scale cannot place."
	case to-from == 1 && p.free[iSlope]:
		r.Explanation = "All trials are at one level: threshold and slope cannot be told apart. Test at least two levels, or fix the slope."
	case r.Trials <= r.Parameters:
		r.Explanation = fmt.Sprintf("%d trials cannot determine %d parameters.", r.Trials, r.Parameters)
	default:
		return false
	}
	r.Status = TooFew
	if r.Trials > 0 {
		n, k := p.totals()
		l := p.low[iLapse]
		r.curve = curve{constant: true, p: clamp(k/n, p.model.bottom(l), p.model.top(l))}
		r.LogLikelihood = p.constantLimit()
		r.Constant = r.LogLikelihood
		r.Saturated = p.saturated()
		r.Deviance = math.Max(2*(r.Saturated-r.LogLikelihood), 0)
	}
	return true
}

// flatEvidence is the likelihood-ratio statistic below which a rise is not shown: the 5%
// point of a one-sided test with one degree of freedom (the slope cannot be negative).
const flatEvidence = 2.706

// judge sets Status, Explanation and Notes.
func (r *Result) judge(p *problem, s *summit, wanted profiling) {
	n, k := p.totals()
	evidence := 2 * (s.value - s.constant)
	switch {
	case r.Model.Symmetric && (k == n || k == 0):
		r.Status = AllWrong
		which := "the other one"
		if k == n {
			r.Status, which = AllCorrect, "the one counted"
		}
		r.Explanation = "Every response was the same, " + which + ". The point of balance lies beyond the levels tested: " + r.limits() + " Test levels on its other side."
	case k == n:
		r.Status = AllCorrect
		r.Explanation = "Every response was correct. The threshold is easier than the levels tested: " + r.limits() + " Test harder levels."
	case k == 0:
		r.Status = AllWrong
		r.Explanation = "Every response was wrong. " + r.belowGuess() + "The threshold is harder than the levels tested: " + r.limits() + " Test easier levels."
	case s.outcome == levelLike:
		r.Status = Flat
		r.Explanation = fmt.Sprintf("Performance does not %s with the level: %.3g of all responses were correct, and a constant describes the data as well as any function. There is no threshold; %s", r.direction(), k/n, r.limits())
	case p.free[iSlope] && evidence < flatEvidence:
		r.Status = Flat
		r.Explanation = fmt.Sprintf("The data do not show that performance changes with the level (likelihood ratio %.2f, a rise needs %.2f). The threshold is a guess; %s", evidence, flatEvidence, r.limits())
	case s.outcome == stepLike:
		r.Status = Separable
		r.Explanation = r.stepWords(p, s)
	case p.free[iSlope] && r.outside():
		r.Status = Outside
		r.Explanation = fmt.Sprintf("The threshold lies beyond the levels tested (%s); it is an extrapolation along the fitted function. %s", r.tested(), capital(r.limits()))
	case wanted != profileNone && !r.Threshold.Interval.Closed():
		r.Status = Open
		r.Explanation = "There is an estimate of the threshold, but the data do not limit it on both sides: " + r.limits()
	case wanted == profileNone:
		r.Status = OK
		r.Explanation = "The function has a maximum of likelihood within the levels tested."
	default:
		r.Status = OK
		r.Explanation = "The data determine the threshold: " + r.limits()
	}
	r.note(p, s, wanted)
}

func (r *Result) direction() string {
	if r.Model.Falling {
		return "fall"
	}
	return "rise"
}

func (r *Result) belowGuess() string {
	if r.Model.Guess == 0 {
		return ""
	}
	return fmt.Sprintf("Guessing alone would give %.3g correct: check how responses are coded. ", r.Model.Guess)
}

// limits is the interval of the threshold in words.
func (r *Result) limits() string {
	i := r.Threshold.Interval
	with := fmt.Sprintf("(%g%% confidence).", 100*r.Model.confidence())
	switch {
	case i.OpenLow && i.OpenHigh:
		return "no limit can be set on it."
	case i.OpenLow:
		return fmt.Sprintf("it is below %.4g %s", i.High, with)
	case i.OpenHigh:
		return fmt.Sprintf("it is above %.4g %s", i.Low, with)
	}
	return fmt.Sprintf("it is between %.4g and %.4g %s", i.Low, i.High, with)
}

func capital(s string) string { return string(s[0]-'a'+'A') + s[1:] }

func (r *Result) outside() bool {
	t := r.Threshold.Value
	return t < r.Data[0].X || t > r.Data[len(r.Data)-1].X
}

// tested is the range of levels in words.
func (r *Result) tested() string {
	return fmt.Sprintf("%.4g to %.4g", r.Data[0].X, r.Data[len(r.Data)-1].X)
}

func (r *Result) stepWords(p *problem, s *summit) string {
	where := fmt.Sprintf("at level %.4g", r.Threshold.Value)
	if s.step.within {
		a, b := p.scaled(s.step.between[0]), p.scaled(s.step.between[1])
		where = fmt.Sprintf("between levels %.4g and %.4g", r.Model.offScale(min(a, b)), r.Model.offScale(max(a, b)))
	}
	return fmt.Sprintf("The best function is a step %s: no slope is too steep for these data, so the slope has no value but a lower limit. The threshold is the middle of what the step allows; %s", where, r.limits())
}

// note adds remarks that do not change the verdict.
func (r *Result) note(p *problem, s *summit, wanted profiling) {
	if s.outcome == interior && !s.converged {
		r.Notes = append(r.Notes, "The search for the maximum did not settle; treat the estimates with care.")
	}
	if p.free[iLapse] && r.Lapse.Valid {
		switch {
		case r.Lapse.Value >= p.high[iLapse]:
			r.Notes = append(r.Notes, fmt.Sprintf("The lapse rate is at its upper bound of %g: the observer may lapse more often, or the function may be shallower.", p.high[iLapse]))
		case r.Lapse.Value <= p.low[iLapse]:
			r.Notes = append(r.Notes, "The lapse rate is at 0; standard errors take it as known.")
		}
	}
	if wanted == profileAll && r.Slope.Valid && p.free[iSlope] && r.Slope.Interval.OpenHigh {
		r.Notes = append(r.Notes, "The slope has no upper limit.")
	}
	if wanted == profileAll && r.Slope.Valid && p.free[iSlope] && r.Slope.Interval.OpenLow {
		r.Notes = append(r.Notes, "The slope has no lower limit.")
	}
}
