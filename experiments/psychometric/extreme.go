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

// candidate is the best step at one level.
type candidate struct {
	value float64
	lapse float64
	f     float64 // share of the rise at the level itself
}

// weighSteps fills p.steps with the best step at every finite level: all levels below it
// at the lower asymptote, all above at the upper, the level itself with a probability of
// its own. It returns the index of the best.
func (p *problem) weighSteps() int {
	from, to := p.finite()
	best := from
	n, k := p.totals()
	var belowN, belowK float64
	for j := range to {
		n -= p.n[j]
		k -= p.k[j]
		if j >= from {
			lapse := p.stepLapse(belowN, belowK, n, k)
			bottom, top := p.model.bottom(lapse), p.model.top(lapse)
			at := clamp(p.k[j]/p.n[j], bottom, top)
			l := logLikelihood(p.n[j], p.k[j], at, 1-at)
			l += logLikelihood(belowN, belowK, bottom, 1-bottom) + logLikelihood(n, k, top, lapse)
			p.steps[j] = candidate{l, lapse, (at - bottom) / (top - bottom)}
			if l > p.steps[best].value {
				best = j
			}
		}
		belowN += p.n[j]
		belowK += p.k[j]
	}
	return best
}

// stepLimit is the best step.
func (p *problem) stepLimit() limit {
	return p.step(p.weighSteps())
}

// peaks of the steps' likelihood within lead of value, the best few.
func (p *problem) stepPeaks(value, lead float64, list []int) []int {
	from, to := p.finite()
	for j := from; j < to; j++ {
		v := p.steps[j].value
		peak := (j == from || v >= p.steps[j-1].value) && (j == to-1 || v > p.steps[j+1].value)
		if peak && v > value-lead && len(list) < cap(list) {
			list = append(list, j)
		}
	}
	return list
}

// stepLapse is the best lapse rate for a step with these counts below and above it.
func (p *problem) stepLapse(belowN, belowK, n, k float64) float64 {
	wrong := n - k
	if p.model.Symmetric {
		n += belowN
		wrong += belowK
	}
	if n == 0 {
		return p.low[iLapse]
	}
	return clamp(wrong/n, p.low[iLapse], p.high[iLapse])
}

// step describes the candidate at level j; a level with F = 0 or 1 is one that the step
// does not touch.
func (p *problem) step(j int) limit {
	from, to := p.finite()
	slope := p.high[iSlope]
	beta := math.Exp(slope)
	c := p.steps[j]
	location := p.z[j] - p.model.Shape.Quantile(clamp(c.f, 1e-9, 1-1e-9))/beta
	l := limit{value: c.value}
	low, high := j, j
	if c.f <= 0 {
		high = min(j+1, to-1)
	} else if c.f >= 1 {
		low = max(j-1, from)
	}
	if low < high {
		l.within = true
		l.between = [2]float64{p.z[low], p.z[high]}
		location = (p.z[low] + p.z[high]) / 2
	}
	q := p.model.offset(p.model.Criterion, c.lapse).q
	l.theta = p.clip(vector{location + q/beta, slope, c.lapse})
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
	// clearLead is the lead of L over step and constant beyond which the first two or three
	// climbs are trusted, safeLead that beyond which two are if the lapse rate is fixed. Of
	// 150,000 random data sets with such leads, some 20 have a higher maximum elsewhere.
	safeLead  = 3.0
	clearLead = 1.0
	// fewLevels is the number of levels up to which that holds; an adaptive track with a
	// trial or two at each of many levels can have a second maximum anywhere.
	fewLevels = 12
	// peakLead is how far below the best L a step may lie to be climbed from.
	peakLead = 3.0
	// steeper is added to the regression's ln slope for a second start: lapses make the
	// regression shallow.
	steeper = 1.1
	// firstStepSpread, in ranges, is the spread of the start at the best step.
	firstStepSpread = 0.25
)

// nearStepSpreads, in smallest gaps between levels, are where climbs from near a step start.
var nearStepSpreads = []float64{1, 0.3}

// summit finds the supremum: climbs from the regression (with few lapses, if their rate is
// free), from a steeper one (with many), from near the best step and, unless that settles
// it, from all good steps and from the grid's starts.
func (p *problem) summit() summit {
	s := summit{maximum: maximum{value: math.Inf(-1)}}
	s.constant = p.constantLimit()
	s.step = limit{value: math.Inf(-1)}
	var room [2]float64
	lapses := p.lapseStarts(room[:0])
	few, many := lapses[0], lapses[len(lapses)-1] // the same where the rate is fixed
	s.climb(p, p.regression(few))
	if p.free[iSlope] {
		line := p.regression(many)
		line[iSlope] += steeper
		s.climb(p, line)
		s.step = p.stepLimit()
		if p.free[iLapse] || s.value < math.Max(s.constant, s.step.value)+safeLead {
			near := s.step.theta
			near[iSlope] = math.Log(p.model.Shape.width() / firstStepSpread)
			near[iLapse] = many
			s.climb(p, near)
		}
	}
	lead := s.value - math.Max(s.constant, s.step.value)
	if !s.converged || lead < clearLead || len(p.z) > fewLevels {
		s.searchWidely(p)
	}
	if s.step.value > s.value-tie {
		s.maximum = maximum{s.step.theta, s.step.value, true}
		s.outcome = stepLike
	}
	if s.constant > s.value-tie {
		s.value = math.Max(s.value, s.constant)
		s.outcome = levelLike
	}
	return s
}

// searchWidely climbs from many starts.
func (s *summit) searchWidely(p *problem) {
	if p.free[iSlope] {
		gap := p.smallestGap()
		var room [6]int
		for _, j := range p.stepPeaks(s.value, peakLead, room[:0]) {
			for _, spread := range nearStepSpreads {
				s.climbFromStep(p, p.step(j).theta, math.Max(spread*gap, 0.02))
			}
		}
	}
	var room [24]vector
	for _, start := range p.starts(room[:0]) {
		s.climb(p, start)
	}
	if s.value < s.constant+clearLead {
		// Of nearly flat data, a tail of a function whose threshold is far away may be best.
		for _, threshold := range []float64{-1.2, 1.2} {
			s.climbFromStep(p, vector{threshold}, 1)
			s.climbFromStep(p, vector{threshold}, 2.5)
			s.climbFromStep(p, vector{4 * threshold}, 10)
		}
	}
	if p.free[iSlope] && s.step.value > s.value-1 {
		for _, spread := range []float64{0.05, 0.15, 0.4} {
			s.climbFromStep(p, s.step.theta, spread)
		}
	}
}

// climbFromStep climbs from a step made less steep, of the given spread in ranges.
func (s *summit) climbFromStep(p *problem, step vector, spread float64) {
	step[iSlope] = math.Log(p.model.Shape.width() / spread) // clipped where the slope is held
	var room [2]float64
	for _, step[iLapse] = range p.lapseStarts(room[:0]) {
		s.climb(p, step)
	}
}

// lapseStarts are the lapse rates to start from: the fixed one, or few and many lapses.
func (p *problem) lapseStarts(list []float64) []float64 {
	if !p.free[iLapse] {
		return append(list, p.low[iLapse])
	}
	for _, share := range startLapses {
		list = append(list, p.low[iLapse]+share*(p.high[iLapse]-p.low[iLapse]))
	}
	return list
}

// climb keeps the maximum above start if it is better.
func (s *summit) climb(p *problem, start vector) {
	if m := p.climbBut(start, &s.maximum); m.value > s.value {
		s.maximum = m
	}
}
