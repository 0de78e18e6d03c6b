package procedure

import (
	"math"
	"testing"

	"distal/experiments/random"
)

// efficiencyBound is n times the least variance of log10 threshold for a 2AFC
// Weibull observer with slope 3.5 and lapse rate 0.02, all but the threshold
// known: the minimum of P(1 − P)/P′² (Taylor MM, Creelman CD 1967, J Acoust Soc
// Am 41:782), found by bounded search and by the root of the derivative.
const efficiencyBound = 0.06607784

// Mean squared errors of simulated runs with thresholds uniform over the middle
// one of two log units; all trials count. 240 runs leave a standard error of
// about 12 % of the mean squared error; the limits lie three of them below
// the efficiencies of 3000 runs (0.61 and 0.80 with slope and lapse known, 0.58
// and 0.69 with the default slopes and lapse rates), so that a worse rule or
// prior, at half the efficiency, fails.
func TestEfficiency(t *testing.T) {
	t.Parallel()
	tests := []struct {
		name           string
		slopes, lapses []float64
		at60, at120    float64
	}{
		{"Known", []float64{3.5}, []float64{0.02}, 0.45, 0.55},
		{"Default", DefaultSlopes(), DefaultLapses(), 0.44, 0.51},
	}
	const runs = 240
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			spec := defaultSpec()
			spec.Slopes, spec.Lapses, spec.MaxTrials, spec.Prior = tt.slopes, tt.lapses, 120, Middle
			if len(tt.slopes) == 1 {
				spec.Place = Entropy
			}
			var square [2]float64
			bias, within := 0.0, 0
			for r := range runs {
				s := random.NewSub(3, uint32(r), random.PurposeObserver, 0)
				truth := -1.5 + (float64(r)+s.Float64())/runs
				q := newQuestPlus(spec)
				for q.trials < 120 {
					x, _ := q.Next()
					q.Record(answer(&s, x[0], math.Pow(10, truth), 3.5, 0.02))
					if q.trials != 60 && q.trials != 120 {
						continue
					}
					d := math.Log10(q.Estimate().Threshold) - truth
					square[q.trials/60-1] += d * d / runs
					if q.trials == 120 {
						bias += d / runs
						if math.Abs(d) < 1.96*q.Estimate().SDLog10 {
							within++
						}
					}
				}
			}
			if got := efficiencyBound / 60 / square[0]; got < tt.at60 {
				t.Errorf("efficiency %.3f after 60 trials", got)
			}
			if got := efficiencyBound / 120 / square[1]; got < tt.at120 || got > 1.2 {
				t.Errorf("efficiency %.3f after 120 trials", got)
			}
			// 2 % of the threshold; the standard error of the mean is 0.4 %.
			if math.Abs(bias) > math.Log10(1.02) {
				t.Errorf("bias %+.2f %%", 100*(math.Pow(10, bias)-1))
			}
			if within < runs*90/100 {
				t.Errorf("the 95 %% interval held the truth in %d of %d runs", within, runs)
			}
		})
	}
}
