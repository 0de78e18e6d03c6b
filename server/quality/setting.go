package quality

import (
	"math"

	"distal/experiments/psychometric"
	"distal/experiments/run"
	"distal/experiments/study"
)

// MeanOfSettings is the Function of thresholds that are adjusted.
const MeanOfSettings = "mean of the settings"

// match takes the point of subjective equality from the settings of a block
// whose levels are adjusted: their mean on the scale with Student's interval.
func (t *Threshold) match(b *study.Block, records []run.Record) {
	t.Function = MeanOfSettings
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Given == nil || r.Block != b.Name || r.Condition != t.Condition || r.Catch || r.Interrupted != "" || r.Response == "" {
			continue
		}
		t.Trials = append(t.Trials, r.Trial)
		t.Levels, t.Correct = append(t.Levels, r.Given.Setting), append(t.Correct, true)
	}
	scale, standard := psychometric.Log10, 1.0 // the standard changes nothing that is used here
	if t.Linear {
		scale = psychometric.Linear
	}
	m, err := psychometric.MatchFromSettings(t.Levels, scale, standard, 0.95)
	if err != nil {
		t.Explanation = err.Error()
		return
	}
	t.Explanation = m.Explanation
	t.Known = m.PSE.Valid
	t.Threshold, t.Low, t.High = m.PSE.Value, m.PSE.Interval.Low, m.PSE.Interval.High
	t.OnScale, t.SE = m.PSE.Value, m.PSE.SE
	if scale == psychometric.Log10 && m.PSE.Value > 0 {
		t.OnScale, t.SE = math.Log10(m.PSE.Value), m.PSE.SE/(math.Ln10*m.PSE.Value)
	}
}
