package procedure_test

import (
	"testing"

	"distal/experiments/procedure"
	"distal/experiments/random"
)

// Every level stands once in each successive set of all levels, in an order
// that differs between sets and between streams.
func TestConstantIsBalanced(t *testing.T) {
	t.Parallel()
	spec := procedure.Spec{Method: procedure.Constant, Min: 0, Max: 1, Levels: []float64{0.1, 0.2, 0.3, 0.4, 0.5}, Repetition: 20, MaxTrials: 100}
	orders := map[[5]float64]bool{}
	for seed := range uint64(2) {
		p := procedure.New(spec, random.New(seed, 0, random.PurposeProcedure))
		for set := range spec.Repetition {
			var order [5]float64
			sum := 0.0
			for i := range order {
				x, ok := p.Next()
				if !ok {
					t.Fatalf("set %d ends early", set)
				}
				order[i] = x[0]
				sum += x[0]
				p.Record(i % 2)
			}
			if sum < 1.4999 || sum > 1.5001 { // 0.1 + … + 0.5
				t.Errorf("set %d is not balanced: %v", set, order)
			}
			orders[order] = true
		}
		if _, ok := p.Next(); ok {
			t.Error("the track does not end after all repetitions")
		}
		if p.Progress() != 1 || p.Trials() != 100 {
			t.Errorf("progress %v after %d trials", p.Progress(), p.Trials())
		}
	}
	// 40 sets out of 120 orders: about 34 different ones are expected.
	if len(orders) < 25 {
		t.Errorf("only %d different orders in 40 sets", len(orders))
	}
}

// Levels that are put off come at the end; every level is still shown as often
// as it was to be.
func TestPostponedLevelsComeLast(t *testing.T) {
	t.Parallel()
	spec := procedure.Spec{Method: procedure.Constant, Levels: []float64{1, 2, 3}, Repetition: 4}
	p := procedure.New(spec, random.New(3, 0, random.PurposeProcedure))
	first, _ := p.Next()
	level := first[0]
	p.(procedure.Postponer).Postpone()
	counts := map[float64]int{}
	last := 0.0
	for {
		levels, more := p.Next()
		if !more {
			break
		}
		last = levels[0]
		counts[last]++
		p.Record(1)
	}
	if last != level || counts[1] != 4 || counts[2] != 4 || counts[3] != 4 {
		t.Errorf("level %g came last, put off was %g; counts %v", last, level, counts)
	}
}
