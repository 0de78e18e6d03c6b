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
	// decrementTolerance bounds the gain in L that a further Newton step promises.
	decrementTolerance = 1e-13
)

// longest steps in one iteration: threshold in ranges, ln slope, lapse rate.
var longestStep = vector{0.5, 1, 0.05}

// climb finds the local maximum of L above start by Newton's method within the bounds:
// parameters at a bound that the gradient pushes outwards are held there; where the
// observed information is not positive definite the expected one is used.
func (p *problem) climb(start vector) maximum {
	theta := p.clip(start)
	d := p.differentiate(theta)
	damping := 0.0
	for range maxIterations {
		active := p.active(theta, &d.gradient)
		step, ok := newtonStep(&d, active, damping)
		if !ok {
			return maximum{theta, d.value, false}
		}
		gain := dot(step, d.gradient) / 2
		if gain < decrementTolerance {
			return maximum{theta, d.value, true}
		}
		next, value, found := p.search(theta, shorten(step), d.value)
		if !found {
			// No ascent along a step that promises little: rounding. Otherwise bend towards the gradient.
			if gain < 1e-9 {
				return maximum{theta, d.value, true}
			}
			if damping = math.Max(10*damping, 1e-3); damping > 1e9 {
				return maximum{theta, d.value, false}
			}
			continue
		}
		damping = 0
		theta = next
		d = p.differentiate(theta)
		d.value = math.Max(d.value, value)
	}
	return maximum{theta, d.value, false}
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

// search halves the step until L rises.
func (p *problem) search(theta, step vector, value float64) (vector, float64, bool) {
	for range 30 {
		next := theta
		for i := range next {
			next[i] += step[i]
			step[i] /= 2
		}
		next = p.clip(next)
		if next == theta {
			return theta, value, false
		}
		if v := p.value(next); v > value {
			return next, v, true
		}
	}
	return theta, value, false
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
