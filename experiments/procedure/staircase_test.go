package procedure_test

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/exact"
	"distal/experiments/procedure"
	"distal/experiments/random"
)

// table reads a CSV file of testdata as one map a row.
func table(t *testing.T, name string) []map[string]string {
	t.Helper()
	file, err := os.Open("../../testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	rows, err := csv.NewReader(file).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	list := make([]map[string]string, len(rows)-1)
	for i, row := range rows[1:] {
		list[i] = map[string]string{}
		for j, key := range rows[0] {
			list[i][key] = row[j]
		}
	}
	return list
}

func float(t *testing.T, s string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// Targets of Levitt H (1971) J Acoust Soc Am 49:467, Kaernbach C (1991) Percept
// Psychophys 49:227 and García-Pérez MA (1998) Vision Res 38:1861, whose
// abstract prints 77.85, 80.35, 83.15 and 85.84 %; solutions of the equations to five decimals.
func TestTarget(t *testing.T) {
	t.Parallel()
	rows := table(t, "staircase_targets.csv")
	if len(rows) != 18 {
		t.Fatalf("%d rows", len(rows))
	}
	for _, row := range rows {
		got := 100 * procedure.Target(procedure.Spec{
			Down: int(float(t, row["correct_in_a_row"])), Up: int(float(t, row["wrong_in_a_row"])), StepRatio: float(t, row["down_over_up_step"]),
		})
		if want := float(t, row["target_percent_correct"]); math.Abs(got-want) > 1e-4 {
			t.Errorf("%s: target %v %%, want %v", row["rule"], got, want)
		}
	}
}

// weibull is the proportion correct x log10 units above threshold.
func weibull(x, slope, guess, lapse float64) float64 {
	return guess - (1-guess-lapse)*math.Expm1(-math.Pow(10, slope*x))
}

// In the long run a track on a Weibull function of slope 3.5 has the
// stationary distribution of its Markov chain. The table holds the exact
// proportion correct and mean level, by the chain's transition matrix,
// confirmed by 4000 simulated tracks. 400 tracks of 1000 trials leave standard
// errors below 0.0008 and 0.0015 log units.
func TestLongRun(t *testing.T) {
	t.Parallel()
	const tolProportion, tolLevel = 0.003, 0.005
	for i, row := range table(t, "staircase_long_run.csv") {
		up, down := float(t, row["step_up_log10"]), float(t, row["step_down_log10"])
		guess := float(t, row["guess"])
		spec := procedure.Spec{
			Method: procedure.Staircase, Min: 1e-3, Max: 1e3, Start: 1, Down: int(float(t, row["correct_in_a_row"])), Up: 1,
			StepsUp: []float64{up}, StepRatio: down / up, EasierIs: 1, MaxTrials: 1000, Guess: guess,
		}
		right, level, n := 0, 0.0, 0
		for track := range 400 {
			s := random.NewSub(uint64(i), uint32(track), random.PurposeObserver, 0)
			p := procedure.New(spec, random.New(0, 0, random.PurposeProcedure))
			for {
				x, ok := p.Next()
				if !ok {
					break
				}
				log := exact.Log10(x[0])
				outcome := 0
				if s.Float64() < weibull(log, 3.5, guess, 0) {
					outcome = 1
				}
				p.Record(outcome)
				if p.Trials() > 200 {
					right, level, n = right+outcome, level+log, n+1
				}
			}
		}
		proportion := float64(right) / float64(n)
		if want := float(t, row["long_run_proportion_correct"]); math.Abs(proportion-want) > tolProportion {
			t.Errorf("row %d: %v correct, want %v", i, proportion, want)
		}
		level /= float64(n)
		if want := float(t, row["mean_level_minus_alpha_log10"]); math.Abs(level-want) > tolLevel {
			t.Errorf("row %d: mean level %v, want %v", i, level, want)
		}
	}
}

// A track by hand: 2 down, 1 up, steps 4 then 2 after the first reversal and 1
// after the second, from 20.
func TestStaircaseByHand(t *testing.T) {
	t.Parallel()
	p := procedure.New(procedure.Spec{
		Method: procedure.Staircase, Scale: procedure.Linear, Min: 10, Max: 21, Start: 20, Down: 2, Up: 1,
		StepsUp: []float64{4, 2, 1}, StepRatio: 1, EasierIs: 1, Reversals: 4, MaxTrials: 50,
	}, random.New(0, 0, random.PurposeProcedure))
	//                    16: −4        12: −4   14: reversal at 12    13: reversal at 14    14: at 13   13: at 14
	outcomes := []int{1, 1, 1, 1, 0, 1, 1, 0, 1, 1}
	levels := []float64{20, 20, 16, 16, 12, 14, 14, 13, 14, 14}
	for i, outcome := range outcomes {
		x, ok := p.Next()
		if !ok || x[0] != levels[i] {
			t.Fatalf("trial %d: level %v (%v), want %v", i+1, x[0], ok, levels[i])
		}
		p.Record(outcome)
	}
	if _, ok := p.Next(); ok {
		t.Error("the track goes on after its 4 reversals")
	}
	e := p.Estimate()
	// Mean of 12, 14, 13, 14; sd with n−1 is √(2.75/3).
	if !e.Valid || e.Threshold != 13.25 || math.Abs(e.SDLog10-math.Sqrt(2.75/3)) > 1e-12 || e.Reversals != 4 {
		t.Errorf("estimate %+v", e)
	}
	if p.Progress() != 1 {
		t.Errorf("progress %v at the end", p.Progress())
	}
}

// Whatever is answered, levels stay within bounds, the same answers give the
// same levels, progress never falls and the track ends.
func TestAnyAnswers(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		spec := anySpec(t)
		if problems := procedure.Check(spec); len(problems) > 0 {
			return // refused, as it should be
		}
		stream := random.New(rapid.Uint64().Draw(t, "seed"), 0, random.PurposeProcedure)
		p, q := procedure.New(spec, stream), procedure.New(spec, stream)
		last := 0.0
		for n := 0; ; n++ {
			x, ok := p.Next()
			y, again := q.Next()
			if ok != again || x[0] != y[0] {
				t.Fatalf("trial %d: %v and %v from the same answers", n+1, x, y)
			}
			if !ok {
				break
			}
			if !(x[0] >= spec.Min && x[0] <= spec.Max) {
				t.Fatalf("trial %d: level %v outside %v to %v", n+1, x[0], spec.Min, spec.Max)
			}
			if n >= spec.MaxTrials {
				t.Fatal("the track does not end")
			}
			outcome := rapid.IntRange(0, 1).Draw(t, "outcome")
			p.Record(outcome)
			q.Record(outcome)
			if p.Progress() < last || p.Progress() > 1 {
				t.Fatalf("progress went from %v to %v", last, p.Progress())
			}
			last = p.Progress()
			checkEstimate(t, p.Estimate())
		}
	})
}

