package psychometric

import "math"

// Parameters of the likelihood, all on the standardised scale of a problem.
const (
	iThreshold = iota // threshold at the criterion
	iSlope            // ln β
	iLapse            // lapse rate
)

type vector [3]float64

type matrix [3][3]float64

// problem is one likelihood: data on a standardised scale on which the finite levels
// run from −½ to ½, the model, and the bounds of the parameters.
type problem struct {
	model  Model
	center float64 // z = center + sign · width · standardised z
	width  float64
	z      []float64 // ascending
	n, k   []float64

	free      [3]bool
	low, high vector

	start startTable
}

// floor keeps logarithms finite where a probability underflows.
const floor = 1e-300

// newProblem prepares the likelihood of merged data under a checked model.
func newProblem(d Data, m Model) *problem {
	p := &problem{model: m, width: 1}
	p.z = make([]float64, len(d))
	p.n = make([]float64, len(d))
	p.k = make([]float64, len(d))
	for i, l := range d {
		at := i
		if m.Falling {
			at = len(d) - 1 - i
		}
		p.z[at] = m.sign() * m.onScale(l.X)
		p.n[at], p.k[at] = float64(l.N), float64(l.K)
	}
	p.standardise()
	p.setBounds()
	return p
}

// finite is the range of indices of finite levels; a level of 0 on a log10 scale is not finite.
func (p *problem) finite() (from, to int) {
	to = len(p.z)
	for from < to && math.IsInf(p.z[from], 0) {
		from++
	}
	for to > from && math.IsInf(p.z[to-1], 0) {
		to--
	}
	return from, to
}

func (p *problem) standardise() {
	from, to := p.finite()
	if from == to {
		return
	}
	low, high := p.z[from], p.z[to-1]
	p.center = p.model.sign() * (low + high) / 2
	if high > low {
		p.width = high - low
	} else if p.model.Slope > 0 {
		p.width = p.model.Shape.width() / p.model.Slope
	}
	for i := from; i < to; i++ {
		p.z[i] = (p.z[i] - p.model.sign()*p.center) / p.width
	}
}

// Bounds of the search on the standardised scale. Beyond them nothing changes that
// data could show: a function that takes 20 times the tested range for its rise is a
// constant there, and one that rises within a twentieth of the smallest gap between
// levels is a step.
const (
	farthest      = 10.0 // |threshold| ≤ this many ranges from the middle
	shallowest    = 20.0 // spread (F = 0.1 to 0.9) at most this many ranges
	steepestShare = 0.05 // spread at least this share of the smallest gap …
	steepest      = 1e-4 // … and at least this share of the range
)

func (p *problem) setBounds() {
	low, high := p.model.Lapse.bounds()
	w := p.model.Shape.width()
	narrow := math.Max(steepestShare*p.smallestGap(), steepest)
	p.low = vector{-farthest, math.Log(w / shallowest), low}
	p.high = vector{farthest, math.Log(w / narrow), high}
	p.free = [3]bool{true, true, p.model.Lapse.Free && high > low}
	if p.model.Slope > 0 {
		s := math.Log(p.model.Slope * p.width)
		p.low[iSlope], p.high[iSlope] = s, s
		p.free[iSlope] = false
	}
}

func (p *problem) smallestGap() float64 {
	gap := 1.0
	from, to := p.finite()
	for i := from + 1; i < to; i++ {
		gap = math.Min(gap, p.z[i]-p.z[i-1])
	}
	return gap
}

// value is L at θ.
func (p *problem) value(theta vector) float64 {
	beta, lapse := math.Exp(theta[iSlope]), theta[iLapse]
	q := p.model.offset(p.model.Criterion, lapse).q
	bottom := p.model.bottom(lapse)
	rise := p.model.top(lapse) - bottom
	l := 0.0
	for i, z := range p.z {
		s := p.at(beta*(z-theta[iThreshold])+q, z)
		l += logLikelihood(p.n[i], p.k[i], bottom+rise*s.f, lapse+rise*s.c)
	}
	return l
}

