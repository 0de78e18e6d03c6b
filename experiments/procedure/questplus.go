package procedure

import (
	"math"

	"distal/experiments/exact"
)

// questPlus is QUEST+ (Watson AB 2017, J Vis 17(3):10) over threshold, slope
// and lapse rate of a Weibull function on the chosen scale,
//
//	P(x) = g + (1 − g − l) (1 − exp(−10^(b (x − T))))        log10 scale, x = log10 level
//	P(x) = g + (1 − g − l) (1 − exp(−(x/T)^b)) = the same with x, T as logarithms
//	                                                            (linear scale: levels stepped evenly)
//
// so T is the level with F = 1 − 1/e. Each trial is placed where the expected
// entropy of the whole posterior is least or, with Nuisance, where the expected
// variance of log T is least after slope and lapse are summed out: trials are
// spent on the threshold alone (Prins N 2013, J Vis 13(7):3). Prins takes the
// entropy of that marginal; the variance is what an estimate is judged by. It is
// reckoned in units of the function's own spread, 1/b, or else the few shallow
// functions still considered, with their wide errors, would choose the levels.
type questPlus struct {
	spec       Spec
	thresholds []float64 // log10 of threshold
	levels     []float64 // as shown
	cells      int       // slopes × lapses
	// right is P(correct) for level, threshold and cell: [level][threshold][cell].
	right []float64
	// doubt is the entropy (nats) of the outcome for the same, kept for the
	// joint entropy only.
	doubt     []float64
	posterior []float64 // [threshold][cell]
	// scaled is the posterior times slope squared, mass its sum over the cells
	// of each threshold, centre the mean log threshold that it gives.
	scaled   []float64
	mass     []float64
	centre   float64
	trials   int
	level    [1]float64
	chosen   int
	ready    bool
	estimate Estimate
}

func newQuestPlus(s Spec) *questPlus {
	q := &questPlus{spec: s, cells: len(s.Slopes) * len(s.Lapses)}
	q.thresholds = grid(s.Scale, s.ThresholdMin, s.ThresholdMax, s.ThresholdCount)
	for i, x := range q.thresholds {
		q.thresholds[i] = exact.Log10(x)
	}
	q.levels = grid(s.Scale, s.Min, s.Max, s.LevelCount)
	q.right = make([]float64, len(q.levels)*len(q.thresholds)*q.cells)
	q.posterior = make([]float64, len(q.thresholds)*q.cells)
	q.scaled = make([]float64, len(q.posterior))
	q.mass = make([]float64, len(q.thresholds))
	q.tabulate()
	q.setPrior()
	q.marginalise()
	return q
}

// grid is n levels from low to high, evenly on the scale; the ends are exact.
func grid(scale Scale, low, high float64, n int) []float64 {
	list := make([]float64, n)
	a, b := onScale(scale, low), onScale(scale, high)
	for i := range list {
		share := float64(i) / float64(n-1)
		list[i] = offScale(scale, a+float64((b-a)*share))
	}
	list[0], list[n-1] = low, high
	return list
}

// leastChance keeps every answer possible: one that all parameters considered
// rule out (wrong at a sure level without lapses) would leave no posterior.
const leastChance = 1e-12

func (q *questPlus) tabulate() {
	i := 0
	for _, level := range q.levels {
		x := exact.Log10(max(level, 0)) // −∞ at 0 and below
		for _, t := range q.thresholds {
			for _, slope := range q.spec.Slopes {
				f := 0.0
				if level > 0 {
					f = -exact.Expm1(-exact.Exp10(float64(slope * (x - t))))
				}
				for _, lapse := range q.spec.Lapses {
					p := q.spec.Guess + float64((1-q.spec.Guess-lapse)*f)
					q.right[i] = min(max(p, leastChance), 1-leastChance)
					i++
				}
			}
		}
	}
	if q.spec.Nuisance {
		return
	}
	q.doubt = make([]float64, len(q.right))
	for i, p := range q.right {
		q.doubt[i] = plogp(p) + plogp(1-p)
	}
}

// setPrior weighs the thresholds; slopes and lapse rates are equally likely.
func (q *questPlus) setPrior() {
	total := 0.0
	for t := range q.thresholds {
		weight := 1.0
		if q.spec.Prior == RaisedCosine {
			share := float64(t) / float64(len(q.thresholds)-1)
			weight = priorFloor + float64((1-priorFloor)*(0.5-float64(0.5*exact.Cos(float64(2*exact.Pi*share)))))
		}
		for c := t * q.cells; c < (t+1)*q.cells; c++ {
			q.posterior[c] = weight
			total += weight
		}
	}
	for c := range q.posterior {
		q.posterior[c] /= total
	}
}

// priorFloor is the weight of the ends of the range, relative to its middle.
const priorFloor = 0.1

// marginalise sums slope and lapse out of the scaled posterior.
func (q *questPlus) marginalise() {
	if !q.spec.Nuisance {
		return
	}
	total, moment, c := 0.0, 0.0, 0
	for t := range q.thresholds {
		sum := 0.0
		for _, slope := range q.spec.Slopes {
			for range q.spec.Lapses {
				q.scaled[c] = float64(q.posterior[c] * slope * slope)
				sum += q.scaled[c]
				c++
			}
		}
		q.mass[t] = sum
		total += sum
		moment += float64(sum * q.thresholds[t])
	}
	q.centre = moment / total
	for t := range q.mass {
		q.mass[t] /= total
	}
	for c := range q.scaled {
		q.scaled[c] /= total
	}
}

