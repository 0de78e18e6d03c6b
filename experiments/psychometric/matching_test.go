package psychometric

import (
	"math"
	"math/rand/v2"
	"testing"
)

// TestMatchFromJudgements: with many trials PSE and JND are those of the simulated function,
// for a Gaussian 0.6745 standard deviations.
func TestMatchFromJudgements(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(3, 9))
	m := Model{Shape: Gaussian, Symmetric: true, Lapse: FreeLapse()}
	d := simulated(rng, []float64{6, 7, 8, 9, 10, 11, 12, 14}, 2000, m, 9.2, 1/0.06, 0.02)
	match, err := MatchFromJudgements(d, m, 10)
	if err != nil {
		t.Fatal(err)
	}
	if !match.PSE.Interval.Contains(9.2) || match.PSE.SE > 0.05 || !match.JND.Interval.Contains(0.6744898*0.06) {
		t.Errorf("%+v", match)
	}
	if math.Abs(match.Factor-math.Pow(10, match.JND.Value)) > 1e-12 || math.Abs(match.ConstantError-math.Log10(match.PSE.Value/10)) > 1e-9 {
		t.Errorf("%+v", match)
	}
	step, err := MatchFromJudgements(Data{{8, 20, 0}, {9, 20, 0}, {11, 20, 20}, {12, 20, 20}}, m, 10)
	if err != nil || step.JND.Valid || !step.JND.Interval.OpenLow || step.JND.Interval.OpenHigh || step.PSE.Value < 9 || step.PSE.Value > 11 {
		t.Errorf("%+v, %v", step, err)
	}
	if _, err := MatchFromJudgements(d, m, -1); err == nil {
		t.Error("a standard of −1 passes on a log10 scale")
	}
}

// TestMatchFromSettings: R 4.2.2, x <- c(9.1, 10.4, 9.8, 8.7, 9.5, 10.1); t.test(x)$conf.int,
// and 0.6744898*sd(x)*sqrt(5/qchisq(c(.975, .025), 5)).
func TestMatchFromSettings(t *testing.T) {
	t.Parallel()
	match, err := MatchFromSettings([]float64{9.1, 10.4, 9.8, 8.7, 9.5, 10.1}, Linear, 10, 0)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range [][2]float64{
		{match.PSE.Value, 9.6}, {match.PSE.Interval.Low, 8.936278624}, {match.PSE.Interval.High, 10.263721376}, {match.ConstantError, -0.4},
		{match.JND.Value, 0.4265847738}, {match.JND.Interval.Low, 0.2662776295}, {match.JND.Interval.High, 1.0462477836},
	} {
		if math.Abs(c[0]-c[1]) > 1e-6 {
			t.Errorf("got %.8f, R has %.8f", c[0], c[1])
		}
	}
	log, err := MatchFromSettings([]float64{5, 20}, Log10, 10, 0)
	if err != nil || math.Abs(log.PSE.Value-10) > 1e-9 || log.ConstantError > 1e-12 || log.Factor <= 1 {
		t.Errorf("%+v, %v", log, err)
	}
	for _, bad := range [][]float64{{1}, {1, 0}, {1, math.NaN()}} {
		if _, err := MatchFromSettings(bad, Log10, 10, 0); err == nil {
			t.Errorf("%v passes", bad)
		}
	}
}