// at is the standard function at u, or at the asymptote for an infinite level.
func (p *problem) at(u, z float64) standard {
	if z < -math.MaxFloat64 {
		return standard{c: 1}
	}
	if z > math.MaxFloat64 {
		return standard{f: 1}
	}
	return p.model.Shape.at(u)
}

// logLikelihood of k of n at probability yes, with no = 1 − yes.
func logLikelihood(n, k, yes, no float64) float64 {
	l := 0.0
	if k > 0 {
		l += k * math.Log(math.Max(yes, floor))
	}
	if n > k {
		l += (n - k) * math.Log(math.Max(no, floor))
	}
	return l
}

// derivatives are those of L at one θ. expected and observed are the Fisher
// information and the negative Hessian.
type derivatives struct {
	value    float64
	gradient vector
	expected matrix
	observed matrix
}

// differentiate is L with its first and second derivatives at θ.
func (p *problem) differentiate(theta vector) derivatives {
	var d derivatives
	beta, lapse := math.Exp(theta[iSlope]), theta[iLapse]
	q := p.model.offset(p.model.Criterion, lapse)
	bottom := p.model.bottom(lapse)
	rise := p.model.top(lapse) - bottom
	for i, z := range p.z {
		v := beta * (z - theta[iThreshold])
		s := p.at(v+q.q, z)
		if s.d == 0 {
			v = 0 // the product with a far or infinite level is 0, not undefined
		}
		yes := math.Max(bottom+rise*s.f, floor)
		no := math.Max(lapse+rise*s.c, floor)
		d.value += logLikelihood(p.n[i], p.k[i], yes, no)
		first, second := p.slopesOfP(s, beta, v, rise, q)
		d.add(p.n[i], p.k[i], yes, no, &first, &second)
	}
	d.mirror()
	return d
}

// slopesOfP are the first and (upper triangle) second derivatives of P by θ.
func (p *problem) slopesOfP(s standard, beta, v, rise float64, q quantile) (vector, matrix) {
	dRise, dBottom := -1.0, 0.0
	if p.model.Symmetric {
		dRise, dBottom = -2, 1
	}
	d, e := rise*s.d, rise*s.e
	first := vector{-d * beta, d * v, dBottom + dRise*s.f + d*q.dq}
	var second matrix
	second[0][0] = e * beta * beta
	second[0][1] = -beta * (e*v + d)
	second[0][2] = -beta * (dRise*s.d + e*q.dq)
	second[1][1] = e*v*v + d*v
	second[1][2] = v * (dRise*s.d + e*q.dq)
	second[2][2] = 2*dRise*s.d*q.dq + e*q.dq*q.dq + d*q.ddq
	return first, second
}

// add one level's part. Ratios to P and 1 − P are formed first so that nothing overflows.
func (d *derivatives) add(n, k, yes, no float64, first *vector, second *matrix) {
	toYes, toNo := 1/yes, 1/no
	for a := range 3 {
		ya, na := first[a]*toYes, first[a]*toNo
		d.gradient[a] += k*ya - (n-k)*na
		for b := a; b < 3; b++ {
			yb, nb := first[b]*toYes, first[b]*toNo
			d.expected[a][b] += n * (ya*first[b] + na*first[b])
			s := second[a][b]
			d.observed[a][b] += k*(ya*yb-s*toYes) + (n-k)*(na*nb+s*toNo)
		}
	}
}

func (d *derivatives) mirror() {
	for a := range 3 {
		for b := range a {
			d.expected[a][b] = d.expected[b][a]
			d.observed[a][b] = d.observed[b][a]
		}
	}
}

// saturated is the log-likelihood when every level has its own probability K/N.
func (p *problem) saturated() float64 {
	l := 0.0
	for i := range p.z {
		l += logLikelihood(p.n[i], p.k[i], p.k[i]/p.n[i], 1-p.k[i]/p.n[i])
	}
	return l
}
