package psychometric

import "math"

// regressionGroups is the largest number of groups of levels in the first start.
const regressionGroups = 8

// regression gives a start: the line u = β (z − α) through the transformed proportions
// of groups of neighbouring levels with about equal numbers of trials, weighted by their
// information as in one step of an iterated probit analysis (Finney DJ, Probit
// Analysis, 3rd ed. 1971), with the given lapse rate. Proportions are kept off the asymptotes.
func (p *problem) regression(lapse float64) vector {
	sum := regressionSums{problem: p, lapse: lapse}
	from, to := p.finite()
	total := 0.0
	for i := from; i < to; i++ {
		total += p.n[i]
	}
	share := 0.0
	if to-from > regressionGroups {
		share = total / regressionGroups
	}
	n, k, nz := 0.0, 0.0, 0.0
	for i := from; i < to; i++ {
		n, k, nz = n+p.n[i], k+p.k[i], nz+p.n[i]*p.z[i]
		if n >= share || i == to-1 {
			sum.add(n, k, nz/n)
			n, k, nz = 0, 0, 0
		}
	}
	return p.clip(sum.line())
}

// regressionSums are the weighted sums of the line.
type regressionSums struct {
	problem         *problem
	lapse           float64
	w, z, u, zz, zu float64
}

func (s *regressionSums) add(n, k, z float64) {
	m := s.problem.model
	bottom := m.bottom(s.lapse)
	rise := m.top(s.lapse) - bottom
	f := clamp(((k+0.5)/(n+1)-bottom)/rise, 0.03, 0.97)
	u := m.Shape.Quantile(f)
	d := rise * m.Shape.at(u).d
	yes := bottom + rise*f
	w := n * d * d / (yes * (1 - yes))
	s.w += w
	s.z += w * z
	s.u += w * u
	s.zz += w * z * z
	s.zu += w * z * u
}

// line is the start: slopes between spreads of 0.08 and 3 ranges.
func (s *regressionSums) line() vector {
	p := s.problem
	z, u := s.z/s.w, s.u/s.w
	width := p.model.Shape.width()
	beta := clamp((s.zu/s.w-z*u)/math.Max(s.zz/s.w-z*z, 1e-9), width/3, width/0.08)
	if !p.free[iSlope] {
		beta = math.Exp(p.low[iSlope])
	}
	q := p.model.offset(p.model.Criterion, s.lapse).q
	return vector{clamp(z-(u-q)/beta, -1, 1), math.Log(beta), s.lapse}
}
