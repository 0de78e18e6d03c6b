package psychometric

import "math"

// information fills in standard errors, covariances and Wald intervals. A parameter at
// the edge of its range (a lapse rate of 0) is taken as known there.
func (r *Result) information(p *problem, s *summit) {
	if s.outcome != interior {
		return
	}
	var d derivatives
	p.differentiate(s.theta, &d)
	active := p.active(s.theta, &d.gradient)
	if expected, ok := invert(&d.expected, active); ok {
		r.Covariance = p.natural(expected, s.theta)
	}
	if observed, ok := invert(&d.observed, active); ok {
		r.CovarianceObserved = p.natural(observed, s.theta)
	}
	r.setErrors(&r.OnScale, iThreshold)
	r.setErrors(&r.Slope, iSlope)
	r.setErrors(&r.Lapse, iLapse)
	scale := 1.0
	if r.Model.logarithmic() {
		scale = math.Ln10 * r.Threshold.Value
	}
	r.Threshold.SE, r.Threshold.SEObserved = r.OnScale.SE*scale, r.OnScale.SEObserved*scale
	r.wald(p)
}

// natural turns a covariance of standardised parameters into one of (threshold on
// scale, β, lapse).
func (p *problem) natural(c matrix, theta vector) matrix {
	j := vector{p.model.sign() * p.width, math.Exp(theta[iSlope]) / p.width, 1}
	for a := range 3 {
		for b := range 3 {
			c[a][b] *= j[a] * j[b]
		}
	}
	return c
}

func (r *Result) setErrors(e *Estimate, index int) {
	e.SE = math.Sqrt(math.Max(r.Covariance[index][index], 0))
	e.SEObserved = math.Sqrt(math.Max(r.CovarianceObserved[index][index], 0))
}

// wald sets the intervals that need no search.
func (r *Result) wald(p *problem) {
	q := math.Sqrt2 * math.Erfinv(r.Model.confidence())
	if se := r.OnScale.SE; se > 0 {
		low, high := r.OnScale.Value-q*se, r.OnScale.Value+q*se
		r.OnScale.Interval = Interval{Low: low, High: high}
		r.Threshold.Interval = Interval{Low: r.Model.offScale(low), High: r.Model.offScale(high)}
	}
	if se := r.Slope.SE; se > 0 {
		ratio := math.Exp(q * se / r.Slope.Value)
		r.Slope.Interval = Interval{Low: r.Slope.Value / ratio, High: r.Slope.Value * ratio}
	}
	if se := r.Lapse.SE; se > 0 {
		low := math.Max(r.Lapse.Value-q*se, p.low[iLapse])
		r.Lapse.Interval = Interval{Low: low, High: math.Min(r.Lapse.Value+q*se, p.high[iLapse])}
	}
}
