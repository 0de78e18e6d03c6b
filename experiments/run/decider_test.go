package run_test

import (
	"math"
	"testing"

	"distal/experiments/replay"
	"distal/experiments/run"
	"distal/experiments/study"
)

// A procedure that varies two parameters sets both of them in every trial, and
// replay re-creates them.
func TestSecondParameter(t *testing.T) {
	t.Parallel()
	s := throughBundle(t, changed(t, "    max_trials: 5\n", "    max_trials: 16\n    nuisance: false\n    gradients: [-1, 0, 1]\n    second_parameter: speed_deg_per_s\n    second_levels: [2, 4, 8]\n"))
	a := run.Assignment{Seed: 4}
	p := begin(t, s, a)
	p.untilBlock("short")
	shown := map[float64]bool{}
	for trial := range 16 {
		plan := p.run.Next().Trial
		levels := map[string]float64{}
		for i, key := range plan.Keys {
			levels[key] = plan.Values[i]
		}
		if x := levels["coherence"]; !(x >= 0.05 && x <= 1) || x != plan.Level {
			t.Fatalf("coherence %v, level %v", x, plan.Level)
		}
		if x := levels["speed_deg_per_s"]; x != 2 && x != 4 && x != 8 {
			t.Fatalf("speed %v", x)
		}
		shown[levels["speed_deg_per_s"]] = true
		p.apply(p.trial(p.choice(plan, levels["coherence"] > 0.2*levels["speed_deg_per_s"]/4), ""))
		if d := p.run.Decider(); d == nil || d.Trials() != trial+1 || !d.Estimate().Valid {
			t.Fatalf("trial %d: %+v", trial+1, d)
		}
	}
	if step := p.run.Next(); step.Kind == run.StepTrial && step.Block == "short" {
		t.Error("the block goes on")
	}
	if len(shown) < 2 {
		t.Errorf("only %v was shown", shown)
	}
	if report := replay.Verify(s, a, p.records); !report.OK() {
		t.Errorf("%+v", report)
	}
}

// The procedure of adjustments says where each begins and takes what it ends
// with: the estimate is the mean of the settings.
func TestAdjustmentsByProcedure(t *testing.T) {
	t.Parallel()
	list := without("by: adjustment, parameter: speed_deg_per_s, min: 1, max: 20, scale: log10, coarse: 0.1, fine: 0.02")
	list = append(list[:len(list)-2], // the last block keeps its procedure
		"  short:\n    method: quest_plus\n    parameter: coherence\n", "  short:\n    method: adjustment\n    parameter: speed_deg_per_s\n",
		"    min: 0.05\n    max: 1\n", "    min: 2\n    max: 18\n", "    threshold_min: 0.05\n    threshold_max: 1\n", "",
		"    max_trials: 5\n", "    max_trials: 6\n", "    stimulus_ms: 200\n", "    stimulus_ms: 900\n")
	s := throughBundle(t, changed(t, list...))
	a := run.Assignment{Seed: 5}
	p := begin(t, s, a)
	slow, trials := 0, 0
	for {
		step := p.run.Next()
		if step.Kind == run.StepQuestions {
			break
		}
		if step.Kind != run.StepTrial {
			p.apply(p.answer(step.Kind))
			continue
		}
		g := nothing()
		g.AdjustFrames, g.AdjustValues, g.AdjustMs = []float64{1, 2}, []float64{3, 4 + 4*float64(step.Trial.Number%2)}, []float64{17, 34}
		rec := p.show(run.Measurement{Response: study.Said[study.ByAdjustment], ResponseMs: 480, Input: "keyboard", OnsetMs: 100, OffsetMs: 900, Steps: []int{1, 1, 1, 1}, IntervalsMs: []float64{16, 17, 16, 17}, Given: g})
		if step.Block == "short" {
			trials++
			if step.Trial.Start != step.Trial.Level || step.Trial.Start < 2 || step.Trial.Start > 18 {
				t.Fatalf("begins at %v, level %v", step.Trial.Start, step.Trial.Level)
			}
			if step.Trial.Start < 6 { // the middle of 2 to 18 on a log scale
				slow++
			}
		}
		p.apply(rec)
		if step.Block != "short" {
			continue
		}
		d := p.run.Decider()
		if d == nil || d.Trials() != trials {
			t.Fatalf("trial %d: %+v", trials, d)
		}
		// Settings are 4 and 8 by turns: their mean on the scale is √32.
		if e := d.Estimate(); trials == 6 && (!e.Valid || math.Abs(e.Threshold-math.Sqrt(32)) > 1e-9) {
			t.Errorf("%+v", e)
		}
	}
	if trials != 6 || slow != 3 {
		t.Errorf("%d trials, %d of them begin in the lower half", trials, slow)
	}
	if report := replay.Verify(s, a, p.records); !report.OK() {
		t.Errorf("%+v", report)
	}
}
