package procedure

import (
	"math"
	"testing"

	"distal/experiments/exact"
	"distal/experiments/random"
)

// The most telling level of a Weibull function: 0.0686502 log10 units above the
// threshold for slope 3.5, guess 0.5 and 1 % answered blindly, and 0.1937423/3.5
// for a lapse rate of 0.02 (minimum of P(1−P)/P′² by bounded search and by the
// root of its derivative at 30 digits).
func TestTelling(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct{ guess, lapse, want float64 }{
		{0.5, 0.005, 0.0686502}, {0.5, 0.02, 0.1937423 / 3.5}, {0.125, 0.01, 0.1954692 / 3.5}, {0, 0, 0.2023859 / 3.5},
	} {
		got := telling(Spec{Slopes: []float64{3.5}, Lapses: []float64{tt.lapse}, Guess: tt.guess})
		if math.Abs(got-tt.want) > 0.0005/3.5+1e-7 {
			t.Errorf("guess %v, lapse %v: %v, want %v", tt.guess, tt.lapse, got, tt.want)
		}
	}
}

func named(m Method) Spec {
	s := Spec{
		Method: m, Min: 0.01, Max: 1, LevelCount: 41, MaxTrials: 400, ThresholdMin: 0.01, ThresholdMax: 1,
		ThresholdCount: 41, Guess: 0.5, Nuisance: true, PriorSDLog10: 0.5,
	}
	switch m {
	case Quest:
		s.Prior = Normal
	case Psi, PsiMarginal:
		s.Prior = Uniform
	}
	s.FillModel()
	return s
}

// QUEST is placed where the mode of the posterior, reckoned anew from all
// answers, says (Watson and Pelli 1983); so are the rules by mean and median.
func TestPlacedAtPosterior(t *testing.T) {
	t.Parallel()
	for _, place := range []Place{Own, Mode, Mean, Median} {
		spec := named(Quest)
		spec.Place = place
		q, s := newQuestPlus(spec), random.New(5, 0, random.PurposeObserver)
		log := make([]float64, len(q.thresholds)) // log posterior
		for i, x := range q.thresholds {
			log[i] = -(x + 1) * (x + 1) / 2 / 0.25
		}
		for range 60 {
			x, _ := q.Next()
			level := math.Log10(x[0])
			if want := place.of(q.thresholds, log) + 0.0686502; math.Abs(level-want) > 0.025+1e-3 {
				t.Fatalf("%s, trial %d: level %v, want %v", PlaceNames[place], q.trials+1, level, want)
			}
			outcome := answer(&s, x[0], 0.1, 3.5, 0.02)
			for i, threshold := range q.thresholds {
				p := 0.5 - 0.495*math.Expm1(-math.Pow(10, 3.5*(level-threshold)))
				if outcome == 0 {
					p = 1 - p
				}
				log[i] += math.Log(p)
			}
			q.Record(outcome)
		}
	}
}

// of takes the posterior for one threshold.
func (p Place) of(thresholds, log []float64) float64 {
	best, total, sum := 0, 0.0, 0.0
	for i := range log {
		if log[i] > log[best] {
			best = i
		}
	}
	for i := range log {
		total += math.Exp(log[i])
		sum += math.Exp(log[i]) * thresholds[i]
	}
	switch p {
	case Mean:
		return sum / total
	case Median:
		below := 0.0
		for i := range log {
			if below += math.Exp(log[i]); below >= total/2 {
				return thresholds[i]
			}
		}
	}
	return thresholds[best]
}

// Psi is QUEST+ by the entropy of all parameters.
func TestPsiIsJoint(t *testing.T) {
	t.Parallel()
	joint := named(Psi)
	joint.Method, joint.Nuisance = QuestPlus, false
	a, b, s := newQuestPlus(named(Psi)), newQuestPlus(joint), random.New(6, 0, random.PurposeObserver)
	for range 40 {
		x, _ := a.Next()
		y, _ := b.Next()
		if x[0] != y[0] {
			t.Fatalf("trial %d: %v and %v", a.trials+1, x, y)
		}
		outcome := answer(&s, x[0], 0.1, 3.5, 0.02)
		a.Record(outcome)
		b.Record(outcome)
	}
}

