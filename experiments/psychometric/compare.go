package psychometric

import (
	"fmt"

	"gonum.org/v1/gonum/stat/distuv"
)

// RatioTest is a likelihood-ratio test of a joint fit against one with fewer shared parameters.
type RatioTest struct {
	// Parameter is what the restricted fit shares: "threshold", "slope", "lapse" or "all".
	Parameter string `json:"parameter"`
	// Statistic is 2 (L of the full − L of the restricted fit).
	Statistic        float64 `json:"statistic"`
	DegreesOfFreedom int     `json:"degrees_of_freedom"`
	// P is from the χ² distribution with that many degrees of freedom (Wilks SS 1938, Ann
	// Math Stat 9:60–62). It is approximate for few trials, and where Reliable is false.
	P float64 `json:"p"`
	// Reliable is false where a fit ended at a step, at a constant or undecided.
	Reliable   bool   `json:"reliable"`
	Restricted *Joint `json:"restricted"`
}

// Comparison of conditions.
type Comparison struct {
	// Full has all parameters separate.
	Full  *Joint      `json:"full"`
	Tests []RatioTest `json:"tests"`
}

// Compare asks of every free parameter whether the conditions have it in common, each
// time with the other parameters free in every condition, and whether they have all in common.
func Compare(conditions []Condition, m Model) (*Comparison, error) {
	full, err := FitJoint(conditions, m, Sharing{})
	if err != nil {
		return nil, err
	}
	c := &Comparison{Full: full}
	questions := []struct {
		name   string
		shared Sharing
		asked  bool
	}{
		{"threshold", Sharing{Threshold: true}, true},
		{"slope", Sharing{Slope: true}, m.Slope == 0},
		{"lapse", Sharing{Lapse: true}, m.Lapse.Free},
		{"all", Sharing{true, true, true}, true},
	}
	for _, q := range questions {
		if !q.asked {
			continue
		}
		restricted, err := FitJoint(conditions, m, q.shared)
		if err != nil {
			return nil, fmt.Errorf("%s shared: %w", q.name, err)
		}
		c.Tests = append(c.Tests, ratioTest(q.name, full, restricted))
	}
	return c, nil
}

func ratioTest(name string, full, restricted *Joint) RatioTest {
	t := RatioTest{
		Parameter:        name,
		Statistic:        max(2*(full.LogLikelihood-restricted.LogLikelihood), 0),
		DegreesOfFreedom: full.Parameters - restricted.Parameters,
		Reliable:         full.Settled && restricted.Settled,
		Restricted:       restricted,
		P:                1,
	}
	if t.DegreesOfFreedom > 0 {
		t.P = distuv.ChiSquared{K: float64(t.DegreesOfFreedom)}.Survival(t.Statistic)
	}
	return t
}
