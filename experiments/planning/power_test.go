package planning

import (
	"errors"
	"math"
	"testing"

	"pgregory.net/rapid"
)

// R 4.2.2: power.t.test(n = n, delta = d, sd = 1, sig.level = alpha, strict = TRUE)$power.
func TestPowerAgreesWithR(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		n          int
		d          float64
		at05, at01 float64
	}{
		{3, 0.1, 0.05106574289, 0.01026041662},
		{3, 0.5, 0.07684904996, 0.01673991693},
		{3, 1, 0.15879087, 0.03956762754},
		{10, 0.1, 0.05516129211, 0.01157096072},
		{10, 0.5, 0.1850956563, 0.05992192202},
		{10, 1, 0.5620066466, 0.2937394044},
		{20, 0.1, 0.06095912465, 0.01350839157},
		{20, 0.5, 0.3379390289, 0.1439550835},
		{20, 1, 0.8689530277, 0.672884865},
		{64, 0.1, 0.08681491455, 0.02268146656},
		{64, 0.5, 0.8014595579, 0.5852510204},
		{64, 1, 0.9998705724, 0.9986756544},
		{200, 0.1, 0.1694809246, 0.05723197877},
		{200, 0.5, 0.9987688588, 0.9918756298},
		{200, 1, 1, 1},
	} {
		if got := Power(c.n, c.d, 0.05); math.Abs(got-c.at05) > 1e-7 {
			t.Errorf("n %d, d %g: %.9f, R has %.9f", c.n, c.d, got, c.at05)
		}
		if got := Power(c.n, c.d, 0.01); math.Abs(got-c.at01) > 1e-7 {
			t.Errorf("n %d, d %g at 0.01: %.9f, R has %.9f", c.n, c.d, got, c.at01)
		}
	}
}

// R 4.2.2: power.t.test(delta = d, power = p, strict = TRUE)$n, rounded up.
func TestParticipantsAgreeWithR(t *testing.T) {
	t.Parallel()
	for _, c := range []struct{ d, at80, at95 float64 }{
		{0.2, 393.405695, 650.6974061},
		{0.5, 63.76561017, 104.9279448},
		{1, 16.71472821, 26.98921625},
		{1.5, 8.060294678, 12.59872163},
	} {
		for power, want := range map[float64]float64{0.8: c.at80, 0.95: c.at95} {
			got, err := Participants(c.d, 0.05, power)
			if err != nil || got != int(math.Ceil(want)) {
				t.Errorf("d %g, power %g: %d, %v, R has %g", c.d, power, got, err, want)
			}
		}
	}
}

// The least number is the least, and a difference of nothing is never found.
func TestParticipantsAreTheLeast(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		d, power := rapid.Float64Range(0.2, 4).Draw(t, "d"), rapid.Float64Range(0.5, 0.99).Draw(t, "power")
		n, err := Participants(d, 0.05, power)
		if err != nil || Power(n, d, 0.05) < power || n > 2 && Power(n-1, d, 0.05) >= power {
			t.Fatalf("%d, %v", n, err)
		}
	})
	for _, d := range []float64{0, math.NaN(), 1e-6} {
		if n, err := Participants(d, 0.05, 0.8); !errors.Is(err, ErrTooMany) {
			t.Errorf("a difference of %g: %d, %v", d, n, err)
		}
	}
}
