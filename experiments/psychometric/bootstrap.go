package psychometric

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Resampling says where a bootstrap takes its responses from.
type Resampling int

const (
	// Parametric draws responses from the fitted function.
	Parametric Resampling = iota
	// Nonparametric draws responses at every level from those observed there.
	Nonparametric
)

// String is the name used in files.
func (r Resampling) String() string {
	if r == Nonparametric {
		return "nonparametric"
	}
	return "parametric"
}

// BootstrapOptions of a bootstrap. The zero value is 2,000 parametric samples.
type BootstrapOptions struct {
	Samples    int // 0 means 2000
	Seed       uint64
	Resampling Resampling
}

// Bootstrap is the distribution of the estimates over samples with the levels and
// numbers of trials of the data. For an adaptive track this takes the levels as given.
type Bootstrap struct {
	Resampling Resampling `json:"resampling"`
	Samples    int        `json:"samples"`
	// Undetermined is the number of samples without a threshold (a constant describes them
	// best); they count as infinitely low or high, so that they can open an interval.
	Undetermined int             `json:"undetermined"`
	Threshold    BootstrapLimits `json:"threshold"` // in the level's unit
	Slope        BootstrapLimits `json:"slope"`
	Lapse        BootstrapLimits `json:"lapse"`
	// SDOnScale is the standard deviation of the thresholds on the scale, over samples that have one.
	SDOnScale float64 `json:"sd_on_scale"`
	// Deviance is the Monte Carlo test of fit; parametric bootstrap only.
	Deviance *DevianceTest `json:"deviance,omitempty"`
}

// BootstrapLimits are intervals of one quantity.
type BootstrapLimits struct {
	Percentile Interval `json:"percentile"`
	// BCa is the bias-corrected and accelerated interval (Efron B 1987, Better bootstrap
	// confidence intervals, J Am Stat Assoc 82:171–185).
	BCa Interval `json:"bca"`
	// Bias is the correction z₀ and Acceleration the constant a of that interval.
	Bias         float64 `json:"bias"`
	Acceleration float64 `json:"acceleration"`
}

// DevianceTest compares the deviance with its distribution under the fitted function
// (Wichmann and Hill 2001, Percept Psychophys 63:1293–1313), because the χ²
// approximation fails for few trials a level.
type DevianceTest struct {
	Deviance float64 `json:"deviance"`
	// P is the share of samples, the data counted among them, with at least this deviance.
	P float64 `json:"p"`
	// Quantile95 is the deviance that 5% of the samples exceed.
	Quantile95 float64 `json:"quantile_95"`
	// ChiSquareP is the p value of the χ² approximation, for comparison.
	ChiSquareP float64 `json:"chi_square_p"`
}

// ErrNoThreshold says that a result has no threshold to work on.
var ErrNoThreshold = errors.New("the fit has no threshold")

// Bootstrap resamples the responses and fits every sample anew. It returns
// ErrNoThreshold (wrapped, with the fit's explanation) where there is nothing to resample.
func (r *Result) Bootstrap(o BootstrapOptions) (*Bootstrap, error) {
	if !r.Threshold.Valid {
		return nil, fmt.Errorf("bootstrap: %w: %s", ErrNoThreshold, r.Explanation)
	}
	if o.Samples == 0 {
		o.Samples = 2000
	}
	if o.Samples < 40 {
		return nil, fmt.Errorf("bootstrap: %d samples are too few for an interval, at least 40", o.Samples)
	}
	b := &Bootstrap{Resampling: o.Resampling, Samples: o.Samples}
	p := newProblem(r.Data, r.Model).copyWithResponses()
	draws := resampler{p, r.probabilities(p, o.Resampling), o.Seed}
	var columns [3][]float64
	deviances := make([]float64, o.Samples)
	for i := range columns {
		columns[i] = make([]float64, o.Samples)
	}
	for i := range o.Samples {
		draws.draw(i)
		s := p.summit()
		for c, v := range p.sampled(&s) {
			columns[c][i] = v
		}
		deviances[i] = math.Max(2*(p.saturated()-s.value), 0)
	}
	b.summarise(r, columns)
	if o.Resampling == Parametric {
		b.Deviance = r.devianceTest(deviances)
	}
	return b, nil
}

