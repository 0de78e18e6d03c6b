package psychometric

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Condition is the data of one condition, session or participant.
type Condition struct {
	Name string
	Data Data
}

// Sharing says which parameters all conditions have in common.
type Sharing struct {
	Threshold bool `json:"threshold"`
	Slope     bool `json:"slope"`
	Lapse     bool `json:"lapse"`
}

// Joint is one function per condition, fitted at once with shared parameters.
type Joint struct {
	Sharing    Sharing        `json:"sharing"`
	Conditions []ConditionFit `json:"conditions"`
	// LogLikelihood is the supremum over all parameters, without binomial coefficients.
	LogLikelihood float64 `json:"log_likelihood"`
	Parameters    int     `json:"parameters"`
	// Settled is false where the search ended without a maximum: at a step, at a constant,
	// or undecided.
	Settled bool `json:"settled"`
}

// ConditionFit are the parameters of one condition. Valid is false where they are the
// end of a search without a maximum and mean nothing by themselves.
type ConditionFit struct {
	Name      string  `json:"name"`
	Valid     bool    `json:"valid"`
	Threshold float64 `json:"threshold"` // level's unit
	Slope     float64 `json:"slope"`
	Lapse     float64 `json:"lapse"`
	SEOnScale float64 `json:"se_on_scale"` // of the threshold, expected information; 0: none
}

// FitJoint fits all conditions with the parameters in s shared. The model's Slope,
// Criterion and lapse rule hold for all conditions.
func FitJoint(conditions []Condition, m Model, s Sharing) (*Joint, error) {
	j, err := newJoint(conditions, m, s)
	if err != nil {
		return nil, err
	}
	out := &Joint{Sharing: s, Parameters: j.count}
	if s == (Sharing{}) {
		j.fitSeparately(out, conditions)
		return out, nil
	}
	best := jointMaximum{value: math.Inf(-1)}
	for _, x := range j.starts() {
		if m := j.climb(x); m.value > best.value {
			best = m
		}
	}
	out.LogLikelihood, out.Settled = best.value, best.converged
	errs := j.standardErrors(best.x)
	for i, p := range j.problems {
		theta := j.theta(best.x, i)
		inside := theta[iThreshold] > p.low[iThreshold] && theta[iThreshold] < p.high[iThreshold]
		inside = inside && (!p.free[iSlope] || theta[iSlope] > p.low[iSlope] && theta[iSlope] < p.high[iSlope])
		out.Settled = out.Settled && inside
		out.Conditions = append(out.Conditions, p.conditionFit(conditions[i].Name, theta, inside, errs[i]))
	}
	return out, nil
}

// joint maps one vector of parameters to those of several problems on a common scale.
type joint struct {
	problems []*problem
	index    [][3]int // of every problem's parameters; −1: held
	count    int
}

var errNoConditions = errors.New("a joint fit needs at least two conditions")

func newJoint(conditions []Condition, m Model, s Sharing) (*joint, error) {
	if len(conditions) < 2 {
		return nil, errNoConditions
	}
	if err := m.Check(); err != nil {
		return nil, err
	}
	j := &joint{}
	var all Data
	for _, c := range conditions {
		if err := c.Data.check(m); err != nil {
			return nil, fmt.Errorf("condition %q: %w", c.Name, err)
		}
		d := c.Data.Merge()
		p := emptyProblem(d, m)
		if from, to := p.finite(); to == from || to-from == 1 && !s.Slope && m.Slope == 0 {
			return nil, fmt.Errorf("condition %q: fewer than two levels (above 0 on a log10 scale) cannot determine threshold and slope", c.Name)
		}
		j.problems = append(j.problems, p)
		all = append(all, d...)
	}
	center, width := emptyProblem(all.Merge(), m).extent()
	for _, p := range j.problems {
		p.standardise(center, width)
	}
	j.commonBounds()
	j.assign(s)
	return j, nil
}

// commonBounds lets shared parameters range as widely as any condition allows.
func (j *joint) commonBounds() {
	high := j.problems[0].high
	for _, p := range j.problems {
		high[iSlope] = math.Max(high[iSlope], p.high[iSlope])
	}
	for _, p := range j.problems {
		p.high[iSlope] = high[iSlope]
	}
}

