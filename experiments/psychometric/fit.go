package psychometric

import (
	"encoding/json"
	"math"
)

// Interval is a confidence or credible interval. A side that the data leave open is
// infinite, or 0 where the quantity cannot be below 0; in JSON an infinite side is null.
type Interval struct {
	Low, High float64
	// OpenLow and OpenHigh say that the data set no limit on that side.
	OpenLow, OpenHigh bool
}

// Contains says whether x lies in the interval, its ends included.
func (i Interval) Contains(x float64) bool { return i.Low <= x && x <= i.High }

// Closed says whether both sides are limited by the data.
func (i Interval) Closed() bool { return !i.OpenLow && !i.OpenHigh }

// MarshalJSON writes {"low", "high", "open_low", "open_high"}.
func (i Interval) MarshalJSON() ([]byte, error) {
	return json.Marshal(struct {
		Low      *float64 `json:"low"`
		High     *float64 `json:"high"`
		OpenLow  bool     `json:"open_low"`
		OpenHigh bool     `json:"open_high"`
	}{finiteOrNil(i.Low), finiteOrNil(i.High), i.OpenLow, i.OpenHigh})
}

func finiteOrNil(x float64) *float64 {
	if math.IsInf(x, 0) || math.IsNaN(x) {
		return nil
	}
	return &x
}

// Estimate is one estimated quantity. Nothing in it is ever NaN.
type Estimate struct {
	// Valid is false where the data determine no value: Value is then 0 and means nothing.
	Valid bool    `json:"valid"`
	Value float64 `json:"value"`
	// SE and SEObserved are standard errors from the expected and the observed
	// information; 0 where there is none (not estimated, or at the edge of its range).
	SE         float64 `json:"se"`
	SEObserved float64 `json:"se_observed"`
	// Interval is the profile-likelihood interval (Fit), that of the threshold steadied as
	// described at Model.PlainProfile, or the Wald interval (Maximise).
	Interval Interval `json:"interval"`
}

// Result is a fitted function with what may be said about it.
type Result struct {
	Model Model `json:"-"`
	Data  Data  `json:"-"` // merged, ascending

	Status      Status   `json:"status"`
	Explanation string   `json:"explanation"` // Status in plain words, with the numbers that matter
	Notes       []string `json:"notes,omitempty"`

	// Threshold at the model's criterion in the level's unit; its standard errors are
	// those of OnScale times the local slope of the scale.
	Threshold Estimate `json:"threshold"`
	// OnScale is the same on the function's axis: log10 units on a log10 scale.
	OnScale Estimate `json:"threshold_on_scale"`
	// Slope is β per unit of z; for the Gaussian 1/β is the standard deviation.
	Slope Estimate `json:"slope"`
	Lapse Estimate `json:"lapse"`

	LogLikelihood float64 `json:"log_likelihood"` // without binomial coefficients
	Saturated     float64 `json:"log_likelihood_saturated"`
	// Constant is the log-likelihood of the best function that does not change with the level.
	Constant float64 `json:"log_likelihood_constant"`
	Deviance float64 `json:"deviance"` // 2 (Saturated − LogLikelihood)
	Trials   int     `json:"trials"`
	Levels   int     `json:"levels"`
	// Parameters is the number of free ones.
	Parameters int `json:"parameters"`

	// Covariance of (threshold on scale, β, lapse) from the expected information, and
	// from the observed one; rows of what was not estimated are zero.
	Covariance         [3][3]float64 `json:"covariance"`
	CovarianceObserved [3][3]float64 `json:"covariance_observed"`

	curve curve
}

// DegreesOfFreedom of the deviance: levels minus free parameters, not below 0.
func (r *Result) DegreesOfFreedom() int { return max(r.Levels-r.Parameters, 0) }

// Predict is the fitted P(x). Where the fit is a constant or a step it is that.
func (r *Result) Predict(x float64) float64 { return r.curve.at(r.Model, x) }

// curve is what Predict needs, on the scale z.
type curve struct {
	constant     bool
	p            float64
	threshold    float64
	slope, lapse float64
}

func (c curve) at(m Model, x float64) float64 {
	if c.constant {
		return c.p
	}
	z := m.onScale(x)
	u := m.sign() * z
	if !math.IsInf(z, 0) {
		u = c.slope*m.sign()*(z-c.threshold) + m.offset(m.Criterion, c.lapse).q
	}
	return m.bottom(c.lapse) + (m.top(c.lapse)-m.bottom(c.lapse))*m.Shape.At(u)
}

// Fit fits the model by maximum likelihood, with profile-likelihood intervals of
// threshold, slope and lapse rate. The error names what is impossible in the data or
// the model; data that merely say little give a Result whose Status says so.
func Fit(d Data, m Model) (*Result, error) {
	return fit(d, m, profileAll)
}

// FitThreshold is Fit with a profile-likelihood interval of the threshold alone and Wald
// intervals of the others (as in Maximise), in a third of the time.
func FitThreshold(d Data, m Model) (*Result, error) {
	return fit(d, m, profileThreshold)
}

// Maximise is Fit with Wald intervals (estimate ± quantile × standard error, computed
// on the scale for the threshold and on ln β for the slope) in place of profile
// likelihood, some fifty times faster. Its Status does not look at intervals.
func Maximise(d Data, m Model) (*Result, error) {
	return fit(d, m, profileNone)
}

// profiling is the set of parameters that get profile intervals.
type profiling int

