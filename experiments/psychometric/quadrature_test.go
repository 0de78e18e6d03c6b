package psychometric

import (
	"math"
	"testing"
)

// TestQuadratureMoments: without data the posterior is the prior, whose moments and
// integral are known; with data they are those of a dense grid.
func TestQuadratureMoments(t *testing.T) {
	t.Parallel()
	rule := newQuadrature()
	prior := [2]normal{{0.2, 1 / 0.09}, {1.1, 1 / 0.25}}
	p := newProblem(setA, Model{Guess: 0.5, Lapse: FixedLapse(0.02)})
	p.prior = prior
	empty := *p
	empty.n, empty.k = make([]float64, len(p.n)), make([]float64, len(p.k))
	mean, cov, log := rule.moments(&empty, empty.climb(vector{0, 1, 0}))
	for _, c := range [][2]float64{{mean[0], 0.2}, {mean[1], 1.1}, {cov[0][0], 0.09}, {cov[1][1], 0.25}, {cov[0][1], 0}, {log, math.Log(2 * math.Pi * 0.3 * 0.5)}} {
		if math.Abs(c[0]-c[1]) > 1e-9 {
			t.Errorf("got %g, the prior has %g", c[0], c[1])
		}
	}
	mean, cov, log = rule.moments(p, p.climb(vector{0, 1, 0.02}))
	grid := accumulator{top: p.value(mean)}
	const h = 0.01
	for a := -1.0; a < 1.2; a += h {
		for b := -0.5; b < 3; b += h {
			theta := vector{a, b, 0.02}
			grid.add(theta, p.value(theta), h*h)
		}
	}
	wantMean, wantCov, wantLog := grid.moments()
	for _, c := range [][2]float64{{mean[0], wantMean[0]}, {mean[1], wantMean[1]}, {cov[0][0], wantCov[0][0]}, {cov[1][1], wantCov[1][1]}, {log, wantLog}} {
		if math.Abs(c[0]-c[1]) > 2e-3*math.Max(0.1, math.Abs(c[1])) {
			t.Errorf("got %g, a dense grid has %g", c[0], c[1])
		}
	}
}
