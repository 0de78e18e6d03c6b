package psychometric

import (
	"fmt"
	"math"
)

// Hierarchy is a joint fit of many runs, whose thresholds (on the scale) and slopes (ln β)
// come from normal distributions over runs. The distributions' parameters maximise the
// marginal likelihood (empirical Bayes) by the expectation–maximisation algorithm
// (Dempster, Laird and Rubin 1977, J R Stat Soc B 39:1–38). Every run is integrated by
// Gauss–Hermite quadrature about its mode (Naylor and Smith 1982, J R Stat Soc C
// 31:214–225), a free lapse rate uniformly over its bounds. The uncertainty of the means is
// carried into the spreads and into every run's interval.
type Hierarchy struct {
	// Threshold is the centre of the distribution of thresholds, in the level's unit (a
	// geometric mean on a log10 scale); OnScale is the same on the scale.
	Threshold Estimate `json:"threshold"`
	OnScale   Estimate `json:"threshold_on_scale"`
	// ThresholdSD is the standard deviation between runs on the scale.
	ThresholdSD float64 `json:"threshold_sd_on_scale"`
	// Slope is the median of β over runs and SlopeFactor e to the standard deviation of ln β.
	Slope       float64  `json:"slope"`
	SlopeFactor float64  `json:"slope_factor"`
	Runs        []Shrunk `json:"runs"`
	// LogMarginal is the log marginal likelihood, without binomial coefficients.
	LogMarginal float64 `json:"log_marginal"`
	Iterations  int     `json:"iterations"`
	Settled     bool    `json:"settled"`
	Explanation string  `json:"explanation"`
}

// Shrunk is one run seen by itself and with the others.
type Shrunk struct {
	Name string `json:"name"`
	// Single is the run's own maximum-likelihood fit, SingleStatus its verdict.
	Single       Estimate `json:"single_threshold"`
	SingleStatus Status   `json:"single_status"`
	// Threshold is the estimate in the light of all runs (level's unit), OnScale on the scale.
	Threshold Estimate `json:"threshold"`
	OnScale   Estimate `json:"threshold_on_scale"`
	Slope     float64  `json:"slope"`
	Lapse     float64  `json:"lapse"`
	// Shrinkage is the weight of the group in the threshold, 0 to 1.
	Shrinkage float64 `json:"shrinkage"`
}

const (
	hierarchyIterations = 500
	hierarchyTolerance  = 5e-4 // gain in log marginal likelihood by one iteration
	// leastVariance keeps a spread that the data do not show from becoming exactly 0.
	leastVariance = 1e-6
)

// FitHierarchy fits at least two runs, each of which may by itself be too poor to fit.
func FitHierarchy(runs []Condition, m Model) (*Hierarchy, error) {
	if len(runs) < 2 {
		return nil, fmt.Errorf("a hierarchical fit needs at least two runs, not %d", len(runs))
	}
	h := &hierarchy{}
	out := &Hierarchy{}
	if err := h.prepare(runs, m, out); err != nil {
		return nil, err
	}
	h.begin()
	before := math.Inf(-1)
	for out.Iterations = 1; out.Iterations < hierarchyIterations; out.Iterations++ {
		h.integrate()
		out.LogMarginal = 0
		for _, l := range h.log {
			out.LogMarginal += l
		}
		if out.LogMarginal-before < hierarchyTolerance {
			out.Settled = true
			break
		}
		before = out.LogMarginal
		h.update()
	}
	h.report(out)
	return out, nil
}

// hierarchy is the state of the algorithm, on a common standardised scale.
type hierarchy struct {
	problems []*problem
	rule     quadrature
	mode     []vector
	theta    []vector  // posterior means given the group
	cov      []matrix  // and covariances
	log      []float64 // log marginal likelihoods
	group    [2]spread // threshold and ln slope
}

// spread is a normal distribution over runs with the variance of its estimated mean.
type spread struct{ mean, variance, ofMean float64 }

func (h *hierarchy) prepare(runs []Condition, m Model, out *Hierarchy) error {
	var all Data
	for _, r := range runs {
		single, err := FitThreshold(r.Data, m)
		if err != nil {
			return fmt.Errorf("run %q: %w", r.Name, err)
		}
		out.Runs = append(out.Runs, Shrunk{Name: r.Name, Single: single.Threshold, SingleStatus: single.Status})
		h.problems = append(h.problems, emptyProblem(single.Data, m))
		all = append(all, single.Data...)
	}
	center, width := emptyProblem(all.Merge(), m).extent()
	for _, p := range h.problems {
		p.standardise(center, width)
		// The prior keeps the slope from running away, so that the bounds need not.
		if p.free[iSlope] {
			p.high[iSlope] = math.Max(p.high[iSlope], math.Log(p.model.Shape.width()/steepest))
		}
	}
	return nil
}

// begin starts from the runs that have a maximum of their own, or from the middle of the levels.
func (h *hierarchy) begin() {
	var t, s []float64
	h.rule = newQuadrature()
	h.mode = make([]vector, len(h.problems))
	h.theta = make([]vector, len(h.problems))
	h.cov = make([]matrix, len(h.problems))
	h.log = make([]float64, len(h.problems))
	for i, p := range h.problems {
		h.mode[i] = vector{0, math.Log(p.model.Shape.width()), p.low[iLapse]}
		if from, to := p.finite(); to == from || to-from == 1 && p.free[iSlope] {
			continue
		}
		if one := p.summit(); one.outcome == interior && math.Abs(one.theta[iThreshold]) < 1.5 {
			h.mode[i] = one.theta
			t = append(t, one.theta[iThreshold])
			s = append(s, one.theta[iSlope])
		}
	}
	h.group = [2]spread{{0, 1, 0}, {math.Log(h.problems[0].model.Shape.width()), 1, 0}}
	if len(t) >= 2 {
		h.group[0] = spread{mean(t), math.Max(sd(t)*sd(t), 0.01), 0}
		h.group[1] = spread{mean(s), clamp(sd(s)*sd(s), 0.01, 1), 0}
	}
	if !h.problems[0].free[iSlope] {
		h.group[1] = spread{h.problems[0].low[iSlope], 1, 0}
	}
}

