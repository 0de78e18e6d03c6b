package psychometric

import "math"

// The likelihood of a psychometric function has no maximum for some data: it grows
// towards a step (infinite slope), or towards a constant (slope 0, or a threshold
// infinitely far away). Both limits have a likelihood in closed form, given here, so
// that a search is never asked to run to infinity.

// limit is such a limiting function.
type limit struct {
	value  float64 // its log-likelihood
	theta  vector  // parameters that come close to it
	within bool    // the step lies between two levels rather than at one
	// between are the standardised levels that enclose the step, if within.
	between [2]float64
}

// constantLimit is the best P that does not depend on the level: any between the
// asymptotes, or one of the asymptotes where the slope is held.
func (p *problem) constantLimit() float64 {
	n, k := p.totals()
	if !p.free[iSlope] {
		bottom, top := p.model.bottom(p.low[iLapse]), p.model.top(clamp(1-k/n, p.low[iLapse], p.high[iLapse]))
		if p.model.Symmetric {
			bottom = clamp(k/n, p.low[iLapse], p.high[iLapse])
		}
		return math.Max(logLikelihood(n, k, bottom, 1-bottom), logLikelihood(n, k, top, 1-top))
	}
	best := math.Inf(-1)
	for _, lapse := range []float64{p.low[iLapse], p.high[iLapse]} {
		c := clamp(k/n, p.model.bottom(lapse), p.model.top(lapse))
		best = math.Max(best, logLikelihood(n, k, c, 1-c))
	}
	return best
}

func (p *problem) totals() (n, k float64) {
	for i := range p.n {
		n += p.n[i]
		k += p.k[i]
	}
	return n, k
}

// stepLimit is the best step: all levels below it at the lower asymptote, all above at
// the upper, one level at it with a probability of its own.
func (p *problem) stepLimit() limit {
	best := limit{value: math.Inf(-1)}
	from, to := p.finite()
	for j := from; j < to; j++ {
		lapse := p.stepLapse(j)
		bottom, top := p.model.bottom(lapse), p.model.top(lapse)
		at := clamp(p.k[j]/p.n[j], bottom, top)
		l := logLikelihood(p.n[j], p.k[j], at, 1-at)
		for i := range p.z {
			if i < j {
				l += logLikelihood(p.n[i], p.k[i], bottom, 1-bottom)
			} else if i > j {
				l += logLikelihood(p.n[i], p.k[i], top, 1-top)
			}
		}
		if l > best.value {
			best = p.step(j, from, to, lapse, (at-bottom)/(top-bottom))
			best.value = l
		}
	}
	return best
}

// stepLapse is the best lapse rate for a step at level j.
func (p *problem) stepLapse(j int) float64 {
	wrong, n := 0.0, 0.0
	for i := range p.z {
		if i > j {
			n += p.n[i]
			wrong += p.n[i] - p.k[i]
		} else if i < j && p.model.Symmetric {
			n += p.n[i]
			wrong += p.k[i]
		}
	}
	if n == 0 {
		return p.low[iLapse]
	}
	return clamp(wrong/n, p.low[iLapse], p.high[iLapse])
}

// step gives parameters for a step at level j at which F = f; a level with F = 0 or 1
// is one that the step does not touch.
func (p *problem) step(j, from, to int, lapse, f float64) limit {
	slope := p.high[iSlope]
	beta := math.Exp(slope)
	location := p.z[j] - p.model.Shape.Quantile(clamp(f, 1e-9, 1-1e-9))/beta
	var l limit
	low, high := j, j
	if f <= 0 {
		high = min(j+1, to-1)
	} else if f >= 1 {
		low = max(j-1, from)
	}
	if low < high {
		l.within = true
		l.between = [2]float64{p.z[low], p.z[high]}
		location = (p.z[low] + p.z[high]) / 2
	}
	q := p.model.offset(p.model.Criterion, lapse).q
	l.theta = p.clip(vector{location + q/beta, slope, lapse})
	return l
}

func clamp(x, low, high float64) float64 { return math.Min(math.Max(x, low), high) }

// outcome says where the supremum of the likelihood lies.
type outcome int

const (
	interior  outcome = iota // at a finite function
	stepLike                 // at a step
	levelLike                // at a constant
)

// summit is the supremum of L and where it is.
type summit struct {
	maximum
	outcome  outcome
	step     limit
	constant float64 // L of the best constant
}

const (
	// tie is the difference in L that counts as none.
	tie = 1e-8
	// nearStepSpread, in smallest gaps, is where a climb from near the step starts.
	nearStepSpread = 0.5
)

// summit finds the supremum from the grid's starts and from the step.
func (p *problem) summit() summit {
	s := summit{maximum: maximum{value: math.Inf(-1)}}
	var room [8]vector
	for _, start := range p.starts(room[:0]) {
		s.take(p.climb(start))
	}
	s.constant = p.constantLimit()
	if p.free[iSlope] {
		s.step = p.stepLimit()
		if s.step.value > s.value-tie {
			near := s.step.theta
			spread := math.Max(nearStepSpread*p.smallestGap(), 2*steepest)
			near[iSlope] = math.Min(math.Log(p.model.Shape.width()/spread), p.high[iSlope])
			s.take(p.climb(near))
		}
		if s.step.value > s.value-tie {
			s.maximum = maximum{s.step.theta, s.step.value, true}
			s.outcome = stepLike
		}
	}
	if s.constant > s.value-tie {
		s.value = math.Max(s.value, s.constant)
		s.outcome = levelLike
	}
	return s
}

func (s *summit) take(m maximum) {
	if m.value > s.value {
		s.maximum = m
	}
}
