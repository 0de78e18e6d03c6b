package psychometric

import "math"

// A profile interval of a parameter holds the values at which the likelihood,
// maximised over all other parameters, stays within half the χ²(1) quantile of its
// supremum. It needs no symmetry and can be open.

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
func (p *problem) profile(index int, value float64, warm vector) maximum {
	q := p.fixed(index, value)
	best := q.climb(warm)
	start, v := q.scan(q.clip(best.theta))
	if v > best.value {
		best = maximum{start, v, true}
	}
	if far := start[iSlope] != best.theta[iSlope] || start[iThreshold] != best.theta[iThreshold]; far || v == best.value {
		if m := q.climb(start); m.value > best.value {
			best = m
		}
	}
	return best
}

// scan tries other slopes (or thresholds, where the slope is held) with the rest of theta.
func (p *problem) scan(theta vector) (vector, float64) {
	best, value := theta, math.Inf(-1)
	try := func(t vector) {
		if v := p.value(p.clip(t)); v > value {
			best, value = p.clip(t), v
		}
	}
	if p.free[iSlope] {
		t := theta
		for _, s := range p.startSlopes() {
			t[iSlope] = s
			try(t)
		}
		t[iSlope] = p.low[iSlope]
		try(t)
		t[iSlope] = p.high[iSlope]
		try(t)
		return best, value
	}
	for i := range startThresholds {
		t := theta
		t[iThreshold] = -0.75 + 1.5*float64(i)/(startThresholds-1)
		try(t)
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
	inside, warm := from[index], from
	for {
		x, m, crossed := p.outward(index, inside, bound, step, target, warm)
		if !crossed {
			return bound, true
		}
		// The likelihood may rise again further out: look before settling.
		if again, w, ok := p.beyond(index, x, bound, math.Abs(x-inside), target, m.theta); ok {
			inside, warm = again, w
			continue
		}
		return p.crossing(index, inside, x, target, warm), false
	}
}

// outward steps away from inside until L falls below target.
func (p *problem) outward(index int, inside, bound, step, target float64, warm vector) (float64, maximum, bool) {
	sign := 1.0
	if bound < inside {
		sign = -1
	}
	x := inside
	for {
		if x == bound {
			return x, maximum{}, false
		}
		x += sign * step
		if sign*(x-bound) > 0 {
			x = bound
		}
		m := p.profile(index, x, warm)
		if m.value < target {
			return x, m, true
		}
		warm = m.theta
		step *= 1.5
	}
}

// beyond looks for a point past x, out to the bound, where L is back above target.
func (p *problem) beyond(index int, x, bound, step, target float64, warm vector) (float64, vector, bool) {
	for distance := step; ; distance *= 2.5 {
		y := x + distance
		if bound < x {
			y = x - distance
		}
		last := math.Abs(y-x) >= math.Abs(bound-x)
		if last {
			y = bound
		}
		m := p.profile(index, y, warm)
		if m.value >= target {
			return y, m.theta, true
		}
		if last {
			return 0, warm, false
		}
		warm = m.theta
	}
}

// crossing finds where L passes target between inside (above) and outside (below), by
// regula falsi with halving (the Illinois rule), which a steep or bent profile cannot defeat.
func (p *problem) crossing(index int, inside, outside, target float64, warm vector) float64 {
	tolerance := 1e-7 * math.Max(1, math.Abs(inside))
	m := p.profile(index, inside, warm)
	a, fa, theta := inside, m.value-target, m.theta
	b, fb := outside, p.profile(index, outside, theta).value-target
	for i := 0; i < 60 && math.Abs(b-a) > tolerance; i++ {
		x := (a*fb - b*fa) / (fb - fa)
		if i%3 == 2 || math.IsNaN(x) {
			x = (a + b) / 2
		}
		m := p.profile(index, x, theta)
		f := m.value - target
		if math.Abs(f) < 1e-8 {
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
	list := surveyed()
	first, last := -1, -1
	warm := vector{0, math.Log(p.model.Shape.width()), (p.low[iLapse] + p.high[iLapse]) / 2}
	thetas := make([]vector, len(list))
	for j, t := range list {
		m := p.profile(iThreshold, t, warm)
		warm, thetas[j] = m.theta, m.theta
		if m.value >= target {
			if first < 0 {
				first = j
			}
			last = j
		}
	}
	if first < 0 {
		return span{-farthest, farthest, true, true}, false
	}
	i = span{low: -farthest, openLow: true, high: farthest, openHigh: true}
	if first > 0 {
		i.openLow = false
		i.low = p.crossing(iThreshold, list[first], list[first-1], target, thetas[first])
	}
	if last < len(list)-1 {
		i.openHigh = false
		i.high = p.crossing(iThreshold, list[last], list[last+1], target, thetas[last])
	}
	return i, true
}