func checkEstimate(t *rapid.T, e procedure.Estimate) {
	for _, x := range []float64{e.Threshold, e.SDLog10, e.Slope, e.Lapse} {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			t.Fatalf("estimate %+v", e)
		}
	}
	if !e.Valid && e.Reason == "" {
		t.Fatal("no estimate and no reason")
	}
}

func anySpec(t *rapid.T) procedure.Spec {
	method, steps := procedure.Method(rapid.IntRange(0, len(procedure.MethodNames)-1).Draw(t, "method")), []float64{0.2, 0.1}
	if method == procedure.Limits {
		steps = steps[:1]
	}
	return procedure.Spec{
		Method: method, Scale: procedure.Scale(rapid.IntRange(0, 1).Draw(t, "scale")),
		Min: 0.01, Max: 1, MinTrials: 5, MaxTrials: 40,
		Levels: []float64{0.1, 0.2, 0.4, 0.8}, Repetition: 10,
		Start: rapid.Float64Range(0.01, 1).Draw(t, "start"), Down: rapid.IntRange(1, 4).Draw(t, "down"), Up: 1,
		StepsUp: steps, StepRatio: rapid.Float64Range(0.2, 1).Draw(t, "ratio"), Reversals: rapid.IntRange(0, 8).Draw(t, "reversals"), EasierIs: rapid.SampledFrom([]int{-1, 1}).Draw(t, "easier"),
		ThresholdMin: 0.01, ThresholdMax: 1, ThresholdCount: 20, Slopes: []float64{1, 2, 4},
		Lapses: rapid.SampledFrom([][]float64{{0}, {0, 0.02}, {0.01}}).Draw(t, "lapses"),
		Guess:  rapid.SampledFrom([]float64{0, 0.25, 0.5}).Draw(t, "guess"), LevelCount: 15,
		StopSDLog10: rapid.SampledFrom([]float64{0, 0.1}).Draw(t, "stop"), Nuisance: rapid.Bool().Draw(t, "nuisance"),
		Place: procedure.Place(rapid.IntRange(0, len(procedure.PlaceNames)-1).Draw(t, "place")), Prior: procedure.Prior(rapid.IntRange(0, len(procedure.PriorNames)-1).Draw(t, "prior")),
		PriorMean: 0.1, PriorSDLog10: 0.3, StopEntropyBits: rapid.SampledFrom([]float64{0, 2}).Draw(t, "bits"),
	}
}