// probabilities of a correct response at the problem's levels.
func (r *Result) probabilities(p *problem, how Resampling) []float64 {
	list := make([]float64, len(r.Data))
	for i, l := range r.Data {
		list[i] = r.Predict(l.X)
		if how == Nonparametric {
			list[i] = float64(l.K) / float64(l.N)
		}
	}
	if p.model.Falling {
		slices.Reverse(list)
	}
	return list
}

// sampled are threshold on the scale, slope and lapse rate of one sample, infinite
// where the sample puts no limit.
func (p *problem) sampled(s *summit) vector {
	if s.outcome == levelLike {
		n, k := p.totals()
		towards := 1.0
		if q := p.predict(vector{0, 0, p.low[iLapse]}, 0); k/n > q { // P at the threshold itself
			towards = -1
		}
		return vector{p.model.sign() * towards * math.Inf(1), 0, s.theta[iLapse]}
	}
	slope := math.Exp(s.theta[iSlope]) / p.width
	if s.outcome == stepLike {
		slope = math.Inf(1)
	}
	return vector{p.scaled(s.theta[iThreshold]), slope, s.theta[iLapse]}
}

// predict is P at a standardised level.
func (p *problem) predict(theta vector, z float64) float64 {
	lapse := theta[iLapse]
	q := p.model.offset(p.model.Criterion, lapse).q
	s := p.at(math.Exp(theta[iSlope])*(z-theta[iThreshold])+q, z)
	return p.model.bottom(lapse) + (p.model.top(lapse)-p.model.bottom(lapse))*s.f
}

func (b *Bootstrap) summarise(r *Result, columns [3][]float64) {
	var finite []float64
	for _, z := range columns[iThreshold] {
		if !math.IsInf(z, 0) {
			finite = append(finite, z)
		}
	}
	b.Undetermined = b.Samples - len(finite)
	b.SDOnScale = sd(finite)
	jack := r.jackknife()
	estimates := vector{r.OnScale.Value, r.Slope.Value, r.Lapse.Value}
	if !r.Slope.Valid {
		estimates[iSlope] = math.Inf(1)
	}
	limits := [3]*BootstrapLimits{&b.Threshold, &b.Slope, &b.Lapse}
	for c, l := range limits {
		slices.Sort(columns[c])
		l.set(columns[c], estimates[c], jack.acceleration(c), r.Model.confidence())
	}
	for _, i := range []*Interval{&b.Threshold.Percentile, &b.Threshold.BCa} {
		*i = r.Model.intervalOffScale(*i)
	}
}

// intervalOffScale turns an interval on the scale into one in the level's unit.
func (m Model) intervalOffScale(i Interval) Interval {
	i.Low, i.High = m.offScale(i.Low), m.offScale(i.High)
	return i
}

// set fills in the limits from sorted samples.
func (l *BootstrapLimits) set(sorted []float64, estimate, acceleration, confidence float64) {
	tail := (1 - confidence) / 2
	l.Percentile = between(sorted, tail, 1-tail)
	below, equal := 0.0, 0.0
	for _, x := range sorted {
		switch {
		case x < estimate:
			below++
		case x == estimate:
			equal++
		}
	}
	n := float64(len(sorted))
	share := clamp((below+equal/2)/n, 0.5/n, 1-0.5/n)
	l.Bias = distuv.UnitNormal.Quantile(share)
	l.Acceleration = acceleration
	adjust := func(p float64) float64 {
		z := l.Bias + distuv.UnitNormal.Quantile(p)
		return distuv.UnitNormal.CDF(l.Bias + z/math.Max(1-acceleration*z, 0.05))
	}
	l.BCa = between(sorted, adjust(tail), adjust(1-tail))
}

