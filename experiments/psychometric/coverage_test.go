package psychometric

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// staircase simulates 80 trials of a 3-down 1-up track that starts far above threshold.
func staircase(rng *rand.Rand, m Model, trials int, slope float64) Data {
	x, step, run, reversals, last := math.Log10(0.4), 0.2, 0, 0, 0
	var d Data
	for range trials {
		l := Level{X: math.Pow(10, math.Round(x*100)/100), N: 1}
		direction := 0
		if rng.Float64() < m.Predict(l.X, 0.1, slope, 0.02) {
			l.K = 1
			if run++; run == 3 {
				run, direction = 0, -1
			}
		} else {
			run, direction = 0, 1
		}
		d = append(d, l)
		if direction != 0 && direction == -last {
			if reversals++; reversals%2 == 0 && step > 0.05 {
				step /= 2
			}
		}
		if direction != 0 {
			last = direction
			x += step * float64(direction)
		}
	}
	return d.Merge()
}

// designs are ways to place trials about a threshold of 0.1.
var designs = []struct {
	name string
	data func(rng *rand.Rand, m Model, trials int, slope float64) Data
}{
	{"constant", func(rng *rand.Rand, m Model, trials int, slope float64) Data {
		levels := make([]float64, 8)
		for i := range levels {
			levels[i] = 0.1 * math.Pow(10, -0.4+0.1*float64(i))
		}
		return simulated(rng, levels, trials/8, m, 0.1, slope, 0.02)
	}},
	{"scattered", func(rng *rand.Rand, m Model, trials int, slope float64) Data {
		levels := make([]float64, trials)
		for i := range levels {
			levels[i] = 0.1 * math.Pow(10, math.Round(20*(0.06+0.1*rng.NormFloat64()))/20)
		}
		return simulated(rng, levels, 1, m, 0.1, slope, 0.02).Merge()
	}},
	{"staircase", staircase},
}

// BenchmarkCoverage is a drill: run with -benchtime 2000x it reports how often the nominal
// 95% interval of the threshold covers it, steadied and plain, for a two-alternative
// Weibull observer of lapse rate 0.02 with 80 trials.
func BenchmarkCoverage(b *testing.B) {
	for _, slope := range []float64{1.5, 3.5, 8} {
		for _, rule := range []LapseRule{FixedLapse(0.02), FreeLapse()} {
			for _, design := range designs {
				b.Run(fmt.Sprintf("slope=%g/free=%v/%s", slope, rule.Free, design.name), func(b *testing.B) {
					rng := rand.New(rand.NewPCG(80, uint64(slope*10)))
					var steadied, plain int
					for b.Loop() {
						m := Model{Guess: 0.5, Lapse: rule}
						d := design.data(rng, m, 80, slope)
						steadied += covers(b, d, m)
						m.PlainProfile = true
						plain += covers(b, d, m)
					}
					b.ReportMetric(100*float64(steadied)/float64(b.N), "%covered")
					b.ReportMetric(100*float64(plain)/float64(b.N), "%plain")
				})
			}
		}
	}
}

func covers(tb testing.TB, d Data, m Model) int {
	tb.Helper()
	r, err := FitThreshold(d, m)
	if err != nil {
		tb.Fatal(err)
	}
	if r.Threshold.Interval.Contains(0.1) {
		return 1
	}
	return 0
}

// TestCoverage holds the intervals to a band about 95% that 400 simulated runs can tell:
// three standard errors of a true coverage of 93 to 97%.
func TestCoverage(t *testing.T) {
	t.Parallel()
	const runs = 400
	rng := rand.New(rand.NewPCG(5, 6))
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	count := 0
	for range runs {
		count += covers(t, designs[0].data(rng, m, 80, 3.5), m)
	}
	if share := float64(count) / runs; share < 0.93-3*0.0128 || share > 0.97+3*0.0085 {
		t.Errorf("%.3f of the intervals cover the threshold", share)
	}
}
