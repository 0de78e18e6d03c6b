package run_test

import (
	"io/fs"
	"strings"
	"testing"
	"testing/fstest"

	"distal/experiments/library"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/studyfile"
	"distal/experiments/value"
)

// motley is a short study with everything that decides what comes next:
// practice with criterion, three measurement blocks in balanced order, two
// conditions in two interleaved copies, crossed balanced values, catch trials,
// breaks, a block without procedure, groups and questions of every type.
const motley = `
distal: 1
about:
  name: motley
  title: Motley
  investigator: Dr Ottilie Brandvold
  contact: lab@motley.example
  languages: [en]
  minutes: 3
participants:
  min_age_years: 18
  max_age_years: 70
  screening:
    seizures: {ask: {en: Have you ever had a seizure?}, admits: false}
    sight: {ask: {en: Can you read this?}, admits: true}
texts: {folder: texts, version: "1"}
screen:
  min_refresh_hz: 50
  max_refresh_hz: 150
  min_width_deg: 9
  min_height_deg: 9
  max_jitter_ms: 2
  max_dropped_percent: 5
  distance_method: blind_spot
  distance_repeats: 3
  card_repeats: 3
displays:
  field:
    kind: dots
    coherence: 0.5
    speed_deg_per_s: 5
    density_per_deg2: 0.5
    dot_diameter_deg: 0.14
    width_deg: 6
tasks:
  which_way:
    display: field
    fixation_ms: 300
    fixation_jitter_ms: 200
    stimulus_ms: 200
    ramp_ms: 50
    response_window_ms: 3000
    feedback: practice
    choices:
      left: {keys: [ArrowLeft], label: {en: Left}, right_when: {direction_deg: 180}}
      right: {keys: [ArrowRight], label: {en: Right}, right_when: {direction_deg: 0}}
procedures:
  track:
    method: staircase
    parameter: coherence
    scale: log10
    min: 0.01
    max: 1
    start: 0.8
    down: 2
    up: 1
    steps: [0.3, 0.1]
    max_trials: 6
    interleave: 2
  short:
    method: quest_plus
    parameter: coherence
    scale: log10
    min: 0.05
    max: 1
    level_count: 8
    threshold_min: 0.05
    threshold_max: 1
    threshold_count: 8
    guess: 0.5
    max_trials: 5
groups:
  - name: slow
    weight: 1
    set: [{display: field, values: {contrast: 0.5}}]
  - name: fast
    weight: 1
    set: [{display: field, values: {contrast: 0.9}}]
orders: {method: latin_square}
blocks:
  - name: practice
    kind: practice
    task: which_way
    balance: {direction_deg: [0, 180]}
    set: {coherence: 1}
    criterion: {correct: 3, window: 4, max_trials: 8, otherwise: end}
    message: {en: Practice first.}
  - name: tracks
    task: which_way
    procedure: track
    balance: {polarity: [light, dark], direction_deg: [0, 180]}
    conditions:
      - {name: thin, set: {density_per_deg2: 0.4}}
      - {name: dense, set: {density_per_deg2: 1}}
    catch: {every: 4, set: {coherence: 1}}
    break_every: 7
  - name: fixed
    task: which_way
    trials: 8
    balance: {direction_deg: [0, 180]}
    set: {coherence: 0.4}
    catch: {every: 3, set: {coherence: 0.9}}
  - name: short
    task: which_way
    procedure: short
    balance: {direction_deg: [0, 180]}
    message: {en: The last part.}
questions:
  eyes: {type: choice, ask: {en: Which eyes?}, options: {one: {label: {en: One}}, both: {label: {en: Both}}}}
  hours: {type: number, ask: {en: Hours awake?}, min: 0, max: 48, unit: h}
  effort: {type: scale, ask: {en: Effort?}, min: 1, max: 7}
  glasses: {type: yes_no, ask: {en: Glasses?}}
  remarks: {type: text, ask: {en: Remarks?}, optional: true}
quota: {runs: 10}
`

// readStudy reads a study text with the texts of a library study beside it.
func readStudy(t testing.TB, text string) *study.Study {
	t.Helper()
	from, err := library.Files("motion-coherence")
	if err != nil {
		t.Fatal(err)
	}
	files := fstest.MapFS{"study.yaml": {Data: []byte(text)}}
	entries, err := fs.ReadDir(from, "texts")
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if !strings.Contains(e.Name(), ".en.") {
			continue
		}
		data, err := fs.ReadFile(from, "texts/"+e.Name())
		if err != nil {
			t.Fatal(err)
		}
		files["texts/"+e.Name()] = &fstest.MapFile{Data: data}
	}
	s, problems := studyfile.Read(files, "study.yaml")
	if problems.Failed() {
		t.Fatal(problems)
	}
	return s
}

// changed is the motley study with one piece of its text replaced.
func changed(t testing.TB, replacements ...string) *study.Study {
	t.Helper()
	for i := 0; i < len(replacements); i += 2 {
		if strings.Count(motley, replacements[i]) != 1 {
			t.Fatalf("%q does not stand exactly once in the study", replacements[i])
		}
	}
	return readStudy(t, strings.NewReplacer(replacements...).Replace(motley))
}

// failer is what tests and properties have in common.
type failer interface {
	Helper()
	Fatal(args ...any)
	Fatalf(format string, args ...any)
}

// person drives a run by hand.
type person struct {
	t       failer
	study   *study.Study
	run     *run.Run
	records []run.Record
}

func begin(t testing.TB, s *study.Study, a run.Assignment) *person {
	t.Helper()
	r, err := run.New(s, a)
	if err != nil {
		t.Fatal(err)
	}
	return &person{t: t, study: s, run: r}
}

