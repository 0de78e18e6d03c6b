package procedure

import (
	"encoding/json"
	"math"
	"os"
	"testing"

	"distal/experiments/exact"
	"distal/experiments/random"
)

func readJSON(t *testing.T, name string, into any) {
	t.Helper()
	text, err := os.ReadFile("../../testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(text, into); err != nil {
		t.Fatal(err)
	}
}

// entropy of p in nats.
func entropy(p []float64) float64 {
	h := 0.0
	for _, x := range p {
		h += plogp(x)
	}
	return h
}

// A worked run of four trials with least expected entropy over threshold and
// slope (Kontsevich LL, Tyler CW 1999, Vision Res 39:2729; Watson AB 2017, J Vis
// 17(3):10). The numbers were computed twice: as posterior entropies and as prior
// entropy minus mutual information.
func TestQuestPlusWorkedRun(t *testing.T) {
	t.Parallel()
	const tol = 1e-9
	var example struct {
		X, Alpha, Beta []float64
		Steps          []struct {
			ExpectedEntropy  []float64 `json:"expected_entropy"`
			ChosenIndex      int       `json:"chosen_index"`
			ResponseCorrect  bool      `json:"response_correct"`
			Posterior        [][]float64
			PosteriorEntropy float64 `json:"posterior_entropy"`
			MeanAlpha        float64 `json:"mean_alpha"`
			MeanBeta         float64 `json:"mean_beta"`
		}
	}
	readJSON(t, "psi_example.json", &example)
	if len(example.Steps) != 4 {
		t.Fatalf("%d steps", len(example.Steps))
	}
	q := newQuestPlus(Spec{
		Method: QuestPlus, Min: exact.Exp10(-1.6), Max: exact.Exp10(-0.8), LevelCount: 5, MaxTrials: 4,
		ThresholdMin: exact.Exp10(-1.4), ThresholdMax: 0.1, ThresholdCount: 3,
		Slopes: example.Beta, Lapses: []float64{0.02}, Guess: 0.5, Prior: Uniform,
	})
	for i, step := range example.Steps {
		prior := entropy(q.posterior)
		for j, want := range step.ExpectedEntropy {
			if got := (q.jointEntropy(j) + prior) / math.Ln2; math.Abs(got-want) > tol {
				t.Errorf("step %d, level %d: expected entropy %.10f bits, want %.10f", i, j, got, want)
			}
		}
		q.Next()
		if q.chosen != step.ChosenIndex {
			t.Fatalf("step %d: level %d chosen, want %d", i, q.chosen, step.ChosenIndex)
		}
		outcome := 0
		if step.ResponseCorrect {
			outcome = 1
		}
		q.Record(outcome)
		for a, row := range step.Posterior {
			for b, want := range row {
				if got := q.posterior[a*q.cells+b]; math.Abs(got-want) > tol {
					t.Errorf("step %d: posterior %d,%d is %.10f, want %.10f", i, a, b, got, want)
				}
			}
		}
		if got := entropy(q.posterior) / math.Ln2; math.Abs(got-step.PosteriorEntropy) > tol {
			t.Errorf("step %d: entropy %v, want %v", i, got, step.PosteriorEntropy)
		}
		e := q.Estimate()
		if math.Abs(exact.Log10(e.Threshold)-step.MeanAlpha) > 1e-8 || math.Abs(e.Slope-step.MeanBeta) > 1e-8 {
			t.Errorf("step %d: estimate %+v, want %v, %v", i, e, step.MeanAlpha, step.MeanBeta)
		}
	}
}

// A worked run of the posterior of QUEST (Watson AB, Pelli DG 1983, Percept
// Psychophys 33:113), computed on this grid and by quadrature. Its mixture with
// δ = 0.01 is, for guess g, a lapse rate of δ(1 − g).
func TestPosteriorWorkedRun(t *testing.T) {
	t.Parallel()
	var example struct {
		AfterEachTrial []struct {
			X        float64
			Correct  bool
			Mean, SD float64
		} `json:"after_each_trial"`
	}
	readJSON(t, "quest_example.json", &example)
	if len(example.AfterEachTrial) != 8 {
		t.Fatalf("%d trials", len(example.AfterEachTrial))
	}
	q := newQuestPlus(Spec{
		Method: QuestPlus, Min: exact.Exp10(-1.5), Max: 0.1, LevelCount: 11, MaxTrials: 8,
		ThresholdMin: 0.001, ThresholdMax: 10, ThresholdCount: 401,
		Slopes: []float64{3.5}, Lapses: []float64{0.005}, Guess: 0.5,
	})
	total := 0.0
	for i, x := range q.thresholds {
		q.posterior[i] = math.Exp(-(x + 1) * (x + 1) / (2 * 0.5 * 0.5)) // prior: mean −1, sd 0.5
		total += q.posterior[i]
	}
	for i := range q.posterior {
		q.posterior[i] /= total
	}
	for i, trial := range example.AfterEachTrial {
		q.chosen, q.ready = int(math.Round((trial.X+1.5)/0.05)), true
		outcome := 0
		if trial.Correct {
			outcome = 1
		}
		q.Record(outcome)
		e := q.Estimate()
		if got := exact.Log10(e.Threshold); math.Abs(got-trial.Mean) > 1e-6 || math.Abs(e.SDLog10-trial.SD) > 1e-6 {
			t.Errorf("trial %d: mean %v sd %v, want %v, %v", i+1, got, e.SDLog10, trial.Mean, trial.SD)
		}
	}
}

