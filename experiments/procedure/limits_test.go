package procedure

import (
	"math"
	"testing"

	"distal/experiments/random"
)

// A sure observer who sees whatever is above 5.3, in steps of 1 from 0 to 10:
// every series turns between 5 and 6, whatever its direction, and directions
// take turns.
func TestLimits(t *testing.T) {
	t.Parallel()
	firsts := map[float64]bool{}
	for seed := range uint64(20) {
		for _, easier := range []int{1, -1} {
			p := newLimits(Spec{Method: Limits, Scale: Linear, Min: 0, Max: 10, StepsUp: []float64{1}, Reversals: 6, MaxTrials: 200, EasierIs: easier}, random.New(seed, 0, random.PurposeProcedure))
			last, series, direction := math.NaN(), 0, 0.0
			for {
				x, ok := p.Next()
				if !ok {
					break
				}
				if p.series != series || p.trials == 0 {
					series = p.series
					if x[0] > 3 && x[0] < 7 {
						t.Fatalf("series %d begins at %v", series+1, x[0])
					}
					firsts[x[0]] = true
					if up := math.Copysign(1, 5-x[0]); up == direction {
						t.Fatalf("series %d goes the same way as the one before", series+1)
					} else {
						direction = up
					}
				} else if math.Abs(x[0]-last) != 1 {
					t.Fatalf("from %v to %v", last, x[0])
				}
				last = x[0]
				outcome := 0
				if easier > 0 == (x[0] > 5.3) {
					outcome = 1
				}
				p.Record(outcome)
			}
			e := p.Estimate()
			if !e.Valid || e.Threshold != 5.5 || e.SDLog10 != 0 || e.Reversals != 6 || p.Progress() != 1 {
				t.Errorf("%+v after %d trials", e, p.trials)
			}
		}
	}
	if len(firsts) < 7 {
		t.Errorf("series begin at %v only", firsts)
	}
}

// Who always answers the same has no turning point; the track ends all the same.
func TestLimitsWithoutTurning(t *testing.T) {
	t.Parallel()
	p := newLimits(Spec{Method: Limits, Min: 0.01, Max: 1, StepsUp: []float64{0.1}, Reversals: 4, MaxTrials: 500, EasierIs: 1}, random.New(1, 0, random.PurposeProcedure))
	for x, ok := p.Next(); ok; x, ok = p.Next() {
		if x[0] < 0.01 || x[0] > 1 {
			t.Fatalf("level %v", x[0])
		}
		p.Record(1)
	}
	if e := p.Estimate(); e.Valid || e.Reason == "" || p.series != 4 {
		t.Errorf("%+v after %d series", e, p.series)
	}
}

// Settings begin in both halves of the range equally often, in no fixed order,
// and the estimate is their mean on the scale with its standard deviation.
func TestAdjustment(t *testing.T) {
	t.Parallel()
	p := newAdjustment(Spec{Method: Adjustment, Min: 0.01, Max: 1, MaxTrials: 40}, random.New(3, 0, random.PurposeProcedure))
	upper, same, before := 0, 0, false
	for i := 0; ; i++ {
		x, ok := p.Next()
		if !ok {
			break
		}
		if x[0] < 0.01 || x[0] > 1 {
			t.Fatalf("begins at %v", x[0])
		}
		now := x[0] >= 0.1
		if now {
			upper++
		}
		if i > 0 && now == before {
			same++
		}
		before = now
		p.Set([]float64{0.1, 0.2}[i%2])
		p.Record(0)
	}
	if upper != 20 || same == 0 {
		t.Errorf("%d of 40 begin in the upper half, %d as the one before", upper, same)
	}
	// Mean of −1 and −0.69897, sd with n−1 of two values 0.30103 apart, 20 each.
	e := p.Estimate()
	if sd := 0.150515 * math.Sqrt(40.0/39); !e.Valid || math.Abs(e.Threshold-math.Sqrt(0.02)) > 1e-12 || math.Abs(e.SDLog10-sd) > 1e-6 {
		t.Errorf("%+v", e)
	}
	p.Set(0) // no logarithm
	if len(p.settings) != 40 {
		t.Error("a setting without a logarithm was taken")
	}
}
