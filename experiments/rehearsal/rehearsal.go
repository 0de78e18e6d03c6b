// Package rehearsal takes simulated observers through a whole study with the
// real run engine: same state machine, procedures, catch trials and refusals.
// Its records are what a participant's browser would send.
package rehearsal

import (
	"errors"
	"math"

	"distal/experiments/exact"
	"distal/experiments/random"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/visual"
)

// Observer answers by a Weibull psychometric function of the level,
//
//	P = g + (1 − g − l) (1 − exp(−(x/T)^b))
//
// with g one over the number of choices. Trials outside a procedure (practice,
// catch) are answered as at a level far above threshold.
type Observer struct {
	Threshold float64 // T, in the level's unit; 1 − 1/e of the way up
	Slope     float64 // b
	Lapse     float64 // l
	SideBias  float64 // share of the guesses moved to the first choice, 0 to 1
	FastGuess float64 // share of trials answered at random before 150 ms
	Drift     float64 // growth of log10 threshold over 100 trials
	Tire      float64 // growth of the lapse rate over 100 trials; it ends at guessing alone
	// LowerIsEasier: the level is a difficulty; the function falls with it.
	LowerIsEasier bool
	// Scale of the threshold by condition name, e.g. inverted: 2.
	Conditions map[string]float64
	AgeYears   int
}

// Screen is a simulated display.
type Screen struct {
	RefreshMs    float64
	JitterMs     float64
	DropRate     float64 // share of refreshes missed
	PxPerMm      float64 // CSS px
	PixelRatio   float64
	DistanceMm   float64
	WidthPx      int // CSS px
	HeightPx     int
	SkipDisplays bool // leave frames and digests out: for speed, when only levels matter
}

// DefaultScreen is a 24-inch display of 1920 × 1080 at 60 Hz and 57 cm.
func DefaultScreen() Screen {
	return Screen{RefreshMs: 1000.0 / 60, JitterMs: 0.15, DropRate: 0.002, PxPerMm: 3.6, PixelRatio: 1, DistanceMm: 570, WidthPx: 1920, HeightPx: 1080}
}

// Observe takes o through s and returns the records in order. A person or
// screen that does not suit the study ends in a refusal record, as in the
// browser; there a bad calibration would be repeated first. bundle is the
// digest that every record names; startMs is the participant's clock at consent.
func Observe(s *study.Study, a run.Assignment, o Observer, screen Screen, bundle string, startMs float64) ([]run.Record, error) {
	r, err := run.New(s, a)
	if err != nil {
		return nil, err
	}
	w := &walk{
		run: r, study: s, observer: o, screen: screen, clock: startMs, start: startMs, bundle: bundle,
		answer: random.New(a.Seed, 0, random.PurposeObserver), frame: random.New(a.Seed, 0, random.PurposeScreen),
	}
	for range maxRecords {
		step := r.Next()
		if step.Kind == run.StepDone || step.Kind == run.StepRefused && w.refused || step.Kind == run.StepWithdrawn {
			return w.records, nil
		}
		rec := w.respond(step)
		w.last = step.Kind
		rec.Sequence = r.Sequence() + 1
		rec.AtMs = math.Floor(w.clock)
		rec.Bundle = bundle
		if err := r.Apply(rec); err != nil {
			return nil, err
		}
		w.records = append(w.records, *rec)
	}
	return nil, errors.New("the run does not end")
}

const maxRecords = 200_000

type walk struct {
	run      *run.Run
	study    *study.Study
	observer Observer
	screen   Screen
	clock    float64 // ms
	start    float64
	bundle   string
	records  []run.Record
	trials   int
	refused  bool
	last     run.StepKind // the step before

	answer, frame random.Stream
}

func (w *walk) wait(seconds float64) {
	w.clock += 1000 * seconds * (0.7 + float64(0.6*w.answer.Float64()))
}

