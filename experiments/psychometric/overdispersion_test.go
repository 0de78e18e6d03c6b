package psychometric

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
	"pgregory.net/rapid"
)

// blocks simulates blocks of n trials whose proportion correct has a beta distribution
// about the function, with correlation rho.
func blocks(rng *rand.Rand, m Model, count, n int, threshold, slope, rho float64) Data {
	var d Data
	for i := range count {
		x := math.Pow(10, -0.4+0.1*float64(i%8)) * threshold
		p := m.Predict(x, threshold, slope, 0.02)
		if rho > 0 {
			a := (1 - rho) / rho
			p = distuv.Beta{Alpha: p * a, Beta: (1 - p) * a, Src: rng}.Rand()
		}
		l := Level{X: x, N: n}
		for range n {
			if rng.Float64() < p {
				l.K++
			}
		}
		d = append(d, l)
	}
	return d
}

// TestBetaBinomial compares with the form in gamma functions,
// Γ(a+k)Γ(b+n−k)Γ(a+b) / (Γ(a)Γ(b)Γ(a+b+n)), and the weights with differences.
func TestBetaBinomial(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		n := float64(rapid.IntRange(1, 60).Draw(t, "n"))
		k := math.Floor(n * rapid.Float64Range(0, 1).Draw(t, "share"))
		yes := rapid.Float64Range(0.01, 0.99).Draw(t, "P")
		rho := rapid.Float64Range(0.001, 0.7).Draw(t, "rho")
		phi := rho / (1 - rho)
		a, b := yes/phi, (1-yes)/phi
		gamma := func(x float64) float64 { l, _ := math.Lgamma(x); return l }
		want := gamma(a+k) + gamma(b+n-k) + gamma(a+b) - gamma(a) - gamma(b) - gamma(a+b+n)
		compare(t, "beta-binomial", betaBinomial(n, k, yes, 1-yes, phi), want)
		const h = 1e-6
		w := weighBetaBinomial(n, k, yes, 1-yes, phi)
		up, down := weighBetaBinomial(n, k, yes+h, 1-yes-h, phi), weighBetaBinomial(n, k, yes-h, 1-yes+h, phi)
		compare(t, "score", w.score, (betaBinomial(n, k, yes+h, 1-yes-h, phi)-betaBinomial(n, k, yes-h, 1-yes+h, phi))/(2*h))
		compare(t, "observed", w.observed, -(up.score-down.score)/(2*h))
	})
}

func TestFitOverdispersed(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(4, 4))
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	wide, err := FitOverdispersed(blocks(rng, m, 64, 20, 3, 3.5, 0.15), m)
	if err != nil {
		t.Fatal(err)
	}
	if wide.P > 0.001 || !wide.Interval.Contains(0.15) || !wide.OnScale.Interval.Contains(math.Log10(3)) || !strings.Contains(wide.Explanation, "more than") {
		t.Errorf("%+v", wide)
	}
	narrow, err := FitOverdispersed(blocks(rng, m, 64, 20, 3, 3.5, 0), m)
	if err != nil {
		t.Fatal(err)
	}
	if narrow.P < 0.05 || narrow.Interval.Low != 0 || narrow.Rho > 0.03 {
		t.Errorf("%+v", narrow)
	}
	// The standard error grows by about the square root of the variance's inflation.
	if ratio := wide.OnScale.SEObserved / narrow.OnScale.SEObserved; math.Abs(ratio-math.Sqrt(wide.Inflation)) > 0.35*ratio {
		t.Errorf("standard errors %g and %g, inflation %g", wide.OnScale.SEObserved, narrow.OnScale.SEObserved, wide.Inflation)
	}
	single, err := FitOverdispersed(designs[0].data(rng, m, 8, 3.5), m)
	if err != nil {
		t.Fatal(err)
	}
	if single.Explanation == "" || single.Rho != 0 {
		t.Errorf("%+v", single)
	}
}
