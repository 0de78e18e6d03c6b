// Package planning says before launch what a study will deliver: rehearsals with
// simulated observers, and from them the trials and participants that a question
// needs.
package planning

import (
	"context"
	"errors"
	"fmt"
	"math"
	"runtime"
	"sync"
	"sync/atomic"

	"distal/experiments/procedure"
	"distal/experiments/psychometric"
	"distal/experiments/random"
	"distal/experiments/rehearsal"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/server/quality"
)

// Observers are simulated observers with a Weibull function of the level.
type Observers struct {
	Count       int     `json:"observers"`
	Threshold   float64 `json:"threshold"`          // median, in the level's unit
	ThresholdSD float64 `json:"threshold_sd_log10"` // between observers, log10 units
	Slope       float64 `json:"slope"`
	Lapse       float64 `json:"lapse"`
	Drift       float64 `json:"drift"` // growth of log10 threshold in 100 trials
	Tire        float64 `json:"tire"`  // growth of the lapse rate in 100 trials
	FastGuess   float64 `json:"fast_guess"`
	SideBias    float64 `json:"side_bias"`
	Seed        uint64  `json:"seed"`
}

// Check says what is wrong with the observers.
func (o Observers) Check() error {
	switch {
	case o.Count < 1:
		return errors.New("one observer or more is needed")
	case !(o.Threshold > 0) || math.IsInf(o.Threshold, 0):
		return fmt.Errorf("the threshold must be above 0, it is %g", o.Threshold)
	case !(o.Slope > 0) || o.Slope > 100:
		return fmt.Errorf("the slope must be above 0 and at most 100, it is %g", o.Slope)
	case !(o.Lapse >= 0 && o.Lapse < 0.5):
		return fmt.Errorf("the lapse rate must be from 0 to below 0.5, it is %g", o.Lapse)
	case !(o.ThresholdSD >= 0 && o.ThresholdSD <= 2):
		return fmt.Errorf("the standard deviation between observers is in log10 units, from 0 to 2; it is %g", o.ThresholdSD)
	case !(o.FastGuess >= 0 && o.FastGuess <= 1 && o.SideBias >= 0 && o.SideBias <= 1):
		return errors.New("shares of fast guesses and of guesses to one side are from 0 to 1")
	case !(o.Tire >= 0 && o.Tire <= 1) || math.Abs(o.Drift) > 5 || math.IsNaN(o.Drift):
		return errors.New("drift (log10 units) and tiring (lapse rate) are growths in 100 trials: at most 5 and from 0 to 1")
	}
	return nil
}

// threshold of observer i: log-normal about the median.
func (o Observers) threshold(i int) float64 {
	if o.ThresholdSD == 0 {
		return o.Threshold
	}
	stream := random.New(o.Seed, uint32(i), random.PurposeObserver)
	return o.Threshold * math.Pow(10, o.ThresholdSD*stream.Normal())
}

// observed is what one observer's run gave.
type observed struct {
	threshold float64 // the true one
	measures  quality.Measures
	records   []run.Record
	refused   bool
}

// observe takes all observers through a study on all processors and hands each
// run to take, one at a time and in no order. progress is told the number done.
func (o Observers) observe(ctx context.Context, s *study.Study, progress func(done int), take func(i int, x *observed) error) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	screen := rehearsal.DefaultScreen()
	screen.SkipDisplays = true
	var next atomic.Int64
	var group sync.WaitGroup
	var lock sync.Mutex
	done := 0
	for range min(runtime.GOMAXPROCS(0), o.Count) {
		group.Go(func() {
			for i := int(next.Add(1)) - 1; i < o.Count && ctx.Err() == nil; i = int(next.Add(1)) - 1 {
				x := &observed{threshold: o.threshold(i)}
				observer := rehearsal.Observer{
					Threshold: x.threshold, Slope: o.Slope, Lapse: o.Lapse, Drift: o.Drift, Tire: o.Tire,
					FastGuess: o.FastGuess, SideBias: o.SideBias, LowerIsEasier: lowerIsEasier(s),
				}
				records, err := rehearsal.Observe(s, run.Assignment{Seed: o.Seed + uint64(i), Order: i}, observer, screen, "rehearsal", 0)
				if err != nil {
					cancel(err)
					return
				}
				x.records, x.measures = records, quality.Measure(records)
				x.refused = records[len(records)-1].Kind == run.KindRefusal
				err = take(i, x)
				lock.Lock()
				done++
				if progress != nil {
					progress(done)
				}
				lock.Unlock()
				if err != nil {
					cancel(err)
					return
				}
			}
		})
	}
	group.Wait()
	return context.Cause(ctx)
}

// lowerIsEasier tells whether the study's first procedure gets easier with lower levels.
func lowerIsEasier(s *study.Study) bool {
	return len(s.Procedures) > 0 && s.Procedures[0].EasierIs < 0
}