func (q *questPlus) Next() ([]float64, bool) {
	if !q.ready {
		q.chosen = q.best()
		q.ready = true
	}
	q.level[0] = q.levels[q.chosen]
	return q.level[:], !q.ended()
}

func (q *questPlus) ended() bool {
	if q.trials >= q.spec.MaxTrials {
		return true
	}
	return q.spec.StopSDLog10 > 0 && q.trials >= max(q.spec.MinTrials, 1) && q.Estimate().SDLog10 < q.spec.StopSDLog10
}

// best is the index of the level with the least expected loss; the first of equals.
func (q *questPlus) best() int {
	best, least := 0, math.Inf(1)
	for i := range q.levels {
		var loss float64
		if q.spec.Nuisance {
			loss = q.marginalVariance(i)
		} else {
			loss = q.jointEntropy(i)
		}
		if loss < least {
			best, least = i, loss
		}
	}
	return best
}

// plogp is −p log p with 0 at p = 0.
func plogp(p float64) float64 {
	if p <= 0 {
		return 0
	}
	return float64(-p * exact.Log(p))
}

// negligible is the share of a threshold below which it cannot change the
// choice of a level.
const negligible = 1e-9

// marginalVariance is the expected variance of log threshold after a trial at
// level i, up to what is the same for all levels: with m_r = Σ_T p(r,T) (T − T̄)
// it is a constant less Σ_r m_r² / p(r), p being the scaled posterior.
func (q *questPlus) marginalVariance(i int) float64 {
	n := len(q.posterior)
	right := q.right[i*n : (i+1)*n]
	var hit, hitMoment, moment, total float64
	for t, mass := range q.mass {
		if mass < negligible {
			continue
		}
		from, to := t*q.cells, (t+1)*q.cells
		a := dot(q.scaled[from:to], right[from:to])
		x := q.thresholds[t] - q.centre
		hit += a
		hitMoment += float64(a * x)
		total += mass
		moment += float64(mass * x)
	}
	missMoment := moment - hitMoment
	return -float64(hitMoment*hitMoment)/hit - float64(missMoment*missMoment)/(total-hit)
}

// jointEntropy is the expected entropy (nats) of the posterior of all
// parameters after a trial at level i, less the entropy of the posterior now:
// Σ p(θ) H(r|θ) − H(r).
func (q *questPlus) jointEntropy(i int) float64 {
	n := len(q.posterior)
	total := dot(q.posterior, q.right[i*n:(i+1)*n])
	return dot(q.posterior, q.doubt[i*n:(i+1)*n]) - plogp(total) - plogp(1-total)
}

// dot is Σ p r in four interleaved sums, which a processor can overlap.
func dot(p, r []float64) float64 {
	var a, b, c, d float64
	for len(p) >= 4 && len(r) >= 4 {
		x, y := (*[4]float64)(p), (*[4]float64)(r) // one check of bounds for four
		a += float64(x[0] * y[0])
		b += float64(x[1] * y[1])
		c += float64(x[2] * y[2])
		d += float64(x[3] * y[3])
		p, r = p[4:], r[4:]
	}
	for i := range p {
		a += float64(p[i] * r[i])
	}
	return (a + b) + (c + d)
}

func (q *questPlus) Record(outcome int) {
	q.Next()
	n := len(q.posterior)
	right := q.right[q.chosen*n : (q.chosen+1)*n]
	total := 0.0
	for c := range q.posterior {
		if outcome > 0 {
			q.posterior[c] = float64(q.posterior[c] * right[c])
		} else {
			q.posterior[c] = float64(q.posterior[c] * (1 - right[c]))
		}
		total += q.posterior[c]
	}
	for c := range q.posterior {
		q.posterior[c] /= total
	}
	q.marginalise()
	q.trials++
	q.ready = false
	q.estimate = Estimate{}
}

func (q *questPlus) Trials() int { return q.trials }

func (q *questPlus) Progress() float64 { return min(1, float64(q.trials)/float64(q.spec.MaxTrials)) }

// Estimate is the posterior mean of log threshold, with its standard
// deviation, and the posterior means of slope and lapse.
func (q *questPlus) Estimate() Estimate {
	if q.estimate.Valid {
		return q.estimate
	}
	mean, square, slope, lapse := 0.0, 0.0, 0.0, 0.0
	c := 0
	for _, t := range q.thresholds {
		for _, b := range q.spec.Slopes {
			for _, l := range q.spec.Lapses {
				p := q.posterior[c]
				mean += float64(p * t)
				square += float64(p * t * t)
				slope += float64(p * b)
				lapse += float64(p * l)
				c++
			}
		}
	}
	e := Estimate{Valid: q.trials > 0, Threshold: exact.Exp10(mean), Slope: slope, Lapse: lapse}
	e.SDLog10 = math.Sqrt(max(0, square-float64(mean*mean)))
	if !e.Valid {
		return Estimate{SDLog10: e.SDLog10, Reason: "there are no trials yet"}
	}
	q.estimate = e
	return e
}
