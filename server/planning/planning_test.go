package planning

import (
	"bytes"
	"context"
	"errors"
	"math"
	"strings"
	"testing"

	"distal/experiments/library"
	"distal/experiments/study"
)

func read(t *testing.T, name string) *study.Study {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return s
}

// Rehearsed observers get their own threshold back, with intervals that hold it
// about as often as they say and no more precision than is possible.
func TestRehearsal(t *testing.T) {
	t.Parallel()
	told := 0
	r, err := Rehearse(context.Background(), read(t, "motion-coherence"), Observers{Count: 60, Threshold: 0.2, ThresholdSD: 0.1, Slope: 3, Lapse: 0.02, Seed: 5}, func(int) { told++ })
	if err != nil {
		t.Fatal(err)
	}
	if told != 60 || r.Estimates+r.Missing != 60 || r.Missing > 3 {
		t.Errorf("%d told, %d estimates, %d missing", told, r.Estimates, r.Missing)
	}
	if math.Abs(r.BiasLog10) > 0.03 || r.SDLog10 > 0.08 || r.RMSELog10 < r.BoundSDLog10*0.8 || r.Efficiency < 0.25 || r.Efficiency > 1.5 {
		t.Errorf("bias %g, sd %g, error %g, bound %g, efficiency %g", r.BiasLog10, r.SDLog10, r.RMSELog10, r.BoundSDLog10, r.Efficiency)
	}
	if r.IntervalCovers < 0.85 { // 0.95 less three standard errors
		t.Errorf("%g of the intervals hold the threshold", r.IntervalCovers)
	}
}

// The same seed gives the same numbers, whichever processor was first.
func TestRehearsalIsTheSame(t *testing.T) {
	t.Parallel()
	o := Observers{Count: 12, Threshold: 0.2, Slope: 3, Lapse: 0.05, Tire: 0.1, Drift: 0.05, FastGuess: 0.02, SideBias: 0.1, Seed: 8}
	first, err := Rehearse(context.Background(), read(t, "motion-coherence"), o, nil)
	if err != nil {
		t.Fatal(err)
	}
	second, err := Rehearse(context.Background(), read(t, "motion-coherence"), o, nil)
	if err != nil {
		t.Fatal(err)
	}
	if first.SDLog10 != second.SDLog10 || first.BiasLog10 != second.BiasLog10 || first.RMSELog10 != second.RMSELog10 {
		t.Errorf("%+v, then %+v", first, second)
	}
}

// More trials make smaller errors; the study's own procedure is compared with others;
// what it costs follows from both.
func TestPlan(t *testing.T) {
	t.Parallel()
	q := Question{Observers: Observers{Count: 40, Threshold: 0.2, ThresholdSD: 0.15, Slope: 3.5, Lapse: 0.02, Seed: 1}, Precision: 0.08, Difference: 0.1, Alpha: 0.05, Power: 0.8, MostTrials: 80}
	last := 0.0
	p, err := Make(context.Background(), read(t, "motion-coherence"), q, func(share float64) { last = share })
	if err != nil {
		t.Fatal(err)
	}
	if len(p.Lines) != 3 || !p.Lines[0].Own || last != 1 {
		t.Fatalf("%d procedures, %g done", len(p.Lines), last)
	}
	for _, l := range p.Lines {
		first, last := l.Marks[0], l.Marks[len(l.Marks)-1]
		if last.Trials != 80 || first.RMSELog10 < last.RMSELog10 || last.RMSELog10 > 0.15 || last.Missing > 0.05 {
			t.Errorf("%s: %+v, then %+v", l.Procedure, first, last)
		}
		// Two groups of n at 0.8 power: about 16 (sd/d)² each (Lehr R 1992, Stat Med 11:1099).
		sd := math.Hypot(q.ThresholdSD, last.RMSELog10) / q.Difference
		if lehr := 16 * sd * sd; math.Abs(float64(last.Participants)-lehr) > 0.1*lehr+1 {
			t.Errorf("%s: %d participants, about %g by Lehr", l.Procedure, last.Participants, lehr)
		}
		if l.Cheapest < 0 {
			t.Errorf("%s has no cheapest plan", l.Procedure)
		}
	}
	if p.Lines[0].TrialsNeeded == 0 || p.Lines[0].TrialsNeeded > 60 {
		t.Errorf("%d trials for an error of 0.08", p.Lines[0].TrialsNeeded)
	}
	var text, figure bytes.Buffer
	if err := p.WriteText(&text); err != nil || !strings.Contains(text.String(), "participants in each group") {
		t.Errorf("%v\n%s", err, text.String())
	}
	if err := p.WriteFigure(&figure, "svg"); err != nil || !strings.Contains(figure.String(), "asked for") {
		t.Errorf("the figure: %v", err)
	}
}

func TestWhatCannotBePlanned(t *testing.T) {
	t.Parallel()
	good := Question{Observers: Observers{Count: 20, Threshold: 0.2, Slope: 3, Seed: 1}, Precision: 0.1, Difference: 0.1, Alpha: 0.05, Power: 0.8, MostTrials: 40}
	if _, err := Make(context.Background(), read(t, "induced-motion"), good, nil); !errors.Is(err, ErrNothingToPlan) {
		t.Errorf("a study without right answers: %v", err)
	}
	stopped, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := Make(stopped, read(t, "motion-coherence"), good, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	for name, change := range map[string]func(*Question){
		"precision": func(q *Question) { q.Precision = 0 }, "difference": func(q *Question) { q.Difference = math.NaN() }, "alpha": func(q *Question) { q.Alpha = 1 },
		"trials": func(q *Question) { q.MostTrials = 5 }, "few observers": func(q *Question) { q.Count = 3 }, "threshold": func(q *Question) { q.Threshold = -1 },
		"slope": func(q *Question) { q.Slope = math.NaN() }, "lapse": func(q *Question) { q.Lapse = 0.5 }, "drift": func(q *Question) { q.Drift = math.NaN() },
	} {
		q := good
		change(&q)
		if q.Check() == nil {
			t.Errorf("%s is accepted", name)
		}
	}
}
