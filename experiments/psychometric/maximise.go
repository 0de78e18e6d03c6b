package psychometric

import "math"

// maximum is the end of a search.
type maximum struct {
	theta     vector
	value     float64
	converged bool
}

const (
	maxIterations = 100
	// decrementTolerance is the gain in L promised by a Newton step from which that step is
	// the last: convergence being quadratic, what is left after it is far below rounding.
	decrementTolerance = 1e-9
)

// longest steps in one iteration: threshold in ranges, ln slope, lapse rate.
var longestStep = vector{0.5, 1, 0.05}

// climb finds the local maximum of L above start by Newton's method within the bounds:
// parameters at a bound that the gradient pushes outwards are held there.
func (p *problem) climb(start vector) maximum {
	return p.climbBut(start, &maximum{value: math.Inf(-1)})
}

// near is the distance in every parameter at which a climb has joined a known maximum.
var near = vector{0.05, 0.15, 0.01}

// climbBut is climb, ended early (with the known maximum) where it comes near a known one.
func (p *problem) climbBut(start vector, known *maximum) maximum {
	theta := p.clip(start)
	var room [2]derivatives
	now, next := &room[0], &room[1]
	p.differentiate(theta, now)
	damping := 0.0
	for range maxIterations {
		step, ok := newtonStep(now, p.active(theta, &now.gradient), damping)
		if !ok {
			break
		}
		if dot(step, now.gradient)/2 < decrementTolerance {
			for i := range theta {
				theta[i] += step[i]
			}
			theta = p.clip(theta)
			return maximum{theta, p.value(theta), true}
		}
		if p.search(&theta, shorten(step), now, next) {
			damping = 0
			now, next = next, now
			if joined(theta, known.theta) && !math.IsInf(known.value, -1) {
				return *known
			}
			continue
		}
		// The step promises what rounding or a bound prevents: bend towards the gradient.
		if damping = math.Max(10*damping, 1e-2); damping > 1e9 {
			break
		}
	}
	return maximum{theta, p.value(theta), false}
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

// joined says whether theta is near a known maximum.
func joined(theta, known vector) bool {
	for i := range theta {
		if math.Abs(theta[i]-known[i]) > near[i] {
			return false
		}
	}
	return true
}

// search halves the step until L rises, and moves theta there. A step after which the
// slope of L along it is not much below zero has not passed the maximum by far and is
// taken without computing L, which would cost as much again.
func (p *problem) search(theta *vector, step vector, now, next *derivatives) bool {
	value, valued := 0.0, false
	for range 12 {
		to := *theta
		for i := range to {
			to[i] += step[i]
		}
		to = p.clip(to)
		if to == *theta {
			return false
		}
		var moved vector // the step within the bounds
		for i := range to {
			moved[i] = to[i] - theta[i]
		}
		p.differentiate(to, next)
		if rise := dot(now.gradient, moved); rise > 0 && dot(next.gradient, moved) > -0.5*rise {
			*theta = to
			return true
		}
		if !valued {
			value, valued = p.value(*theta), true
		}
		if p.value(to) > value {
			*theta = to
			return true
		}
		for i := range step {
			step[i] /= 2
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

// newtonStep solves (observed + ridge · diagonal of expected) · step = gradient over the
// active parameters, with the least ridge from damping up that makes the matrix positive
// definite. It keeps the observed curvature across a narrow ridge, which the expected
// information, off its maximum, does not know.
func newtonStep(d *derivatives, active [3]bool, damping float64) (vector, bool) {
	for ridge := damping; ridge < 1e12; ridge = math.Max(4*ridge, 1e-2) {
		a := d.observed
		for i := range a {
			a[i][i] += ridge * (d.expected[i][i] + 1e-9)
		}
		if step, ok := solve(&a, d.gradient, active); ok {
			return step, true
		}
	}
	return vector{}, false
}

// solve is Cholesky's method on the active rows of a; ok is false unless a is positive
// definite there.
func solve(a *matrix, b vector, active [3]bool) (vector, bool) {
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
		x, ok := solve(a, e, active)
		if !ok {
			return matrix{}, false
		}
		for i := range 3 {
			inverse[i][j] = x[i]
		}
	}
	return inverse, true
}
