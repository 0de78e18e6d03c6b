package psychometric

import (
	"fmt"
	"math"
)

// Prior of a posterior on a grid. The zero value is the default of every field.
type Prior struct {
	// ThresholdLow and ThresholdHigh bound the threshold (level's unit), within which its
	// prior is uniform on the scale. Both 0: the tested range widened on each side by its
	// own width on the scale.
	ThresholdLow, ThresholdHigh float64
	// SlopeMedian and SlopeFactor give a log-normal prior of β, one standard deviation of
	// which is a factor of SlopeFactor. 0: the median is the slope at which F rises from 0.1
	// to 0.9 over the tested range (√12 standard deviations of the levels over trials), the
	// factor is e.
	SlopeMedian, SlopeFactor float64
	// LapseA and LapseB are the parameters of a beta prior of a free lapse rate, cut off at
	// its upper bound. Both 0: uniform below the bound.
	LapseA, LapseB float64
}

// Summary of one quantity's posterior.
type Summary struct {
	Mean   float64 `json:"mean"`
	Median float64 `json:"median"`
	SD     float64 `json:"sd"`
	// Interval is the central credible interval. A side is open where the posterior runs
	// into the end of the threshold's prior, so that the end and not the data limit it.
	Interval Interval `json:"interval"`
}

// Posterior is the posterior distribution of the parameters, computed on a grid.
type Posterior struct {
	Threshold Summary `json:"threshold"` // level's unit; Mean is that of the scale, taken back to the unit, and SD is OnScale's times the local slope of the scale
	OnScale   Summary `json:"threshold_on_scale"`
	Slope     Summary `json:"slope"`
	Lapse     Summary `json:"lapse"`
	// LogEvidence is ln ∫ likelihood × prior, without binomial coefficients.
	LogEvidence float64 `json:"log_evidence"`
	// Axis and Density are the marginal of the threshold: levels and density per unit of the scale.
	Axis    []float64 `json:"threshold_axis"`
	Density []float64 `json:"threshold_density"`
}

// Points of the grid for threshold, ln slope and lapse rate, in the passes that find the
// region and in the last one.
var (
	coarsePoints = [3]int{41, 17, 5}
	finePoints   = [3]int{61, 27, 11}
)

// gridFall is how far below the maximum of the posterior's logarithm a cell must lie in
// order to be left out: e⁻¹⁴ ≈ 10⁻⁶.
const gridFall = 14.0

// FitPosterior computes the posterior for data under a model. Data without trials give
// the prior back. The error names what is impossible in data, model or prior.
func FitPosterior(d Data, m Model, prior Prior) (*Posterior, error) {
	if err := m.Check(); err != nil {
		return nil, err
	}
	if err := d.check(m); err != nil {
		return nil, err
	}
	p := newProblem(d.Merge(), m)
	g := posteriorGrid{problem: p, prior: prior}
	if err := g.setPrior(); err != nil {
		return nil, err
	}
	for range 4 {
		before := g.to[iThreshold] - g.from[iThreshold]
		g.fill(coarsePoints)
		g.zoom()
		if g.to[iThreshold]-g.from[iThreshold] > before/2 {
			break
		}
	}
	g.fill(finePoints)
	return g.posterior(), nil
}

// posteriorGrid is the posterior on a rectangular grid of standardised parameters.
type posteriorGrid struct {
	problem *problem
	prior   Prior

	first, last float64 // support of the threshold
	median, sd  float64 // of ln slope

	from, to vector // corners
	points   [3]int
	log      []float64 // [threshold][slope][lapse]
}

func (g *posteriorGrid) setPrior() error {
	p, m := g.problem, g.problem.model
	if err := g.setThresholdPrior(); err != nil {
		return err
	}
	if !(g.prior.SlopeMedian >= 0) || !(g.prior.SlopeFactor >= 0) || g.prior.SlopeFactor > 0 && g.prior.SlopeFactor <= 1 {
		return fmt.Errorf("prior of the slope: median %g must be above 0 and factor %g above 1", g.prior.SlopeMedian, g.prior.SlopeFactor)
	}
	if !(g.prior.LapseA >= 0) || !(g.prior.LapseB >= 0) || (g.prior.LapseA == 0) != (g.prior.LapseB == 0) {
		return fmt.Errorf("prior of the lapse rate: beta(%g, %g) needs two parameters above 0", g.prior.LapseA, g.prior.LapseB)
	}
	g.median, g.sd = p.steadied().reference, 1
	if g.prior.SlopeMedian > 0 {
		g.median = math.Log(g.prior.SlopeMedian * p.width)
	}
	if g.prior.SlopeFactor > 0 {
		g.sd = math.Log(g.prior.SlopeFactor)
	}
	g.from = vector{g.first, g.median - 4*g.sd, p.low[iLapse]}
	g.to = vector{g.last, g.median + 4*g.sd, p.high[iLapse]}
	if m.Slope > 0 {
		g.from[iSlope], g.to[iSlope] = p.low[iSlope], p.low[iSlope]
	}
	return nil
}

