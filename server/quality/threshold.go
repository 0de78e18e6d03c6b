package quality

import (
	"math"

	"distal/experiments/psychometric"
	"distal/experiments/run"
	"distal/experiments/study"
)

// Threshold is a run's threshold in one block and condition, fitted by maximum
// likelihood: Weibull with the guess rate of the task, lapse rate free within
// 0 and 0.1. It is where performance is 1 − 1/e of the way from guessing to the top.
type Threshold struct {
	Block       string
	Condition   string
	Parameter   string // that was varied
	Unit        string
	Known       bool // false: Explanation says why there is none
	Threshold   float64
	Low, High   float64 // 95 % interval by profile likelihood; infinite or 0 where the data leave it open
	Explanation string
	Fit         *psychometric.Result // nil if nothing could be fitted
	Levels      []float64            // in the order of the trials
	Correct     []bool
}

// Thresholds fits every block and condition of a run that varies a level.
func Thresholds(s *study.Study, records []run.Record) []Threshold {
	var list []Threshold
	for i := range s.Blocks {
		b := &s.Blocks[i]
		if b.Kind != study.Measurement || b.Procedure < 0 {
			continue
		}
		conditions := []string{""}
		if len(b.Conditions) > 0 {
			conditions = nil
			for j := range b.Conditions {
				conditions = append(conditions, b.Conditions[j].Name)
			}
		}
		for _, condition := range conditions {
			list = append(list, fitOne(s, b, condition, records))
		}
	}
	return list
}

func fitOne(s *study.Study, b *study.Block, condition string, records []run.Record) Threshold {
	p := &s.Procedures[b.Procedure]
	task := &s.Tasks[b.Task]
	kind := s.Displays[task.Display].Kind
	t := Threshold{Block: b.Name, Condition: condition, Parameter: p.Parameter, Unit: kind.Params[kind.Index(p.Parameter)].Unit}
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Block != b.Name || r.Condition != condition || r.Catch || r.Interrupted != "" || r.Correct < 0 || math.IsNaN(r.Level) {
			continue
		}
		t.Levels, t.Correct = append(t.Levels, r.Level), append(t.Correct, r.Correct == 1)
	}
	if len(t.Levels) == 0 {
		t.Explanation = "There are no trials yet."
		return t
	}
	model := psychometric.Model{
		Shape: psychometric.Weibull, Scale: psychometric.Log10, Guess: 1 / float64(len(task.Choices)),
		Lapse: psychometric.FreeLapse(), Falling: p.EasierIs < 0,
	}
	fit, err := psychometric.Fit(psychometric.Collect(t.Levels, t.Correct), model)
	if err != nil {
		t.Explanation = err.Error()
		return t
	}
	t.Fit = fit
	t.Explanation = fit.Explanation
	t.Known = fit.Threshold.Valid
	t.Threshold, t.Low, t.High = fit.Threshold.Value, fit.Threshold.Interval.Low, fit.Threshold.Interval.High
	return t
}
