package planning

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"sync"

	"distal/experiments/planning"
	"distal/experiments/procedure"
	"distal/experiments/psychometric"
	"distal/experiments/study"
	"distal/experiments/value"
	"distal/server/quality"
)

// Question is what a plan is asked.
type Question struct {
	Observers
	Precision  float64 `json:"precision_log10"`  // wanted root mean square error of a run's log10 threshold
	Difference float64 `json:"difference_log10"` // between two groups, log10 units
	Alpha      float64 `json:"alpha"`
	Power      float64 `json:"power"`
	MostTrials int     `json:"most_trials"`
}

// Check says what is wrong with a question.
func (q Question) Check() error {
	switch {
	case !(q.Precision > 0 && q.Precision <= 1):
		return fmt.Errorf("the wanted precision is in log10 units, above 0 and at most 1; it is %g", q.Precision)
	case !(q.Difference > 0 && q.Difference <= 2):
		return fmt.Errorf("the difference between groups is in log10 units, above 0 and at most 2; it is %g", q.Difference)
	case !(q.Alpha > 0 && q.Alpha < 1 && q.Power > 0.05 && q.Power < 1):
		return errors.New("alpha and power are probabilities between 0 and 1")
	case q.MostTrials < 20 || q.MostTrials > 1000:
		return fmt.Errorf("from 20 to 1000 trials can be planned, not %d", q.MostTrials)
	case q.Count < 20:
		return errors.New("a plan needs 20 observers or more")
	}
	return q.Observers.Check()
}

// Marks are the numbers of trials of one threshold that a plan looks at.
func (q Question) Marks() []int {
	var list []int
	for _, n := range []int{20, 30, 40, 50, 60, 80, 100, 120, 160, 200, 240, 320, 400, 500, 640, 800} {
		if n < q.MostTrials {
			list = append(list, n)
		}
	}
	return append(list, q.MostTrials)
}

// Mark is what a procedure gives after so many trials of one threshold.
type Mark struct {
	Trials     int     `json:"trials"`
	RMSELog10  float64 `json:"rmse_log10"`
	BiasLog10  float64 `json:"bias_log10"`
	Missing    float64 `json:"share_without_estimate"`
	Efficiency float64 `json:"efficiency"`
	Minutes    float64 `json:"minutes_per_participant"`
	// Participants is the least number in each of two groups for the difference and
	// power asked for, Hours what both groups together cost; 0 where no number does.
	Participants int     `json:"participants_per_group"`
	Hours        float64 `json:"participant_hours"`
}

// Line is one procedure of a plan.
type Line struct {
	Procedure string `json:"procedure"`
	Own       bool   `json:"own"` // of the study as it is
	Marks     []Mark `json:"marks"`
	// TrialsNeeded is the least of the marks that reaches the precision, 0 if none does.
	TrialsNeeded int `json:"trials_needed"`
	// Cheapest is the mark with the fewest participant hours, −1 where none is possible.
	Cheapest int `json:"cheapest"`
}

// Plan is the answer to a question about a study.
type Plan struct {
	Study string `json:"study"`
	Block string `json:"block"`
	Question
	Lines []Line `json:"procedures"`
}

// Make rehearses the study's first threshold with its own procedure and with others.
// progress is told the share done.
func Make(ctx context.Context, s *study.Study, q Question, progress func(share float64)) (*Plan, error) {
	if err := q.Check(); err != nil {
		return nil, err
	}
	block, err := firstBlock(s)
	if err != nil {
		return nil, err
	}
	candidates, err := alternatives(s, block, q)
	if err != nil {
		return nil, err
	}
	out := &Plan{Study: s.About.Name, Block: s.Blocks[block].Name, Question: q}
	for i, c := range candidates {
		line, err := q.line(ctx, c, block, func(done int) {
			if progress != nil {
				progress((float64(i) + float64(done)/float64(q.Count)) / float64(len(candidates)))
			}
		})
		if err != nil {
			return nil, fmt.Errorf("%s: %w", c.name, err)
		}
		out.Lines = append(out.Lines, line)
	}
	return out, nil
}

func firstBlock(s *study.Study) (int, error) {
	for i := range s.Blocks {
		b := &s.Blocks[i]
		if b.Kind == study.Measurement && b.Procedure >= 0 && plannable(s, b) {
			return i, nil
		}
	}
	return 0, ErrNothingToPlan
}