func (j *joint) assign(s Sharing) {
	shared := [3]bool{s.Threshold, s.Slope, s.Lapse}
	common := [3]int{-1, -1, -1}
	for _, p := range j.problems {
		var index [3]int
		for a := range index {
			index[a] = -1
			if !p.free[a] {
				continue
			}
			if shared[a] && common[a] >= 0 {
				index[a] = common[a]
				continue
			}
			index[a] = j.count
			common[a] = j.count
			j.count++
		}
		j.index = append(j.index, index)
	}
}

// fitSeparately takes every condition's supremum.
func (j *joint) fitSeparately(out *Joint, names []Condition) {
	out.Settled = true
	for i, p := range j.problems {
		s := p.summit()
		out.LogLikelihood += s.value
		valid := s.outcome == interior && s.converged
		out.Settled = out.Settled && valid
		se := 0.0
		if valid {
			var d derivatives
			p.differentiate(s.theta, &d)
			if inverse, ok := invert(&d.expected, p.active(s.theta, &d.gradient)); ok {
				se = math.Sqrt(inverse[0][0]) * p.width
			}
		}
		out.Conditions = append(out.Conditions, p.conditionFit(names[i].Name, s.theta, valid, se))
	}
}

func (p *problem) conditionFit(name string, theta vector, valid bool, se float64) ConditionFit {
	return ConditionFit{
		Name: name, Valid: valid,
		Threshold: p.model.offScale(p.scaled(theta[iThreshold])),
		Slope:     math.Exp(theta[iSlope]) / p.width,
		Lapse:     theta[iLapse],
		SEOnScale: se,
	}
}

// theta are the parameters of problem i.
func (j *joint) theta(x []float64, i int) vector {
	p := j.problems[i]
	theta := p.low // what is held has equal bounds
	for a, at := range j.index[i] {
		if at >= 0 {
			theta[a] = x[at]
		}
	}
	return theta
}

// gather is the inverse of theta, shared parameters averaged over trials.
func (j *joint) gather(thetas []vector) []float64 {
	x, weight := make([]float64, j.count), make([]float64, j.count)
	for i, p := range j.problems {
		n, _ := p.totals()
		for a, at := range j.index[i] {
			if at >= 0 {
				x[at] += n * thetas[i][a]
				weight[at] += n
			}
		}
	}
	for at := range x {
		x[at] /= weight[at]
	}
	return x
}

// starts are the separate fits, and separate thresholds with every slope of the grid.
func (j *joint) starts() [][]float64 {
	thetas := make([]vector, len(j.problems))
	for i, p := range j.problems {
		s := p.summit()
		thetas[i] = s.theta
		if s.outcome != interior {
			thetas[i] = p.regression(p.lapseStarts(nil)[0])
		}
	}
	list := [][]float64{j.gather(thetas)}
	for _, slope := range j.problems[0].startSlopes() {
		for i, p := range j.problems {
			thetas[i][iSlope] = slope
			thetas[i] = p.clip(thetas[i])
		}
		list = append(list, j.gather(thetas))
	}
	return list
}

// jointMaximum is the end of a joint search.
type jointMaximum struct {
	x         []float64
	value     float64
	converged bool
}

func (j *joint) value(x []float64) float64 {
	l := 0.0
	for i, p := range j.problems {
		l += p.value(j.theta(x, i))
	}
	return l
}

// system adds up gradients and information of the problems.
func (j *joint) system(x []float64) (gradient []float64, observed, expected *mat.SymDense) {
	gradient = make([]float64, j.count)
	observed, expected = mat.NewSymDense(j.count, nil), mat.NewSymDense(j.count, nil)
	var d derivatives
	for i, p := range j.problems {
		p.differentiate(j.theta(x, i), &d)
		for a, at := range j.index[i] {
			if at < 0 {
				continue
			}
			gradient[at] += d.gradient[a]
			for b, bt := range j.index[i] {
				if bt >= at {
					observed.SetSym(at, bt, observed.At(at, bt)+d.observed[a][b])
					expected.SetSym(at, bt, expected.At(at, bt)+d.expected[a][b])
				}
			}
		}
	}
	return gradient, observed, expected
}

