package psychometric

import (
	"encoding/json"
	"math"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// TestVerdicts gives data whose verdict is known by construction.
func TestVerdicts(t *testing.T) {
	t.Parallel()
	twoAFC := Model{Guess: 0.5, Lapse: FixedLapse(0.02)}
	yesNo := Model{Shape: Logistic, Scale: Linear}
	fixed := twoAFC
	fixed.Slope = 3.5
	falling := twoAFC
	falling.Falling = true
	for _, c := range []struct {
		name      string
		d         Data
		m         Model
		want      Status
		says      string
		valid     bool // threshold has a value
		low, high bool // sides of its interval that are open
	}{
		{"Nothing", nil, twoAFC, TooFew, "no trials", false, true, true},
		{"OneLevel", Data{{1, 40, 30}}, twoAFC, TooFew, "one level", false, true, true},
		{"OnlyZero", Data{{0, 40, 22}}, twoAFC, TooFew, "level 0", false, true, true},
		{"TwoTrials", Data{{1, 1, 0}, {2, 1, 1}}, twoAFC, TooFew, "2 trials", false, true, true},
		{"OneLevelKnownSlope", Data{{1, 100, 80}}, fixed, OK, "determine", true, false, false},
		{"AllCorrect", Data{{1, 20, 20}, {2, 20, 20}, {4, 20, 20}}, twoAFC, AllCorrect, "Every response was correct", false, true, false},
		{"AllCorrectFalling", Data{{1, 20, 20}, {2, 20, 20}, {4, 20, 20}}, falling, AllCorrect, "it is above", false, false, true},
		{"AllWrong", Data{{1, 20, 0}, {2, 20, 0}, {4, 20, 0}}, twoAFC, AllWrong, "how responses are coded", false, false, true},
		{"AllNo", Data{{1, 20, 0}, {2, 20, 0}, {4, 20, 0}}, yesNo, AllWrong, "wrong", false, false, true},
		{"Guessing", Data{{1, 100, 52}, {2, 100, 49}, {4, 100, 51}}, twoAFC, Flat, "", false, false, true},
		{"FlatHalfway", Data{{1, 40, 30}, {2, 40, 30}, {4, 40, 30}}, twoAFC, Flat, "constant", false, true, true},
		{"FallsInsteadOfRises", Data{{1, 40, 38}, {2, 40, 32}, {4, 40, 22}}, twoAFC, Flat, "does not rise", false, true, true},
		{"BarelyRises", Data{{1, 20, 14}, {2, 20, 15}, {4, 20, 16}}, twoAFC, Flat, "do not show", true, true, true},
		{"Separable", Data{{1, 20, 0}, {2, 20, 0}, {3, 20, 20}, {4, 20, 20}}, yesNo, Separable, "between levels 2 and 3", true, false, false},
		{"SeparableWithGuess", Data{{1, 20, 10}, {2, 20, 10}, {4, 20, 20}, {8, 20, 20}}, Model{Guess: 0.5}, Separable, "between levels 2 and 4", true, false, false},
		{"StepAtALevel", Data{{1, 20, 0}, {2, 20, 9}, {3, 20, 20}}, yesNo, Separable, "at level 2", true, false, false},
		{"Beyond", Data{{1, 200, 101}, {2, 200, 103}, {4, 200, 120}}, twoAFC, Outside, "beyond the levels tested", true, false, true},
		{"Good", Data{{1, 40, 21}, {2, 40, 25}, {4, 40, 35}, {8, 40, 39}}, twoAFC, OK, "between", true, false, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			r, err := Fit(c.d, c.m)
			if err != nil {
				t.Fatal(err)
			}
			i := r.Threshold.Interval
			if r.Status != c.want || !strings.Contains(r.Explanation, c.says) || r.Threshold.Valid != c.valid || i.OpenLow != c.low || i.OpenHigh != c.high {
				t.Errorf("got %v, valid %v, interval %+v, slope %+v: %s %v", r.Status, r.Threshold.Valid, i, r.Slope, r.Explanation, r.Notes)
			}
		})
	}
}