// try applies a record under the next sequence number.
func (p *person) try(rec run.Record) error {
	rec.Sequence = p.run.Sequence() + 1
	rec.Bundle = "b"
	err := p.run.Apply(&rec)
	if err == nil {
		p.records = append(p.records, rec)
	}
	return err
}

func (p *person) apply(rec run.Record) {
	p.t.Helper()
	if err := p.try(rec); err != nil {
		p.t.Fatalf("record %d (%s): %v", p.run.Sequence()+1, run.KindNames[rec.Kind], err)
	}
}

// answer makes the record that suits any step but a trial.
func (p *person) answer(k run.StepKind) run.Record {
	switch k {
	case run.StepConsent:
		text := &p.study.Texts[0]
		return run.Record{Kind: run.KindConsent, Consent: &run.Consent{TextDigest: run.ConsentDigest(text), Version: text.Version, Language: text.Language, Items: 3}}
	case run.StepScreening:
		return run.Record{Kind: run.KindScreening, Screening: goodScreening()}
	case run.StepCard:
		return run.Record{Kind: run.KindCard, Card: goodCard()}
	case run.StepDistance:
		return run.Record{Kind: run.KindDistance, Distance: goodDistance()}
	case run.StepDisplayCheck:
		return run.Record{Kind: run.KindDisplayCheck, Check: goodCheck()}
	case run.StepInstructions:
		return run.Record{Kind: run.KindInstructions}
	case run.StepBreak:
		return run.Record{Kind: run.KindBreak}
	case run.StepQuestions:
		return run.Record{Kind: run.KindAnswers, Answers: goodAnswers()}
	case run.StepDebrief:
		return run.Record{Kind: run.KindDebrief}
	}
	p.t.Fatalf("no record answers step %s", run.StepKindNames[k])
	return run.Record{}
}

// trial takes the planned trial, answering with the named choice.
func (p *person) trial(response, interrupted string) run.Record {
	p.t.Helper()
	if !p.run.BeginTrial() {
		p.t.Fatalf("the next step is %s, not a trial", run.StepKindNames[p.run.Next().Kind])
	}
	m := run.Measurement{Response: response, ResponseMs: 480, Input: "keyboard", OnsetMs: 100, OffsetMs: 300, Steps: []int{1, 2, 1}, IntervalsMs: []float64{16.7, 33.3, 16.6}, Interrupted: interrupted}
	for i := range m.Steps {
		p.run.Frame(m.Steps[max(i-1, 0)])
	}
	return run.Record{Kind: run.KindTrial, Trial: p.run.FinishTrial(m)}
}

// right is the name of the choice that is right or, for right = false, another.
func (p *person) choice(plan *run.TrialPlan, right bool) string {
	choices := p.study.Tasks[plan.Task].Choices
	k := max(plan.CorrectChoice, 0)
	if !right {
		k = (k + 1) % len(choices)
	}
	return choices[k].Name
}

// until answers every step well until stop says so, and gives that step.
func (p *person) until(stop func(run.Step) bool) run.Step {
	p.t.Helper()
	for range 2000 {
		step := p.run.Next()
		if stop(step) {
			return step
		}
		if step.Kind == run.StepTrial {
			p.apply(p.trial(p.choice(step.Trial, true), ""))
		} else {
			p.apply(p.answer(step.Kind))
		}
	}
	p.t.Fatal("the step never came")
	return run.Step{}
}

func (p *person) untilKind(k run.StepKind) run.Step {
	p.t.Helper()
	return p.until(func(s run.Step) bool { return s.Kind == k })
}

// untilBlock goes on to the first trial of the named block.
func (p *person) untilBlock(name string) *run.TrialPlan {
	p.t.Helper()
	return p.until(func(s run.Step) bool { return s.Kind == run.StepTrial && s.Block == name }).Trial
}

func goodScreening() *run.Screening {
	return &run.Screening{CautionsRead: true, AgeYears: 40, Names: []string{"seizures", "sight"}, Yes: []bool{false, true}}
}

func goodCard() *run.Card {
	return &run.Card{
		WidthsCSSPx: []float64{300, 302, 301}, PixelRatio: 1.5, ScreenWidthPx: 1600, ScreenHeightPx: 900,
		PxPerMm: 301 / 85.6, SDPxPerMm: 0.01, Attempts: 3,
	}
}

func goodDistance() *run.Distance {
	return &run.Distance{Method: "blind_spot", OffsetsMm: []float64{158, 160, 159}, Eye: "left", DistanceMm: 573, SDMm: 43}
}

func goodCheck() *run.DisplayCheck {
	return &run.DisplayCheck{
		RefreshMs: 1000.0 / 60, JitterMs: 0.2, DroppedPercent: 0.1, Frames: 120, WidthDeg: 30, HeightDeg: 17,
		CanvasWidthPx: 2400, CanvasHeightPx: 1350, PixelRatio: 1.5, FloatTarget: true, Renderer: "test", CrossOriginIsol: true,
	}
}

func goodAnswers() *run.Answers {
	return &run.Answers{
		Names:  []string{"eyes", "hours", "effort", "glasses", "remarks"},
		Values: []run.Answer{{IsText: true, Text: "both"}, {Number: 9.5}, {Number: 6}, {IsBool: true, Number: 1}, {Null: true}},
	}
}

// wire is the canonical text of a record.
func wire(t failer, v value.Value) string {
	t.Helper()
	text, err := value.Canonical(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// decode reads a record's text.
func decode(text string) (*run.Record, error) {
	tree, err := value.ParseJSON([]byte(text))
	if err != nil {
		return nil, err
	}
	return run.DecodeRecord(tree)
}
