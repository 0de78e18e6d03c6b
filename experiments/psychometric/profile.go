package psychometric

import "math"

// A profile interval of a parameter holds the values at which the likelihood,
// maximised over all other parameters, stays within half the χ²(1) quantile of its
// supremum. It needs no symmetry and can be open.
//
// For the threshold the plain profile interval is too short in small samples: with some
// eighty trials the likelihood is often greatest at an almost infinite slope, for which
// the threshold seems known very well, and a nominal 95% interval covers 87 to 93%. The
// interval of the threshold therefore comes from a steadied likelihood, in which slopes
// that would take the function from F = 0.1 to 0.9 within less than the tested range count
// less: L − ½ ln²(range/spread) for spread < range. The range is √12 standard deviations
// of the levels over trials, which for evenly spaced levels is their range. The drill
// BenchmarkCoverage prints what is covered with and without.

// span is an interval on the standardised scale; an open side ends at the search's bound.
type span struct {
	low, high         float64
	openLow, openHigh bool
}

// drop is the fall of L at the ends of an interval with the given confidence.
func drop(confidence float64) float64 {
	z := math.Sqrt2 * math.Erfinv(confidence)
	return z * z / 2
}

// fixed is the problem with one parameter held at a value.
func (p *problem) fixed(index int, value float64) *problem {
	q := *p
	q.free[index] = false
	q.low[index], q.high[index] = value, value
	return &q
}

// profile is the maximum of L with one parameter held at value; warm is a point nearby.
// A second climb starts where a scan promises a maximum other than the one climbed to.
func (p *problem) profile(index int, value float64, warm vector) maximum {
	q := p.fixed(index, value)
	best := q.climb(warm)
	start, v := q.scan(q.clip(best.theta))
	far := math.Abs(start[iSlope]-best.theta[iSlope]) > 0.8 || math.Abs(start[iThreshold]-best.theta[iThreshold]) > 0.25
	if far && v > best.value-2 {
		if m := q.climb(start); m.value > best.value {
			best = m
		}
	}
	if v > best.value {
		best = maximum{start, v, true}
	}
	return best
}

// scanStep in ln slope: a factor of 3.
const scanStep = 1.1

// scan tries other slopes (or thresholds, where the slope is held), each with the lapse
// rate of theta and, if it is free, with few and with many lapses.
func (p *problem) scan(theta vector) (vector, float64) {
	best, value := theta, math.Inf(-1)
	var room [3]float64
	lapses := append(room[:0], theta[iLapse])
	if p.free[iLapse] {
		lapses = p.lapseStarts(lapses)
	}
	index, step := iSlope, scanStep
	from, to := p.low[iSlope], p.high[iSlope]
	if !p.free[iSlope] {
		index, step, from, to = iThreshold, 0.125, -0.75, 0.75
		if !p.free[iThreshold] {
			from, to = theta[iThreshold], theta[iThreshold]
		}
	}
	for _, lapse := range lapses {
		for x := from; ; x = math.Min(x+step, to) {
			t := theta
			t[index], t[iLapse] = x, lapse
			if v := p.value(t); v > value {
				best, value = t, v
			}
			if x >= to {
				break
			}
		}
	}
	return best, value
}

// walk finds the end of the interval on one side (direction −1 or 1) of from, a point
// inside it. step is the first distance tried.
func (p *problem) walk(index int, from vector, direction, step, target float64) (end float64, open bool) {
	bound := p.high[index]
	if direction < 0 {
		bound = p.low[index]
	}
	in := point{from[index], maximum{theta: from, value: math.Inf(1)}}
	for {
		before, after, crossed := p.outward(index, in, bound, step, target)
		if !crossed {
			return bound, true
		}
		// The likelihood may rise again further out: look before settling.
		if again, ok := p.beyond(index, after, bound, math.Abs(after.x-before.x), target); ok {
			in = again
			continue
		}
		return p.crossing(index, before, after, target), false
	}
}

// point is a value of the profiled parameter with the maximum there.
type point struct {
	x float64
	maximum
}

func (p *problem) profilePoint(index int, x float64, warm vector) point {
	return point{x, p.profile(index, x, warm)}
}

// outward steps away from a point inside until L falls below target: between the two
// points returned it crosses.
func (p *problem) outward(index int, in point, bound, step, target float64) (before, after point, crossed bool) {
	sign := 1.0
	if bound < in.x {
		sign = -1
	}
	for in.x != bound {
		x := in.x + sign*step
		if sign*(x-bound) > 0 {
			x = bound
		}
		next := p.profilePoint(index, x, in.theta)
		if next.value < target {
			return in, next, true
		}
		in = next
		step *= 1.5
	}
	return in, in, false
}

