package main

import (
	"fmt"
	"math"
	"os"
	"text/tabwriter"

	"distal/experiments/procedure"
	"distal/experiments/random"
)

// Trials of a track before the long run begins, and of the long run.
const (
	settling = 200
	longRun  = 400
)

// printConvergence compares the proportion correct that staircases hold in the
// long run with theory: p^down = up/(up + down step) (Levitt 1971; Kaernbach
// 1991; García-Pérez 1998), which holds as steps become small against the
// spread of the function. The unit of the steps is 0.02 log10 units, 1/14 of
// the observer's spread; the observer has slope 3.5 and never lapses.
func printConvergence(runs int) {
	w := tabwriter.NewWriter(os.Stdout, 0, 0, 2, ' ', tabwriter.AlignRight)
	fmt.Fprintln(w, "staircase\tdown/up step\ttheory %\tlong run %\t± s.e.\toff by % of theory\t")
	for _, row := range []struct {
		name     string
		down, up int
		ratio    float64
		guess    float64
	}{
		{"1 down 1 up, yes/no", 1, 1, 1, 0},
		{"2 down 1 up", 2, 1, 1, 0.5},
		{"3 down 1 up", 3, 1, 1, 0.5},
		{"4 down 1 up", 4, 1, 1, 0.5},
		{"1 down 1 up, weighted (Kaernbach)", 1, 1, 1.0 / 3, 0.5},
		{"1 down 1 up (García-Pérez)", 1, 1, 0.2845, 0.5},
		{"2 down 1 up (García-Pérez)", 2, 1, 0.5488, 0.5},
		{"3 down 1 up (García-Pérez)", 3, 1, 0.7393, 0.5},
		{"4 down 1 up (García-Pérez)", 4, 1, 0.8415, 0.5},
		{"1 down 2 up, yes/no", 1, 2, 1, 0},
	} {
		step := 0.02 / min(row.ratio, 1)
		spec := procedure.Spec{
			Method: procedure.Staircase, Min: 1e-3, Max: 1e3, Start: 1, Down: row.down, Up: row.up,
			StepsUp: []float64{step}, StepRatio: row.ratio, EasierIs: 1, MaxTrials: settling + longRun, Guess: row.guess,
		}
		mean, sd := settle(spec, runs)
		target := procedure.Target(spec)
		fmt.Fprintf(w, "%s\t%.4f\t%.2f\t%.2f\t%.2f\t%+.2f\t\n", row.name, row.ratio, 100*target, 100*mean, 100*sd/math.Sqrt(float64(runs)), 100*(mean/target-1))
	}
	w.Flush()
}

// settle is the proportion correct in the long run, with its standard deviation
// over the runs.
func settle(spec procedure.Spec, runs int) (mean, sd float64) {
	square := 0.0
	for r := range runs {
		s := random.NewSub(21, uint32(r), random.PurposeObserver, 0)
		p := procedure.New(spec, random.NewSub(21, uint32(r), random.PurposeProcedure, 0))
		right := 0
		for x, ok := p.Next(); ok; x, ok = p.Next() {
			outcome := 0
			if s.Float64() < spec.Guess-(1-spec.Guess)*math.Expm1(-math.Pow(x[0], 3.5)) {
				outcome = 1
			}
			p.Record(outcome)
			if p.Trials() > settling {
				right += outcome
			}
		}
		share := float64(right) / longRun
		mean += share / float64(runs)
		square += share * share / float64(runs)
	}
	return mean, math.Sqrt(max(0, square-mean*mean))
}
