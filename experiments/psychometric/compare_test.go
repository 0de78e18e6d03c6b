package psychometric

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// three conditions, of which R 4.2.2's glm(cbind(k, n − k) ~ x*c, binomial) and the like
// give the numbers below.
func threeConditions() []Condition {
	var list []Condition
	for i, k := range [][]int{{3, 9, 22, 31, 38}, {6, 17, 28, 36, 39}, {2, 5, 19, 33, 39}} {
		c := Condition{Name: string(rune('a' + i))}
		for j, k := range k {
			c.Data = append(c.Data, Level{float64(j - 2), 40, k})
		}
		list = append(list, c)
	}
	return list
}

func TestCompareAgreesWithGLM(t *testing.T) {
	t.Parallel()
	m := Model{Shape: Logistic, Scale: Linear}
	c, err := Compare(threeConditions(), m)
	if err != nil {
		t.Fatal(err)
	}
	const tolerance = 1e-6
	close := func(what string, got, want float64) {
		if math.Abs(got-want) > tolerance {
			t.Errorf("%s: %.9f, R has %.9f", what, got, want)
		}
	}
	close("full", c.Full.LogLikelihood, -249.630222792)
	for _, test := range c.Tests {
		if !test.Reliable {
			t.Errorf("%s is not reliable", test.Parameter)
		}
		switch test.Parameter {
		case "slope": // ~ x + c
			close("slope shared", test.Restricted.LogLikelihood, -250.832507056)
			close("its p", test.P, 0.30050699)
			close("threshold", test.Restricted.Conditions[0].Threshold, -0.1119149480/1.4136992333)
			close("its standard error", test.Restricted.Conditions[0].SEOnScale, 0.136644242)
			if test.DegreesOfFreedom != 2 {
				t.Errorf("%d degrees of freedom", test.DegreesOfFreedom)
			}
		case "all": // ~ x
			close("all shared", test.Restricted.LogLikelihood, -259.080371587)
			if test.DegreesOfFreedom != 4 {
				t.Errorf("%d degrees of freedom", test.DegreesOfFreedom)
			}
		}
	}
}

// TestJointIdentities: nothing shared is the sum of single fits, everything shared is the
// fit of the pooled data, and every restriction costs likelihood.
func TestJointIdentities(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(8, 9))
	m := Model{Guess: 0.5, Lapse: FreeLapse()}
	var conditions []Condition
	var pooled Data
	sum := 0.0
	for i, threshold := range []float64{4, 5, 8} {
		d := simulated(rng, []float64{1, 2, 4, 8, 16, 32}, 60, m, threshold, 2, 0.03)
		conditions = append(conditions, Condition{string(rune('a' + i)), d})
		pooled = append(pooled, d...)
		r, err := Maximise(d, m)
		if err != nil {
			t.Fatal(err)
		}
		sum += r.LogLikelihood
	}
	all, err := Maximise(pooled, m)
	if err != nil {
		t.Fatal(err)
	}
	c, err := Compare(conditions, m)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(c.Full.LogLikelihood-sum) > 1e-7 || len(c.Tests) != 4 {
		t.Errorf("separate %.9f, sum %.9f, %d tests", c.Full.LogLikelihood, sum, len(c.Tests))
	}
	for _, test := range c.Tests {
		if test.Restricted.LogLikelihood > c.Full.LogLikelihood+1e-7 {
			t.Errorf("%s: restricted %.9f above full %.9f", test.Parameter, test.Restricted.LogLikelihood, c.Full.LogLikelihood)
		}
		if test.Parameter == "all" && math.Abs(test.Restricted.LogLikelihood-all.LogLikelihood) > 1e-6 {
			t.Errorf("all shared %.9f, pooled %.9f", test.Restricted.LogLikelihood, all.LogLikelihood)
		}
		if test.Parameter == "threshold" && test.P > 0.01 {
			t.Errorf("thresholds of 4, 5 and 8 are told apart with p = %g", test.P)
		}
		if test.Parameter == "slope" && test.P < 0.001 {
			t.Errorf("equal slopes are told apart with p = %g", test.P)
		}
	}
}

// TestCompareErrorRate: with equal conditions p is below 0.05 in about 5% of 400 comparisons
// (within three standard errors).
func TestCompareErrorRate(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(18, 19))
	m := Model{Shape: Gaussian, Scale: Linear, Guess: 0.5, Lapse: FixedLapse(0.02)}
	const runs = 400
	hits := 0
	for range runs {
		var conditions []Condition
		for range 2 {
			d := simulated(rng, []float64{-2, -1, 0, 1, 2}, 60, m, 0, 1, 0.02)
			conditions = append(conditions, Condition{Data: d})
		}
		c, err := Compare(conditions, m)
		if err != nil {
			t.Fatal(err)
		}
		if c.Tests[0].P < 0.05 {
			hits++
		}
	}
	if share := float64(hits) / runs; math.Abs(share-0.05) > 3*math.Sqrt(0.05*0.95/runs) {
		t.Errorf("%.3f of equal conditions differ at 5%%", share)
	}
}

func TestCompareRefusals(t *testing.T) {
	t.Parallel()
	for says, conditions := range map[string][]Condition{
		"at least two":    {{Data: setA}},
		`condition "b"`:   {{"a", setA}, {"b", Data{{1, 20, 15}}}},
		"11 correct of 1": {{"a", setA}, {"b", Data{{1, 1, 11}}}},
	} {
		if _, err := Compare(conditions, Model{Guess: 0.5}); err == nil || !strings.Contains(err.Error(), says) {
			t.Errorf("%s: got %v", says, err)
		}
	}
}
