package psychometric

import "math"

// maximum is the end of a search.
type maximum struct {
	theta     vector
	value     float64
	converged bool
}

const (
	maxIterations = 200
	// decrementTolerance is the gain in L promised by a Newton step from which that step is
	// the last: convergence being quadratic, what is left after it is far below rounding.
	decrementTolerance = 1e-9
)

// longest steps in one iteration: threshold in ranges, ln slope, lapse rate.
var longestStep = vector{0.5, 1, 0.05}

// climb finds the local maximum of L above start by Newton's method within the bounds:
// parameters at a bound that the gradient pushes outwards are held there; where the
// observed information is not positive definite the expected one is used.
func (p *problem) climb(start vector) maximum {
	theta := p.clip(start)
	var room [2]derivatives
	now, next := &room[0], &room[1]
	p.differentiate(theta, now)
	damping := 0.0
	for range maxIterations {
		step, ok := newtonStep(now, p.active(theta, &now.gradient), damping)
		if !ok {
			return maximum{theta, now.value, false}
		}
		gain := dot(step, now.gradient) / 2
		if gain < decrementTolerance {
			return p.settle(theta, step, now.value, gain)
		}
		if p.search(&theta, shorten(step), now, next) {
			damping = 0
			now, next = next, now
			continue
		}
		// No ascent along a step that promises little: rounding. Otherwise bend towards the gradient.
		if gain < 1e-9 {
			return maximum{theta, now.value, true}
		}
		if damping = math.Max(10*damping, 1e-3); damping > 1e9 {
			return maximum{theta, now.value, false}
		}
	}
	return maximum{theta, now.value, false}
}

func (p *problem) clip(theta vector) vector {
	for i := range theta {
		theta[i] = math.Min(math.Max(theta[i], p.low[i]), p.high[i])
	}
	return theta
}

func (p *problem) active(theta vector, gradient *vector) [3]bool {
	active := p.free
	for i := range theta {
		atLow := theta[i] <= p.low[i] && gradient[i] <= 0
		atHigh := theta[i] >= p.high[i] && gradient[i] >= 0
		if atLow || atHigh {
			active[i] = false
		}
	}
	return active
}

// settle takes the last step.
func (p *problem) settle(theta, step vector, value, gain float64) maximum {
	for i := range theta {
		theta[i] += step[i]
	}
	return maximum{p.clip(theta), value + math.Max(gain, 0), true}
}

// search halves the step until L rises, and moves theta there.
func (p *problem) search(theta *vector, step vector, now, next *derivatives) bool {
	for range 30 {
		to := *theta
		for i := range to {
			to[i] += step[i]
			step[i] /= 2
		}
		to = p.clip(to)
		if to == *theta {
			return false
		}
		p.differentiate(to, next)
		if next.value > now.value {
			*theta = to
			return true
		}
	}
	return false
}

func shorten(step vector) vector {
	ratio := 1.0
	for i := range step {
		if r := math.Abs(step[i]) / longestStep[i]; r > ratio {
			ratio = r
		}
	}
	for i := range step {
		step[i] /= ratio
	}
	return step
}

// newtonStep solves information · step = gradient over the active parameters.
func newtonStep(d *derivatives, active [3]bool, damping float64) (vector, bool) {
	if damping == 0 {
		if step, ok := solve(&d.observed, d.gradient, active, 0); ok {
			return step, true
		}
	}
	for ridge := math.Max(damping, 1e-12); ridge < 1e3; ridge *= 100 {
		if step, ok := solve(&d.expected, d.gradient, active, ridge); ok {
			return step, true
		}
	}
	return vector{}, false
}

// solve is Cholesky's method on the active rows of a, its diagonal raised by the
// share ridge (and by ridge itself); ok is false unless a is positive definite there.
func solve(a *matrix, b vector, active [3]bool, ridge float64) (vector, bool) {
	var l matrix
	var y vector
	for i := range 3 {
		if !active[i] {
			continue
		}
		for j := 0; j <= i; j++ {
			if !active[j] {
				continue
			}
			s := a[i][j]
			if i == j {
				s += ridge * (1 + a[i][i])
			}
			for m := range j {
				s -= l[i][m] * l[j][m]
			}
			if i > j {
				l[i][j] = s / l[j][j]
				continue
			}
			if !(s > 1e-13*math.Abs(a[i][i])) || math.IsInf(s, 0) {
				return vector{}, false
			}
			l[i][i] = math.Sqrt(s)
		}
		y[i] = b[i]
		for m := range i {
			y[i] -= l[i][m] * y[m]
		}
		y[i] /= l[i][i]
	}
	var x vector
	for i := 2; i >= 0; i-- {
		if !active[i] {
			continue
		}
		x[i] = y[i]
		for m := i + 1; m < 3; m++ {
			x[i] -= l[m][i] * x[m]
		}
		x[i] /= l[i][i]
	}
	return x, true
}

func dot(a, b vector) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

// invert is the inverse of a on the active rows, zero elsewhere.
func invert(a *matrix, active [3]bool) (matrix, bool) {
	var inverse matrix
	for j := range 3 {
		if !active[j] {
			continue
		}
		var e vector
		e[j] = 1
		x, ok := solve(a, e, active, 0)
		if !ok {
			return matrix{}, false
		}
		for i := range 3 {
			inverse[i][j] = x[i]
		}
	}
	return inverse, true
}