func (g *posteriorGrid) setThresholdPrior() error {
	p, m := g.problem, g.problem.model
	g.first, g.last = -1.5, 1.5
	low, high := g.prior.ThresholdLow, g.prior.ThresholdHigh
	if low == 0 && high == 0 {
		return nil
	}
	if !(low < high) || m.logarithmic() && low <= 0 {
		return fmt.Errorf("prior of the threshold: from %g to %g is no range on this scale", low, high)
	}
	g.first = m.sign() * (m.onScale(low) - p.center) / p.width
	g.last = m.sign() * (m.onScale(high) - p.center) / p.width
	g.first, g.last = math.Min(g.first, g.last), math.Max(g.first, g.last)
	return nil
}

// fill computes the logarithm of likelihood × prior at the grid's points.
func (g *posteriorGrid) fill(points [3]int) {
	for i := range points {
		if g.from[i] == g.to[i] {
			points[i] = 1
		}
	}
	g.points = points
	g.log = g.log[:0]
	var theta vector
	for a := range points[0] {
		theta[0] = g.at(0, a)
		for b := range points[1] {
			theta[1] = g.at(1, b)
			for c := range points[2] {
				theta[2] = g.at(2, c)
				g.log = append(g.log, g.problem.value(theta)+g.logPrior(theta))
			}
		}
	}
}

// at is the value of parameter i at its point j.
func (g *posteriorGrid) at(i, j int) float64 {
	if g.points[i] == 1 {
		return g.from[i]
	}
	return g.from[i] + (g.to[i]-g.from[i])*float64(j)/float64(g.points[i]-1)
}

func (g *posteriorGrid) logPrior(theta vector) float64 {
	l := -math.Log(g.last - g.first)
	if g.points[iSlope] > 1 {
		z := (theta[iSlope] - g.median) / g.sd
		l -= z*z/2 + math.Log(g.sd*math.Sqrt(2*math.Pi))
	}
	if g.points[iLapse] == 1 {
		return l
	}
	if g.prior.LapseA == 0 {
		return l - math.Log(g.problem.high[iLapse])
	}
	return l + g.logBeta(theta[iLapse])
}

// logBeta is the beta density, kept finite at the ends of its range.
func (g *posteriorGrid) logBeta(lapse float64) float64 {
	a, b := g.prior.LapseA, g.prior.LapseB
	x := clamp(lapse, 1e-6, 1-1e-6)
	ab, _ := math.Lgamma(a + b)
	la, _ := math.Lgamma(a)
	lb, _ := math.Lgamma(b)
	return ab - la - lb + (a-1)*math.Log(x) + (b-1)*math.Log1p(-x)
}

// zoom narrows the corners to where the posterior is not negligible.
func (g *posteriorGrid) zoom() {
	top := math.Inf(-1)
	for _, l := range g.log {
		top = math.Max(top, l)
	}
	var first, last [3]int
	for i, n := range g.points {
		first[i], last[i] = n, -1
	}
	for index, l := range g.log {
		if l < top-gridFall {
			continue
		}
		at := [3]int{index / g.points[2] / g.points[1], index / g.points[2] % g.points[1], index % g.points[2]}
		for i := range at {
			first[i] = min(first[i], at[i])
			last[i] = max(last[i], at[i])
		}
	}
	from, to := g.from, g.to
	for i, n := range g.points {
		from[i] = g.at(i, max(first[i]-1, 0))
		to[i] = g.at(i, min(last[i]+1, n-1))
	}
	g.from, g.to = from, to
}

