package quality

import (
	"math"
	"testing"

	"distal/experiments/run"
)

// timed is a trial of 3 planned frames at 60 Hz with the given steps and
// intervals per refresh, answered atMs of the page's clock.
func timed(block string, steps []int, refreshMs, onsetMs, atMs float64) run.Record {
	t := &run.TrialRecord{Block: block, Task: "which", StimulusSteps: 3, RefreshMs: 50.0 / 3, Steps: steps, OnsetMs: onsetMs, ResponseMs: atMs - onsetMs, Response: "left", Correct: 1}
	for _, n := range steps {
		t.IntervalsMs = append(t.IntervalsMs, float64(n)*refreshMs)
		t.Dropped += n - 1
	}
	return run.Record{Kind: run.KindTrial, Trial: t}
}

func TestTimingAccount(t *testing.T) {
	t.Parallel()
	const hz60 = 50.0 / 3
	var records []run.Record
	for i := range 9 { // answered at whole milliseconds
		records = append(records, timed("one", []int{1, 1, 1}, hz60, 1000*float64(i), 1000*float64(i)+407))
	}
	records = append(records,
		timed("one", []int{1, 2}, hz60, 1e4, 10507),          // a missed refresh inside: ends on time
		timed("two", []int{1, 1, 2}, hz60*1.01, 2e4, 20507),  // one refresh too long, on a screen that has become slower
		timed("two", []int{1}, hz60*1.01, 3e4, 30101),        // answered at once
		timed("two", []int{1, 1, 1}, hz60*1.01, 4e4, 40_503)) // 1 % slower
	m := Measure(records)
	for name, want := range map[string]float64{
		"dropped_per_minute":    2 / ((10*3*hz60 + 8*hz60*1.01) / 60000),
		"interval_99_ms":        2 * hz60 * 1.01,
		"duration_error_ms":     4*hz60*1.01 - 50,
		"refresh_drift_percent": 1,
		"response_clock_ms":     1,
	} {
		if got := m.Value(name); math.Abs(got-want) > 1e-9 {
			t.Errorf("%s = %g, want %g", name, got, want)
		}
	}
	got := Phases(records)
	if len(got) != 1 || got[0].Trials != 13 || got[0].Exact != 10 || got[0].Late != 2 || got[0].EndedEarly != 1 ||
		math.Abs(got[0].PlannedMs-50) > 1e-9 || math.Abs(got[0].MedianMs-50) > 1e-9 || math.Abs(got[0].LongestMs-4*hz60*1.01) > 1e-9 {
		t.Errorf("%+v", got)
	}
}

func TestClockStep(t *testing.T) {
	t.Parallel()
	times := func(step float64) []float64 {
		var out []float64
		for i := range 20 {
			out = append(out, math.Round(100*step*float64(7*i*i+3))/100)
		}
		return out
	}
	for _, step := range clockSteps {
		if got := clockStep(times(step)); got != step {
			t.Errorf("times in steps of %g ms: %g", step, got)
		}
	}
	if got := clockStep(times(0.03)); got != 0 {
		t.Errorf("fine times: %g, want 0", got)
	}
	if got := clockStep(times(1)[:9]); !math.IsNaN(got) {
		t.Errorf("nine times: %g, want NaN", got)
	}
}