// between is the interval between two quantiles of sorted samples; an end at infinity is open.
func between(sorted []float64, low, high float64) Interval {
	i := Interval{Low: sampleQuantile(sorted, low), High: sampleQuantile(sorted, high)}
	i.OpenLow, i.OpenHigh = math.IsInf(i.Low, -1), math.IsInf(i.High, 1)
	return i
}

// sampleQuantile interpolates between order statistics, (n+1)p being the rank. An
// interpolation that involves an infinite sample is infinite.
func sampleQuantile(sorted []float64, p float64) float64 {
	rank := clamp(p*float64(len(sorted)+1)-1, 0, float64(len(sorted)-1))
	i := int(rank)
	if i == len(sorted)-1 || sorted[i] == sorted[i+1] || rank == float64(i) {
		return sorted[i]
	}
	if math.IsInf(sorted[i], -1) || math.IsInf(sorted[i+1], 1) {
		if math.IsInf(sorted[i], -1) {
			return sorted[i]
		}
		return sorted[i+1]
	}
	return sorted[i] + (rank-float64(i))*(sorted[i+1]-sorted[i])
}

func sd(x []float64) float64 {
	if len(x) < 2 {
		return 0
	}
	m, squares := mean(x), 0.0
	for _, v := range x {
		squares += (v - m) * (v - m)
	}
	return math.Sqrt(squares / float64(len(x)-1))
}

func (r *Result) devianceTest(samples []float64) *DevianceTest {
	t := &DevianceTest{Deviance: r.Deviance, ChiSquareP: 1}
	atLeast := 1.0
	for _, d := range samples {
		if d >= r.Deviance-1e-9 {
			atLeast++
		}
	}
	t.P = atLeast / float64(len(samples)+1)
	slices.Sort(samples)
	t.Quantile95 = sampleQuantile(samples, 0.95)
	if dof := r.DegreesOfFreedom(); dof > 0 {
		t.ChiSquareP = distuv.ChiSquared{K: float64(dof)}.Survival(r.Deviance)
	}
	return t
}

// jackknifed are the estimates without one trial, each with the number of trials that
// it stands for.
type jackknifed struct {
	values  []vector
	weights []float64
}

// jackknife leaves out one correct and one wrong response at every level.
func (r *Result) jackknife() jackknifed {
	var j jackknifed
	for i, l := range r.Data {
		if l.K > 0 {
			j.add(r, i, Level{l.X, l.N - 1, l.K - 1}, l.K)
		}
		if l.N > l.K {
			j.add(r, i, Level{l.X, l.N - 1, l.K}, l.N-l.K)
		}
	}
	return j
}

// add the fit with level i replaced; weight trials give the same.
func (j *jackknifed) add(r *Result, i int, l Level, weight int) {
	d := slices.Clone(r.Data)
	d[i] = l
	p := newProblem(d.Merge(), r.Model)
	if from, to := p.finite(); to == from || to-from == 1 && p.free[iSlope] {
		return // the rest is no longer a fit
	}
	s := p.summit()
	j.values = append(j.values, p.sampled(&s))
	j.weights = append(j.weights, float64(weight))
}

// acceleration is a = Σ(m − θᵢ)³ / (6 (Σ(m − θᵢ)²)^1.5) over leave-one-out estimates; 0
// where one of them is infinite.
func (j *jackknifed) acceleration(column int) float64 {
	mean, weight := 0.0, 0.0
	for i, v := range j.values {
		if math.IsInf(v[column], 0) {
			return 0
		}
		mean += j.weights[i] * v[column]
		weight += j.weights[i]
	}
	if weight == 0 {
		return 0
	}
	mean /= weight
	squares, cubes := 0.0, 0.0
	for i, v := range j.values {
		d := mean - v[column]
		squares += j.weights[i] * d * d
		cubes += j.weights[i] * d * d * d
	}
	if squares == 0 {
		return 0
	}
	return cubes / (6 * math.Pow(squares, 1.5))
}