// integrate finds every run's posterior means and covariances given the group.
func (h *hierarchy) integrate() {
	for i, p := range h.problems {
		for a, g := range h.group {
			p.prior[a] = normal{g.mean, 1 / g.variance}
		}
		middle := vector{h.group[0].mean, h.group[1].mean, p.low[iLapse] + 0.2*(p.high[iLapse]-p.low[iLapse])}
		best := p.climb(h.mode[i])
		if other := p.climb(middle); other.value > best.value {
			best = other
		}
		h.mode[i] = best.theta
		h.theta[i], h.cov[i], h.log[i] = h.rule.moments(p, best)
		h.log[i] -= math.Log(2*math.Pi*h.group[0].variance) / 2
		if p.free[iSlope] {
			h.log[i] -= math.Log(2*math.Pi*h.group[1].variance) / 2
		}
	}
}

// update sets the group's means and variances: E(θ − μ)² over runs, with the variance of
// μ counted in the share in which a run follows its data.
func (h *hierarchy) update() {
	n := float64(len(h.problems))
	for a := range h.group {
		if a == iSlope && !h.problems[0].free[iSlope] {
			continue
		}
		g := &h.group[a]
		mean, weight := 0.0, 0.0
		for i := range h.theta {
			mean += h.theta[i][a] / n
			weight += h.informationOn(i, a)
		}
		g.mean, g.ofMean = mean, 1/weight
		sum := 0.0
		for i := range h.theta {
			follows := 1 - h.shrinkage(i, a)
			d := h.theta[i][a] - mean
			sum += d*d + h.cov[i][a][a] + follows*follows*g.ofMean
		}
		g.variance = math.Max(sum/n, leastVariance)
	}
}

// shrinkage is the weight of the group in parameter a of run i: posterior ÷ prior variance.
func (h *hierarchy) shrinkage(i, a int) float64 {
	return clamp(h.cov[i][a][a]/h.group[a].variance, 0, 1)
}

// informationOn is what run i tells about the group's mean: 1/(σ² + v), v being the
// variance that the run's own data leave, 1/v = 1/cov − 1/σ².
func (h *hierarchy) informationOn(i, a int) float64 {
	return (1 - h.shrinkage(i, a)) / h.group[a].variance
}

func (h *hierarchy) report(out *Hierarchy) {
	p := h.problems[0]
	m := p.model
	q := math.Sqrt2 * math.Erfinv(m.confidence())
	estimate := func(t, variance float64) (onScale, threshold Estimate) {
		z, se := p.scaled(t), math.Sqrt(math.Max(variance, 0))*p.width
		onScale = Estimate{Valid: true, Value: z, SE: se, SEObserved: se, Interval: Interval{Low: z - q*se, High: z + q*se}}
		threshold = onScale
		threshold.Value = m.offScale(z)
		if m.logarithmic() {
			threshold.SE *= math.Ln10 * threshold.Value
			threshold.SEObserved = threshold.SE
		}
		threshold.Interval = m.intervalOffScale(onScale.Interval)
		return onScale, threshold
	}
	t, s := h.group[iThreshold], h.group[iSlope]
	if total := h.totalInformation(); total > 0 {
		t.ofMean = 1 / total
	}
	out.OnScale, out.Threshold = estimate(t.mean, t.ofMean)
	out.ThresholdSD = math.Sqrt(t.variance) * p.width
	out.Slope = math.Exp(s.mean) / p.width
	out.SlopeFactor = math.Exp(math.Sqrt(s.variance))
	if !p.free[iSlope] {
		out.SlopeFactor = 1
	}
	for i := range out.Runs {
		r := &out.Runs[i]
		r.Shrinkage = h.shrinkage(i, iThreshold)
		r.OnScale, r.Threshold = estimate(h.theta[i][iThreshold], h.cov[i][0][0]+r.Shrinkage*r.Shrinkage*t.ofMean)
		r.Slope = math.Exp(h.theta[i][iSlope]) / p.width
		r.Lapse = h.theta[i][iLapse]
	}
	out.Explanation = h.explain(out)
}

func (h *hierarchy) totalInformation() float64 {
	sum := 0.0
	for i := range h.problems {
		sum += h.informationOn(i, iThreshold)
	}
	return sum
}

func (h *hierarchy) explain(out *Hierarchy) string {
	poor := 0
	for _, r := range out.Runs {
		if r.SingleStatus != OK {
			poor++
		}
	}
	text := fmt.Sprintf("%d runs; thresholds lie about %.4g with a standard deviation of %.3g on the scale between runs.", len(out.Runs), out.Threshold.Value, out.ThresholdSD)
	if poor > 0 {
		text += fmt.Sprintf(" %d of them would not give a sound threshold by themselves and lean on the others.", poor)
	}
	if !out.Settled {
		text += " The iteration did not settle; treat the spreads with care."
	}
	return text
}
