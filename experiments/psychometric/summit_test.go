package psychometric

import (
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"
)

// exhaustive is the best of climbs from a dense grid of starts and of both limits.
func exhaustive(p *problem) float64 {
	best := p.constantLimit()
	slopes := []float64{p.low[iSlope]}
	if p.free[iSlope] {
		best = math.Max(best, p.stepLimit().value)
		slopes = nil
		for spread := 0.02; spread < 8; spread *= 1.7 {
			slopes = append(slopes, math.Log(p.model.Shape.width()/spread))
		}
	}
	for _, s := range slopes {
		for t := -1.0; t <= 1; t += 0.1 {
			for _, share := range []float64{0.05, 0.7} {
				lapse := p.low[iLapse] + share*(p.high[iLapse]-p.low[iLapse])
				best = math.Max(best, p.climb(vector{t, s, lapse}).value)
			}
		}
	}
	return best
}

// randomProblem draws a model and data as experiments give them: constant stimuli with
// few or many trials, and adaptive tracks with many levels.
func randomProblem(rng *rand.Rand) (Data, Model) {
	m := Model{Shape: Shape(rng.IntN(5)), Guess: []float64{0, 0.125, 0.25, 0.5, 0.5, 0.5}[rng.IntN(6)]}
	m.Lapse = []LapseRule{FixedLapse(0), FixedLapse(0.02), FreeLapse()}[rng.IntN(3)]
	slope := m.Shape.width() / (0.05 + rng.Float64()*2)
	threshold := math.Pow(10, -0.7+1.4*rng.Float64())
	lapse := 0.05 * rng.Float64()
	levels, n := make([]float64, 3+rng.IntN(7)), 2+rng.IntN(40)
	for i := range levels {
		levels[i] = math.Pow(10, -0.5+float64(i)/float64(len(levels)-1))
	}
	if rng.IntN(3) == 0 { // a track about the threshold
		levels, n = make([]float64, 20+rng.IntN(80)), 1
		for i := range levels {
			levels[i] = threshold * math.Pow(10, math.Round(20*0.3*rng.NormFloat64())/20)
		}
	}
	return simulated(rng, levels, n, m, threshold, slope, lapse).Merge(), m
}

// TestSummitIsTheGlobalMaximum looks for data for which a dense search finds a
// likelihood that is higher by more than the tolerance of 1e-6. SUMMITS and SEED ask for
// more data sets, and others.
func TestSummitIsTheGlobalMaximum(t *testing.T) {
	t.Parallel()
	count := 150
	if s := os.Getenv("SUMMITS"); s != "" {
		count, _ = strconv.Atoi(s)
	}
	seed, _ := strconv.Atoi(os.Getenv("SEED"))
	rng := rand.New(rand.NewPCG(uint64(seed), 2))
	missed := 0
	for range count {
		d, m := randomProblem(rng)
		p := newProblem(d, m)
		if from, to := p.finite(); to-from < 2 {
			continue
		}
		s := p.summit()
		if best := exhaustive(newProblem(d, m)); best > s.value+1e-6 {
			missed++
			t.Logf("missed by %.3g: outcome %d, L %.6f, step %.6f, constant %.6f, converged %v theta %v: %v %+v", best-s.value, s.outcome, s.value, s.step.value, s.constant, s.converged, s.theta, d, m)
		}
	}
	if missed > 0 {
		t.Errorf("%d of %d maxima missed", missed, count)
	}
}
