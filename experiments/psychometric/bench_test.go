package psychometric

import (
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

func BenchmarkMaximise(b *testing.B) {
	for _, c := range []struct {
		name string
		m    Model
	}{
		{"WeibullFixedLapse", Model{Guess: 0.5, Lapse: FixedLapse(0.02)}},
		{"WeibullFreeLapse", Model{Guess: 0.5, Lapse: FreeLapse()}},
		{"GaussianFreeLapse", Model{Shape: Gaussian, Guess: 0.5, Lapse: FreeLapse()}},
	} {
		b.Run(c.name, func(b *testing.B) {
			d := Data{{2, 40, 21}, {4, 40, 23}, {8, 40, 29}, {16, 40, 36}, {32, 40, 39}, {64, 40, 39}}
			b.ReportAllocs()
			for b.Loop() {
				if _, err := Maximise(d, c.m); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(c.name+"Profile", func(b *testing.B) {
			d := Data{{2, 40, 21}, {4, 40, 23}, {8, 40, 29}, {16, 40, 36}, {32, 40, 39}, {64, 40, 39}}
			for b.Loop() {
				if _, err := Fit(d, c.m); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