// The marginal Psi method chooses the level with the least expected entropy of
// what is of interest (Prins 2013), here by the definition: for either answer
// the posterior, its sums over what is not of interest, their entropy.
func TestPsiMarginal(t *testing.T) {
	t.Parallel()
	for _, keep := range []bool{false, true} {
		spec := named(PsiMarginal)
		spec.KeepSlope, spec.ThresholdCount, spec.LevelCount = keep, 21, 21
		q, s := newQuestPlus(spec), random.New(7, 0, random.PurposeObserver)
		for range 30 {
			best, least, second := 0, math.Inf(1), math.Inf(1)
			for i := range q.levels {
				loss := q.expectedEntropy(i, keep)
				if loss < least {
					best, least, second = i, loss, least
				} else {
					second = min(second, loss)
				}
			}
			x, _ := q.Next()
			if second-least > 1e-7 && x[0] != q.levels[best] {
				t.Fatalf("keep slope %v, trial %d: level %v, want %v", keep, q.trials+1, x[0], q.levels[best])
			}
			q.Record(answer(&s, x[0], 0.1, 3.5, 0.02))
		}
	}
}

func (q *questPlus) expectedEntropy(i int, keep bool) float64 {
	n, expected := len(q.posterior), 0.0
	for outcome := range 2 {
		sums := map[int]float64{}
		total := 0.0
		for c, p := range q.posterior {
			r := q.right[i*n+c]
			if outcome == 0 {
				r = 1 - r
			}
			key := c / (len(q.spec.Slopes) * len(q.spec.Lapses))
			if keep {
				key = c / len(q.spec.Lapses)
			}
			sums[key] += p * r
			total += p * r
		}
		for _, mass := range sums {
			if mass > 0 {
				expected -= mass * math.Log(mass/total)
			}
		}
	}
	return expected
}

// The track ends when the entropy of the threshold, summed anew, is low enough.
func TestStopsByEntropy(t *testing.T) {
	t.Parallel()
	spec := named(Psi)
	spec.StopEntropyBits, spec.MinTrials = 2.5, 10
	q, s := newQuestPlus(spec), random.New(8, 0, random.PurposeObserver)
	bits := func() float64 {
		sum := 0.0
		for t := range q.thresholds {
			mass := 0.0
			for _, p := range q.posterior[t*q.cells : (t+1)*q.cells] {
				mass += p
			}
			if mass > 0 {
				sum -= mass * math.Log2(mass)
			}
		}
		return sum
	}
	for {
		x, ok := q.Next()
		if !ok {
			break
		}
		if q.trials >= 10 && bits() < 2.5 {
			t.Fatalf("trial %d at %v bits", q.trials+1, bits())
		}
		q.Record(answer(&s, x[0], 0.1, 3.5, 0.02))
	}
	if q.trials < 10 || q.trials == 400 || bits() >= 2.5 {
		t.Errorf("ended after %d trials at %v bits", q.trials, bits())
	}
}

// Two parameters: log threshold rises by 0.5 for each log unit of the second.
// Both are found, and levels of the second are not all the same.
func TestTwoParameters(t *testing.T) {
	t.Parallel()
	seconds := []float64{1, 2, 4, 8, 16}
	for _, m := range []Method{QuestPlus, Psi, PsiMarginal} {
		spec := named(m)
		spec.Slopes, spec.Lapses = []float64{2.5, 3.5, 4.5}, []float64{0.02}
		spec.Second, spec.SecondLevels = "speed", seconds
		spec.Nuisance, spec.ThresholdCount, spec.LevelCount = false, 31, 31
		spec.FillModel()
		if problems := Check(spec); len(problems) > 0 {
			t.Fatal(problems)
		}
		q, s := newQuestPlus(spec), random.New(9, 0, random.PurposeObserver)
		shown := map[float64]int{}
		for q.trials < 240 {
			x, _ := q.Next()
			if len(x) != 2 {
				t.Fatalf("levels %v", x)
			}
			shown[x[1]]++
			q.Record(answer(&s, x[0], 0.1*math.Sqrt(x[1]/4), 3.5, 0.02))
		}
		e := q.Estimate()
		if d := exact.Log10(e.Threshold) + 1; math.Abs(d) > 4*e.SDLog10+0.01 || e.SDLog10 > 0.06 {
			t.Errorf("%s: threshold %v, sd %v", MethodNames[m], e.Threshold, e.SDLog10)
		}
		if m != PsiMarginal && math.Abs(e.Gradient-0.5) > 0.2 {
			t.Errorf("%s: gradient %v", MethodNames[m], e.Gradient)
		}
		if m != PsiMarginal && len(shown) < 2 {
			t.Errorf("%s: only %v was shown", MethodNames[m], shown)
		}
	}
}
