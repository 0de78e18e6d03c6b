package reaction

import (
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// TestEZExamples: testdata/psychometric_ez_diffusion.json; the first is the worked example of
// Wagenmakers et al. (2007), all were fed back through the forward equations.
func TestEZExamples(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../../testdata/psychometric_ez_diffusion.json")
	if err != nil {
		t.Fatal(err)
	}
	var examples []struct{ PC, VRT, MRT, V, A, Ter, MDT float64 }
	if err := json.Unmarshal(text, &examples); err != nil {
		t.Fatal(err)
	}
	const tolerance = 1e-7
	for _, x := range examples {
		e, err := FitEZ(x.PC, x.VRT, x.MRT, 100)
		if err != nil {
			t.Fatal(err)
		}
		for _, pair := range [][2]float64{{e.Drift, x.V}, {e.Boundary, x.A}, {e.NonDecision, x.Ter}, {e.Decision, x.MDT}} {
			if math.Abs(pair[0]-pair[1]) > tolerance {
				t.Errorf("%+v: got %.9f, want %.9f", x, pair[0], pair[1])
			}
		}
	}
}

// TestEZInverse: parameters from predictions are the parameters, below chance too.
func TestEZInverse(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		e := EZ{
			Drift:       rapid.Float64Range(0.02, 0.4).Draw(t, "v") * float64(1-2*rapid.IntRange(0, 1).Draw(t, "sign")),
			Boundary:    rapid.Float64Range(0.06, 0.2).Draw(t, "a"),
			NonDecision: rapid.Float64Range(0.1, 0.5).Draw(t, "Ter"),
		}
		p, v, m := e.Predict()
		if p > 1-1e-9 || p < 1e-9 {
			return
		}
		back, err := FitEZ(p, v, m, 100)
		if err != nil || math.Abs(back.Drift-e.Drift) > 1e-6 || math.Abs(back.Boundary-e.Boundary) > 1e-6 || math.Abs(back.NonDecision-e.NonDecision) > 1e-6 {
			t.Fatalf("%+v becomes %+v (%v)", e, back, err)
		}
	})
}

func TestEZEdges(t *testing.T) {
	t.Parallel()
	for proportion, moved := range map[float64]float64{0: 0.005, 0.5: 0.505, 1: 0.995} {
		e, err := FitEZ(proportion, 0.1, 0.7, 100)
		same, _ := FitEZ(moved, 0.1, 0.7, 100)
		same.Corrected = true
		if err != nil || e != same {
			t.Errorf("%g: %+v, %v; %g gives %+v", proportion, e, err, moved, same)
		}
	}
	for _, bad := range [][4]float64{{1.1, 0.1, 1, 10}, {0.8, 0, 1, 10}, {0.8, 0.1, 0, 10}, {0.8, 0.1, 1, 0}, {1, 0.1, 1, 1}, {math.NaN(), 0.1, 1, 10}} {
		if e, err := FitEZ(bad[0], bad[1], bad[2], int(bad[3])); !errors.Is(err, ErrNoDiffusion) {
			t.Errorf("%v gives %+v, %v", bad, e, err)
		}
	}
}

// TestFitEZTrials recovers the parameters of a simulated diffusion in steps of 0.5 ms,
// within 10%: 3,000 trials leave standard errors of 2 to 3%.
func TestFitEZTrials(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(1, 5))
	const drift, boundary, rest, dt = 0.2, 0.12, 0.3, 0.0005
	var trials []Trial
	for range 3000 {
		x, steps := boundary/2, 0
		for ; x > 0 && x < boundary; steps++ {
			x += drift*dt + noise*math.Sqrt(dt)*rng.NormFloat64()
		}
		trials = append(trials, Trial{rest + float64(steps)*dt, x >= boundary})
	}
	e, err := FitEZTrials(trials)
	if err != nil {
		t.Fatal(err)
	}
	if math.Abs(e.Drift/drift-1) > 0.1 || math.Abs(e.Boundary/boundary-1) > 0.1 || math.Abs(e.NonDecision/rest-1) > 0.1 || len(e.Warnings) > 0 {
		t.Errorf("%+v", e)
	}
	slow := append([]Trial(nil), trials...)
	for i := range slow {
		if !slow[i].Correct {
			slow[i].RT += 0.5
		}
	}
	if e, err = FitEZTrials(slow); err != nil || len(e.Warnings) == 0 || !strings.Contains(e.Warnings[0], "errors take") {
		t.Errorf("%+v, %v", e, err)
	}
	if _, err := FitEZTrials([]Trial{{0.5, true}}); !errors.Is(err, ErrNoDiffusion) {
		t.Errorf("got %v", err)
	}
	if _, err := FitEZTrials([]Trial{{-1, true}, {1, true}}); !errors.Is(err, ErrNoDiffusion) {
		t.Errorf("got %v", err)
	}
}

