package psychometric

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Overdispersion is a fit in which the proportion correct itself varies from block to
// block about the function, with a beta distribution (Griffiths DA 1973, Maximum
// likelihood estimation for the beta-binomial distribution, Biometrics 29:637–648;
// for psychometric functions Fründ I, Haenel NV, Wichmann FA 2011, J Vis 11(6):16).
type Overdispersion struct {
	// Rho is the correlation of responses within a block: the variance of K is
	// n P (1 − P) (1 + (n − 1) ρ). 0 is the binomial distribution.
	Rho      float64  `json:"rho"`
	Interval Interval `json:"interval"` // profile likelihood
	// Inflation is 1 + (n̄ − 1) ρ at the mean number of trials a block.
	Inflation float64 `json:"variance_inflation"`
	// Statistic is 2 (L of the beta-binomial − L of the binomial fit). P halves the χ²(1)
	// probability, since ρ cannot be negative (Self SG, Liang KY 1987, J Am Stat Assoc 82:605–610).
	Statistic     float64  `json:"statistic"`
	P             float64  `json:"p"`
	LogLikelihood float64  `json:"log_likelihood"` // without binomial coefficients
	Threshold     Estimate `json:"threshold"`
	OnScale       Estimate `json:"threshold_on_scale"`
	Slope         Estimate `json:"slope"`
	Lapse         Estimate `json:"lapse"`
	Explanation   string   `json:"explanation"`
}

// maxPhi bounds ρ/(1 − ρ): ρ = 0.8.
const maxPhi = 4.0

// FitOverdispersed fits blocks, which are not merged: every entry of d is a block of
// trials that may differ from others at the same level. Intervals of threshold and
// slope are Wald intervals at the estimated ρ.
func FitOverdispersed(d Data, m Model) (*Overdispersion, error) {
	r, err := Maximise(d, m)
	if err != nil {
		return nil, err
	}
	o := &Overdispersion{P: 1, Inflation: 1, Threshold: r.Threshold, OnScale: r.OnScale, Slope: r.Slope, Lapse: r.Lapse, LogLikelihood: r.LogLikelihood}
	o.Interval = Interval{Low: 0, High: maxPhi / (1 + maxPhi), OpenHigh: true}
	blocks := repeated(d)
	switch {
	case !r.Threshold.Valid || !r.Slope.Valid:
		o.Explanation = "Overdispersion needs a fitted function to vary about. " + r.Explanation
		return o, nil
	case len(blocks) == 0:
		o.Explanation = "All blocks are single trials: whether the proportion correct varies between blocks cannot be told."
		return o, nil
	}
	o.fit(d, m, r)
	return o, nil
}

// repeated are the blocks of two or more trials.
func repeated(d Data) Data {
	var list Data
	for _, l := range d {
		if l.N > 1 {
			list = append(list, l)
		}
	}
	return list
}

func (o *Overdispersion) fit(d Data, m Model, r *Result) {
	var blocks Data
	for _, l := range d {
		if l.N > 0 {
			blocks = append(blocks, l)
		}
	}
	p := newProblem(blocks.sorted(), m)
	start := p.clip(vector{m.sign() * (r.OnScale.Value - p.center) / p.width, math.Log(r.Slope.Value * p.width), r.Lapse.Value})
	at := func(phi float64) maximum {
		q := *p
		q.phi = phi
		return q.climb(start)
	}
	binomial := at(0)
	phi, best := 0.0, binomial
	// ln φ from e⁻¹² (ρ ≈ 6e−6, no more than binomial) up.
	x := goldenSection(func(x float64) float64 { return -at(math.Exp(x)).value }, -12, math.Log(maxPhi))
	if m := at(math.Exp(x)); m.value > best.value+tie {
		phi, best = math.Exp(x), m
	}
	o.Rho, o.LogLikelihood = phi/(1+phi), best.value
	o.Inflation = 1 + (float64(d.Trials())/float64(len(blocks))-1)*o.Rho
	o.Statistic = math.Max(2*(best.value-binomial.value), 0)
	if o.Statistic > 0 {
		o.P = distuv.ChiSquared{K: 1}.Survival(o.Statistic) / 2
	}
	o.setInterval(at, phi, best.value-drop(m.confidence()))
	o.setEstimates(p, m, phi, best.theta)
	o.Explanation = "Blocks vary no more than responses drawn at random would."
	if o.P < 0.05 {
		o.Explanation = "Blocks vary more than responses drawn at random would (drifts, learning or lapses of attention): standard errors and intervals here allow for it, those of the plain fit are too small."
	}
}

// setInterval finds where the profile of L by φ crosses target.
func (o *Overdispersion) setInterval(at func(float64) maximum, phi, target float64) {
	rho := func(phi float64) float64 { return phi / (1 + phi) }
	o.Interval = Interval{Low: 0, High: rho(maxPhi), OpenHigh: true}
	cross := func(inside, outside float64) float64 {
		for range 50 {
			middle := (inside + outside) / 2
			if at(middle).value >= target {
				inside = middle
			} else {
				outside = middle
			}
		}
		return inside
	}
	if at(0).value < target {
		o.Interval.Low = rho(cross(phi, 0))
	}
	if at(maxPhi).value < target {
		o.Interval.High, o.Interval.OpenHigh = rho(cross(phi, maxPhi)), false
	}
}

func (o *Overdispersion) setEstimates(p *problem, m Model, phi float64, theta vector) {
	q := *p
	q.phi = phi
	s := summit{maximum: maximum{theta: theta, converged: true}}
	r := &Result{Model: m}
	r.OnScale = Estimate{Valid: true, Value: p.scaled(theta[iThreshold])}
	r.Threshold = Estimate{Valid: true, Value: m.offScale(r.OnScale.Value)}
	r.Slope = Estimate{Valid: true, Value: math.Exp(theta[iSlope]) / p.width, Interval: o.Slope.Interval}
	r.Lapse = Estimate{Valid: true, Value: theta[iLapse], Interval: o.Lapse.Interval}
	r.information(&q, &s)
	o.OnScale, o.Threshold, o.Slope, o.Lapse = r.OnScale, r.Threshold, r.Slope, r.Lapse
}

// betaBinomial is ln ∏(P + iφ) ∏(1 − P + iφ) / ∏(1 + iφ), products over correct
// responses, wrong ones and trials: the beta-binomial likelihood without its
// binomial coefficient.
func betaBinomial(n, k, yes, no, phi float64) float64 {
	l := 0.0
	for i := 0.0; i < n; i++ {
		if i < k {
			l += math.Log(math.Max(yes, floor) + i*phi)
		}
		if i < n-k {
			l += math.Log(math.Max(no, floor) + i*phi)
		}
		l -= math.Log1p(i * phi)
	}
	return l
}

// weighBetaBinomial are the weights of betaBinomial. The expectation is that of the
// variance inflated by 1 + (n − 1) ρ.
func weighBetaBinomial(n, k, yes, no, phi float64) weights {
	var w weights
	for i := 0.0; i < n; i++ {
		if i < k {
			a := 1 / (yes + i*phi)
			w.score += a
			w.observed += a * a
		}
		if i < n-k {
			b := 1 / (no + i*phi)
			w.score -= b
			w.observed += b * b
		}
	}
	w.expected = n / yes / no / (1 + (n-1)*phi/(1+phi))
	return w
}
