// Package quality says how good the data of a run are: it computes the
// measures that exclusion rules, the workspace and the export share, and
// applies a study's exclusion rules. Start with Metrics, the table of measures.
package quality

import (
	"math"
	"slices"

	"distal/experiments/run"
	"distal/experiments/study"
)

// Metric is one measure of a run's quality. Missing values are NaN.
type Metric struct {
	Name string // in exclusion rules, CSV columns and page labels
	Unit string
	Doc  string
	of   func(trials) float64
}

// Measures are the values of Metrics, in their order.
type Measures []float64

// Metrics is the table of measures. Times of responses are from stimulus onset.
var Metrics = append([]Metric{
	{"trials", "trials", "measurement trials that count: not practice, not catch, not interrupted", func(t trials) float64 { return float64(len(t.main)) }},
	{"accuracy", "proportion", "correct among the answered measurement trials", func(t trials) float64 { return share(t.main, right, answered) }},
	{"catch_trials", "trials", "catch trials shown", func(t trials) float64 { return float64(len(t.caught)) }},
	{"catch_accuracy", "proportion", "catch trials answered correctly among all catch trials; a missing answer is wrong", func(t trials) float64 { return share(t.caught, right, every) }},
	{"missed", "proportion", "measurement trials without a response in time", func(t trials) float64 { return share(t.main, unanswered, every) }},
	{"fast_responses", "proportion", "answered trials with a response below 150 ms after onset: faster than a choice can be made (common practice, no source)", func(t trials) float64 { return share(t.main, fast, answered) }},
	{"median_rt_ms", "ms", "median response time of the answered measurement trials", func(t trials) float64 {
		return median(pick(t.main, func(r *run.TrialRecord) float64 { return r.ResponseMs }))
	}},
	{"longest_same_response", "trials", "longest row of identical responses", func(t trials) float64 { return longestRow(t.main) }},
	{"side_bias", "proportion", "share of the most frequent response among the answered measurement trials", func(t trials) float64 { return commonest(t.main) }},
	{"dropped_frames", "frames", "refreshes missed while a stimulus was shown", func(t trials) float64 {
		return sum(t.main, func(r *run.TrialRecord) float64 { return float64(r.Dropped) })
	}},
	{"dropped_percent", "%", "refreshes missed, of all refreshes of the stimulus phases", droppedPercent},
	{"dropped_trials", "proportion", "measurement trials with at least one missed refresh", func(t trials) float64 {
		return share(t.main, func(r *run.TrialRecord) bool { return r.Dropped > 0 }, every)
	}},
	{"interrupted_trials", "trials", "trials broken off (page hidden, window changed, Escape) and asked again", func(t trials) float64 { return float64(t.interrupted) }},
	{"repeated_trials", "trials", "trials with a dropped stimulus frame that count for nothing and were asked again", func(t trials) float64 { return float64(t.repeated) }},
	{"focus_lost", "times", "how often the page lost the focus or was hidden", func(t trials) float64 { return float64(t.focusLost) }},
	{"fullscreen_left", "times", "how often full screen was left", func(t trials) float64 { return float64(t.fullscreenLeft) }},
	{"refresh_hz", "Hz", "refresh rate found in the last display check", func(t trials) float64 {
		if t.check == nil || t.check.RefreshMs <= 0 {
			return math.NaN()
		}
		return 1000 / t.check.RefreshMs
	}},
	{"refresh_jitter_ms", "ms", "standard deviation of the frame intervals in the last display check", func(t trials) float64 {
		if t.check == nil {
			return math.NaN()
		}
		return t.check.JitterMs
	}},
	{"card_spread", "proportion", "standard deviation of the card settings ÷ their mean", func(t trials) float64 {
		if t.card == nil || t.card.PxPerMm <= 0 {
			return math.NaN()
		}
		return t.card.SDPxPerMm / t.card.PxPerMm
	}},
	{"distance_mm", "mm", "viewing distance", func(t trials) float64 {
		if t.distance == nil {
			return math.NaN()
		}
		return t.distance.DistanceMm
	}},
	{"distance_spread", "proportion", "standard error of the viewing distance ÷ distance", func(t trials) float64 {
		if t.distance == nil || t.distance.DistanceMm <= 0 {
			return math.NaN()
		}
		return t.distance.SDMm / t.distance.DistanceMm
	}},
	{"practice_accuracy", "proportion", "correct among the practice trials", func(t trials) float64 { return share(t.practice, right, every) }},
	{"minutes", "min", "from consent to the last record", func(t trials) float64 { return t.minutes }},
}, timingMetrics...)

