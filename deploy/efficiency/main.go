// Command efficiency prints how close adaptive procedures come to the least
// variance that any unbiased estimate of a threshold can have.
//
//	go run ./deploy/efficiency -runs 2000
//	go run ./deploy/efficiency -converge    where staircases settle, against theory
//
// A simulated two-alternative observer with a Weibull function answers; its
// threshold is uniform over the middle one of the two log units from the lowest
// to the highest level, or with -outer over the two outer halves. Efficiency is the bound, for an observer whose slope and
// lapse rate are known,
//
//	min P (1 − P) / (n P'²)
//
// over the mean squared error of log10 threshold after n trials, all counted
// from the first (sweat factor: Taylor MM, Creelman CD 1967, J Acoust Soc Am 41:782).
package main

import (
	"flag"
	"fmt"
	"math"
	"os"
	"strconv"
	"strings"
	"text/tabwriter"

	"distal/experiments/procedure"
	"distal/experiments/random"
)

// observer is a Weibull function of log10 level with two alternatives.
type observer struct{ slope, lapse float64 }

func (o observer) correct(x float64) float64 {
	return 0.5 - (0.5-o.lapse)*math.Expm1(-math.Pow(10, o.slope*x))
}

// bound is n times the least variance of log10 threshold.
func (o observer) bound() float64 {
	least := math.Inf(1)
	for u := -1.0; u < 1; u += 1e-4 {
		x := u / o.slope
		p := o.correct(x)
		slope := (0.5 - o.lapse) * math.Exp(-math.Pow(10, u)) * math.Pow(10, u) * math.Ln10 * o.slope
		least = min(least, p*(1-p)/(slope*slope))
	}
	return least
}

// threshold of the proportion correct target, as log10 units above the
// Weibull threshold: what a staircase estimates.
func (o observer) at(target float64) float64 {
	f := (target - 0.5) / (0.5 - o.lapse)
	return math.Log10(-math.Log1p(-f)) / o.slope
}

var marks = []int{30, 60, 120, 240}

// tally sums errors of log10 threshold after each of marks.
type tally struct {
	n                   int
	sum, square, fourth float64
	within, none        float64
}

func (t *tally) add(e procedure.Estimate, truth float64) {
	if !e.Valid {
		t.none++
		return
	}
	d := math.Log10(e.Threshold) - truth
	t.n++
	t.sum += d
	t.square += d * d
	t.fourth += d * d * d * d
	if math.Abs(d) < 1.96*e.SDLog10 {
		t.within++
	}
}

// simulate runs spec on o, whose true value is offset above the Weibull threshold.
func simulate(spec procedure.Spec, o observer, offset float64, runs int, seed uint64, outer bool) []tally {
	result := make([]tally, len(marks))
	for r := range runs {
		s := random.NewSub(seed, uint32(r), random.PurposeObserver, 0)
		threshold := -1.5 + (float64(r)+s.Float64())/float64(runs)
		if outer && threshold < -1 {
			threshold -= 0.5
		} else if outer {
			threshold += 0.5
		}
		p := procedure.New(spec, random.NewSub(seed, uint32(r), random.PurposeProcedure, 0))
		for m := 0; m < len(marks); {
			x, _ := p.Next()
			outcome := 0
			if s.Float64() < o.correct(math.Log10(x[0])-threshold) {
				outcome = 1
			}
			p.Record(outcome)
			if p.Trials() == marks[m] {
				result[m].add(p.Estimate(), threshold+offset)
				m++
			}
		}
	}
	return result
}

func quest(slopes, lapses []float64) procedure.Spec {
	return procedure.Spec{
		Method: procedure.QuestPlus, Min: 0.01, Max: 1, MaxTrials: 1000, LevelCount: 60,
		ThresholdMin: 0.01, ThresholdMax: 1, ThresholdCount: 80, Slopes: slopes, Lapses: lapses, Guess: 0.5, Nuisance: true,
		Prior: procedure.Middle,
	}
}

