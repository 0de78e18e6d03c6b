package psychometric

import (
	"math"
	"slices"
)

// startTable holds log P and log(1 − P) on a coarse grid of parameters, for levels
// pooled into a few groups. It depends on the levels and not on the responses, so that
// a problem with new responses (a bootstrap sample) gets its starting values for a few
// multiplications.
type startTable struct {
	group  []int // of each level
	groups int
	cells  []vector
	slopes int
	// yes and no are [cell][group].
	yes, no []float64
	n, k    []float64
	values  []float64
}

// maxGroups of levels: pooling costs little at the grid's coarseness.
const maxGroups = 24

// startSpreads are the spreads tried, as shares of the tested range.
var startSpreads = []float64{0.05, 0.12, 0.25, 0.5, 1, 2.5}

// startLead is how far below the grid's best a start may lie.
const startLead = 4.0

const startThresholds = 13 // from −0.75 to 0.75 ranges about the middle

// startLapses are the lapse rates tried, as shares of their range, if they are free.
var startLapses = []float64{0.1, 0.7}

func (p *problem) prepareStarts() {
	t := &p.start
	t.group = make([]int, len(p.z))
	center := p.pool()
	lapses := p.lapseStarts(nil)
	slopes := p.startSlopes()
	t.slopes = len(slopes)
	for _, lapse := range lapses {
		q := p.model.offset(p.model.Criterion, lapse).q
		for _, slope := range slopes {
			for i := range startThresholds {
				at := -0.75 + 1.5*float64(i)/(startThresholds-1)
				theta := vector{at + q/math.Exp(slope), slope, lapse} // the location lies at at
				t.cells = append(t.cells, theta)
				p.tabulate(theta, center)
			}
		}
	}
	t.n = make([]float64, t.groups)
	t.k = make([]float64, t.groups)
	t.values = make([]float64, len(t.cells))
}

func (p *problem) startSlopes() []float64 {
	if !p.free[iSlope] {
		return []float64{p.low[iSlope]}
	}
	slopes := make([]float64, len(startSpreads))
	for i, spread := range startSpreads {
		slopes[i] = math.Log(p.model.Shape.width() / spread)
	}
	return slopes
}

// pool assigns every level to a group and returns the groups' middles.
func (p *problem) pool() []float64 {
	t := &p.start
	var center []float64
	weight, last := 0.0, math.Inf(-1)
	for i, z := range p.z {
		far := z-last >= 1.0/maxGroups || math.IsInf(z, 0) || math.IsInf(last, 0)
		if i == 0 || len(p.z) <= maxGroups || far {
			center = append(center, 0)
			weight, last = 0, z
		}
		g := len(center) - 1
		t.group[i] = g
		weight += p.n[i]
		if math.IsInf(z, 0) {
			center[g] = z
		} else {
			center[g] += (z - center[g]) * p.n[i] / weight
		}
	}
	t.groups = len(center)
	return center
}

func (p *problem) tabulate(theta vector, center []float64) {
	beta, lapse := math.Exp(theta[iSlope]), theta[iLapse]
	q := p.model.offset(p.model.Criterion, lapse).q
	bottom := p.model.bottom(lapse)
	rise := p.model.top(lapse) - bottom
	for _, z := range center {
		s := p.at(beta*(z-theta[iThreshold])+q, z)
		p.start.yes = append(p.start.yes, math.Log(math.Max(bottom+rise*s.f, floor)))
		p.start.no = append(p.start.no, math.Log(math.Max(lapse+rise*s.c, floor)))
	}
}

// starts are the grid's local maxima in threshold and slope, for every lapse rate.
func (p *problem) starts(list []vector) []vector {
	t := &p.start
	if t.cells == nil {
		p.prepareStarts()
	}
	clear(t.n)
	clear(t.k)
	for i, g := range t.group {
		t.n[g] += p.n[i]
		t.k[g] += p.k[i]
	}
	for c := range t.cells {
		v := 0.0
		for g, n := range t.n {
			i := c*t.groups + g
			v += t.k[g]*t.yes[i] + (n-t.k[g])*t.no[i]
		}
		t.values[c] = v
	}
	best := slices.Max(t.values)
	for c := range t.cells {
		if t.values[c] > best-startLead && t.peak(c) {
			list = append(list, t.cells[c])
		}
	}
	return list
}

// peak says whether no neighbour in threshold and slope has a higher value (or an equal
// one earlier in order).
func (t *startTable) peak(c int) bool {
	column, row := c%startThresholds, c/startThresholds%t.slopes
	for dr := -1; dr <= 1; dr++ {
		for dc := -1; dc <= 1; dc++ {
			if row+dr < 0 || row+dr >= t.slopes || column+dc < 0 || column+dc >= startThresholds {
				continue
			}
			other := c + dr*startThresholds + dc
			if t.values[other] > t.values[c] || t.values[other] == t.values[c] && other < c {
				return false
			}
		}
	}
	return true
}
