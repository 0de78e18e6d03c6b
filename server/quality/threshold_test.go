package quality

import (
	"math"
	"strings"
	"testing"

	"distal/experiments/library"
	"distal/experiments/random"
	"distal/experiments/run"
)

// judged makes records of a block in which the second answer is given with the
// probability of a cumulative Gaussian about a known level.
func judged(t *testing.T, name string, levels []float64, repeats int, probability func(level float64) float64) (block string, thresholds []Threshold) {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	draw := random.New(20261201, 0, random.PurposeObserver)
	var records []run.Record
	for i := range s.Blocks {
		b := &s.Blocks[i]
		if b.Procedure < 0 || block != "" {
			continue
		}
		block = b.Name
		task := &s.Tasks[b.Task]
		condition := ""
		if len(b.Conditions) > 0 {
			condition = b.Conditions[0].Name
		}
		for range repeats {
			for _, level := range levels {
				r := &run.TrialRecord{Block: b.Name, Condition: condition, Task: task.Name, Level: level, Correct: -1, Response: task.Choices[0].Name}
				if draw.Float64() < probability(level) {
					r.Response = task.Choices[1].Name
				}
				records = append(records, run.Record{Kind: run.KindTrial, Trial: r})
			}
		}
	}
	return block, Thresholds(s, records)
}

// Where neither of two answers is right the point of balance is found, whichever
// answer goes with higher levels and on either side of zero.
func TestPointOfBalance(t *testing.T) {
	t.Parallel()
	levels := []float64{-3, -2, -1, 0, 1, 2, 3}
	for _, c := range []struct{ at, sign float64 }{{-0.8, 1}, {0.6, -1}} {
		block, list := judged(t, "induced-motion", levels, 40, func(x float64) float64 {
			return 0.01 + 0.98*0.5*math.Erfc(-c.sign*(x-c.at)/(0.9*math.Sqrt2))
		})
		got := list[0]
		if got.Block != block || got.Counted == "" || !got.Linear || got.Function != "cumulative Gaussian" {
			t.Fatalf("%+v", got)
		}
		if !got.Known || got.Low > c.at || got.High < c.at || got.High-got.Low > 0.8 {
			t.Errorf("balance at %g: %g [%g, %g], %s", c.at, got.Threshold, got.Low, got.High, got.Explanation)
		}
		if slope := got.Fit.Predict(3) - got.Fit.Predict(-3); slope*c.sign < 0.8 {
			t.Errorf("balance at %g: the function goes from %g to %g", c.at, got.Fit.Predict(-3), got.Fit.Predict(3))
		}
	}
}

// An observer who always gives the same answer has no point of balance, and is told why.
func TestNoPointOfBalance(t *testing.T) {
	t.Parallel()
	_, list := judged(t, "induced-motion", []float64{-2, -1, 0, 1, 2}, 10, func(float64) float64 { return 1 })
	if got := list[0]; got.Known || strings.TrimSpace(got.Explanation) == "" {
		t.Errorf("%+v", got)
	}
}