// named is a method with its published settings, as a study file has them that
// names the method and the range alone.
func named(m procedure.Method, prior procedure.Prior) procedure.Spec {
	s := quest(nil, nil)
	s.Method, s.Prior, s.PriorSDLog10 = m, prior, 0.5
	s.FillModel()
	return s
}

// sure is the known observer placed by entropy: there is no slope to keep trials from.
func sure(o observer) procedure.Spec {
	s := quest([]float64{o.slope}, []float64{o.lapse})
	s.Place, s.LevelCount, s.ThresholdCount = procedure.Entropy, 80, 120
	return s
}

func staircase(down int, ratio float64) procedure.Spec {
	return procedure.Spec{
		Method: procedure.Staircase, Min: 0.01, Max: 1, MaxTrials: 1000, Start: 1, Down: down, Up: 1,
		StepsUp: []float64{0.2, 0.2, 0.1, 0.1, 0.05}, StepRatio: ratio, Discard: 4, EasierIs: 1, Guess: 0.5,
	}
}

func main() {
	runs := flag.Int("runs", 2000, "simulated runs a row")
	slope := flag.Float64("slope", 3.5, "of the observer")
	lapse := flag.Float64("lapse", 0.02, "of the observer")
	only := flag.String("only", "", "rows whose name contains this text")
	converge := flag.Bool("converge", false, "print where staircases settle")
	seed := flag.Uint64("seed", 20, "of the simulation: rows share it, so that they meet the same observers")
	outer := flag.Bool("outer", false, "thresholds in the outer halves of the range, which the default prior takes for unlikely")
	flag.Parse()
	if *converge {
		printConvergence(*runs)
		return
	}
	o := observer{*slope, *lapse}
	w := tabwriter.NewWriter(os.Stdout, 0, 0, 2, ' ', tabwriter.AlignRight)
	fmt.Fprintln(w, "procedure\ttrials\tefficiency\t± s.e.\tbias %\t95 % covers\tno estimate\t")
	for _, row := range []struct {
		name   string
		spec   procedure.Spec
		offset float64
	}{
		{"QUEST+, slope and lapse known", sure(o), 0},
		{"QUEST+, both unknown (default)", quest(procedure.DefaultSlopes(), procedure.DefaultLapses()), 0},
		{"QUEST", named(procedure.Quest, procedure.Normal), 0},
		{"Psi", named(procedure.Psi, procedure.Uniform), 0},
		{"Psi, marginal", named(procedure.PsiMarginal, procedure.Uniform), 0},
		{"2 down 1 up", staircase(2, 1), o.at(procedure.Target(staircase(2, 1)))},
		{"3 down 1 up", staircase(3, 1), o.at(procedure.Target(staircase(3, 1)))},
		{"4 down 1 up", staircase(4, 1), o.at(procedure.Target(staircase(4, 1)))},
		{"1 down 1 up, weighted 1:3", staircase(1, 1.0/3), o.at(procedure.Target(staircase(1, 1.0/3)))},
		{"3 down 1 up, ratio 0.7393", staircase(3, 0.7393), o.at(procedure.Target(staircase(3, 0.7393)))},
	} {
		if !strings.Contains(row.name, *only) {
			continue
		}
		for i, t := range simulate(row.spec, o, row.offset, *runs, *seed, *outer) {
			n := float64(t.n)
			mse := t.square / n
			efficiency := o.bound() / float64(marks[i]) / mse
			error := efficiency * math.Sqrt(max(0, t.fourth/n-mse*mse)/n) / mse
			covers := "–" // a staircase claims no interval
			if row.spec.Method.Bayesian() {
				covers = strconv.FormatFloat(t.within/n, 'f', 3, 64)
			}
			fmt.Fprintf(w, "%s\t%d\t%.3f\t%.3f\t%+.2f\t%s\t%.3f\t\n", row.name, marks[i], efficiency, error,
				100*(math.Pow(10, t.sum/n)-1), covers, t.none/float64(*runs))
		}
	}
	w.Flush()
}
