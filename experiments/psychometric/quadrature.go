package psychometric

import (
	"math"

	"gonum.org/v1/gonum/integrate/quad"
)

// quadrature integrates exp(L) over threshold and ln slope by Gauss–Hermite nodes placed
// about the mode in the directions of its curvature, and over the lapse rate by
// Gauss–Legendre nodes between its bounds.
type quadrature struct {
	node, weight       []float64 // Hermite: ∫ e^(−x²) f
	lapseNode, lapseWt []float64 // Legendre on 0 to 1
}

const (
	hermiteNodes  = 9
	legendreNodes = 4
)

func newQuadrature() quadrature {
	q := quadrature{
		node: make([]float64, hermiteNodes), weight: make([]float64, hermiteNodes),
		lapseNode: make([]float64, legendreNodes), lapseWt: make([]float64, legendreNodes),
	}
	quad.Hermite{}.FixedLocations(q.node, q.weight, math.Inf(-1), math.Inf(1))
	quad.Legendre{}.FixedLocations(q.lapseNode, q.lapseWt, 0, 1)
	return q
}

// moments are mean and covariance of the parameters under exp(L) and the logarithm of its
// integral. The problem needs priors that make it integrable.
func (q *quadrature) moments(p *problem, mode maximum) (vector, matrix, float64) {
	c := p.curvature(mode.theta)
	// Cholesky factor of the covariance of (threshold, ln slope).
	l00 := math.Sqrt(c[0][0])
	l10, l11 := 0.0, 0.0
	if p.free[iSlope] {
		l10 = c[1][0] / l00
		l11 = math.Sqrt(math.Max(c[1][1]-l10*l10, 1e-18))
	}
	sum := accumulator{top: mode.value}
	q.eachLapse(p, func(lapse, share float64) {
		for a, x := range q.node {
			if !p.free[iSlope] {
				theta := vector{mode.theta[0] + math.Sqrt2*l00*x, mode.theta[1], lapse}
				sum.add(theta, p.value(theta)+x*x, share*q.weight[a])
				continue
			}
			for b, y := range q.node {
				theta := vector{mode.theta[0] + math.Sqrt2*l00*x, mode.theta[1] + math.Sqrt2*(l10*x+l11*y), lapse}
				sum.add(theta, p.value(theta)+x*x+y*y, share*q.weight[a]*q.weight[b])
			}
		}
	})
	mean, cov, log := sum.moments()
	if p.free[iSlope] {
		return mean, cov, log + math.Log(2*l00*l11)
	}
	return mean, cov, log + math.Log(math.Sqrt2*l00)
}

// eachLapse calls f for the fixed lapse rate or for nodes between its bounds.
func (q *quadrature) eachLapse(p *problem, f func(lapse, share float64)) {
	if !p.free[iLapse] {
		f(p.low[iLapse], 1)
		return
	}
	for i, x := range q.lapseNode {
		f(p.low[iLapse]+x*(p.high[iLapse]-p.low[iLapse]), q.lapseWt[i])
	}
}

// curvature is the covariance of the parameters from the observed information at a
// mode, from the expected one where that is no covariance.
func (p *problem) curvature(theta vector) matrix {
	var d derivatives
	p.differentiate(theta, &d)
	active := p.active(theta, &d.gradient)
	active[iThreshold], active[iSlope] = true, p.free[iSlope]
	c, ok := invert(&d.observed, active)
	if !ok {
		if c, ok = invert(&d.expected, active); !ok {
			c[0][0], c[1][1] = 1, 1
		}
	}
	return c
}

// accumulator sums moments of weighted points, relative to exp(top).
type accumulator struct {
	top     float64
	total   float64
	first   vector
	squares matrix
}

func (s *accumulator) add(theta vector, log, weight float64) {
	w := weight * math.Exp(log-s.top)
	s.total += w
	for a := range 3 {
		s.first[a] += w * theta[a]
		for b := range 3 {
			s.squares[a][b] += w * theta[a] * theta[b]
		}
	}
}

func (s *accumulator) moments() (vector, matrix, float64) {
	var mean vector
	var cov matrix
	for a := range 3 {
		mean[a] = s.first[a] / s.total
	}
	for a := range 3 {
		for b := range 3 {
			cov[a][b] = s.squares[a][b]/s.total - mean[a]*mean[b]
		}
		cov[a][a] = math.Max(cov[a][a], 0)
	}
	return mean, cov, s.top + math.Log(s.total)
}