func defaultSpec() Spec {
	return Spec{
		Method: QuestPlus, Min: 0.01, Max: 1, LevelCount: 60, MaxTrials: 60, ThresholdMin: 0.01, ThresholdMax: 1,
		ThresholdCount: 100, Slopes: DefaultSlopes(), Lapses: DefaultLapses(), Guess: 0.5, Nuisance: true,
	}
}

func TestQuestPlusAllocatesNothing(t *testing.T) {
	for _, nuisance := range []bool{false, true} {
		spec := defaultSpec()
		spec.Nuisance, spec.MaxTrials = nuisance, 1000
		q := newQuestPlus(spec)
		n := testing.AllocsPerRun(20, func() {
			q.Next()
			q.Record(q.trials % 2)
			q.Estimate()
		})
		if n != 0 {
			t.Errorf("nuisance %v: %v allocations a trial", nuisance, n)
		}
	}
}

// An answer that no parameters considered allow leaves the posterior a
// distribution: without lapses, wrong far above every threshold.
func TestImpossibleAnswer(t *testing.T) {
	t.Parallel()
	q := newQuestPlus(Spec{
		Method: QuestPlus, Min: 0.01, Max: 1000, LevelCount: 2, MaxTrials: 10, ThresholdMin: 0.01, ThresholdMax: 0.1, ThresholdCount: 10,
		Slopes: []float64{4}, Lapses: []float64{0}, Guess: 0.5,
	})
	q.chosen, q.ready = 1, true
	q.Record(0)
	e := q.Estimate()
	if !e.Valid || !(e.Threshold >= 0.01 && e.Threshold <= 0.1) || math.IsNaN(e.SDLog10) {
		t.Errorf("estimate %+v", e)
	}
}

// The track ends once the posterior is narrow enough, not before the least
// number of trials.
func TestQuestPlusStops(t *testing.T) {
	t.Parallel()
	spec := defaultSpec()
	spec.StopSDLog10, spec.MinTrials, spec.MaxTrials = 0.06, 10, 400
	for run := range uint64(20) {
		q, s := newQuestPlus(spec), random.New(run, 0, random.PurposeObserver)
		for {
			x, ok := q.Next()
			if !ok {
				break
			}
			sd := q.Estimate().SDLog10
			if q.trials >= 10 && sd < 0.06 {
				t.Fatalf("trial %d although the sd is %v", q.trials+1, sd)
			}
			q.Record(answer(&s, x[0], 0.1, 3.5, 0.02))
		}
		if q.trials < 10 || q.trials == 400 || q.Estimate().SDLog10 >= 0.06 {
			t.Errorf("ended after %d trials with sd %v", q.trials, q.Estimate().SDLog10)
		}
	}
}

// answer of a simulated two-alternative observer with a Weibull function.
func answer(s *random.Stream, level, threshold, slope, lapse float64) int {
	p := 0.5 - (0.5-lapse)*math.Expm1(-math.Pow(level/threshold, slope))
	if s.Float64() < p {
		return 1
	}
	return 0
}

// One trial with 40 thresholds × 20 slopes × 10 lapse rates and 60 levels.
func BenchmarkQuestPlus(b *testing.B) {
	for _, rule := range []struct {
		name   string
		change func(*Spec)
	}{
		{"joint", func(s *Spec) { s.Nuisance = false }},
		{"nuisance", func(*Spec) {}},
		{"marginal", func(s *Spec) { s.Method = PsiMarginal }},
		{"marginalWithSlope", func(s *Spec) { s.Method, s.KeepSlope = PsiMarginal, true }},
	} {
		b.Run(rule.name, func(b *testing.B) {
			spec := defaultSpec()
			spec.ThresholdCount, spec.Slopes, spec.Lapses = 40, make([]float64, 20), make([]float64, 10)
			for i := range spec.Slopes {
				spec.Slopes[i] = 1 + float64(i)/4
			}
			for i := range spec.Lapses {
				spec.Lapses[i] = float64(i) / 100
			}
			spec.MaxTrials = math.MaxInt
			rule.change(&spec)
			q, s := newQuestPlus(spec), random.New(1, 0, random.PurposeObserver)
			b.ReportAllocs()
			for b.Loop() {
				x, _ := q.Next()
				q.Record(answer(&s, x[0], 0.1, 3.5, 0.02))
			}
		})
	}
}
