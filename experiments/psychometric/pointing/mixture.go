package pointing

import (
	"fmt"
	"math"

	"distal/experiments/psychometric"

	"gonum.org/v1/gonum/stat/distuv"
)

// Options of a mixture fit. The zero value fits everything.
type Options struct {
	// NoBias holds the mean error at 0.
	NoBias bool
	// NoOpposite leaves responses in the opposite direction out of the mixture.
	NoOpposite bool
	// MaxBias bounds the mean error in degrees, 0 means 45: a mean error beyond that would
	// rather be another direction.
	MaxBias    float64
	Confidence float64 // of the intervals, 0 means 0.95
}

// Mixture is the fit of
//
//	p(e) = (1 − o − g) vM(e; μ, κ) + o vM(e; μ + 180°, κ) + g/360°
//
// to errors e: precise responses with bias μ and concentration κ, a share o in the
// opposite direction and a share g of guesses. The likelihood is maximised by the
// expectation–maximisation algorithm from several starts.
type Mixture struct {
	Count int `json:"count"`
	// Bias is μ in degrees; Deviation the circular standard deviation of precise responses
	// in degrees; Opposite and Guess are shares, 0 to 1. Intervals are profile-likelihood
	// intervals, open where the data set no limit.
	Bias      psychometric.Estimate `json:"bias_deg"`
	Deviation psychometric.Estimate `json:"sd_deg"`
	Opposite  psychometric.Estimate `json:"opposite"`
	Guess     psychometric.Estimate `json:"guess"`
	Kappa     float64               `json:"kappa"`
	// LogLikelihood is of the errors in radians.
	LogLikelihood float64 `json:"log_likelihood"`
	// OppositeP and GuessP test that the share is 0, by likelihood ratio with half the χ²(1)
	// probability, since a share cannot be negative; UniformP that all responses are guesses.
	OppositeP   float64 `json:"opposite_p"`
	GuessP      float64 `json:"guess_p"`
	UniformP    float64 `json:"uniform_p"`
	Explanation string  `json:"explanation"`
}

// leastErrors below which a mixture is not attempted.
const leastErrors = 10

// FitMixture fits the mixture to errors in degrees.
func FitMixture(errors []float64, o Options) (*Mixture, error) {
	if err := check(errors); err != nil {
		return nil, err
	}
	if o.Confidence == 0 {
		o.Confidence = 0.95
	}
	if !(o.Confidence > 0 && o.Confidence < 1) {
		return nil, fmt.Errorf("confidence %g is not between 0 and 1", o.Confidence)
	}
	if o.MaxBias == 0 {
		o.MaxBias = 45
	}
	if !(o.MaxBias > 0 && o.MaxBias < 90) {
		return nil, fmt.Errorf("largest bias %g° is not between 0 and 90", o.MaxBias)
	}
	m := &Mixture{Count: len(errors), OppositeP: 1, GuessP: 1, UniformP: 1}
	m.openAll()
	if len(errors) < leastErrors {
		m.Explanation = fmt.Sprintf("%d responses are too few for a mixture, at least %d; the circular summary still holds.", len(errors), leastErrors)
		return m, nil
	}
	m.fill(newFitter(errors, o))
	return m, nil
}

func (m *Mixture) openAll() {
	share := psychometric.Interval{Low: 0, High: 1, OpenLow: true, OpenHigh: true}
	m.Opposite.Interval, m.Guess.Interval = share, share
	m.Bias.Interval = psychometric.Interval{Low: -180, High: 180, OpenLow: true, OpenHigh: true}
	m.Deviation.Interval = psychometric.Interval{Low: 0, High: math.Inf(1), OpenLow: true, OpenHigh: true}
}

// parameters of the mixture, angles in radians.
type parameters struct{ bias, kappa, opposite, guess float64 }

// held are parameters that a constrained fit keeps.
type held struct{ bias, kappa, opposite, guess bool }

type fitter struct {
	cos, sin []float64 // of the errors
	options  Options
	member   [][2]float64 // membership probabilities, precise and opposite
}

func newFitter(degrees []float64, o Options) *fitter {
	f := &fitter{options: o, member: make([][2]float64, len(degrees))}
	for _, a := range degrees {
		f.cos = append(f.cos, math.Cos(a*degree))
		f.sin = append(f.sin, math.Sin(a*degree))
	}
	return f
}

