package psychometric

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

func simulated(rng *rand.Rand, levels []float64, n int, m Model, threshold, slope, lapse float64) Data {
	d := make(Data, len(levels))
	for i, x := range levels {
		d[i] = Level{X: x, N: n}
		p := m.Predict(x, threshold, slope, lapse)
		for range n {
			if rng.Float64() < p {
				d[i].K++
			}
		}
	}
	return d
}

func BenchmarkFit(b *testing.B) {
	rng := rand.New(rand.NewPCG(3, 4))
	m := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	six := Data{{2, 40, 21}, {4, 40, 23}, {8, 40, 29}, {16, 40, 36}, {32, 40, 39}, {64, 40, 39}}
	track := make([]float64, 60) // levels of an adaptive track that seldom repeats one
	for i := range track {
		track[i] = math.Pow(10, 1+0.25*rng.NormFloat64())
	}
	for _, c := range []struct {
		name string
		d    Data
	}{{"SixLevels", six}, {"Track", simulated(rng, track, 1, m, 10, 3, 0.02)}} {
		for _, rule := range []LapseRule{FixedLapse(0.02), FreeLapse()} {
			for _, f := range []struct {
				name string
				fit  func(Data, Model) (*Result, error)
			}{{"Maximise", Maximise}, {"FitThreshold", FitThreshold}, {"Fit", Fit}} {
				b.Run(fmt.Sprintf("%s/free=%v/%s", c.name, rule.Free, f.name), func(b *testing.B) {
					m := m
					m.Lapse = rule
					b.ReportAllocs()
					for b.Loop() {
						if _, err := f.fit(c.d, m); err != nil {
							b.Fatal(err)
						}
					}
				})
			}
		}
	}
}