func (w *walk) respond(step run.Step) *run.Record {
	switch step.Kind {
	case run.StepConsent:
		text := w.study.Texts[0]
		return &run.Record{Kind: run.KindConsent, Consent: &run.Consent{
			TextDigest: run.ConsentDigest(&text), Version: text.Version, Language: text.Language, Items: len(study.Statements(text.Consent)),
		}}
	case run.StepScreening:
		w.wait(20)
		return &run.Record{Kind: run.KindScreening, Screening: w.screening()}
	case run.StepCard:
		w.wait(25)
		card := w.card()
		return w.unless(run.CheckCard(w.study, card), step, &run.Record{Kind: run.KindCard, Card: card})
	case run.StepDistance:
		w.wait(40)
		distance := w.distance()
		return w.unless(run.CheckDistance(w.study, distance), step, &run.Record{Kind: run.KindDistance, Distance: distance})
	case run.StepDisplayCheck:
		w.wait(5)
		check := w.check()
		return w.unless(run.CheckDisplay(w.study, check), step, &run.Record{Kind: run.KindDisplayCheck, Check: check})
	case run.StepInstructions:
		w.wait(20)
		return &run.Record{Kind: run.KindInstructions}
	case run.StepTrial:
		return &run.Record{Kind: run.KindTrial, Trial: w.trial(step.Trial)}
	case run.StepBreak:
		w.wait(12)
		return &run.Record{Kind: run.KindBreak}
	case run.StepQuestions:
		w.wait(20)
		return &run.Record{Kind: run.KindAnswers, Answers: w.answers()}
	case run.StepDebrief:
		w.wait(10)
		return &run.Record{Kind: run.KindDebrief}
	}
	return w.refuse(w.last, step.Code)
}

// unless gives the record, or a refusal where there is a reason for one.
func (w *walk) unless(reason string, step run.Step, rec *run.Record) *run.Record {
	if reason == "" {
		return rec
	}
	return w.refuse(step.Kind, reason)
}

func (w *walk) refuse(at run.StepKind, reason string) *run.Record {
	w.refused = true
	return &run.Record{Kind: run.KindRefusal, Refusal: &run.Refusal{Step: run.StepKindNames[at], Reason: reason}}
}

func (w *walk) screening() *run.Screening {
	s := &run.Screening{CautionsRead: true, AgeYears: w.observer.AgeYears}
	if s.AgeYears == 0 {
		s.AgeYears = 30
	}
	for i := range w.study.Participants.Screening {
		q := &w.study.Participants.Screening[i]
		s.Names, s.Yes = append(s.Names, q.Name), append(s.Yes, q.Admits)
	}
	return s
}

func (w *walk) card() *run.Card {
	c := &run.Card{PixelRatio: w.screen.PixelRatio, ScreenWidthPx: w.screen.WidthPx, ScreenHeightPx: w.screen.HeightPx}
	for range w.study.Screen.CardRepeats {
		c.WidthsCSSPx = append(c.WidthsCSSPx, exact.Round(w.screen.PxPerMm*visual.CardWidthMm+float64(0.8*w.answer.Normal())))
	}
	mean, sd := visual.MeanSD(c.WidthsCSSPx)
	c.PxPerMm, c.SDPxPerMm, c.Attempts = mean/visual.CardWidthMm, sd/visual.CardWidthMm, len(c.WidthsCSSPx)
	return c
}

func (w *walk) distance() *run.Distance {
	spec := w.study.Screen
	if spec.Distance == study.StatedDistance {
		return &run.Distance{Method: "stated", OffsetsMm: []float64{}, DistanceMm: spec.StatedDistanceMm, SDMm: 0.05 * spec.StatedDistanceMm}
	}
	d := &run.Distance{Method: "blind_spot", Eye: "left"}
	for range spec.DistanceRepeats {
		offset := visual.OffsetMm(visual.BlindSpotDeg, w.screen.DistanceMm) * (1 + float64(0.03*w.answer.Normal()))
		d.OffsetsMm = append(d.OffsetsMm, exact.Round(100*offset)/100)
	}
	mean, _ := visual.MeanSD(d.OffsetsMm)
	d.DistanceMm, d.SDMm = visual.BlindSpotDistance(mean)
	return d
}

func (w *walk) check() *run.DisplayCheck {
	s := w.screen
	return &run.DisplayCheck{
		RefreshMs: s.RefreshMs, JitterMs: s.JitterMs, DroppedPercent: 100 * s.DropRate, Frames: 120,
		WidthDeg:      visual.SizeDeg(float64(s.WidthPx)/s.PxPerMm, s.DistanceMm),
		HeightDeg:     visual.SizeDeg(float64(s.HeightPx)/s.PxPerMm, s.DistanceMm),
		CanvasWidthPx: int(float64(s.WidthPx) * s.PixelRatio), CanvasHeightPx: int(float64(s.HeightPx) * s.PixelRatio),
		PixelRatio: s.PixelRatio, FloatTarget: true, Renderer: "simulated", CrossOriginIsol: true,
	}
}