// marginal of parameter i: a density over its points (trapezoidal weights), and the
// logarithm of the integral over the grid.
func (g *posteriorGrid) marginal(i int) (density []float64, logIntegral float64) {
	top := math.Inf(-1)
	for _, l := range g.log {
		top = math.Max(top, l)
	}
	density = make([]float64, g.points[i])
	volume := 1.0
	for j := range g.points {
		if g.points[j] > 1 {
			volume *= (g.to[j] - g.from[j]) / float64(g.points[j]-1)
		}
	}
	total := 0.0
	for index, l := range g.log {
		at := [3]int{index / g.points[2] / g.points[1], index / g.points[2] % g.points[1], index % g.points[2]}
		w := math.Exp(l - top)
		for j, n := range g.points {
			if n > 1 && (at[j] == 0 || at[j] == n-1) && j != i {
				w /= 2
			}
		}
		density[at[i]] += w
		if n := g.points[i]; n > 1 && (at[i] == 0 || at[i] == n-1) {
			w /= 2
		}
		total += w
	}
	step := 1.0
	if g.points[i] > 1 {
		step = (g.to[i] - g.from[i]) / float64(g.points[i]-1)
	}
	for j := range density {
		density[j] /= total * step
	}
	return density, top + math.Log(total*volume)
}

func (g *posteriorGrid) posterior() *Posterior {
	p, m := g.problem, g.problem.model
	out := &Posterior{}
	density, evidence := g.marginal(iThreshold)
	out.LogEvidence = evidence
	t := g.summary(iThreshold, density, func(x float64) float64 { return p.scaled(x) })
	// Edges of the prior with a density like that of a likelihood-based limit leave the side open.
	peak := 0.0
	for _, d := range density {
		peak = math.Max(peak, d)
	}
	edge := peak * math.Exp(-drop(m.confidence()))
	t.Interval.OpenLow = g.from[iThreshold] <= g.first && density[0] > edge
	t.Interval.OpenHigh = g.to[iThreshold] >= g.last && density[len(density)-1] > edge
	if m.Falling {
		t.Interval.Low, t.Interval.High = t.Interval.High, t.Interval.Low
		t.Interval.OpenLow, t.Interval.OpenHigh = t.Interval.OpenHigh, t.Interval.OpenLow
	}
	t.Interval = t.Interval.opened()
	out.OnScale = t
	out.Threshold = m.summaryOffScale(t)
	for i, d := range density {
		out.Axis = append(out.Axis, m.offScale(p.scaled(g.at(iThreshold, i))))
		out.Density = append(out.Density, d/p.width)
	}
	density, _ = g.marginal(iSlope)
	out.Slope = g.summary(iSlope, density, func(s float64) float64 { return math.Exp(s) / p.width })
	density, _ = g.marginal(iLapse)
	out.Lapse = g.summary(iLapse, density, func(l float64) float64 { return l })
	return out
}

// opened makes open sides infinite.
func (i Interval) opened() Interval {
	if i.OpenLow {
		i.Low = math.Inf(-1)
	}
	if i.OpenHigh {
		i.High = math.Inf(1)
	}
	return i
}

func (m Model) summaryOffScale(s Summary) Summary {
	scale := 1.0
	if m.logarithmic() {
		scale = math.Ln10 * m.offScale(s.Median)
	}
	return Summary{m.offScale(s.Mean), m.offScale(s.Median), s.SD * scale, m.intervalOffScale(s.Interval)}
}

// summary of a marginal in the quantity that to makes of the parameter.
func (g *posteriorGrid) summary(i int, density []float64, to func(float64) float64) Summary {
	if len(density) == 1 {
		x := to(g.from[i])
		return Summary{x, x, 0, Interval{Low: x, High: x}}
	}
	n := len(density)
	step := (g.to[i] - g.from[i]) / float64(n-1)
	first, second := 0.0, 0.0
	for j, d := range density {
		w := d * step
		if j == 0 || j == n-1 {
			w /= 2
		}
		x := to(g.at(i, j))
		first += w * x
		second += w * x * x
	}
	tail := (1 - g.problem.model.confidence()) / 2
	return Summary{
		Mean:     first,
		Median:   to(g.quantile(i, density, 0.5)),
		SD:       math.Sqrt(math.Max(second-first*first, 0)),
		Interval: Interval{Low: to(g.quantile(i, density, tail)), High: to(g.quantile(i, density, 1-tail))},
	}
}

// quantile of a marginal density that is linear between points.
func (g *posteriorGrid) quantile(i int, density []float64, p float64) float64 {
	step := (g.to[i] - g.from[i]) / float64(len(density)-1)
	sum := 0.0
	for j := 1; j < len(density); j++ {
		a, b := density[j-1], density[j]
		part := (a + b) / 2 * step
		if sum+part >= p {
			// a x + (b − a) x²/2 = (p − sum)/step for the share x of the interval.
			rest := (p - sum) / step
			x := rest * 2 / (a + math.Sqrt(math.Max(a*a+2*(b-a)*rest, 0)))
			return g.at(i, j-1) + step*clamp(x, 0, 1)
		}
		sum += part
	}
	return g.to[i]
}