const (
	profileNone profiling = iota
	profileThreshold
	profileAll
)

func fit(d Data, m Model, wanted profiling) (*Result, error) {
	if err := m.Check(); err != nil {
		return nil, err
	}
	if err := d.check(m); err != nil {
		return nil, err
	}
	r := &Result{Model: m, Data: d.Merge()}
	r.Trials, r.Levels = r.Data.Trials(), len(r.Data)
	p := newProblem(r.Data, m)
	for _, free := range p.free {
		if free {
			r.Parameters++
		}
	}
	r.openAll(p)
	if r.tooFew(p) {
		return r, nil
	}
	s := p.summit()
	r.describe(p, &s)
	r.information(p, &s)
	if wanted != profileNone {
		r.profiles(p, &s, wanted)
	}
	r.judge(p, &s, wanted)
	return r, nil
}

// openAll sets the widest intervals.
func (r *Result) openAll(p *problem) {
	low := math.Inf(-1)
	r.OnScale.Interval = Interval{low, math.Inf(1), true, true}
	if r.Model.logarithmic() {
		low = 0
	}
	r.Threshold.Interval = Interval{low, math.Inf(1), true, true}
	r.Slope.Interval = Interval{0, math.Inf(1), true, true}
	if !p.free[iSlope] && r.Model.Slope > 0 {
		r.Slope = Estimate{Valid: true, Value: r.Model.Slope, Interval: Interval{Low: r.Model.Slope, High: r.Model.Slope}}
	}
	if p.free[iLapse] {
		r.Lapse.Interval = Interval{p.low[iLapse], p.high[iLapse], true, true}
	} else {
		l := p.low[iLapse]
		r.Lapse = Estimate{Valid: true, Value: l, Interval: Interval{Low: l, High: l}}
	}
}

// describe fills in the estimates and likelihoods.
func (r *Result) describe(p *problem, s *summit) {
	r.LogLikelihood = s.value
	r.Constant = s.constant
	r.Saturated = p.saturated()
	r.Deviance = math.Max(2*(r.Saturated-r.LogLikelihood), 0)
	if s.outcome == levelLike {
		n, k := p.totals()
		c := clamp(k/n, p.model.bottom(p.low[iLapse]), p.model.top(p.low[iLapse]))
		r.curve = curve{constant: true, p: c}
		return
	}
	z := p.scaled(s.theta[iThreshold])
	beta := math.Exp(s.theta[iSlope]) / p.width
	r.curve = curve{threshold: z, slope: beta, lapse: s.theta[iLapse]}
	r.OnScale.Valid, r.OnScale.Value = true, z
	r.Threshold.Valid, r.Threshold.Value = true, r.Model.offScale(z)
	if p.free[iLapse] {
		r.Lapse.Valid, r.Lapse.Value = true, s.theta[iLapse]
	}
	if p.free[iSlope] && s.outcome == interior {
		r.Slope.Valid, r.Slope.Value = true, beta
	}
}

// scaled is the value on the scale z of a standardised threshold.
func (p *problem) scaled(t float64) float64 {
	return p.center + p.model.sign()*p.width*t
}

// profiles fills in the profile intervals.
func (r *Result) profiles(p *problem, s *summit, wanted profiling) {
	target := s.value - drop(r.Model.confidence())
	if s.outcome == levelLike {
		q := p
		if p.free[iSlope] && !r.Model.PlainProfile {
			q = p.steadied()
		}
		if i, ok := q.survey(target); ok {
			r.setThresholdInterval(p, i)
		}
		return
	}
	step := 0.05
	if r.OnScale.SE > 0 {
		step = clamp(r.OnScale.SE/p.width, 1e-3, 1)
	}
	r.setThresholdInterval(p, p.thresholdInterval(s, step))
	if wanted == profileThreshold {
		return
	}
	if p.free[iSlope] {
		i := p.interval(iSlope, s, 0.3, target)
		r.Slope.Interval = Interval{math.Exp(i.low) / p.width, math.Exp(i.high) / p.width, i.openLow, i.openHigh}
		if i.openLow {
			r.Slope.Interval.Low = 0
		}
		if i.openHigh {
			r.Slope.Interval.High = math.Inf(1)
		}
	}
	if p.free[iLapse] {
		i := p.interval(iLapse, s, 0.2*p.high[iLapse], target)
		r.Lapse.Interval = Interval{i.low, i.high, false, i.openHigh} // 0 is a limit of its own
	}
}

// setThresholdInterval translates an interval of the standardised threshold.
func (r *Result) setThresholdInterval(p *problem, i span) {
	low, high := p.scaled(i.low), p.scaled(i.high)
	if r.Model.Falling {
		low, high = high, low
		i.openLow, i.openHigh = i.openHigh, i.openLow
	}
	r.OnScale.Interval = Interval{low, high, i.openLow, i.openHigh}
	r.Threshold.Interval = Interval{r.Model.offScale(low), r.Model.offScale(high), i.openLow, i.openHigh}
	if i.openLow {
		r.OnScale.Interval.Low = math.Inf(-1)
		r.Threshold.Interval.Low = math.Inf(-1)
		if r.Model.logarithmic() {
			r.Threshold.Interval.Low = 0
		}
	}
	if i.openHigh {
		r.OnScale.Interval.High = math.Inf(1)
		r.Threshold.Interval.High = math.Inf(1)
	}
}