// expect is the E step; it returns the log-likelihood.
func (f *fitter) expect(p parameters) float64 {
	l, product := 0.0, 1.0 // logarithms are taken of products: they cost most
	norm := math.Exp(p.kappa-logI0(p.kappa)) / (2 * math.Pi)
	a, b, g := (1-p.opposite-p.guess)*norm, p.opposite*norm, p.guess/(2*math.Pi)
	cb, sb := math.Cos(p.bias), math.Sin(p.bias)
	for i, c := range f.cos {
		along := c*cb + f.sin[i]*sb
		x := a * math.Exp(p.kappa*(along-1))
		y := 0.0
		if b > 0 {
			y = b * math.Exp(-p.kappa*(along+1))
		}
		sum := math.Max(x+y+g, 1e-100)
		if product *= sum; product < 1e-150 || product > 1e150 {
			l += math.Log(product)
			product = 1
		}
		f.member[i] = [2]float64{x / sum, y / sum}
	}
	return l + math.Log(product)
}

// climb runs the expectation–maximisation algorithm with some parameters held. It stops
// early once the log-likelihood reaches enough.
func (f *fitter) climb(p parameters, h held, enough float64) (parameters, float64) {
	value := f.expect(p)
	for range 1000 {
		next := f.maximise(p, h)
		v := f.expect(next)
		if v < value+1e-8 || v >= enough {
			return next, math.Max(v, value)
		}
		p, value = next, v
	}
	return p, value
}

// maximise is the M step. The bias stays within Options.MaxBias.
func (f *fitter) maximise(p parameters, h held) parameters {
	var precise, opposite, c, s float64
	for i, m := range f.member {
		w := m[0] - m[1] // the opposite component is the precise one turned by 180°
		precise += m[0]
		opposite += m[1]
		c += w * f.cos[i]
		s += w * f.sin[i]
	}
	n := float64(len(f.member))
	if !h.bias {
		most := f.options.MaxBias * degree
		p.bias = clamp(math.Atan2(s, c), -most, most)
	}
	if !h.kappa {
		along := c*math.Cos(p.bias) + s*math.Sin(p.bias)
		p.kappa = concentration(along / math.Max(precise+opposite, 1e-12))
	}
	free, expected := 1.0, n // share and number left for what is not held
	if h.opposite {
		free -= p.opposite
		expected -= opposite
	}
	if h.guess {
		free -= p.guess
		expected -= n - precise - opposite
	}
	if !h.opposite {
		p.opposite = free * opposite / math.Max(expected, 1e-12)
	}
	if !h.guess {
		p.guess = free * (n - precise - opposite) / math.Max(expected, 1e-12)
	}
	return p
}

// starts for concentration, and for the shares of opposite responses and guesses.
var (
	startKappas = []float64{3, 30, 300}
	startShares = [][2]float64{{0.1, 0.1}, {0.1, 0.6}}
)

// best is the highest of climbs from several starts, with the given values held.
func (f *fitter) best(at parameters, h held, enough float64) (parameters, float64) {
	h.bias = h.bias || f.options.NoBias
	if f.options.NoOpposite {
		at.opposite, h.opposite = 0, true
	}
	var best parameters
	value := math.Inf(-1)
	for _, kappa := range startKappas {
		for _, shares := range startShares {
			start := at
			if !h.kappa {
				start.kappa = kappa
			}
			left := 1.0
			if h.guess {
				left -= at.guess
			}
			if !h.opposite {
				start.opposite = shares[0] * left
			}
			if !h.guess {
				start.guess = shares[1] * (1 - start.opposite)
			}
			if p, v := f.climb(start, h, enough); v > value {
				best, value = p, v
			}
			if value >= enough {
				return best, value
			}
		}
	}
	return best, value
}

func (m *Mixture) fill(f *fitter) {
	never := math.Inf(1)
	p, value := f.best(parameters{}, held{}, never)
	uniform := -float64(m.Count) * math.Log(2*math.Pi)
	m.LogLikelihood = math.Max(value, uniform)
	m.UniformP = f.options.uniformP(2 * (value - uniform))
	if m.UniformP > 0.05 {
		m.Explanation = fmt.Sprintf("The responses cannot be told from guesses (p = %.2g): there is no precision to estimate.", m.UniformP)
		return
	}
	m.Kappa = p.kappa
	m.Bias.Valid, m.Bias.Value = true, p.bias/degree
	m.Deviation.Valid, m.Deviation.Value = true, Deviation(p.kappa)
	m.Opposite.Valid, m.Opposite.Value = true, p.opposite
	m.Guess.Valid, m.Guess.Value = true, p.guess
	_, without := f.best(parameters{}, held{opposite: true}, never)
	m.OppositeP = halfChi(value - without)
	_, without = f.best(parameters{}, held{guess: true}, never)
	m.GuessP = halfChi(value - without)
	z := math.Sqrt2 * math.Erfinv(f.options.Confidence)
	m.intervals(f, p, value-z*z/2)
	m.Explanation = fmt.Sprintf("%.3g%% of the responses are precise with a standard deviation of %.3g°, %.3g%% opposite, %.3g%% guesses.", 100*(1-p.opposite-p.guess), m.Deviation.Value, 100*p.opposite, 100*p.guess)
	if p.kappa >= maxKappa {
		m.Explanation += " The precision is at the limit of what is looked for."
	}
	if math.Abs(m.Bias.Value) >= f.options.MaxBias {
		m.Explanation += " The bias is at the limit of what is looked for: check the coding of directions."
	}
}

