package quality

import (
	"fmt"
	"math"

	"distal/experiments/psychometric"
)

// prior of the posterior of a threshold where answers are right or wrong: Weibull
// slopes log-normal about 3.5 with a standard deviation of 0.5 of the natural
// logarithm, nine in ten from 1.5 to 8; lapse rates Beta(2, 98), mean 0.02 (common
// practice, no source). Adaptive procedures place trials where they tell about the
// threshold and hardly about the slope: profile-likelihood intervals then hold the true
// threshold in 87 to 90 % of runs of 70 trials instead of 95, because no slope is too
// steep for them; these hold it in 92 to 98 % for slopes from 2 to 5, with a smaller error.
var prior = psychometric.Prior{SlopeMedian: 3.5, SlopeFactor: math.Exp(0.5), LapseA: 2, LapseB: 98}

// Posterior gives threshold and 95 % credible interval of data under a model, as
// the thresholds of a run have them.
func Posterior(d psychometric.Data, m psychometric.Model) (psychometric.Summary, psychometric.Summary, error) {
	p, err := psychometric.FitPosterior(d, m, prior)
	if err != nil {
		return psychometric.Summary{}, psychometric.Summary{}, err
	}
	return p.Threshold, p.OnScale, nil
}

// settle takes threshold and interval from the posterior. The verdict on the data
// stays that of the maximum-likelihood fit.
func (t *Threshold) settle(d psychometric.Data) {
	m := t.Fit.Model
	threshold, onScale, err := Posterior(d, m)
	if err != nil {
		t.Known, t.Explanation = false, err.Error()
		return
	}
	t.Threshold, t.Low, t.High = threshold.Mean, threshold.Interval.Low, threshold.Interval.High
	t.OnScale, t.SE = onScale.Mean, onScale.SD
	if threshold.Interval.OpenLow {
		t.Low = math.Inf(-1)
		if m.Scale == psychometric.Log10 {
			t.Low = 0
		}
	}
	if threshold.Interval.OpenHigh {
		t.High = math.Inf(1)
	}
	between := fmt.Sprintf("The threshold lies between %.4g and %.4g with a probability of 95 %%.", threshold.Interval.Low, threshold.Interval.High)
	switch {
	case threshold.Interval.OpenLow || threshold.Interval.OpenHigh:
		t.Explanation = "The data do not limit the threshold on both sides. " + t.Fit.Explanation
	case t.Fit.Status == psychometric.OK || t.Fit.Status == psychometric.Open:
		t.Explanation = between
	case t.Fit.Status == psychometric.Separable:
		t.Explanation = between + " No slope is too steep for these data; how steep it can be is taken from what is usual."
	default:
		t.Explanation = between + " By maximum likelihood: " + t.Fit.Explanation
	}
}