// bounds of every joint parameter.
func (j *joint) bounds() (low, high []float64) {
	low, high = make([]float64, j.count), make([]float64, j.count)
	for i, p := range j.problems {
		for a, at := range j.index[i] {
			if at >= 0 {
				low[at], high[at] = p.low[a], p.high[a]
			}
		}
	}
	return low, high
}

// climb is Newton's method as in problem.climb, in any number of dimensions.
func (j *joint) climb(x []float64) jointMaximum {
	low, high := j.bounds()
	for i := range x {
		x[i] = clamp(x[i], low[i], high[i])
	}
	value := j.value(x)
	for range maxIterations {
		gradient, observed, expected := j.system(x)
		for i := range x {
			if x[i] <= low[i] && gradient[i] <= 0 || x[i] >= high[i] && gradient[i] >= 0 {
				isolate(observed, i)
				gradient[i] = 0
			}
		}
		step, ok := jointStep(gradient, observed, expected)
		if !ok {
			return jointMaximum{x, value, false}
		}
		gain := 0.0
		for i := range step {
			gain += step[i] * gradient[i] / 2
		}
		next, better := j.search(x, step, value, low, high)
		if gain < decrementTolerance || better <= value {
			return jointMaximum{next, math.Max(value, better), gain < 1e-6}
		}
		x, value = next, better
	}
	return jointMaximum{x, value, false}
}

// isolate takes row i out of a system of equations.
func isolate(a *mat.SymDense, i int) {
	n := a.SymmetricDim()
	for k := range n {
		a.SetSym(i, k, 0)
	}
	a.SetSym(i, i, 1)
}

// jointStep solves (observed + ridge · diagonal of expected) · step = gradient.
func jointStep(gradient []float64, observed, expected *mat.SymDense) ([]float64, bool) {
	n := len(gradient)
	for ridge := 0.0; ridge < 1e12; ridge = math.Max(4*ridge, 1e-2) {
		a := mat.NewSymDense(n, nil)
		a.CopySym(observed)
		for i := range n {
			a.SetSym(i, i, a.At(i, i)+ridge*(expected.At(i, i)+1e-9))
		}
		var c mat.Cholesky
		if !c.Factorize(a) {
			continue
		}
		step := mat.NewVecDense(n, nil)
		if err := c.SolveVecTo(step, mat.NewVecDense(n, gradient)); err != nil {
			continue
		}
		return step.RawVector().Data, true
	}
	return nil, false
}

// search halves the step until L rises.
func (j *joint) search(x, step []float64, value float64, low, high []float64) ([]float64, float64) {
	scale := 1.0
	for _, s := range step {
		scale = math.Min(scale, 1/math.Max(math.Abs(s), 1e-300))
	}
	for range 25 {
		next := make([]float64, len(x))
		for i := range x {
			next[i] = clamp(x[i]+scale*step[i], low[i], high[i])
		}
		if v := j.value(next); v > value {
			return next, v
		}
		scale /= 2
	}
	return x, value
}

// standardErrors of every condition's threshold on the scale; 0 where there is none.
func (j *joint) standardErrors(x []float64) []float64 {
	errs := make([]float64, len(j.problems))
	gradient, _, expected := j.system(x)
	low, high := j.bounds()
	for i := range x {
		if x[i] <= low[i] && gradient[i] <= 0 || x[i] >= high[i] && gradient[i] >= 0 {
			isolate(expected, i)
		}
	}
	var c mat.Cholesky
	if !c.Factorize(expected) {
		return errs
	}
	inverse := mat.NewSymDense(j.count, nil)
	if err := c.InverseTo(inverse); err != nil {
		return errs
	}
	for i, p := range j.problems {
		if at := j.index[i][iThreshold]; at >= 0 {
			errs[i] = math.Sqrt(inverse.At(at, at)) * p.width
		}
	}
	return errs
}
