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

	// steady adds the weight on steep slopes described at steadied to L.
	steady    bool
	reference float64 // ln slope above which it works

	// phi is the overdispersion ρ/(1 − ρ) of the beta-binomial likelihood; 0: binomial.
	phi float64
	// prior is normal on threshold and ln slope, where its precision is not 0.
	prior [2]normal

	start startTable
	steps []candidate
}

// normal is a normal prior of one parameter; precision is 1/variance.
type normal struct{ mean, precision float64 }

// floor keeps logarithms and squared reciprocals finite where a probability underflows.
const floor = 1e-150

// newProblem prepares the likelihood of merged data under a checked model, on a
// standardised scale of its own.
func newProblem(d Data, m Model) *problem {
	p := emptyProblem(d, m)
	center, width := p.extent()
	p.standardise(center, width)
	return p
}

// emptyProblem is a problem whose levels are still on the scale z.
func emptyProblem(d Data, m Model) *problem {
	p := &problem{model: m}
	room := make([]float64, 3*len(d))
	p.z, p.n, p.k = room[:len(d):len(d)], room[len(d):2*len(d):2*len(d)], room[2*len(d):]
	p.steps = make([]candidate, len(d))
	for i, l := range d {
		at := i
		if m.Falling {
			at = len(d) - 1 - i
		}
		p.z[at] = m.sign() * m.onScale(l.X)
		p.n[at], p.k[at] = float64(l.N), float64(l.K)
	}
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

// extent is the middle and the width of the range of levels on the scale z.
func (p *problem) extent() (center, width float64) {
	from, to := p.finite()
	if from == to {
		return 0, 1
	}
	low, high := p.z[from], p.z[to-1]
	center, width = p.model.sign()*(low+high)/2, 1
	if high > low {
		width = high - low
	} else if p.model.Slope > 0 {
		width = p.model.Shape.width() / p.model.Slope
	}
	return center, width
}

func (p *problem) standardise(center, width float64) {
	p.center, p.width = center, width
	from, to := p.finite()
	for i := from; i < to; i++ {
		p.z[i] = (p.z[i] - p.model.sign()*center) / width
	}
	p.setBounds()
}

// Bounds of the search on the standardised scale. Beyond them nothing changes that
// data could show: a function that takes 1000 times the tested range for its rise is a
// constant there, and one that rises within a twentieth of the smallest gap between
// levels is a step.
const (
	farthest      = 10.0 // |threshold| ≤ this many ranges from the middle
	shallowest    = 1e3  // spread (F = 0.1 to 0.9) at most this many ranges
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
		yes, no := bottom+rise*s.f, lapse+rise*s.c
		if p.phi > 0 {
			l += betaBinomial(p.n[i], p.k[i], yes, no, p.phi)
		} else {
			l += logLikelihood(p.n[i], p.k[i], yes, no)
		}
	}
	if over := theta[iSlope] - p.reference; p.steady && over > 0 {
		l -= over * over / 2
	}
	for i, n := range p.prior {
		l -= n.precision * (theta[i] - n.mean) * (theta[i] - n.mean) / 2
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
		l = k * math.Log(max(yes, floor))
	}
	if n > k {
		l += (n - k) * math.Log(max(no, floor))
	}
	return l
}

// derivatives are those of L at one θ. expected and observed are the Fisher
// information and the negative Hessian.
type derivatives struct {
	gradient vector
	expected matrix
	observed matrix
}

// differentiate sets d to the first and second derivatives of L at θ; those by the lapse
// rate are 0 unless it is free.
func (p *problem) differentiate(theta vector, d *derivatives) {
	*d = derivatives{}
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
		yes := max(bottom+rise*s.f, floor)
		no := max(lapse+rise*s.c, floor)
		w := weigh(p.n[i], p.k[i], yes, no)
		if p.phi > 0 {
			w = weighBetaBinomial(p.n[i], p.k[i], yes, no, p.phi)
		}
		d.addFunction(w, rise*s.d, rise*s.e, beta, v)
		if p.free[iLapse] {
			d.addLapse(w, s, beta, v, rise, q, p.model.Symmetric)
		}
	}
	if over := theta[iSlope] - p.reference; p.steady && over > 0 {
		d.gradient[iSlope] -= over
		d.expected[iSlope][iSlope]++
		d.observed[iSlope][iSlope]++
	}
	for i, n := range p.prior {
		d.gradient[i] -= n.precision * (theta[i] - n.mean)
		d.expected[i][i] += n.precision
		d.observed[i][i] += n.precision
	}
	d.mirror()
}

// weights turn derivatives of P into those of L: the score K/P − (N−K)/(1−P), its
// negative derivative, and that derivative's expectation.
type weights struct{ score, observed, expected float64 }

func weigh(n, k, yes, no float64) weights {
	toYes, toNo := 1/yes, 1/no
	a, b := k*toYes, (n-k)*toNo
	return weights{a - b, a*toYes + b*toNo, n * toYes * toNo}
}

// addFunction adds one level's part in threshold and slope; d and e are the first two
// derivatives of P by u, and u_t = −β, u_s = v.
func (d *derivatives) addFunction(w weights, d1, d2, beta, v float64) {
	p0, p1 := -d1*beta, d1*v
	d.gradient[0] += w.score * p0
	d.gradient[1] += w.score * p1
	d.expected[0][0] += w.expected * p0 * p0
	d.expected[0][1] += w.expected * p0 * p1
	d.expected[1][1] += w.expected * p1 * p1
	d.observed[0][0] += w.observed*p0*p0 - w.score*d2*beta*beta
	d.observed[0][1] += w.observed*p0*p1 + w.score*beta*(d2*v+d1)
	d.observed[1][1] += w.observed*p1*p1 - w.score*v*(d2*v+d1)
}

// addLapse adds one level's part in the lapse rate.
func (d *derivatives) addLapse(w weights, s standard, beta, v, rise float64, q quantile, symmetric bool) {
	dRise, dBottom := -1.0, 0.0
	if symmetric {
		dRise, dBottom = -2, 1
	}
	d1, d2 := rise*s.d, rise*s.e
	p0, p1, p2 := -d1*beta, d1*v, dBottom+dRise*s.f+d1*q.dq
	mixed := dRise*s.d + d2*q.dq
	d.gradient[2] += w.score * p2
	d.expected[0][2] += w.expected * p0 * p2
	d.expected[1][2] += w.expected * p1 * p2
	d.expected[2][2] += w.expected * p2 * p2
	d.observed[0][2] += w.observed*p0*p2 + w.score*beta*mixed
	d.observed[1][2] += w.observed*p1*p2 - w.score*v*mixed
	d.observed[2][2] += w.observed*p2*p2 - w.score*(2*dRise*s.d*q.dq+d2*q.dq*q.dq+d1*q.ddq)
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