// beyond looks for a point past out, towards the bound, where L is back above target.
func (p *problem) beyond(index int, out point, bound, step, target float64) (point, bool) {
	sign := math.Copysign(1, bound-out.x)
	far := math.Abs(bound - out.x)
	for distance := step; far > 0; distance *= 4 {
		distance = math.Min(distance, far)
		next := p.profilePoint(index, out.x+sign*distance, out.theta)
		if next.value >= target {
			return next, true
		}
		if distance == far {
			break
		}
	}
	return point{}, false
}

// crossing finds where L passes target between a point above it and one below, by
// regula falsi with halving (the Illinois rule) and a bisection every third time, which a
// steep or bent profile cannot defeat.
func (p *problem) crossing(index int, above, below point, target float64) float64 {
	tolerance := 1e-6 * math.Max(1, math.Abs(above.x))
	a, b := above.x, below.x
	fa, fb := math.Max(math.Min(above.value, target+10)-target, 0), below.value-target
	theta := above.theta
	for i := 0; i < 60 && math.Abs(b-a) > tolerance; i++ {
		x := (a + b) / 2
		if i%3 != 2 && fb < fa {
			x = (a*fb - b*fa) / (fb - fa)
		}
		m := p.profile(index, x, theta)
		f := m.value - target
		if math.Abs(f) < 1e-6 {
			return x
		}
		if f >= 0 {
			a, fa, theta = x, f, m.theta
			fb /= 2
		} else {
			b, fb = x, f
			fa /= 2
		}
	}
	return (a + b) / 2
}

// interval is the profile interval around a supremum at a function or a step.
func (p *problem) interval(index int, s *summit, step, target float64) span {
	var i span
	i.low, i.openLow = p.walk(index, s.theta, -1, step, target)
	i.high, i.openHigh = p.walk(index, s.theta, 1, step, target)
	return i
}

// surveyed are the thresholds at which a likelihood without a maximum is looked at.
func surveyed() []float64 {
	var list []float64
	for i := -20; i <= 20; i++ {
		list = append(list, 0.04*float64(i))
	}
	for x := 1.0; x < farthest; x *= 1.35 {
		list = append([]float64{-x}, list...)
		list = append(list, x)
	}
	return append(append([]float64{-farthest}, list...), farthest)
}

// survey is the threshold's interval where the supremum lies at a constant; ok is false
// if no threshold within the bounds comes near the supremum.
func (p *problem) survey(target float64) (i span, ok bool) {
	var list []point
	first, last := -1, -1
	warm := vector{0, math.Log(p.model.Shape.width()), (p.low[iLapse] + p.high[iLapse]) / 2}
	for j, t := range surveyed() {
		list = append(list, p.profilePoint(iThreshold, t, warm))
		warm = list[j].theta
		if list[j].value >= target {
			if first < 0 {
				first = j
			}
			last = j
		}
	}
	i = span{low: -farthest, openLow: true, high: farthest, openHigh: true}
	if first < 0 {
		return i, false
	}
	if first > 0 {
		i.openLow = false
		i.low = p.crossing(iThreshold, list[first], list[first-1], target)
	}
	if last < len(list)-1 {
		i.openHigh = false
		i.high = p.crossing(iThreshold, list[last], list[last+1], target)
	}
	return i, true
}

// steadied is the problem with the weight on steep slopes.
func (p *problem) steadied() *problem {
	n, sum, squares := 0.0, 0.0, 0.0
	from, to := p.finite()
	for i := from; i < to; i++ {
		n += p.n[i]
		sum += p.n[i] * p.z[i]
		squares += p.n[i] * p.z[i] * p.z[i]
	}
	reach := 1.0 // for a single level, whose standardised scale has the function's own width
	if variance := squares/n - sum/n*sum/n; n > 0 && variance > 1e-9 {
		reach = math.Sqrt(12 * variance)
	}
	q := *p
	q.steady = true
	q.reference = math.Log(p.model.Shape.width() / reach)
	return &q
}

// steadiedMaximum is the maximum of the steadied likelihood, s being the plain one's.
func (p *problem) steadiedMaximum(s *summit) maximum {
	best := p.climb(s.theta)
	for over := 2.0; over >= -1; over-- {
		start := s.theta
		start[iSlope] = p.reference + over
		if m := p.climb(start); m.value > best.value {
			best = m
		}
	}
	return best
}

// thresholdInterval is the interval of the threshold around a function or a step.
func (p *problem) thresholdInterval(s *summit, step float64) span {
	fall := drop(p.model.confidence())
	if p.model.PlainProfile || !p.free[iSlope] {
		return p.interval(iThreshold, s, step, s.value-fall)
	}
	q := p.steadied()
	steady := summit{maximum: q.steadiedMaximum(s)}
	i := q.interval(iThreshold, &steady, step, steady.value-fall)
	i.low = math.Min(i.low, s.theta[iThreshold])
	i.high = math.Max(i.high, s.theta[iThreshold])
	return i
}