func (w *walk) trial(p *run.TrialPlan) *run.TrialRecord {
	task := &w.study.Tasks[p.Task]
	m := run.Measurement{Input: "keyboard"}
	m.Steps, m.IntervalsMs = w.present(p)
	if m.Given = w.given(p, task, &m); m.Given != nil && !w.screen.SkipDisplays {
		w.run.Redraw(&run.TrialRecord{Steps: m.Steps, Given: m.Given})
	} else if !w.screen.SkipDisplays {
		w.run.BeginTrial()
		for i := range m.Steps {
			w.run.Frame(m.Steps[max(i-1, 0)])
		}
	} else {
		w.run.BeginTrial()
	}
	choice, rt := w.decide(p, max(1, len(task.Choices)))
	shown := 0.0
	for _, d := range m.IntervalsMs {
		shown += d
	}
	m.OnsetMs = round2(w.clock - w.start + float64(p.FixationFrames)*p.RefreshMs)
	m.OffsetMs = round2(m.OnsetMs + shown)
	m.ResponseMs = round2(rt + task.StimulusMs)
	if task.RespondDuring {
		m.ResponseMs = round2(rt)
	}
	if m.Response = study.Said[task.Answer.By]; m.Response == "" {
		m.Response = task.Choices[choice].Name
	}
	if len(p.Order) > 0 || task.Answer.By == study.ByAdjustment || task.Answer.By == study.ByHolding {
		m.ResponseMs = round2(rt + shown)
	}
	w.clock += float64(p.FixationFrames)*p.RefreshMs + max(m.ResponseMs, shown) + task.IntertrialMs
	w.trials++
	return w.run.FinishTrial(m)
}

func round2(x float64) float64 { return exact.Round(x*100) / 100 }

// present makes up the frame steps of a stimulus, with missed refreshes.
func (w *walk) present(p *run.TrialPlan) (steps []int, intervalsMs []float64) {
	for left := p.StimulusFrames; left > 0; {
		n := 1
		if left > 1 && w.frame.Float64() < w.screen.DropRate {
			n = 2
		}
		steps = append(steps, n)
		intervalsMs = append(intervalsMs, round2(float64(n)*p.RefreshMs+float64(w.screen.JitterMs*w.frame.Normal())))
		left -= n
	}
	return steps, intervalsMs
}

// decide gives the index of the choice and the response time after the stimulus, ms.
func (w *walk) decide(p *run.TrialPlan, choices int) (choice int, rtMs float64) {
	o := &w.observer
	rtMs = 250 + float64(120*w.answer.Exponential()) + math.Abs(float64(60*w.answer.Normal()))
	right := p.CorrectChoice
	if o.FastGuess > 0 && w.answer.Float64() < o.FastGuess {
		return w.guess(choices), 60 + float64(60*w.answer.Float64())
	}
	f := 1.0
	if !math.IsNaN(p.Level) {
		threshold := o.Threshold * exact.Exp10(o.Drift*float64(w.trials)/100)
		if scale, ok := o.Conditions[p.Condition]; ok {
			threshold *= scale
		}
		ratio := p.Level / threshold
		if o.LowerIsEasier {
			ratio = threshold / p.Level
		}
		f = -exact.Expm1(-exact.Pow(ratio, o.Slope))
	}
	// The function is that of one who sees the answer in a share of the trials
	// and guesses in the others: P = seen + (1 − seen) g.
	guess := 1 / float64(choices)
	lapse := o.Lapse + float64(o.Tire*float64(w.trials)/100)
	seen := f * max(0, 1-lapse/(1-guess))
	if right >= 0 && w.answer.Float64() < seen {
		return right, rtMs
	}
	return w.guess(choices), rtMs
}

// guess gives the first choice in a share of SideBias, otherwise any.
func (w *walk) guess(choices int) int {
	if w.answer.Float64() < w.observer.SideBias {
		return 0
	}
	return w.answer.Intn(choices)
}

func (w *walk) answers() *run.Answers {
	a := &run.Answers{}
	for i := range w.study.Questions {
		q := &w.study.Questions[i]
		x := run.Answer{}
		switch q.Type {
		case study.ChoiceQuestion:
			x = run.Answer{IsText: true, Text: q.Options[w.answer.Intn(len(q.Options))].Name}
		case study.NumberQuestion, study.ScaleQuestion:
			x = run.Answer{Number: exact.Round(w.answer.Range(q.Min, q.Max))}
		case study.YesNoQuestion:
			x = run.Answer{IsBool: true, Number: 1}
		case study.TextQuestion:
			x = run.Answer{Null: q.Optional, IsText: !q.Optional, Text: "simulated"}
		}
		a.Names, a.Values = append(a.Names, q.Name), append(a.Values, x)
	}
	return a
}
