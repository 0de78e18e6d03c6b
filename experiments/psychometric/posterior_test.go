package psychometric

import (
	"math"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mathext"
)

// trigamma is ψ′ by differences of digamma.
func trigamma(x float64) float64 {
	const h = 1e-4
	return (mathext.Digamma(x+h) - mathext.Digamma(x-h)) / (2 * h)
}

// TestPosteriorExact: for one level, a logistic function of known slope and no guessing
// or lapses, u = ln(F/(1−F)) at the level has the distribution of the logit of a
// beta(k, n−k) variable, whose moments are digamma and trigamma functions.
func TestPosteriorExact(t *testing.T) {
	t.Parallel()
	const n, k, slope, level = 30, 22, 2.5, 3.0
	for _, falling := range []bool{false, true} {
		m := Model{Shape: Logistic, Scale: Linear, Slope: slope, Falling: falling}
		post, err := FitPosterior(Data{{level, n, k}}, m, Prior{ThresholdLow: -20, ThresholdHigh: 20})
		if err != nil {
			t.Fatal(err)
		}
		u := mathext.Digamma(k) - mathext.Digamma(n-k)
		mean, sd := level-m.sign()*u/slope, math.Sqrt(trigamma(k)+trigamma(n-k))/slope
		beta, _ := math.Lgamma(k)
		other, _ := math.Lgamma(n - k)
		both, _ := math.Lgamma(n)
		evidence := beta + other - both - math.Log(slope*40)
		for _, c := range []struct {
			what      string
			got, want float64
		}{{"mean", post.Threshold.Mean, mean}, {"sd", post.Threshold.SD, sd}, {"evidence", post.LogEvidence, evidence}} {
			if math.Abs(c.got-c.want) > 1e-5 {
				t.Errorf("falling %v, %s: %.7f, exactly %.7f", falling, c.what, c.got, c.want)
			}
		}
		low, high := 0.5645997, 0.8726599 // R 4.2.2: qbeta(c(.025, .975), 22, 8)
		logit := func(p float64) float64 { return level - m.sign()*math.Log(p/(1-p))/slope }
		a, b := math.Min(logit(low), logit(high)), math.Max(logit(low), logit(high))
		if math.Abs(post.Threshold.Interval.Low-a) > 2e-3 || math.Abs(post.Threshold.Interval.High-b) > 2e-3 {
			t.Errorf("falling %v: %+v, exactly %v to %v", falling, post.Threshold.Interval, a, b)
		}
	}
}

// TestPosteriorNearLikelihood: with many trials the posterior is the likelihood.
func TestPosteriorNearLikelihood(t *testing.T) {
	t.Parallel()
	var d Data
	for _, l := range setA {
		d = append(d, Level{l.X, 50 * l.N, 50 * l.K})
	}
	m := Model{Guess: 0.5, Lapse: FreeLapse()}
	r, err := Fit(d, m)
	if err != nil {
		t.Fatal(err)
	}
	post, err := FitPosterior(d, m, Prior{})
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(post.OnScale.Mean-r.OnScale.Value) > 0.1*r.OnScale.SE || math.Abs(post.OnScale.SD/r.OnScale.SE-1) > 0.03 {
		t.Errorf("threshold %+v, fit %+v", post.OnScale, r.OnScale)
	}
	if math.Abs(post.Slope.Mean-r.Slope.Value) > 0.2*r.Slope.SE || math.Abs(post.Slope.SD/r.Slope.SE-1) > 0.05 {
		t.Errorf("slope %+v, fit %+v", post.Slope, r.Slope)
	}
	if math.Abs(post.Lapse.Mean-r.Lapse.Value) > 0.2*r.Lapse.SE {
		t.Errorf("lapse %+v, fit %+v", post.Lapse, r.Lapse)
	}
	sum := 0.0
	for i := 1; i < len(post.Axis); i++ {
		sum += (post.Density[i] + post.Density[i-1]) / 2 * (math.Log10(post.Axis[i]) - math.Log10(post.Axis[i-1]))
	}
	if math.Abs(sum-1) > 1e-9 {
		t.Errorf("the marginal integrates to %g", sum)
	}
}

// TestPosteriorOpens: data that set no limit leave the interval open, whatever the prior.
func TestPosteriorOpens(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		name      string
		d         Data
		low, high bool
	}{
		{"AllCorrect", Data{{1, 20, 20}, {2, 20, 20}, {4, 20, 20}}, true, false},
		{"Guessing", Data{{1, 100, 50}, {2, 100, 50}, {4, 100, 50}}, false, true},
		{"Nothing", nil, true, true},
		{"Good", setA, false, false},
	} {
		post, err := FitPosterior(c.d, Model{Guess: 0.5, Lapse: FixedLapse(0.02)}, Prior{})
		if err != nil {
			t.Fatal(err)
		}
		if i := post.Threshold.Interval; i.OpenLow != c.low || i.OpenHigh != c.high {
			t.Errorf("%s: %+v", c.name, i)
		}
	}
}

func TestPosteriorRefusals(t *testing.T) {
	t.Parallel()
	for says, prior := range map[string]Prior{
		"threshold": {ThresholdLow: 3, ThresholdHigh: 2},
		"slope":     {SlopeFactor: 0.5},
		"lapse":     {LapseA: 1},
	} {
		if _, err := FitPosterior(setA, Model{Guess: 0.5}, prior); err == nil || !strings.Contains(err.Error(), says) {
			t.Errorf("%s: got %v", says, err)
		}
	}
}
