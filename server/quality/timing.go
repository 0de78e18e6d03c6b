package quality

import (
	"math"
	"slices"

	"distal/experiments/run"
)

// timingMetrics are the measures of a run's timing account. All of them tell
// what the browser reported: light leaves a panel later, by a time that no
// browser can measure and that is nearly constant for one screen.
var timingMetrics = []Metric{
	{"dropped_per_minute", "1/min", "refreshes missed per minute of shown stimulus", func(t trials) float64 {
		minutes := sum(t.main, shownMs) / 60000
		if minutes == 0 {
			return math.NaN()
		}
		return sum(t.main, func(r *run.TrialRecord) float64 { return float64(r.Dropped) }) / minutes
	}},
	{"interval_99_ms", "ms", "time between stimulus frames that 99 % of them do not exceed", func(t trials) float64 {
		var all []float64
		for _, r := range t.main {
			all = append(all, r.IntervalsMs...)
		}
		return quantile(all, 0.99)
	}},
	{"duration_error_ms", "ms", "largest difference between the shown and the planned duration of a stimulus, where no answer ended it before", func(t trials) float64 {
		return largest(pick(t.main, DurationErrorMs))
	}},
	{"refresh_drift_percent", "%", "largest difference between the median frame interval of a block and the refresh interval of the display check before it", func(t trials) float64 {
		return largest(drifts(t.main))
	}},
	{"input_delay_ms", "ms", "median time from the event of an answer to its handling by the page: the part of the input latency that a browser can tell; what keyboard and system add before is not in it", func(t trials) float64 {
		return median(pick(t.main, func(r *run.TrialRecord) float64 {
			if r.InputDelayMs == 0 {
				return math.NaN()
			}
			return r.InputDelayMs
		}))
	}},
	{"response_clock_ms", "ms", "steps in which the browser gave the times of key presses and clicks: response times are no finer", func(t trials) float64 {
		return clockStep(pick(t.main, func(r *run.TrialRecord) float64 { return r.OnsetMs + r.ResponseMs }))
	}},
}

func shownMs(r *run.TrialRecord) float64 {
	total := 0.0
	for _, ms := range r.IntervalsMs {
		total += ms
	}
	return total
}

// DurationErrorMs is the shown minus the planned duration of a trial's
// stimulus, NaN where the stimulus ended before its time.
func DurationErrorMs(r *run.TrialRecord) float64 {
	steps := 0
	for _, n := range r.Steps {
		steps += n
	}
	if steps == 0 || steps < r.StimulusSteps {
		return math.NaN()
	}
	return shownMs(r) - float64(r.StimulusSteps)*r.RefreshMs
}

// drifts are the differences (%) between a block's median interval, each
// divided by its refreshes, and the refresh interval its trials were planned with.
func drifts(list []*run.TrialRecord) []float64 {
	var out []float64
	for len(list) > 0 {
		n := 1
		for n < len(list) && list[n].Block == list[0].Block && list[n].RefreshMs == list[0].RefreshMs {
			n++
		}
		var single []float64
		for _, r := range list[:n] {
			for i, ms := range r.IntervalsMs {
				if i < len(r.Steps) && r.Steps[i] > 0 {
					single = append(single, ms/float64(r.Steps[i]))
				}
			}
		}
		if len(single) > 0 && list[0].RefreshMs > 0 {
			out = append(out, 100*(median(single)/list[0].RefreshMs-1))
		}
		list = list[n:]
	}
	return out
}

// largest is the value farthest from 0 without its sign, NaN if there is none.
func largest(values []float64) float64 {
	out := math.NaN()
	for _, v := range values {
		if math.IsNaN(out) || math.Abs(v) > out {
			out = math.Abs(v)
		}
	}
	return out
}

// quantile is the smallest value that at least the share p does not exceed.
func quantile(values []float64, p float64) float64 {
	if len(values) == 0 {
		return math.NaN()
	}
	sorted := slices.Sorted(slices.Values(values))
	return sorted[max(0, int(math.Ceil(p*float64(len(sorted))))-1)]
}

// clockSteps are the resolutions (ms) that browsers round times of events to;
// clockSlackMs is what rounding in the record to 0.01 ms, twice, can add.
var clockSteps = []float64{100, 20, 16, 8, 5, 2, 1, 0.5, 0.2, 0.1}

const (
	clockSlackMs = 0.011
	fewTimes     = 10 // fewer say nothing
)

// clockStep is the coarsest of clockSteps that all times are multiples of, 0
// if they are finer than any, NaN for few times.
func clockStep(timesMs []float64) float64 {
	if len(timesMs) < fewTimes {
		return math.NaN()
	}
	for _, step := range clockSteps {
		if !slices.ContainsFunc(timesMs, func(t float64) bool {
			return math.Abs(t-step*math.Round(t/step)) > clockSlackMs
		}) {
			return step
		}
	}
	return 0
}

// Phase compares what was planned for the stimuli of one task with what was shown.
type Phase struct {
	Task          string
	PlannedFrames int
	PlannedMs     float64 // at the refresh interval of the check
	Trials        int
	Exact         int     // shown for as many refreshes as planned, none missed
	Late          int     // with a missed refresh
	EndedEarly    int     // by an answer
	MedianMs      float64 // shown, of those that were not ended early
	LongestMs     float64
}

// Phases is the account of planned against shown durations: one entry for each
// task and planned number of frames, in the order of their first trial.
// Trials that were broken off are left out.
func Phases(records []run.Record) []Phase {
	var out []Phase
	var shown [][]float64
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Interrupted != "" && r.Interrupted != run.DroppedFrame {
			continue
		}
		k := slices.IndexFunc(out, func(p Phase) bool { return p.Task == r.Task && p.PlannedFrames == r.StimulusSteps })
		if k < 0 {
			k = len(out)
			out = append(out, Phase{Task: r.Task, PlannedFrames: r.StimulusSteps, PlannedMs: float64(r.StimulusSteps) * r.RefreshMs})
			shown = append(shown, nil)
		}
		p := &out[k]
		p.Trials++
		switch late := DurationErrorMs(r); {
		case r.Dropped > 0:
			p.Late++
		case math.IsNaN(late):
			p.EndedEarly++
		default:
			p.Exact++
		}
		if !math.IsNaN(DurationErrorMs(r)) {
			shown[k] = append(shown[k], shownMs(r))
		}
	}
	for k := range out {
		out[k].MedianMs, out[k].LongestMs = median(shown[k]), largest(shown[k])
	}
	return out
}
