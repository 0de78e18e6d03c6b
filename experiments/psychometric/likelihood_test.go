package psychometric

import (
	"math"
	"testing"

	"pgregory.net/rapid"
)

// drawModel draws any model that passes Check.
func drawModel(t *rapid.T) Model {
	m := Model{
		Shape:   Shape(rapid.IntRange(0, 4).Draw(t, "shape")),
		Scale:   Scale(rapid.IntRange(0, 1).Draw(t, "scale")),
		Falling: rapid.Bool().Draw(t, "falling"),
		Lapse: rapid.SampledFrom([]LapseRule{FixedLapse(0), FixedLapse(0.02), FreeLapse(), {Free: true, Max: 0.04}}).
			Draw(t, "lapse"),
	}
	if m.Symmetric = rapid.Bool().Draw(t, "symmetric"); !m.Symmetric {
		m.Guess = rapid.SampledFrom([]float64{0, 0.125, 0.5}).Draw(t, "guess")
	}
	m.Criterion = rapid.SampledFrom([]Criterion{{}, AtShare(0.3), AtProportion(0.75)}).Draw(t, "criterion")
	return m
}

// TestDerivatives compares gradient, observed and expected information with central
// differences, for every kind of model and criterion.
func TestDerivatives(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		m := drawModel(t)
		m.Lapse = FreeLapse()
		d := Data{{0.5, 20, 9}, {1, 20, 11}, {2, 20, 17}, {4, 20, 19}}
		p := newProblem(d, m)
		theta := vector{
			rapid.Float64Range(-0.5, 0.5).Draw(t, "threshold"),
			rapid.Float64Range(0, 2).Draw(t, "ln slope"),
			rapid.Float64Range(0.01, 0.09).Draw(t, "lapse"),
		}
		var d0 derivatives
		p.differentiate(theta, &d0)
		for a := range 3 {
			h := []float64{2e-6, 2e-6, 3e-7}[a]
			up, down := theta, theta
			up[a] += h
			down[a] -= h
			var above, below derivatives
			p.differentiate(up, &above)
			p.differentiate(down, &below)
			compare(t, "gradient", d0.gradient[a], (p.value(up)-p.value(down))/(2*h))
			for b := range 3 {
				size := math.Abs(d0.observed[a][a]) + math.Abs(d0.observed[b][b])
				compareAt(t, "observed information", d0.observed[a][b], -(above.gradient[b]-below.gradient[b])/(2*h), size)
			}
		}
		// With responses at their expectation the observed information is the expected one.
		for i := range p.z {
			p.k[i] = p.n[i] * p.predict(theta, p.z[i])
		}
		p.differentiate(theta, &d0)
		for a := range 3 {
			compare(t, "score at expectation", d0.gradient[a], 0)
			for b := range 3 {
				compare(t, "expected information", d0.expected[a][b], d0.observed[a][b])
			}
		}
	})
}

func compare(t *rapid.T, what string, got, want float64) {
	compareAt(t, what, got, want, math.Abs(want))
}

// compareAt allows for rounding and truncation of differences of numbers as large as size.
func compareAt(t *rapid.T, what string, got, want, size float64) {
	if math.Abs(got-want) > 5e-6*math.Max(1, size) {
		t.Fatalf("%s: %.10g, by differences %.10g", what, got, want)
	}
}

// TestShapes checks limits, the quantile as the inverse, and the derivatives by
// central differences.
func TestShapes(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		s := Shape(rapid.IntRange(0, 4).Draw(t, "shape"))
		u := rapid.Float64Range(-4, 1).Draw(t, "u")
		v := s.at(u)
		const h = 1e-6
		compare(t, "F + (1 − F)", v.f+v.c, 1)
		compare(t, "F′", v.d, (s.At(u+h)-s.At(u-h))/(2*h))
		compare(t, "F″", v.e, (s.at(u+h).d-s.at(u-h).d)/(2*h))
		compare(t, "quantile", s.Quantile(v.f), u)
		for _, end := range []float64{-40, 40, math.Inf(-1), math.Inf(1)} {
			v := s.at(end)
			compare(t, "limit", v.f, math.Max(0, math.Copysign(1, end)))
			compare(t, "derivative at the limit", v.d, 0)
			if math.IsNaN(v.e) {
				t.Fatal("F″ is NaN")
			}
		}
	})
}
