package run_test

import (
	"strings"
	"testing"

	"distal/experiments/run"
)

// Trials with a dropped frame come again, up to the limit, and what counts stays
// balanced. (Every trial of the tests has a dropped frame.)
func TestTrialsRepeatedForDroppedFrames(t *testing.T) {
	t.Parallel()
	p := begin(t, changed(t, "set: {coherence: 0.4}", "set: {coherence: 0.4}\n    repeat_dropped: 5"), run.Assignment{Seed: 5})
	p.untilBlock("fixed")
	from := len(p.records)
	p.until(func(s run.Step) bool { return s.Block == "short" })
	repeated, counted, directions := 0, 0, map[float64]int{}
	for i, rec := range p.records[from:] {
		r := rec.Trial
		switch {
		case r == nil:
		case r.Interrupted == run.DroppedFrame:
			repeated++
			if i >= 5 || r.Correct != -1 || r.Response == "" {
				t.Errorf("repeated trial %d: %+v", i, r)
			}
		case r.Interrupted != "":
			t.Errorf("trial %d: interrupted by %s", r.Trial, r.Interrupted)
		default:
			if !r.Catch {
				counted++
			}
			for j, key := range r.Keys {
				if key == "direction_deg" {
					directions[r.Values[j]]++
				}
			}
		}
	}
	if repeated != 5 || counted != 8 || max(directions[0], directions[180])-min(directions[0], directions[180]) > 1 {
		t.Errorf("%d repeated, %d count, directions %v", repeated, counted, directions)
	}
}

// A procedure learns nothing from a trial that is repeated, and shows its level again.
func TestProcedureWaitsForRepeatedTrials(t *testing.T) {
	t.Parallel()
	s := changed(t, "message: {en: The last part.}", "message: {en: The last part.}\n    repeat_dropped: 3")
	p := begin(t, s, run.Assignment{Seed: 9})
	first := p.untilBlock("short").Level
	for i := range 4 {
		plan := p.run.Next().Trial
		if plan.Level != first {
			t.Fatalf("trial %d of the block has level %g, not %g", i, plan.Level, first)
		}
		p.apply(p.trial(p.choice(plan, true), ""))
	}
	p.untilKind(run.StepQuestions)
	n := 0
	for _, rec := range p.records {
		if rec.Trial != nil && rec.Trial.Block == "short" && rec.Trial.Interrupted == "" {
			n++
		}
	}
	if n != 5 {
		t.Errorf("%d trials count, 5 were asked for", n)
	}
}

// The participant's page cannot choose which trials count.
func TestRepetitionIsChecked(t *testing.T) {
	t.Parallel()
	for _, c := range []struct{ limit, claim string }{{"5", ""}, {"0", run.DroppedFrame}} {
		p := begin(t, changed(t, "set: {coherence: 0.4}", "set: {coherence: 0.4}\n    repeat_dropped: "+c.limit), run.Assignment{Seed: 5})
		plan := p.untilBlock("fixed")
		rec := p.trial(p.choice(plan, true), "")
		rec.Trial.Interrupted = c.claim
		rec.Trial.Correct = -1
		if c.claim == "" {
			rec.Trial.Correct = 1
		}
		if err := p.try(rec); err == nil || !strings.Contains(err.Error(), "repeated for a dropped frame") {
			t.Errorf("limit %s, claimed %q: %v", c.limit, c.claim, err)
		}
	}
}