// TestSummarise: R 4.2.2, quantile, mad, mean(trim = .2), sd, and sqrt(var(w)·11/(8·7)) with
// w winsorised; the median's interval is the 3rd and 10th of 12, pbinom(2, 12, .5) = 0.0193.
func TestSummarise(t *testing.T) {
	t.Parallel()
	s, err := Summarise([]float64{.412, .385, .501, .477, .366, .590, .433, .402, .455, 1.92, .388, .521}, 0)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range [][2]float64{
		{s.Median, 0.4440}, {s.Quartiles[0], 0.3985}, {s.Quartiles[1], 0.5060}, {s.MAD, 0.0837669}, {s.Trimmed, 0.448625}, {s.SD, 0.4298889568},
		{s.GeometricMean, 0.5012587086}, {s.TrimmedSE, 0.02465581526}, {s.MedianInterval.Low, 0.388}, {s.MedianInterval.High, 0.521},
	} {
		if math.Abs(c[0]-c[1]) > 1e-8 {
			t.Errorf("got %.10f, R has %.10f", c[0], c[1])
		}
	}
	if few, err := Summarise([]float64{0.4, 0.5}, 0); err != nil || !few.MedianInterval.OpenLow || few.TrimmedSE != 0 {
		t.Errorf("%+v, %v", few, err)
	}
	if _, err := Summarise(nil, 0); !errors.Is(err, ErrNoTimes) {
		t.Errorf("got %v", err)
	}
	if _, err := Summarise([]float64{0.4, math.NaN()}, 0); !errors.Is(err, ErrBadTime) {
		t.Errorf("got %v", err)
	}
}

// TestFastGuesses: a mixture of guesses at 120 to 190 ms and responses from 300 ms on.
func TestFastGuesses(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(2, 5))
	var trials []Trial
	for i := range 600 {
		if i%6 == 0 {
			trials = append(trials, Trial{0.12 + 0.07*rng.Float64(), rng.Float64() < 0.5})
			continue
		}
		trials = append(trials, Trial{0.3 + 0.2*rng.ExpFloat64(), rng.Float64() < 0.95})
	}
	trials = append(trials, Trial{0.05, true}, Trial{-0.02, false})
	f, err := FindFastGuesses(trials, FastOptions{})
	if err != nil {
		t.Fatal(err)
	}
	if f.Fast != 102 || f.Anticipations != 2 || f.AboveChance < 0.01 || !f.OnsetValid || f.OnsetS < 0.15 || f.OnsetS > 0.34 {
		t.Errorf("%+v", f)
	}
	high, err := FindFastGuesses(trials, FastOptions{Cut: 0.4})
	if err != nil || high.AboveChance > 1e-6 || !strings.Contains(high.Explanation, "too high") {
		t.Errorf("%+v, %v", high, err)
	}
	none, err := FindFastGuesses([]Trial{{0.5, true}}, FastOptions{})
	if err != nil || none.Fast != 0 || none.OnsetValid {
		t.Errorf("%+v, %v", none, err)
	}
	if _, err := FindFastGuesses(trials, FastOptions{Guess: 2}); err == nil {
		t.Error("a guess rate of 2 passes")
	}
}

func TestLapses(t *testing.T) {
	t.Parallel()
	rng := rand.New(rand.NewPCG(3, 5))
	var list []Response
	for i := range 200 {
		r := Response{Trial{0.5 * math.Exp(0.2*rng.NormFloat64()), true}, rng.IntN(2), i%5 == 0}
		list = append(list, r)
	}
	list[17].RT, list[90].RT = 5, 9
	for _, i := range []int{0, 50, 100} { // 3 of 40 easy ones
		list[i].Correct = false
	}
	l, err := FindLapses(list, 0.5, LapseOptions{})
	if err != nil {
		t.Fatal(err)
	}
	// Clopper–Pearson limits by R 4.2.2, binom.test(3, 40)$conf.int, doubled for guessing.
	if l.Easy != 40 || l.EasyWrong != 3 || math.Abs(l.RateLow-2*0.01574218) > 1e-6 || math.Abs(l.RateHigh-2*0.20386475) > 1e-6 || math.Abs(l.Rate-0.15) > 1e-12 {
		t.Errorf("%+v", l)
	}
	found := map[int]bool{}
	for _, i := range l.SlowTrials {
		found[i] = true
	}
	if !found[17] || !found[90] || l.Slow > 4 || l.RunP < 0.01 {
		t.Errorf("%+v", l)
	}
	for i := range 40 {
		list[i].Choice = 1
	}
	if l, err = FindLapses(list, 0.5, LapseOptions{}); err != nil || l.LongestRun < 40 || l.RunP > 1e-6 {
		t.Errorf("%+v, %v", l, err)
	}
	if empty, err := FindLapses(nil, 0.5, LapseOptions{}); err != nil || empty.RunP != 1 {
		t.Errorf("%+v, %v", empty, err)
	}
}

// TestRunProbability compares with counting all sequences.
func TestRunProbability(t *testing.T) {
	t.Parallel()
	const n = 11
	for r := 1; r <= n; r++ {
		share := []float64{0.3, 0.7}
		want := 0.0
		for sequence := range 1 << n {
			p, run, longest := 1.0, 0, 0
			for i := range n {
				bit := sequence >> i & 1
				p *= share[bit]
				if i > 0 && bit == sequence>>(i-1)&1 {
					run++
				} else {
					run = 1
				}
				longest = max(longest, run)
			}
			if longest >= r {
				want += p
			}
		}
		if got := runProbability(share, n, r); math.Abs(got-want) > 1e-12 {
			t.Errorf("run of %d: %.12f, by counting %.12f", r, got, want)
		}
	}
}
