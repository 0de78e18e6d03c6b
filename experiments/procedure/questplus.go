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
//
// The other Bayesian procedures are settings of the same: see Spec.rule. With a
// second parameter s, x is x − G (log10 s − mean of log10 s): the gradient G of
// log threshold is one more parameter.
type questPlus struct {
	spec       Spec
	thresholds []float64 // log10 of threshold
	levels     []float64 // as shown
	cells      int       // gradients × slopes × lapses
	rule       Place     // never Own
	width      int       // cells that are summed before an entropy is taken
	offset     float64   // from threshold to the most telling level, log10 units
	// right is P(correct) for level, threshold and cell: [level][threshold][cell].
	right []float64
	// doubt is the entropy (nats) of the outcome for the same, kept for the
	// joint entropy only.
	doubt     []float64
	posterior []float64 // [threshold][cell]
	// Least variance: scaled is the posterior times slope squared, mass its sum
	// over the cells of each threshold, centre the mean log threshold that it
	// gives. Otherwise mass is the posterior's sum over each width cells.
	scaled   []float64
	mass     []float64
	centre   float64
	trials   int
	level    [2]float64
	chosen   int
	ready    bool
	estimate Estimate
}

func newQuestPlus(s Spec) *questPlus {
	q := &questPlus{spec: s, cells: max(1, len(s.Gradients)) * len(s.Slopes) * len(s.Lapses)}
	if len(s.Gradients) == 0 {
		q.spec.Gradients = []float64{0}
	}
	q.rule, q.width = s.rule(q.cells)
	if q.rule > Variance {
		q.offset = telling(s)
	}
	q.thresholds = grid(s.Scale, s.ThresholdMin, s.ThresholdMax, s.ThresholdCount)
	for i, x := range q.thresholds {
		q.thresholds[i] = exact.Log10(x)
	}
	q.levels = grid(s.Scale, s.Min, s.Max, s.LevelCount)
	q.right = make([]float64, len(q.levels)*q.seconds()*len(q.thresholds)*q.cells)
	q.posterior = make([]float64, len(q.thresholds)*q.cells)
	q.mass = make([]float64, len(q.posterior)/q.width)
	if q.rule == Variance {
		q.scaled = make([]float64, len(q.posterior))
	}
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

// seconds is the number of levels of the second parameter, 1 where there is none.
func (q *questPlus) seconds() int { return max(1, len(q.spec.SecondLevels)) }

// beyond is how far second level j lies above the middle one, in log10 units.
func (q *questPlus) beyond(j int) float64 {
	mean, own := 0.0, 0.0
	for k, x := range q.spec.SecondLevels {
		log := exact.Log10(x)
		mean += log / float64(q.seconds())
		if k == j {
			own = log
		}
	}
	return own - mean
}

func (q *questPlus) tabulate() {
	i := 0
	for _, level := range q.levels {
		for j := range q.seconds() {
			i = q.tabulateLevel(i, level, q.beyond(j))
		}
	}
	if q.rule != Entropy || q.width > 1 {
		return
	}
	q.doubt = make([]float64, len(q.right))
	for i, p := range q.right {
		q.doubt[i] = plogp(p) + plogp(1-p)
	}
}

func (q *questPlus) tabulateLevel(i int, level, beyond float64) int {
	x := exact.Log10(max(level, 0)) // −∞ at 0 and below
	for _, t := range q.thresholds {
		for _, gradient := range q.spec.Gradients {
			for _, slope := range q.spec.Slopes {
				f := 0.0
				if level > 0 {
					f = -exact.Expm1(-exact.Exp10(float64(slope * (x - float64(gradient*beyond) - t))))
				}
				for _, lapse := range q.spec.Lapses {
					p := q.spec.Guess + float64((1-q.spec.Guess-lapse)*f)
					q.right[i] = min(max(p, leastChance), 1-leastChance)
					i++
				}
			}
		}
	}
	return i
}

// setPrior weighs the thresholds; the other parameters are equally likely.
func (q *questPlus) setPrior() {
	total := 0.0
	for t := range q.thresholds {
		weight := q.spec.weight(float64(t)/float64(len(q.thresholds)-1), q.thresholds[t])
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

// outerWeight is the weight of the outer quarters of the range under Middle.
const outerWeight = 0.05

// weight is how likely a threshold is beforehand, up to a factor: share of the
// range, as log10.
func (s *Spec) weight(share, log float64) float64 {
	switch s.Prior {
	case RaisedCosine:
		return priorFloor + float64((1-priorFloor)*(0.5-float64(0.5*exact.Cos(float64(2*exact.Pi*share)))))
	case Normal:
		z := (log - exact.Log10(s.PriorMean)) / s.PriorSDLog10
		return max(exact.Exp(float64(-0.5*z*z)), leastChance)
	case Middle:
		if share < 0.25 || share > 0.75 {
			return outerWeight
		}
	}
	return 1
}

// marginalise sums what is not of interest out of the posterior.
func (q *questPlus) marginalise() {
	if q.rule != Variance {
		for g := range q.mass {
			sum := 0.0
			for _, p := range q.posterior[g*q.width : (g+1)*q.width] {
				sum += p
			}
			q.mass[g] = sum
		}
		return
	}
	total, moment, c := 0.0, 0.0, 0
	for t := range q.thresholds {
		sum := 0.0
		for range q.spec.Gradients {
			for _, slope := range q.spec.Slopes {
				for range q.spec.Lapses {
					q.scaled[c] = float64(q.posterior[c] * slope * slope)
					sum += q.scaled[c]
					c++
				}
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
	n := q.seconds()
	q.level[0] = q.levels[q.chosen/n]
	if len(q.spec.SecondLevels) == 0 {
		return q.level[:1], !q.ended()
	}
	q.level[1] = q.spec.SecondLevels[q.chosen%n]
	return q.level[:], !q.ended()
}

func (q *questPlus) ended() bool {
	if q.trials >= q.spec.MaxTrials {
		return true
	}
	if q.trials < max(q.spec.MinTrials, 1) {
		return false
	}
	return q.spec.StopSDLog10 > 0 && q.Estimate().SDLog10 < q.spec.StopSDLog10 ||
		q.spec.StopEntropyBits > 0 && q.entropyBits() < q.spec.StopEntropyBits
}

// best is the index of the level with the least expected loss; the first of equals.
func (q *questPlus) best() int {
	best, least := 0, math.Inf(1)
	aim := 0.0
	if q.rule > Variance {
		aim = q.aim() + q.offset
	}
	for i := range len(q.levels) * q.seconds() {
		var loss float64
		switch {
		case q.rule == Variance:
			loss = q.marginalVariance(i)
		case q.rule > Variance:
			loss = math.Abs(exact.Log10(max(q.levels[i/q.seconds()], 0)) - aim)
		case q.width > 1:
			loss = q.marginalEntropy(i)
		default:
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

// marginalEntropy is the same, up to a constant, for the posterior summed over
// each width cells (Prins 2013).
func (q *questPlus) marginalEntropy(i int) float64 {
	n := len(q.posterior)
	right := q.right[i*n : (i+1)*n]
	var sum, hit, total float64
	for g, mass := range q.mass {
		if mass < negligible {
			continue
		}
		from, to := g*q.width, (g+1)*q.width
		a := dot(q.posterior[from:to], right[from:to])
		hit += a
		total += mass
		sum += plogp(a) + plogp(mass-a)
	}
	return sum - plogp(hit) - plogp(total-hit)
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
	gradient := 0.0
	for _, t := range q.thresholds {
		for _, g := range q.spec.Gradients {
			for _, b := range q.spec.Slopes {
				for _, l := range q.spec.Lapses {
					p := q.posterior[c]
					mean += float64(p * t)
					square += float64(p * t * t)
					gradient += float64(p * g)
					slope += float64(p * b)
					lapse += float64(p * l)
					c++
				}
			}
		}
	}
	e := Estimate{Valid: q.trials > 0, Threshold: exact.Exp10(mean), Slope: slope, Lapse: lapse, Gradient: gradient}
	e.SDLog10 = math.Sqrt(max(0, square-float64(mean*mean)))
	if !e.Valid {
		return Estimate{SDLog10: e.SDLog10, Reason: "there are no trials yet"}
	}
	q.estimate = e
	return e
}
