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
// posterior entropy is least: of the whole posterior or, with Nuisance, of the
// threshold alone after slope and lapse are summed out (Prins N 2013, J Vis 13(7):3).
type questPlus struct {
	spec       Spec
	thresholds []float64 // log10 of threshold
	levels     []float64 // as shown
	cells      int       // slopes × lapses
	// right is P(correct) for level, threshold and cell: [level][threshold][cell].
	right     []float64
	posterior []float64 // [threshold][cell]
	trials    int
	level     [1]float64
	chosen    int
	ready     bool
	estimate  Estimate
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
	for i := range q.posterior {
		q.posterior[i] = 1 / float64(len(q.posterior))
	}
	q.tabulate()
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

func (q *questPlus) tabulate() {
	i := 0
	for _, level := range q.levels {
		x := math.Inf(-1)
		if level > 0 {
			x = exact.Log10(level)
		}
		for _, t := range q.thresholds {
			for _, slope := range q.spec.Slopes {
				f := 0.0
				if !math.IsInf(x, -1) {
					f = -exact.Expm1(-exact.Exp10(float64(slope * (x - t))))
				}
				for _, lapse := range q.spec.Lapses {
					q.right[i] = q.spec.Guess + float64((1-q.spec.Guess-lapse)*f)
					i++
				}
			}
		}
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

// best is the index of the level with the least expected entropy; the first of equals.
func (q *questPlus) best() int {
	best, least := 0, math.Inf(1)
	for i := range q.levels {
		var h float64
		if q.spec.Nuisance {
			h = q.marginalEntropy(i)
		} else {
			h = q.jointEntropy(i)
		}
		if h < least {
			best, least = i, h
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

// marginalEntropy is the expected entropy (nats) of the threshold's posterior
// after a trial at level i: Σ_r −Σ_T p(r,T) log(p(r,T)/p(r)).
func (q *questPlus) marginalEntropy(i int) float64 {
	n := len(q.thresholds) * q.cells
	right := q.right[i*n : (i+1)*n]
	h, totalRight, totalWrong := 0.0, 0.0, 0.0
	for t := range q.thresholds {
		a, b := 0.0, 0.0
		for c := t * q.cells; c < (t+1)*q.cells; c++ {
			p := q.posterior[c]
			r := float64(p * right[c])
			a += r
			b += p - r
		}
		h += plogp(a) + plogp(b)
		totalRight += a
		totalWrong += b
	}
	return h - plogp(totalRight) - plogp(totalWrong)
}

// jointEntropy is the same for the posterior of all parameters. Terms that do
// not depend on the level are left out: Σ −p log p over the posterior.
func (q *questPlus) jointEntropy(i int) float64 {
	n := len(q.thresholds) * q.cells
	right := q.right[i*n : (i+1)*n]
	h, total := 0.0, 0.0
	for c, p := range q.posterior {
		r := right[c]
		total += float64(p * r)
		h += float64(p * (plogp(r) + plogp(1-r)))
	}
	return h - plogp(total) - plogp(1-total)
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
