package quality

import (
	"math"
	"testing"

	"distal/experiments/library"
	"distal/experiments/run"
	"distal/experiments/study"
)

// Settings 0.1, 0.2, 0.4: the mean on a log10 axis is 0.2, and Student's interval
// with two degrees of freedom is t = 4.302653 (R: qt(0.975, 2)) standard errors
// of 0.30103/√3 log units to either side. Interrupted and unconfirmed trials
// count for nothing.
func TestSettings(t *testing.T) {
	t.Parallel()
	s, problems := library.Read("motion-coherence")
	if problems.Failed() {
		t.Fatal(problems)
	}
	for i := range s.Tasks {
		s.Tasks[i].Answer.By, s.Tasks[i].Choices = study.ByAdjustment, nil
	}
	var block *study.Block
	for i := range s.Blocks {
		if s.Blocks[i].Procedure >= 0 {
			block = &s.Blocks[i]
		}
	}
	var records []run.Record
	add := func(setting float64, response, interrupted string) {
		r := &run.TrialRecord{Trial: len(records), Block: block.Name, Level: 0.7, Correct: -1, Response: response, Interrupted: interrupted, Given: &run.Given{Setting: setting}}
		records = append(records, run.Record{Kind: run.KindTrial, Trial: r})
	}
	add(0.1, "set", "")
	if got := Thresholds(s, records)[0]; got.Known || got.Explanation == "" {
		t.Errorf("from one setting: %+v", got)
	}
	add(0.9, "", "")
	add(0.9, "set", "hidden")
	add(0.2, "set", "")
	add(0.4, "set", "")
	got := Thresholds(s, records)[0]
	factor := math.Pow(10, 4.302653*math.Log10(2)/math.Sqrt(3))
	if !got.Known || math.Abs(got.Threshold-0.2) > 1e-9 || math.Abs(got.Low-0.2/factor) > 1e-6 || math.Abs(got.High-0.2*factor) > 1e-5 {
		t.Errorf("%v [%v, %v], want 0.2 and a factor %v", got.Threshold, got.Low, got.High, factor)
	}
	if len(got.Trials) != 3 || got.Trials[2] != 4 {
		t.Errorf("trials %v", got.Trials)
	}
}

// Levels of two parameters are not fitted by one function.
func TestTwoParametersAreNotFitted(t *testing.T) {
	t.Parallel()
	s, problems := library.Read("motion-coherence")
	if problems.Failed() {
		t.Fatal(problems)
	}
	for i := range s.Procedures {
		s.Procedures[i].Second = "speed_deg_per_s"
	}
	var records []run.Record
	for i := range 40 {
		for _, b := range s.Blocks {
			r := &run.TrialRecord{Trial: i, Block: b.Name, Level: 0.1 + float64(i%3)/10, Correct: i % 2, Response: "left"}
			records = append(records, run.Record{Kind: run.KindTrial, Trial: r})
		}
	}
	if got := Thresholds(s, records)[0]; got.Known || got.Fit != nil || len(got.Levels) != 40 {
		t.Errorf("%+v", got)
	}
}
