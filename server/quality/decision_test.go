package quality

import (
	"math"
	"testing"

	"distal/experiments/library"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
)

// Every trial of a procedure has an estimate, of which the last is near the
// simulated observer's threshold; records of another seed give none after the
// trial that differs.
func TestDecisions(t *testing.T) {
	t.Parallel()
	s, problems := library.Read("motion-coherence")
	if problems.Failed() {
		t.Fatal(problems)
	}
	a := run.Assignment{Seed: 11}
	records, err := rehearsal.Observe(s, a, rehearsal.Observer{Threshold: 0.2, Slope: 3.5, Lapse: 0.02}, rehearsal.DefaultScreen(), "digest", 0)
	if err != nil {
		t.Fatal(err)
	}
	list := Decisions(s, a, records)
	trials, last := 0, math.NaN()
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Catch || r.Track < 0 || r.Interrupted != "" || r.Response == "" {
			continue
		}
		trials++
		e, ok := list[r.Trial]
		if !ok {
			t.Fatalf("trial %d has no estimate", r.Trial)
		}
		last = e.Threshold
	}
	if trials < 40 || len(list) != trials {
		t.Fatalf("%d estimates of %d trials", len(list), trials)
	}
	if math.Abs(math.Log10(last/0.2)) > 0.25 {
		t.Errorf("the last estimate is %v, the observer's threshold 0.2", last)
	}
	if n := len(Decisions(s, run.Assignment{Seed: 12}, records)); n >= trials {
		t.Errorf("another seed: %d estimates", n)
	}
}
