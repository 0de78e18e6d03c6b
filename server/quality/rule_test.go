package quality_test

import (
	"errors"
	"math"
	"strings"
	"testing"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/quality"
)

func trial(response string, correct int, rtMs float64) run.Record {
	return run.Record{Kind: run.KindTrial, Trial: &run.TrialRecord{
		Response: response, Correct: correct, ResponseMs: rtMs, StimulusSteps: 30,
	}}
}

func catchTrial(correct int) run.Record {
	r := trial("left", correct, 500)
	r.Trial.Catch = true
	return r
}

func TestMeasure(t *testing.T) {
	t.Parallel()
	practice := trial("left", 1, 400)
	practice.Trial.Practice = true
	broken := trial("", -1, math.NaN())
	broken.Trial.Interrupted = "hidden"
	dropped := trial("left", 0, 100)
	dropped.Trial.Dropped = 3
	records := []run.Record{
		{Kind: run.KindConsent, AtMs: 0},
		practice, broken, catchTrial(1), catchTrial(0),
		trial("left", 1, 300), trial("left", 1, 500), dropped, trial("right", 1, 700), trial("", -1, math.NaN()),
		{Kind: run.KindEvent, Event: &run.Event{Name: "hidden"}, AtMs: 120000},
	}
	m := quality.Measure(records)
	expect := map[string]float64{
		"trials": 5, "accuracy": 0.75, "catch_trials": 2, "catch_accuracy": 0.5, "missed": 0.2,
		"fast_responses": 0.25, "median_rt_ms": 400, "longest_same_response": 3, "side_bias": 0.75,
		"dropped_frames": 3, "dropped_percent": 2, "dropped_trials": 0.2, "interrupted_trials": 1,
		"focus_lost": 1, "practice_accuracy": 1, "minutes": 2,
	}
	for name, want := range expect {
		if got := m.Value(name); math.Abs(got-want) > 1e-12 {
			t.Errorf("%s = %v, want %v", name, got, want)
		}
	}
	if got := m.Value("refresh_hz"); !math.IsNaN(got) {
		t.Errorf("refresh_hz without a display check = %v, want NaN", got)
	}
}

func TestRules(t *testing.T) {
	t.Parallel()
	given := quality.Measure([]run.Record{catchTrial(1), catchTrial(0), trial("left", 1, 300)})
	tests := []struct {
		name, when string
		expect     bool
	}{
		{"Broken", "catch_accuracy < 0.8", true},
		{"Kept", "catch_accuracy < 0.5", false},
		{"WholeNumbers", "trials < 10", true},
		{"Both", "trials < 10 && catch_accuracy >= 0.5", true},
		{"MissingIsNotBroken", "refresh_hz < 50", false},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			rules, err := quality.Compile([]study.ExclusionRule{{Name: "r", When: tt.when, Reason: "because"}})
			if err != nil {
				t.Fatal(err)
			}
			breaches, err := rules.Apply(given)
			if err != nil {
				t.Fatal(err)
			}
			if got := len(breaches) == 1; got != tt.expect {
				t.Errorf("broken = %v, want %v", got, tt.expect)
			}
		})
	}
}

func TestCompileSaysWhatIsWrong(t *testing.T) {
	t.Parallel()
	for when, want := range map[string]string{
		"catch_acuracy < 0.8": "undeclared reference to 'catch_acuracy'",
		"catch_accuracy <":    "column",
		"catch_accuracy":      "true or false",
	} {
		_, err := quality.Compile([]study.ExclusionRule{{Name: "r", When: when}})
		var rule *quality.RuleError
		if !errors.As(err, &rule) || !strings.Contains(err.Error(), want) {
			t.Errorf("%q: error %v, want %q", when, err, want)
		}
	}
}