// uniformP is the p value of the likelihood ratio against guesses only. Concentration,
// bias and the opposite share mean nothing when all responses are guesses, so that Wilks's
// theorem does not hold; χ² with 2 degrees of freedom, 3 more for a free bias and 2 more for
// opposite responses is conservative: in 300 simulations each with 20, 100 and 400 uniform
// responses its 5% point was exceeded in 1 to 4%.
func (o Options) uniformP(statistic float64) float64 {
	freedom := 2.0
	if !o.NoBias {
		freedom += 3
	}
	if !o.NoOpposite {
		freedom += 2
	}
	return distuv.ChiSquared{K: freedom}.Survival(math.Max(statistic, 0))
}

func halfChi(gain float64) float64 {
	if gain <= 1e-9 {
		return 1
	}
	return distuv.ChiSquared{K: 1}.Survival(2*gain) / 2
}

// intervals finds profile intervals: of the shares from 0 to 1, of ln κ between κ = 0.05
// and its bound, of the bias up to its bound.
func (m *Mixture) intervals(f *fitter, p parameters, target float64) {
	warm := p
	above := func(at parameters, h held) bool {
		hw := h
		hw.bias = hw.bias || f.options.NoBias
		hw.opposite = hw.opposite || f.options.NoOpposite
		q, v := f.climb(warm.with(at, h), hw, target)
		if v < target {
			q, v = f.best(at, h, target)
		}
		if v >= target {
			warm = q
		}
		return v >= target
	}
	m.Guess.Interval = share(p.guess, func(x float64) bool { return above(parameters{guess: x}, held{guess: true}) })
	if f.options.NoOpposite {
		m.Opposite.Interval = psychometric.Interval{}
	} else {
		m.Opposite.Interval = share(p.opposite, func(x float64) bool { return above(parameters{opposite: x}, held{opposite: true}) })
	}
	kappa := func(x float64) bool { return above(parameters{kappa: math.Exp(x)}, held{kappa: true}) }
	low, high := math.Log(0.05), math.Log(maxKappa)
	x := clamp(math.Log(math.Max(p.kappa, 0.05)), low, high)
	m.Deviation.Interval = psychometric.Interval{Low: 0, High: math.Inf(1), OpenLow: true, OpenHigh: true}
	if !kappa(high) {
		m.Deviation.Interval.Low, m.Deviation.Interval.OpenLow = Deviation(math.Exp(bisect(kappa, x, high))), false
	}
	if !kappa(low) {
		m.Deviation.Interval.High, m.Deviation.Interval.OpenHigh = Deviation(math.Exp(bisect(kappa, x, low))), false
	}
	if f.options.NoBias {
		m.Bias.Interval = psychometric.Interval{}
		return
	}
	bias := func(x float64) bool { return above(parameters{bias: x}, held{bias: true}) }
	for _, side := range []float64{-1, 1} {
		end, open := side*f.options.MaxBias*degree, true
		if !bias(end) {
			end, open = bisect(bias, p.bias, end), false
		}
		if side < 0 {
			m.Bias.Interval.Low, m.Bias.Interval.OpenLow = end/degree, open
		} else {
			m.Bias.Interval.High, m.Bias.Interval.OpenHigh = end/degree, open
		}
	}
}

// with is p with the held parameters replaced, its shares made to fit.
func (p parameters) with(at parameters, h held) parameters {
	if h.bias {
		p.bias = at.bias
	}
	if h.kappa {
		p.kappa = at.kappa
	}
	if h.guess {
		p.opposite *= (1 - at.guess) / math.Max(1-p.guess, 1e-9)
		p.guess = at.guess
	}
	if h.opposite {
		p.guess *= (1 - at.opposite) / math.Max(1-p.opposite, 1e-9)
		p.opposite = at.opposite
	}
	return p
}

// share is the interval of a share between 0 and 1.
func share(estimate float64, inside func(float64) bool) psychometric.Interval {
	i := psychometric.Interval{Low: 0, High: 1}
	if estimate > 0 && !inside(0) {
		i.Low = bisect(inside, estimate, 0)
	}
	if estimate < 1 && !inside(1-1e-9) {
		i.High = bisect(inside, estimate, 1-1e-9)
	}
	return i
}

func bisect(inside func(float64) bool, in, out float64) float64 {
	for range 25 {
		middle := (in + out) / 2
		if inside(middle) {
			in = middle
		} else {
			out = middle
		}
	}
	return in
}

func clamp(x, low, high float64) float64 { return math.Min(math.Max(x, low), high) }
