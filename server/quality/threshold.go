package quality

import (
	"math"

	"distal/experiments/procedure"
	"distal/experiments/psychometric"
	"distal/experiments/run"
	"distal/experiments/study"
)

// Threshold is a run's threshold in one block and condition.
//
// Where answers are right or wrong it is where performance is the Function's way
// from guessing to the top: 1 − 1/e for Weibull (levels on a log scale), half for
// the cumulative Gaussian (levels on a linear one). Where a task has two answers
// and neither is right it is the point of balance: the level at which both are
// equally likely. The Weibull threshold is the mean of a posterior with the prior of
// this package and its 95 % interval the central credible one; others are maximum-likelihood
// estimates with profile-likelihood intervals, lapse rate free within 0 and 0.1.
type Threshold struct {
	Block       string
	Condition   string
	Parameter   string // that was varied
	Unit        string
	Linear      bool   // scale of the levels
	Function    string // fitted
	Counted     string // at a point of balance: the answer whose share is fitted; "" where right answers are
	Known       bool   // false: Explanation says why there is none
	Threshold   float64
	Low, High   float64 // 95 % interval; infinite or 0 where the data leave it open
	OnScale, SE float64 // threshold and standard error in log10 units, on a linear scale in the level's
	Explanation string
	Fit         *psychometric.Result // nil if nothing could be fitted
	Levels      []float64            // in the order of the trials
	Correct     []bool               // right, or at a point of balance the answer Counted
	Trials      []int                // their numbers in the run
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
	t := Threshold{
		Block: b.Name, Condition: condition, Parameter: p.Parameter, Unit: kind.Params[kind.Index(p.Parameter)].Unit,
		Linear: p.Spec.Scale == procedure.Linear, Counted: counted(task),
	}
	if task.Answer.By == study.ByAdjustment {
		t.match(b, records)
		return t
	}
	for i := range records {
		r := records[i].Trial
		if r == nil || r.Block != b.Name || r.Condition != condition || r.Catch || r.Interrupted != "" || r.Response == "" || math.IsNaN(r.Level) {
			continue
		}
		if t.Counted == "" && r.Correct < 0 {
			continue
		}
		t.Trials = append(t.Trials, r.Trial)
		t.Levels, t.Correct = append(t.Levels, r.Level), append(t.Correct, r.Correct == 1 || t.Counted != "" && r.Response == t.Counted)
	}
	if len(t.Levels) == 0 {
		t.Explanation = "There are no trials yet."
		return t
	}
	if p.Second != "" {
		t.Explanation = "Levels are of two parameters, so that no one function fits them: see the procedure's own estimate."
		return t
	}
	data := psychometric.Collect(t.Levels, t.Correct)
	fit, err := t.fit(data, task, p)
	if err != nil {
		t.Explanation = err.Error()
		return t
	}
	t.Fit = fit
	t.Explanation = fit.Explanation
	t.Known = fit.Threshold.Valid
	t.Threshold, t.Low, t.High = fit.Threshold.Value, fit.Threshold.Interval.Low, fit.Threshold.Interval.High
	t.OnScale, t.SE = fit.OnScale.Value, fit.OnScale.SE
	if t.Known && t.Function == "Weibull" {
		t.settle(data)
	}
	return t
}

// counted is the second of two answers of which neither is ever right, "" for other tasks.
func counted(task *study.Task) string {
	if len(task.Choices) != 2 || len(task.Choices[0].Correct)+len(task.Choices[1].Correct) > 0 {
		return ""
	}
	return task.Choices[1].Name
}

func (t *Threshold) fit(data psychometric.Data, task *study.Task, p *study.ProcedureSpec) (*psychometric.Result, error) {
	model := psychometric.Model{Shape: psychometric.Weibull, Scale: psychometric.Log10, Guess: 1 / float64(len(task.Choices)), Lapse: psychometric.FreeLapse(), Falling: p.EasierIs < 0}
	t.Function = "Weibull"
	if t.Linear || t.Counted != "" {
		model.Shape, t.Function = psychometric.Gaussian, "cumulative Gaussian"
	}
	if t.Linear {
		model.Scale = psychometric.Linear
	}
	if t.Counted == "" {
		return psychometric.Fit(data, model)
	}
	model.Guess, model.Symmetric, model.Criterion, model.Falling = 0, true, psychometric.AtShare(0.5), false
	rising, err := psychometric.Fit(data, model)
	if err != nil {
		return nil, err
	}
	// Which answer goes with higher levels is the observer's to say.
	model.Falling = true
	falling, err := psychometric.Fit(data, model)
	if err != nil || rising.LogLikelihood >= falling.LogLikelihood {
		return rising, nil
	}
	return falling, nil
}