// candidate is a study with one of the procedures to be compared.
type candidate struct {
	name  string
	own   bool
	study *study.Study
}

// alternatives are the study as it is and with other procedures, each made as long
// as the longest plan and without breaks, rules of ending or further blocks.
func alternatives(s *study.Study, block int, q Question) ([]candidate, error) {
	own := &s.Procedures[s.Blocks[block].Procedure].Spec
	levels := func() []float64 {
		var list []float64
		for i := -3.0; i <= 3; i++ {
			list = append(list, math.Max(own.Min, math.Min(own.Max, q.Threshold*math.Pow(10, 0.15*i))))
		}
		return slices.Compact(list)
	}()
	start := math.Min(own.Max, q.Threshold*4)
	if own.EasierIs < 0 {
		start = math.Max(own.Min, q.Threshold/4)
	}
	base := procedure.Spec{
		Parameter: own.Parameter, Scale: own.Scale, Min: own.Min, Max: own.Max, EasierIs: own.EasierIs, Guess: guess(s, block), MaxTrials: q.MostTrials,
		LevelCount: 60, ThresholdCount: 80, Down: 2, Up: 1, StepRatio: 1, Discard: 2, Prior: procedure.Middle, PriorSDLog10: 0.5,
	}
	with := func(change func(*procedure.Spec)) procedure.Spec {
		spec := base
		change(&spec)
		return spec
	}
	list := []struct {
		name string
		spec procedure.Spec
	}{
		{"this study: " + procedure.MethodNames[own.Method], long(*own, q.MostTrials)},
		{"quest_plus", with(func(p *procedure.Spec) { p.Method, p.Nuisance = procedure.QuestPlus, true })},
		{"staircase 3 down 1 up", with(func(p *procedure.Spec) {
			p.Method, p.Start, p.Down, p.Up, p.StepsUp, p.StepRatio = procedure.Staircase, start, 3, 1, []float64{0.2, 0.2, 0.1}, 0.7393
		})},
		{"constant, 7 levels about the threshold", with(func(p *procedure.Spec) {
			p.Method, p.Levels, p.Repetition = procedure.Constant, levels, (q.MostTrials+len(levels)-1)/len(levels)
		})},
	}
	var out []candidate
	for i, c := range list {
		if i > 0 && c.spec.Method == own.Method {
			continue
		}
		changed, err := withProcedure(s, block, c.spec)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", c.name, err)
		}
		out = append(out, candidate{c.name, i == 0, changed})
	}
	return out, nil
}

func guess(s *study.Study, block int) float64 {
	return 1 / float64(max(2, len(s.Tasks[s.Blocks[block].Task].Choices)))
}

// long is a procedure that goes on for n trials.
func long(p procedure.Spec, n int) procedure.Spec {
	p.MaxTrials, p.MinTrials, p.Reversals, p.StopSDLog10, p.StopEntropyBits = n, 0, 0, 0, 0
	if p.Method == procedure.Constant && len(p.Levels) > 0 {
		p.Repetition = (n + len(p.Levels) - 1) / len(p.Levels)
	}
	return p
}

// withProcedure is a copy of the study in which one block, measured alone and without
// conditions, uses another procedure. It goes through the study's text, so that all
// defaults and checks are those of a study file.
func withProcedure(s *study.Study, block int, spec procedure.Spec) (*study.Study, error) {
	text, err := value.Canonical(s.Encode())
	if err != nil {
		return nil, err
	}
	decode := func() (*study.Study, error) {
		tree, err := value.ParseJSON(text)
		if err != nil {
			return nil, err
		}
		out, problems := study.Decode(tree)
		if problems.Failed() {
			return nil, problems
		}
		return out, nil
	}
	out, err := decode()
	if err != nil {
		return nil, err
	}
	b := out.Blocks[block]
	b.Conditions, b.BreakEvery, b.Catch = nil, 0, study.Catch{}
	out.Procedures = []study.ProcedureSpec{{Name: out.Procedures[b.Procedure].Name, Spec: spec, Interleave: 1}}
	b.Procedure = 0
	out.Blocks = []study.Block{b}
	out.Groups, out.Orders, out.Exclusions = nil, study.Orders{}, nil
	out.Screen.MaxDroppedPercent = 100
	if text, err = value.Canonical(out.Encode()); err != nil {
		return nil, err
	}
	return decode()
}