// Rehearsal is what the observers of a study gave.
type Rehearsal struct {
	Study string `json:"study"`
	Observers
	Estimates    int     `json:"estimates"` // thresholds that could be given
	Missing      int     `json:"no_estimate"`
	MeanEstimate float64 `json:"geometric_mean_estimate"`
	BiasLog10    float64 `json:"bias_log10"`
	SDLog10      float64 `json:"sd_log10"`   // of the errors about their mean
	RMSELog10    float64 `json:"rmse_log10"` // about the true thresholds
	// BoundSDLog10 is the least standard deviation that any unbiased estimate could have
	// with as many trials, each where it tells most, slope and lapse rate being known.
	BoundSDLog10   float64 `json:"bound_sd_log10"`
	Efficiency     float64 `json:"efficiency"` // bound variance ÷ mean squared error
	IntervalCovers float64 `json:"interval_95_covers"`
	CoversSE       float64 `json:"interval_95_covers_se"`
	MeanTrials     float64 `json:"mean_trials"`
	MeanMinutes    float64 `json:"mean_minutes"`
	Excluded       float64 `json:"share_excluded"`
	Refused        float64 `json:"share_refused"`
}

// estimate is one threshold of one run.
type estimate struct {
	error, bound float64 // log10; bound is a variance
	value        float64
	covered      bool
}

// Rehearse takes the observers through the study and summarises the thresholds of
// all blocks and conditions.
func Rehearse(ctx context.Context, s *study.Study, o Observers, progress func(done int)) (*Rehearsal, error) {
	if err := rehearsable(s); err != nil {
		return nil, err
	}
	if err := o.Check(); err != nil {
		return nil, err
	}
	rules, err := quality.Compile(s.Exclusions)
	if err != nil {
		return nil, err
	}
	out := &Rehearsal{Study: s.About.Name, Observers: o}
	found := make([][]estimate, o.Count)
	var lock sync.Mutex
	err = o.observe(ctx, s, progress, func(i int, x *observed) error {
		breaches, err := rules.Apply(x.measures)
		if err != nil {
			return err
		}
		list, missing := o.estimates(s, x)
		lock.Lock()
		defer lock.Unlock()
		found[i] = list
		out.MeanTrials += x.measures.Value("trials") / float64(o.Count)
		out.MeanMinutes += x.measures.Value("minutes") / float64(o.Count)
		switch {
		case x.refused:
			out.Refused += 1 / float64(o.Count)
		default:
			out.Missing += missing
			if len(breaches) > 0 {
				out.Excluded += 1 / float64(o.Count)
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out.summarise(found)
	return out, nil
}

// ErrNothingToPlan says that a study has no threshold that observers could have.
var ErrNothingToPlan = errors.New("the study has no procedure whose answers are right or wrong on a log10 scale: there is no threshold to rehearse")

func rehearsable(s *study.Study) error {
	for i := range s.Blocks {
		b := &s.Blocks[i]
		if b.Kind == study.Measurement && b.Procedure >= 0 && plannable(s, b) {
			return nil
		}
	}
	return ErrNothingToPlan
}

// plannable tells whether a block varies a level on a log10 scale and has right answers.
func plannable(s *study.Study, b *study.Block) bool {
	p := &s.Procedures[b.Procedure]
	if p.Spec.Scale != procedure.Log10 || p.Spec.Method == procedure.Adjustment || p.Spec.Second != "" {
		return false
	}
	for _, c := range s.Tasks[b.Task].Choices {
		if len(c.Correct) > 0 {
			return true
		}
	}
	return len(s.Tasks[b.Task].Choices) == 0
}

// estimates are the thresholds of a run, with the bound for as many trials.
func (o Observers) estimates(s *study.Study, x *observed) (list []estimate, missing int) {
	if x.refused {
		return nil, 0
	}
	for _, t := range quality.Thresholds(s, x.records) {
		if t.Linear || t.Counted != "" || t.Fit == nil && !t.Known && len(t.Levels) == 0 {
			continue
		}
		if !t.Known || !(t.Threshold > 0) {
			missing++
			continue
		}
		m := t.Fit.Model
		list = append(list, estimate{
			value: math.Log10(t.Threshold), error: math.Log10(t.Threshold / x.threshold),
			bound:   psychometric.BestPlacement(m, x.threshold, o.Slope, o.Lapse).Variance / float64(len(t.Levels)),
			covered: t.Low <= x.threshold && x.threshold <= t.High,
		})
	}
	return list, missing
}

func (r *Rehearsal) summarise(found [][]estimate) {
	var errs []float64
	value, square, bound, covered := 0.0, 0.0, 0.0, 0
	for _, list := range found { // in the observers' order, so that sums do not depend on who was first
		for _, e := range list {
			errs = append(errs, e.error)
			value += e.value
			square += e.error * e.error
			bound += e.bound
			if e.covered {
				covered++
			}
		}
	}
	n := float64(len(errs))
	r.Estimates = len(errs)
	if n == 0 {
		return
	}
	mean := 0.0
	for _, e := range errs {
		mean += e / n
	}
	for _, e := range errs {
		r.SDLog10 += (e - mean) * (e - mean)
	}
	r.SDLog10 = math.Sqrt(r.SDLog10 / math.Max(1, n-1))
	r.MeanEstimate, r.BiasLog10 = math.Pow(10, value/n), mean
	r.RMSELog10, r.BoundSDLog10 = math.Sqrt(square/n), math.Sqrt(bound/n)
	r.Efficiency = psychometric.Efficiency(bound/n, square/n)
	r.IntervalCovers = float64(covered) / n
	r.CoversSE = math.Sqrt(r.IntervalCovers * (1 - r.IntervalCovers) / n)
}
