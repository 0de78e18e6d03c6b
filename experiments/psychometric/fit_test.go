package psychometric_test

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"distal/experiments/psychometric"
)

// published is testdata/psychometric_fits.json: maximum-likelihood fits found by simplex
// and quasi-Newton optimisers, score equations solved at 40 digits, repeated in R. Set D
// is Hecht S, Shlaer S, Pirenne MH (1942) J Gen Physiol 25:819–840, observer SS.
type published struct {
	Sets []struct {
		Name         string
		X, Quanta    []float64
		N, K         []int
		Guess, Lapse float64
		Fits         []struct {
			Kind        string
			A, B        float64
			Loglik      float64
			Deviance    float64
			SEA         float64 `json:"se_a"`
			SEB         float64 `json:"se_b"`
			SEAObserved float64 `json:"se_a_observed"`
			SEBObserved float64 `json:"se_b_observed"`
			Fitted      []float64
			DOF         int `json:"dof"`
		}
	}
}

func readPublished(t *testing.T) published {
	t.Helper()
	text, err := os.ReadFile("../../testdata/psychometric_fits.json")
	if err != nil {
		t.Fatal(err)
	}
	var p published
	if err := json.Unmarshal(text, &p); err != nil {
		t.Fatal(err)
	}
	return p
}

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: got %.10g, want %.10g within %g", what, got, want, tolerance)
	}
}

func TestFitAgreesWithPublished(t *testing.T) {
	t.Parallel()
	const (
		relative = 1e-6 // of parameters and standard errors, given to 10 digits
		logs     = 1e-6
	)
	shapes := map[string]psychometric.Shape{"weibull": psychometric.Weibull, "logistic": psychometric.Logistic, "gauss": psychometric.Gaussian}
	for _, set := range readPublished(t).Sets {
		for _, want := range set.Fits {
			t.Run(set.Name+" "+want.Kind, func(t *testing.T) {
				t.Parallel()
				x := set.X
				if want.Kind == "weibull" && set.Quanta != nil {
					x = set.Quanta
				}
				var d psychometric.Data
				for i := range x {
					d = append(d, psychometric.Level{X: x[i], N: set.N[i], K: set.K[i]})
				}
				r, err := psychometric.Fit(d, psychometric.Model{Shape: shapes[want.Kind], Scale: psychometric.Linear,
					Guess: set.Guess, Lapse: psychometric.FixedLapse(set.Lapse)})
				if err != nil {
					t.Fatal(err)
				}
				b, seB, seBObserved := r.Slope.Value, r.Slope.SE, r.Slope.SEObserved
				if want.Kind == "gauss" { // b is the standard deviation, 1/β
					b, seB, seBObserved = 1/b, seB/(b*b), seBObserved/(b*b)
				}
				near(t, "a", r.Threshold.Value, want.A, relative*math.Abs(want.A))
				near(t, "b", b, want.B, relative*want.B)
				near(t, "log-likelihood", r.LogLikelihood, want.Loglik, logs)
				near(t, "deviance", r.Deviance, want.Deviance, 2*logs)
				near(t, "se a", r.Threshold.SE, want.SEA, relative*want.SEA)
				near(t, "se b", seB, want.SEB, relative*want.SEB)
				near(t, "observed se a", r.Threshold.SEObserved, want.SEAObserved, relative*want.SEAObserved)
				near(t, "observed se b", seBObserved, want.SEBObserved, relative*want.SEBObserved)
				for i := range x {
					near(t, "fitted", r.Predict(x[i]), want.Fitted[i], relative)
				}
				if r.Status != psychometric.OK || r.DegreesOfFreedom() != want.DOF {
					t.Errorf("status %v with %d degrees of freedom: %s", r.Status, r.DegreesOfFreedom(), r.Explanation)
				}
				t.Log(r.Explanation, r.Threshold.Interval)
			})
		}
	}
}
