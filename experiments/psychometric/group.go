package psychometric

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// RandomEffects summarises thresholds (or any estimates) with known standard errors, on
// the scale on which they are given: log10 units where the level is a ratio.
//
// yᵢ = μ + bᵢ + eᵢ with bᵢ ~ N(0, τ²) and eᵢ ~ N(0, seᵢ²). τ² is estimated by restricted
// maximum likelihood (Viechtbauer W 2005, Bias and efficiency of meta-analytic variance
// estimators in the random-effects model, J Educ Behav Stat 30:261–293); τ² of
// DerSimonian and Laird (1986, Control Clin Trials 7:177–188) stands beside it. The interval of
// μ is that of Knapp and Hartung (2003, Stat Med 22:2693–2710), with a t distribution.
type RandomEffects struct {
	Count int `json:"count"`
	// Left is the number of inputs that had no standard error and were left out.
	Left int `json:"left_out"`
	// Mean is μ, with its standard error and interval.
	Mean Estimate `json:"mean"`
	// Tau is the standard deviation between units (REML), TauDL that of DerSimonian and Laird.
	Tau   float64 `json:"tau"`
	TauDL float64 `json:"tau_dersimonian_laird"`
	// Prediction is the interval for a further unit (Higgins, Thompson and Spiegelhalter
	// 2009, J R Stat Soc A 172:137–159), with Count − 2 degrees of freedom; open for 2 units.
	Prediction Interval `json:"prediction"`
	// Q is Cochran's heterogeneity statistic with its p value, I2 the share of the variance
	// between units (0 to 1).
	Q  float64 `json:"q"`
	QP float64 `json:"q_p"`
	I2 float64 `json:"i_squared"`
}

// ErrTooFewUnits says that a group needs at least two units with a standard error.
var ErrTooFewUnits = errors.New("a group summary needs at least two estimates with a standard error")

// SummariseGroup computes the random-effects summary. y and se must have the same length
// (otherwise it panics); units whose standard error is not above 0 are left out and counted.
func SummariseGroup(y, se []float64, confidence float64) (*RandomEffects, error) {
	if len(y) != len(se) {
		panic("psychometric: estimates and standard errors differ in number")
	}
	if confidence == 0 {
		confidence = 0.95
	}
	if !(confidence > 0 && confidence < 1) {
		return nil, fmt.Errorf("confidence %g is not between 0 and 1", confidence)
	}
	g := &RandomEffects{}
	var u units
	for i := range y {
		if se[i] > 0 && !math.IsInf(se[i], 0) && !math.IsNaN(y[i]) && !math.IsInf(y[i], 0) {
			u.y = append(u.y, y[i])
			u.v = append(u.v, se[i]*se[i])
		}
	}
	g.Count, g.Left = len(u.y), len(y)-len(u.y)
	if g.Count < 2 {
		return nil, ErrTooFewUnits
	}
	g.fill(&u, confidence)
	return g, nil
}

// units are estimates with their variances.
type units struct{ y, v []float64 }

// mean is the weighted mean for a variance between units, with the sum of weights.
func (u *units) mean(tau2 float64) (mean, weight float64) {
	sum := 0.0
	for i, y := range u.y {
		w := 1 / (u.v[i] + tau2)
		weight += w
		sum += w * y
	}
	return sum / weight, weight
}

func (g *RandomEffects) fill(u *units, confidence float64) {
	k := float64(g.Count)
	fixed, _ := u.mean(0)
	var w1, w2 float64
	for i, y := range u.y {
		w := 1 / u.v[i]
		w1 += w
		w2 += w * w
		g.Q += w * (y - fixed) * (y - fixed)
	}
	g.QP = distuv.ChiSquared{K: k - 1}.Survival(g.Q)
	g.TauDL = math.Sqrt(math.Max((g.Q-(k-1))/(w1-w2/w1), 0))
	tau2 := u.restrictedML()
	g.Tau = math.Sqrt(tau2)
	typical := (k - 1) * w1 / (w1*w1 - w2) // Higgins and Thompson 2002, Stat Med 21:1539–1558
	g.I2 = tau2 / (tau2 + typical)

	mean, weight := u.mean(tau2)
	spread := 0.0
	for i, y := range u.y {
		spread += (y - mean) * (y - mean) / (u.v[i] + tau2)
	}
	se := math.Sqrt(spread / (k - 1) / weight)
	t := distuv.StudentsT{Nu: k - 1, Sigma: 1}.Quantile((1 + confidence) / 2)
	g.Mean = Estimate{Valid: true, Value: mean, SE: se, SEObserved: se, Interval: Interval{Low: mean - t*se, High: mean + t*se}}
	if g.Count == 2 {
		g.Prediction = Interval{math.Inf(-1), math.Inf(1), true, true}
		return
	}
	t = distuv.StudentsT{Nu: k - 2, Sigma: 1}.Quantile((1 + confidence) / 2)
	width := t * math.Sqrt(tau2+1/weight)
	g.Prediction = Interval{Low: mean - width, High: mean + width}
}

// restrictedML maximises the restricted likelihood of τ²,
// −½ (Σ ln(vᵢ + τ²) + ln Σ wᵢ + Σ wᵢ (yᵢ − μ)²) with wᵢ = 1/(vᵢ + τ²), over τ² ≥ 0.
func (u *units) restrictedML() float64 {
	minus := func(tau2 float64) float64 {
		mean, weight := u.mean(tau2)
		l := math.Log(weight)
		for i, y := range u.y {
			l += math.Log(u.v[i]+tau2) + (y-mean)*(y-mean)/(u.v[i]+tau2)
		}
		return l / 2
	}
	// τ² cannot exceed the variance of the estimates themselves by much.
	s := sd(u.y)
	top := 4*s*s + 1e-12
	least, at := minus(0), 0.0
	const steps = 60
	for i := 1; i <= steps; i++ {
		x := top * math.Pow(float64(i)/steps, 3)
		if v := minus(x); v < least {
			least, at = v, x
		}
	}
	if at == 0 {
		return 0
	}
	share := math.Cbrt(at/top) * steps
	low, high := top*math.Pow((share-1)/steps, 3), top*math.Pow((share+1)/steps, 3)
	return goldenSectionTo(minus, low, high, 1e-12*top)
}
