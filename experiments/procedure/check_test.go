package procedure_test

import (
	"strings"
	"testing"

	"distal/experiments/procedure"
)

// Settings that cannot work are refused with the key and the reason.
func TestCheck(t *testing.T) {
	t.Parallel()
	staircase := procedure.Spec{Method: procedure.Staircase, Min: 0.01, Max: 1, MaxTrials: 80, Start: 0.5, Down: 2, Up: 1,
		StepsUp: []float64{0.1}, StepRatio: 1, EasierIs: 1, Guess: 0.5}
	quest := procedure.Spec{Method: procedure.QuestPlus, Min: 0.01, Max: 1, MaxTrials: 80, ThresholdMin: 0.01, ThresholdMax: 1,
		ThresholdCount: 40, Slopes: []float64{2, 4}, Lapses: []float64{0.02}, Guess: 0.5, LevelCount: 40}
	constant := procedure.Spec{Method: procedure.Constant, Min: 0.01, Max: 1, MaxTrials: 80, Levels: []float64{0.1, 0.2}, Repetition: 10}
	limits := procedure.Spec{Method: procedure.Limits, Min: 0.01, Max: 1, MaxTrials: 80, StepsUp: []float64{0.1}, Reversals: 6, EasierIs: 1}
	tests := []struct {
		name   string
		base   procedure.Spec
		change func(s *procedure.Spec)
		key    string // "" when nothing is wrong
		reason string
	}{
		{"Staircase", staircase, func(*procedure.Spec) {}, "", ""},
		{"OneDownAtGuess", staircase, func(s *procedure.Spec) { s.Down = 1 }, "step_ratio", "converge at 50 % correct, which guessing reaches"},
		{"OneDownWeighted", staircase, func(s *procedure.Spec) { s.Down, s.StepRatio = 1, 1.0/3 }, "", ""},
		{"OneUpEightChoices", staircase, func(s *procedure.Spec) { s.Down, s.Guess = 1, 0.125 }, "", ""},
		{"TargetAboveLapses", staircase, func(s *procedure.Spec) { s.Down, s.StepRatio = 4, 0.02 }, "step_ratio", "lapses make unreachable"},
		{"BothAboveOne", staircase, func(s *procedure.Spec) { s.Up = 2 }, "up", "no single convergence point"},
		{"StartOutside", staircase, func(s *procedure.Spec) { s.Start = 2 }, "start", "2 is outside min to max"},
		{"StepZero", staircase, func(s *procedure.Spec) { s.StepsUp = []float64{0} }, "steps", "above 0"},
		{"NoSteps", staircase, func(s *procedure.Spec) { s.StepsUp = nil }, "steps", "at least one step"},
		{"AllDiscarded", staircase, func(s *procedure.Spec) { s.Reversals, s.Discard = 4, 4 }, "discard", "all reversals"},
		{"EasierUnknown", staircase, func(s *procedure.Spec) { s.EasierIs = 0 }, "easier_is", "+1 or −1"},
		{"RangeEmpty", staircase, func(s *procedure.Spec) { s.Min = 1 }, "min", "below max"},
		{"LogOfZero", staircase, func(s *procedure.Spec) { s.Min = 0 }, "min", "log10 scale"},
		{"MinTrials", staircase, func(s *procedure.Spec) { s.MinTrials = 81 }, "min_trials", "above max_trials"},
		{"Quest", quest, func(*procedure.Spec) {}, "", ""},
		{"ThresholdsReversed", quest, func(s *procedure.Spec) { s.ThresholdMin = 1 }, "threshold_min", "below threshold_max"},
		{"ThresholdZeroLinear", quest, func(s *procedure.Spec) { s.Scale, s.Min, s.ThresholdMin = procedure.Linear, 0, 0 }, "threshold_min", "above 0"},
		{"PriorOutsideLevels", quest, func(s *procedure.Spec) { s.ThresholdMin, s.ThresholdMax = 2, 4 }, "threshold_min", "no threshold considered"},
		{"Flat", quest, func(s *procedure.Spec) { s.Lapses = []float64{0.5} }, "lapses", "flat"},
		{"TooManyCells", quest, func(s *procedure.Spec) {
			s.ThresholdCount, s.LevelCount = 400, 400
			s.Slopes = make([]float64, 20)
			s.Lapses = make([]float64, 5)
		}, "threshold_count", "cells"},
		{"OneLevel", quest, func(s *procedure.Spec) { s.LevelCount = 1 }, "level_count", "at least 2"},
		{"NoSlopes", quest, func(s *procedure.Spec) { s.Slopes = nil }, "slopes", "at least one"},
		{"KeepSlopeElsewhere", quest, func(s *procedure.Spec) { s.KeepSlope = true }, "keep_slope", "psi_marginal"},
		{"EntropyAtOnce", quest, func(s *procedure.Spec) { s.StopEntropyBits = 5.4 }, "stop_entropy_bits", "at most 5.3219 bits"},
		{"NormalOutside", quest, func(s *procedure.Spec) { s.Prior, s.PriorMean, s.PriorSDLog10 = procedure.Normal, 2, 1 }, "prior_mean", "outside"},
		{"Second", quest, func(s *procedure.Spec) { s.Second, s.SecondLevels, s.Gradients = "x", []float64{1, 2}, []float64{0} }, "", ""},
		{"SecondLevelsMissing", quest, func(s *procedure.Spec) { s.Second = "x" }, "second_levels", "at least 2 levels of x"},
		{"SecondNameless", quest, func(s *procedure.Spec) { s.SecondLevels = []float64{1, 2} }, "second_parameter", "name the parameter"},
		{"SecondTheSame", quest, func(s *procedure.Spec) { s.Parameter, s.Second, s.SecondLevels = "x", "x", []float64{1, 2} }, "second_parameter", "varied already"},
		{"SecondByMode", quest, func(s *procedure.Spec) { s.Second, s.SecondLevels, s.Place = "x", []float64{1, 2}, procedure.Mode }, "place", "which of its levels"},
		{"SecondOfStaircase", staircase, func(s *procedure.Spec) { s.Second = "x" }, "second_parameter", "only quest_plus"},
		{"Limits", limits, func(*procedure.Spec) {}, "", ""},
		{"LimitsTwoSteps", limits, func(s *procedure.Spec) { s.StepsUp = []float64{0.1, 0.2} }, "steps", "one step"},
		{"LimitsFewSteps", limits, func(s *procedure.Spec) { s.StepsUp = []float64{1} }, "steps", "2 steps fit"},
		{"LimitsNoSeries", limits, func(s *procedure.Spec) { s.Reversals = 0 }, "reversals", "number of series"},
		{"LimitsEasier", limits, func(s *procedure.Spec) { s.EasierIs = 0 }, "easier_is", "+1 or −1"},
		{"Constant", constant, func(*procedure.Spec) {}, "", ""},
		{"NoLevels", constant, func(s *procedure.Spec) { s.Levels = nil }, "levels", "needs levels"},
		{"NoRepetitions", constant, func(s *procedure.Spec) { s.Repetition = 0 }, "repetitions", "trials per level"},
		{"LevelOutside", constant, func(s *procedure.Spec) { s.Levels = []float64{0.1, 3} }, "levels", "3 is outside"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			spec := tt.base
			tt.change(&spec)
			problems := procedure.Check(spec)
			if tt.key == "" {
				if len(problems) > 0 {
					t.Fatalf("refused: %v", problems)
				}
				return
			}
			for _, p := range problems {
				if p.Key == tt.key && strings.Contains(p.Message, tt.reason) {
					return
				}
			}
			t.Errorf("want %s: … %s …, got %v", tt.key, tt.reason, problems)
		})
	}
}
