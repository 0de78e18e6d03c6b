package exact_test

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/exact"
)

// ulps is the distance between got and want in units in the last place of want.
func ulps(got, want float64) float64 {
	if got == want {
		return 0
	}
	return math.Abs(got-want) / (math.Nextafter(math.Abs(want), math.Inf(1)) - math.Abs(want))
}

// Package math of Go is the reference: its results are within 1 unit in the
// last place of the true value, so 2 units here bound our own error by 3.
func TestAgreesWithMath(t *testing.T) {
	t.Parallel()
	tests := []struct {
		name      string
		low, high float64
		got, want func(float64) float64
		tolerance float64 // units in the last place
	}{
		{"Exp", -700, 700, exact.Exp, math.Exp, 2},
		{"Expm1", -2, 2, exact.Expm1, math.Expm1, 3},
		{"Log", 1e-300, 1e6, exact.Log, math.Log, 2},
		{"LogNearOne", 0.5, 2, exact.Log, math.Log, 2},
		{"Log10", 1e-6, 1e6, exact.Log10, math.Log10, 3},
		{"Log1p", -0.5, 3, exact.Log1p, math.Log1p, 3},
		{"Tan", 1e-3, 1, exact.Tan, math.Tan, 3}, // below 1e-7 math.Tan gives x itself, up to 15 units off
		{"Atan", -1e3, 1e3, exact.Atan, math.Atan, 2},
		{"Exp10", -12, 12, exact.Exp10, func(x float64) float64 { return math.Pow(10, x) }, 10},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			rapid.Check(t, func(t *rapid.T) {
				x := rapid.Float64Range(tt.low, tt.high).Draw(t, "x")
				if d := ulps(tt.got(x), tt.want(x)); d > tt.tolerance {
					t.Fatalf("at %v: %v, want %v (%v units)", x, tt.got(x), tt.want(x), d)
				}
			})
		})
	}
}

// Sine and cosine are compared absolutely: near their zeros the reduced
// argument's own rounding (2⁻⁵³ of the argument's size) is what counts.
func TestSinCos(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.Float64Range(-1e4, 1e4).Draw(t, "x")
		s, c := exact.SinCos(x)
		if math.Abs(s-math.Sin(x)) > 3e-16 || math.Abs(c-math.Cos(x)) > 3e-16 {
			t.Fatalf("at %v: %v %v, want %v %v", x, s, c, math.Sin(x), math.Cos(x))
		}
	})
}

func TestPowAndAngles(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		x := rapid.Float64Range(1e-6, 1e6).Draw(t, "x")
		y := rapid.Float64Range(-20, 20).Draw(t, "y")
		if d := ulps(exact.Pow(x, y), math.Pow(x, y)); d > 40 {
			t.Fatalf("pow(%v, %v): %v, want %v (%v units)", x, y, exact.Pow(x, y), math.Pow(x, y), d)
		}
		a, b := rapid.Float64Range(-5, 5).Draw(t, "a")+0, rapid.Float64Range(-5, 5).Draw(t, "b")+0 // no −0
		if d := math.Abs(exact.Atan2(a, b) - math.Atan2(a, b)); d > 1e-15 {
			t.Fatalf("atan2(%v, %v) is off by %v", a, b, d)
		}
		u := rapid.Float64Range(-0.99, 0.99).Draw(t, "u") // nearer to 1 math.Asin itself loses digits
		if d := math.Abs(exact.Asin(u) - math.Asin(u)); d > 2e-15 {
			t.Fatalf("asin(%v) is off by %v", u, d)
		}
	})
}

func TestEdges(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct{ got, want float64 }{
		{exact.Exp(0), 1}, {exact.Exp(-800), 0}, {exact.Exp(800), math.Inf(1)},
		{exact.Log(1), 0}, {exact.Log(0), math.Inf(-1)},
		{exact.Round(2.5), 3}, {exact.Round(-2.5), -3}, {exact.Round(0.49999), 0},
		{exact.Pow(0, 0.5), 0}, {exact.Pow(2, 10), 1024}, {exact.Pow(-2, 3), -8},
	} {
		if tt.got != tt.want {
			t.Errorf("got %v, want %v", tt.got, tt.want)
		}
	}
	if !math.IsNaN(exact.Log(-1)) || !math.IsNaN(exact.Exp(math.NaN())) || !math.IsNaN(exact.Sin(math.Inf(1))) {
		t.Error("outside the domain the result must be NaN")
	}
}