// line rehearses one candidate and fits every run after each mark.
func (q Question) line(ctx context.Context, c candidate, block int, progress func(done int)) (Line, error) {
	marks := q.Marks()
	found := make([][]estimate, q.Count) // by observer, then mark; value is NaN where there is none
	before, minutes := make([]float64, q.Count), make([]float64, q.Count)
	var lock sync.Mutex
	err := q.observe(ctx, c.study, progress, func(i int, x *observed) error {
		if x.refused {
			return errors.New("a simulated observer was refused: the study's demands are above a screen of 1920 × 1080 at 60 Hz")
		}
		list := make([]estimate, len(marks))
		t := quality.Thresholds(c.study, x.records)[0]
		for k, n := range marks {
			list[k] = q.after(t, n, x.threshold)
		}
		around, perTrial := times(x)
		lock.Lock()
		defer lock.Unlock()
		found[i], before[i], minutes[i] = list, around, perTrial
		return nil
	})
	if err != nil {
		return Line{}, err
	}
	out := Line{Procedure: c.name, Own: c.own, Cheapest: -1}
	around, perTrial := 0.0, 0.0
	for i := range minutes {
		around += before[i] / float64(q.Count)
		perTrial += minutes[i] / float64(q.Count)
	}
	for k, n := range marks {
		m := q.mark(found, k, n)
		m.Minutes = around + perTrial*float64(n)
		if m.Missing < 0.5 {
			q.cost(&m)
		}
		if out.TrialsNeeded == 0 && m.RMSELog10 > 0 && m.RMSELog10 <= q.Precision && m.Missing < 0.05 {
			out.TrialsNeeded = n
		}
		if m.Hours > 0 && (out.Cheapest < 0 || m.Hours < out.Marks[out.Cheapest].Hours) {
			out.Cheapest = k
		}
		out.Marks = append(out.Marks, m)
	}
	return out, nil
}

// after fits the first n trials of a track.
func (q Question) after(t quality.Threshold, n int, threshold float64) estimate {
	none := estimate{value: math.NaN()}
	if t.Fit == nil || len(t.Levels) < n {
		return none
	}
	m := t.Fit.Model
	_, onScale, err := quality.Posterior(psychometric.Collect(t.Levels[:n], t.Correct[:n]), m)
	if err != nil || onScale.Interval.OpenLow || onScale.Interval.OpenHigh {
		return none
	}
	return estimate{
		value: onScale.Mean, error: onScale.Mean - math.Log10(threshold),
		bound: psychometric.BestPlacement(m, threshold, q.Slope, q.Lapse).Variance / float64(n),
	}
}

// times are the minutes that a run takes beside its trials (reading, calibration,
// questions) and those of one trial.
func times(x *observed) (around, perTrial float64) {
	first, last, n := math.NaN(), math.NaN(), 0
	for i := range x.records {
		if r := x.records[i].Trial; r != nil && !r.Practice {
			if n == 0 {
				first = x.records[i].AtMs
			}
			last = x.records[i].AtMs
			n++
		}
	}
	if n < 2 {
		return 0, 0
	}
	perTrial = (last - first) / float64(n-1) / 60000
	whole := (x.records[len(x.records)-1].AtMs - x.records[0].AtMs) / 60000
	return whole - perTrial*float64(n), perTrial
}

func (q Question) mark(found [][]estimate, k, n int) Mark {
	m := Mark{Trials: n}
	square, bound, count := 0.0, 0.0, 0.0
	for _, list := range found {
		if math.IsNaN(list[k].value) {
			m.Missing += 1 / float64(len(found))
			continue
		}
		m.BiasLog10 += list[k].error
		square += list[k].error * list[k].error
		bound += list[k].bound
		count++
	}
	if count > 0 {
		m.BiasLog10 /= count
		m.RMSELog10 = math.Sqrt(square / count)
		m.Efficiency = psychometric.Efficiency(bound/count, square/count)
	}
	return m
}

// cost adds the participants and hours: a participant's measured threshold varies by
// the spread between observers and by the error of measurement.
func (q Question) cost(m *Mark) {
	sd := math.Hypot(q.ThresholdSD, m.RMSELog10)
	if sd == 0 {
		return
	}
	n, err := planning.Participants(q.Difference/sd, q.Alpha, q.Power)
	if err != nil {
		return
	}
	m.Participants, m.Hours = n, 2*float64(n)*m.Minutes/60
}