// TestNeverNaN fits anything that can be counted and looks for numbers that are none.
func TestNeverNaN(t *testing.T) {
	t.Parallel()
	rapid.Check(t, func(t *rapid.T) {
		m := drawModel(t)
		if rapid.IntRange(0, 4).Draw(t, "slope held") == 0 {
			m.Slope = rapid.Float64Range(0.1, 50).Draw(t, "slope")
		}
		level := rapid.Custom(func(t *rapid.T) Level {
			n := rapid.IntRange(0, 30).Draw(t, "n")
			return Level{rapid.SampledFrom([]float64{0, 1e-6, 0.5, 1, 1.0001, 2, 5, 1e5}).Draw(t, "x"), n, rapid.IntRange(0, n).Draw(t, "k")}
		})
		d := Data(rapid.SliceOfN(level, 0, 8).Draw(t, "data"))
		r, err := Fit(d, m)
		if err != nil {
			t.Fatal(err)
		}
		checkResult(t, r)
	})
}

func checkResult(t *rapid.T, r *Result) {
	numbers := []float64{r.LogLikelihood, r.Saturated, r.Constant, r.Deviance}
	for _, e := range []Estimate{r.Threshold, r.OnScale, r.Slope, r.Lapse} {
		numbers = append(numbers, e.Value, e.SE, e.SEObserved)
		if math.IsNaN(e.Interval.Low) || math.IsNaN(e.Interval.High) || e.Interval.Low > e.Interval.High {
			t.Fatalf("interval %+v", e.Interval)
		}
		if e.Valid && !(e.Interval.Low <= e.Value*(1+1e-9)+1e-12 && e.Value <= e.Interval.High*(1+1e-9)+1e-12) && e.Value > 0 {
			t.Fatalf("%v lies outside %+v (%v: %s)", e.Value, e.Interval, r.Status, r.Explanation)
		}
	}
	for _, x := range []float64{0, 0.7, 3, 1e9} {
		p := r.Predict(x)
		if !(p >= 0 && p <= 1) {
			t.Fatalf("P(%v) = %v", x, p)
		}
	}
	for _, row := range append(r.Covariance[:], r.CovarianceObserved[:]...) {
		numbers = append(numbers, row[:]...)
	}
	if i := slices.IndexFunc(numbers, func(x float64) bool { return math.IsNaN(x) || math.IsInf(x, 0) }); i >= 0 {
		t.Fatalf("number %d is %v", i, numbers[i])
	}
	if r.Explanation == "" || strings.Contains(r.Explanation, "NaN") || strings.Contains(r.Explanation, "Inf") {
		t.Fatalf("explanation %q", r.Explanation)
	}
	if _, err := json.Marshal(r); err != nil {
		t.Fatal(err)
	}
}

// TestRefusals names what is impossible.
func TestRefusals(t *testing.T) {
	t.Parallel()
	good := Data{{1, 10, 5}, {2, 10, 9}}
	for _, c := range []struct {
		name string
		d    Data
		m    Model
		says string
	}{
		{"Guess", good, Model{Guess: 1}, "guess rate 1"},
		{"GuessNaN", good, Model{Guess: math.NaN()}, "guess rate"},
		{"Lapse", good, Model{Lapse: FixedLapse(-0.1)}, "lapse rate"},
		{"NoRoom", good, Model{Guess: 0.95, Lapse: FixedLapse(0.05)}, "no room"},
		{"Criterion", good, Model{Guess: 0.5, Criterion: AtProportion(0.4)}, "P = 0.4"},
		{"CriterionAboveFreeLapse", good, Model{Guess: 0.5, Lapse: FreeLapse(), Criterion: AtProportion(0.95)}, "P = 0.95"},
		{"Share", good, Model{Criterion: AtShare(1)}, "F = 1"},
		{"Slope", good, Model{Slope: -1}, "slope -1"},
		{"Confidence", good, Model{Confidence: 1}, "confidence"},
		{"Symmetric", good, Model{Symmetric: true, Guess: 0.5}, "symmetric"},
		{"Shape", good, Model{Shape: 9}, "shape 9"},
		{"NegativeLevel", Data{{-1, 10, 5}}, Model{}, "level 1 is -1"},
		{"MoreCorrectThanTrials", Data{{1, 10, 11}}, Model{}, "11 correct of 10"},
		{"LevelNaN", Data{{math.NaN(), 10, 1}}, Model{}, "level 1 is not"},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			if _, err := Fit(c.d, c.m); err == nil || !strings.Contains(err.Error(), c.says) {
				t.Errorf("got %v, want it to say %q", err, c.says)
			}
		})
	}
}