// trials is a run's records sorted by what they are good for.
type trials struct {
	main, caught, practice []*run.TrialRecord
	interrupted, repeated  int
	focusLost              int
	fullscreenLeft         int
	card                   *run.Card
	distance               *run.Distance
	check                  *run.DisplayCheck
	minutes                float64
}

// Measure computes every metric of a run from its records.
func Measure(records []run.Record) Measures {
	t := sortRecords(records)
	m := make(Measures, len(Metrics))
	for i := range Metrics {
		m[i] = Metrics[i].of(t)
	}
	return m
}

// Value is the measure called name, NaN if there is none.
func (m Measures) Value(name string) float64 {
	i := slices.IndexFunc(Metrics, func(metric Metric) bool { return metric.Name == name })
	if i < 0 || i >= len(m) {
		return math.NaN()
	}
	return m[i]
}

func sortRecords(records []run.Record) trials {
	var t trials
	for i := range records {
		r := &records[i]
		switch r.Kind {
		case run.KindCard:
			t.card = r.Card
		case run.KindDistance:
			t.distance = r.Distance
		case run.KindDisplayCheck:
			t.check = r.Check
		case run.KindTrial:
			t.addTrial(r.Trial)
		case run.KindEvent:
			switch r.Event.Name {
			case "focus_lost", "hidden":
				t.focusLost++
			case "fullscreen_left":
				t.fullscreenLeft++
			}
		}
	}
	if n := len(records); n > 0 {
		t.minutes = (records[n-1].AtMs - records[0].AtMs) / 60000
	}
	return t
}

func (t *trials) addTrial(r *run.TrialRecord) {
	switch {
	case r.Interrupted == run.DroppedFrame:
		t.repeated++
	case r.Interrupted != "":
		t.interrupted++
	case r.Practice:
		t.practice = append(t.practice, r)
	case r.Catch:
		t.caught = append(t.caught, r)
	default:
		t.main = append(t.main, r)
	}
}

func every(*run.TrialRecord) bool        { return true }
func right(r *run.TrialRecord) bool      { return r.Correct == 1 }
func answered(r *run.TrialRecord) bool   { return r.Response != "" }
func unanswered(r *run.TrialRecord) bool { return r.Response == "" }

// chosen tells whether the response is one of a task's choices, not a direction, a
// setting or a time of holding.
func chosen(r *run.TrialRecord) bool {
	return r.Response != "" && (r.Given == nil || !slices.Contains(study.Said, r.Response))
}

// fastMs is the shortest response time that a choice can take.
const fastMs = 150 // common practice, no source

func fast(r *run.TrialRecord) bool { return r.ResponseMs < fastMs }

// share is how many of the trials in base fulfil is, NaN if base is empty.
func share(list []*run.TrialRecord, is, base func(*run.TrialRecord) bool) float64 {
	n, k := 0, 0
	for _, r := range list {
		if base(r) {
			n++
			if is(r) {
				k++
			}
		}
	}
	if n == 0 {
		return math.NaN()
	}
	return float64(k) / float64(n)
}

func sum(list []*run.TrialRecord, of func(*run.TrialRecord) float64) float64 {
	total := 0.0
	for _, r := range list {
		total += of(r)
	}
	return total
}

// pick collects the values that are numbers.
func pick(list []*run.TrialRecord, of func(*run.TrialRecord) float64) []float64 {
	var values []float64
	for _, r := range list {
		if v := of(r); !math.IsNaN(v) {
			values = append(values, v)
		}
	}
	return values
}

func median(values []float64) float64 {
	n := len(values)
	if n == 0 {
		return math.NaN()
	}
	sorted := slices.Sorted(slices.Values(values))
	return (sorted[(n-1)/2] + sorted[n/2]) / 2
}

func longestRow(list []*run.TrialRecord) float64 {
	longest, row, last := 0, 0, ""
	for _, r := range list {
		switch {
		case !chosen(r):
			continue
		case r.Response == last:
			row++
		default:
			row, last = 1, r.Response
		}
		longest = max(longest, row)
	}
	return float64(longest)
}

func commonest(list []*run.TrialRecord) float64 {
	counts, n := map[string]int{}, 0
	for _, r := range list {
		if chosen(r) {
			counts[r.Response]++
			n++
		}
	}
	if n == 0 {
		return math.NaN()
	}
	most := 0
	for _, k := range counts {
		most = max(most, k)
	}
	return float64(most) / float64(n)
}

func droppedPercent(t trials) float64 {
	planned := sum(t.main, func(r *run.TrialRecord) float64 { return float64(r.StimulusSteps) })
	if planned == 0 {
		return math.NaN()
	}
	return 100 * sum(t.main, func(r *run.TrialRecord) float64 { return float64(r.Dropped) }) / planned
}
