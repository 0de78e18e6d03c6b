package psychometric

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// TestSummariseGroup: R 4.2.2, restricted likelihood by optimize(tol = 1e-14), t and χ²
// quantiles by qt and pchisq.
func TestSummariseGroup(t *testing.T) {
	t.Parallel()
	y := []float64{-1.10, -0.82, -0.95, -1.31, -0.60, -1.02, -0.88, -1.25, -5}
	se := []float64{.05, .08, .06, .10, .12, .07, .05, .09, 0}
	g, err := SummariseGroup(y, se, 0)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		what      string
		got, want float64
	}{
		{"tau", g.Tau, 0.1984873288},
		{"mean", g.Mean.Value, -0.9942078466},
		{"se", g.Mean.SE, 0.0786314291},
		{"low", g.Mean.Interval.Low, -1.1801416308},
		{"high", g.Mean.Interval.High, -0.8082740624},
		{"Q", g.Q, 43.95467290},
		{"p of Q", g.QP, 2.180712753e-07},
		{"DerSimonian–Laird tau", g.TauDL, 0.1598617614},
		{"prediction low", g.Prediction.Low, -1.5138645548},
		{"prediction high", g.Prediction.High, -0.4745511384},
		{"I²", g.I2, 0.8905736008},
	} {
		if math.Abs(c.got-c.want) > 1e-6*math.Max(1, math.Abs(c.want)) {
			t.Errorf("%s: %.9g, R has %.9g", c.what, c.got, c.want)
		}
	}
	if g.Count != 8 || g.Left != 1 {
		t.Errorf("%d units, %d left out", g.Count, g.Left)
	}
	if _, err := SummariseGroup([]float64{1, 2}, []float64{0.1, 0}, 0); !errors.Is(err, ErrTooFewUnits) {
		t.Errorf("got %v", err)
	}
	if _, err := SummariseGroup(y, se, 2); err == nil {
		t.Error("a confidence of 2 passes")
	}
}

// TestRestrictedML checks the estimating equation of Viechtbauer (2005, eq. 15),
// τ² = Σ w² ((y − μ)² − v) / Σ w² + 1/Σ w, wherever τ² is above 0.
func TestRestrictedML(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 20).Draw(t, "n")
		u := units{
			y: rapid.SliceOfN(rapid.Float64Range(-2, 2), n, n).Draw(t, "y"),
			v: rapid.SliceOfN(rapid.Float64Range(0.001, 0.5), n, n).Draw(t, "v"),
		}
		tau2 := u.restrictedML()
		mean, weight := u.mean(tau2)
		above, squares := 0.0, 0.0
		for i := range u.y {
			w := 1 / (u.v[i] + tau2)
			above += w * w * ((u.y[i]-mean)*(u.y[i]-mean) - u.v[i])
			squares += w * w
		}
		right := above/squares + 1/weight
		if tau2 > 1e-6 && math.Abs(tau2-right) > 1e-4*(1+tau2) || tau2 <= 1e-6 && right > 1e-3 {
			t.Fatalf("τ² = %g, the equation gives %g", tau2, right)
		}
	})
}

// manyRuns simulates runs of one study.
func manyRuns(rng *rand.Rand, m Model, count, trials int, sdLog float64) (runs []Condition, truth []float64) {
	for i := range count {
		threshold := 0.1 * math.Pow(10, sdLog*rng.NormFloat64())
		slope := 3.5 * math.Exp(0.2*rng.NormFloat64())
		levels := make([]float64, 8)
		for j := range levels {
			levels[j] = 0.1 * math.Pow(10, -0.6+0.16*float64(j))
		}
		d := simulated(rng, levels, trials/8, m, threshold, slope, 0.02)
		runs = append(runs, Condition{fmt.Sprint("run ", i+1), d})
		truth = append(truth, math.Log10(threshold))
	}
	return runs, truth
}

// TestHierarchy recovers centre and spread of simulated thresholds, covers the true
// thresholds, and is nearer to them than the single fits.
func TestHierarchy(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(40, 41))
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	runs, truth := manyRuns(rng, m, 60, 64, 0.15)
	runs = append(runs, Condition{"all correct", Data{{0.1, 30, 30}, {0.2, 30, 30}}})
	truth = append(truth, math.NaN())
	h, err := FitHierarchy(runs, m)
	if err != nil {
		t.Fatal(err)
	}
	if !h.Settled || !h.OnScale.Interval.Contains(-1) || math.Abs(h.ThresholdSD-0.15) > 0.045 || math.Abs(h.Slope/3.5-1) > 0.2 {
		t.Errorf("settled %v after %d, threshold %+v, sd %.3f, slope %.2f × %.2f", h.Settled, h.Iterations, h.OnScale, h.ThresholdSD, h.Slope, h.SlopeFactor)
	}
	covered, better, single := 0, 0.0, 0.0
	for i, r := range h.Runs[:60] {
		if r.OnScale.Interval.Contains(truth[i]) {
			covered++
		}
		if r.Single.Valid {
			better += math.Pow(r.OnScale.Value-truth[i], 2)
			single += math.Pow(math.Log10(r.Single.Value)-truth[i], 2)
		}
		if r.Shrinkage <= 0 || r.Shrinkage >= 1 {
			t.Errorf("%s: shrinkage %g", r.Name, r.Shrinkage)
		}
	}
	if covered < 52 {
		t.Errorf("%d of 60 intervals cover", covered)
	}
	if better >= single {
		t.Errorf("squared error %g with the group, %g alone", better, single)
	}
	last := h.Runs[60]
	if last.SingleStatus != AllCorrect || !last.Threshold.Valid || last.Threshold.Value >= 0.1 || last.Threshold.Value < 0.02 || !strings.Contains(h.Explanation, "lean on the others") {
		t.Errorf("%+v: %s", last, h.Explanation)
	}
}

// TestHierarchyLimits: rich data are not shrunk, and equal runs are pooled.
func TestHierarchyLimits(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(42, 43))
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	runs, _ := manyRuns(rng, m, 8, 40000, 0.2)
	h, err := FitHierarchy(runs, m)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range h.Runs {
		if r.Shrinkage > 0.01 || math.Abs(r.Threshold.Value/r.Single.Value-1) > 0.01 {
			t.Errorf("%s: %g beside %g, shrinkage %g", r.Name, r.Threshold.Value, r.Single.Value, r.Shrinkage)
		}
	}
	d := Data{{0.05, 40, 22}, {0.1, 40, 33}, {0.2, 40, 39}}
	equal, err := FitHierarchy([]Condition{{"a", d}, {"b", d}, {"c", d}}, m)
	if err != nil {
		t.Fatal(err)
	}
	one, err := Maximise(d, m)
	if err != nil {
		t.Fatal(err)
	}
	if equal.ThresholdSD > 0.05 || math.Abs(equal.Threshold.Value/one.Threshold.Value-1) > 0.02 {
		t.Errorf("threshold %g ± %g, single %g", equal.Threshold.Value, equal.ThresholdSD, one.Threshold.Value)
	}
	if _, err := FitHierarchy(runs[:1], m); err == nil {
		t.Error("one run passes")
	}
}
