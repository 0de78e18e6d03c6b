package psychometric

import (
	"cmp"
	"fmt"
	"math"
	"slices"
)

// Level is the outcome of all trials at one level.
type Level struct {
	X float64 `json:"level"`   // in its own unit
	N int     `json:"trials"`  // number of trials
	K int     `json:"correct"` // correct (or "yes") responses among them
}

// Data are the outcomes at the levels of one observer and condition.
type Data []Level

// Collect counts trials by level: levels[i] was shown in trial i and correct[i] says
// whether the response was correct. The result is in ascending order. Collect panics
// if the lengths differ.
func Collect(levels []float64, correct []bool) Data {
	if len(levels) != len(correct) {
		panic("psychometric: levels and responses differ in number")
	}
	d := make(Data, len(levels))
	for i, x := range levels {
		d[i] = Level{X: x, N: 1}
		if correct[i] {
			d[i].K = 1
		}
	}
	return d.Merge()
}

// Merge is a copy in ascending order of level with equal levels made one and empty ones left out.
func (d Data) Merge() Data {
	sorted := d.sorted()
	merged := sorted[:0]
	for _, l := range sorted {
		switch last := len(merged) - 1; {
		case l.N == 0 && l.K == 0:
		case last >= 0 && merged[last].X == l.X:
			merged[last].N += l.N
			merged[last].K += l.K
		default:
			merged = append(merged, l)
		}
	}
	return merged
}

func (d Data) sorted() Data {
	sorted := slices.Clone(d)
	slices.SortStableFunc(sorted, func(a, b Level) int { return cmp.Compare(a.X, b.X) })
	return sorted
}

// Trials is the number of trials at all levels.
func (d Data) Trials() int {
	n := 0
	for _, l := range d {
		n += l.N
	}
	return n
}

// Correct is the number of correct responses at all levels.
func (d Data) Correct() int {
	k := 0
	for _, l := range d {
		k += l.K
	}
	return k
}

// check refuses what is no count or no level.
func (d Data) check(m Model) error {
	for i, l := range d {
		switch {
		case math.IsNaN(l.X) || math.IsInf(l.X, 0):
			return fmt.Errorf("level %d is not a finite number", i+1)
		case l.N < 0 || l.K < 0 || l.K > l.N:
			return fmt.Errorf("level %d (%g): %d correct of %d trials is impossible", i+1, l.X, l.K, l.N)
		case l.X < 0 && m.logarithmic():
			return fmt.Errorf("level %d is %g: on a log10 scale (and for the Weibull function) levels are 0 or more", i+1, l.X)
		}
	}
	return nil
}
