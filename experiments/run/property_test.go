package run_test

import (
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

// walker takes a run along a random legal way and checks, after every record,
// what must hold on all ways.
type walker struct {
	*person
	canonical  *study.Study // the same study, read from its canonical text
	t          *rapid.T
	assignment run.Assignment

	progress float64
	number   int // of the next trial

	refreshMs float64 // of the last display check, 0 where it was the plain one
	shown     int     // trials of the block that count as shown
	block     string
	catch     bool // the last shown trial of the block was a catch trial
}

// Any legal sequence of records, with interruptions, recalibrations, refusals
// and withdrawals, gives the same next step when it is applied again from the
// beginning through its wire form; records that do not fit change nothing.
func TestAnyLegalWay(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	canonical := throughBundle(t, s)
	ends := map[run.StepKind]int{}
	rapid.Check(t, func(rt *rapid.T) {
		a := run.Assignment{Seed: rapid.Uint64().Draw(rt, "seed"), Group: rapid.IntRange(0, 1).Draw(rt, "group"), Order: rapid.IntRange(0, 20).Draw(rt, "order")}
		r, err := run.New(s, a)
		if err != nil {
			rt.Fatal(err)
		}
		w := &walker{person: &person{t: rt, study: s, run: r}, canonical: canonical, t: rt, assignment: a}
		for range rapid.SampledFrom([]int{0, 0, 12, 40, 80, 120}).Draw(rt, "head start") {
			w.well()
			w.invariants()
		}
		// How often something else than the plain answer happens differs from way to way.
		mischief := rapid.SampledFrom([]int{0, 3, 10, 40}).Draw(rt, "mischief")
		for range rapid.IntRange(1, 100).Draw(rt, "length") {
			if rapid.IntRange(0, 99).Draw(rt, "luck") < mischief {
				w.mischief()
			} else {
				w.plain()
			}
			w.invariants()
			if rapid.IntRange(0, 19).Draw(rt, "reload") == 0 {
				w.reload()
			}
		}
		w.reload()
		ends[r.Next().Kind]++
	})
	if ends[run.StepTrial] == 0 || ends[run.StepWithdrawn] == 0 || ends[run.StepDone] == 0 {
		t.Errorf("the ways ended at %v only", ends)
	}
}

// well answers the next step as the study hopes.
func (w *walker) well() {
	switch step := w.run.Next(); step.Kind {
	case run.StepDone, run.StepRefused, run.StepWithdrawn:
	case run.StepTrial:
		w.takeTrial(step, w.choice(step.Trial, true), "")
	default:
		w.apply(w.answer(step.Kind))
	}
}

// plain answers the next step as people and screens do.
func (w *walker) plain() {
	switch step := w.run.Next(); step.Kind {
	case run.StepDone, run.StepRefused, run.StepWithdrawn:
	case run.StepTrial:
		interrupted := rapid.SampledFrom([]string{"", "", "", "", "", "", "hidden"}).Draw(w.t, "interrupted")
		response := ""
		if rapid.IntRange(0, 11).Draw(w.t, "answered") > 0 {
			response = w.choice(step.Trial, rapid.IntRange(0, 3).Draw(w.t, "right") > 0)
		}
		w.takeTrial(step, response, interrupted)
	case run.StepDisplayCheck:
		check := goodCheck()
		check.RefreshMs = 1000 / rapid.SampledFrom([]float64{59.94, 60, 120, 144}).Draw(w.t, "refresh rate")
		w.refreshMs = check.RefreshMs
		w.apply(run.Record{Kind: run.KindDisplayCheck, Check: check})
	default:
		w.apply(w.answer(step.Kind))
	}
}

// takeTrial checks the plan against the trials before and applies the trial.
func (w *walker) takeTrial(step run.Step, response, interrupted string) {
	p := step.Trial
	if p.Number != w.number {
		w.t.Fatalf("trial number %d, want %d", p.Number, w.number)
	}
	if w.refreshMs > 0 && p.RefreshMs != w.refreshMs {
		w.t.Fatalf("trial %d is planned for %g ms, the screen has %g ms", p.Number, p.RefreshMs, w.refreshMs)
	}
	if step.Block != w.block {
		w.block, w.shown, w.catch = step.Block, 0, false
	}
	if p.Catch && (w.shown < 2 || w.catch) {
		w.t.Fatalf("a catch trial after %d trials of the block, the last a catch trial: %v", w.shown, w.catch)
	}
	rec := w.trial(response, interrupted)
	w.number++
	if interrupted == "" {
		w.shown++
		w.catch = p.Catch
	}
	w.apply(rec)
}

// mischief is what a person or their screen may do at any time, or a record that does not fit.
func (w *walker) mischief() {
	step := w.run.Next()
	began := step.Kind != run.StepConsent && step.Kind != run.StepWithdrawn
	switch what := rapid.SampledFrom([]string{"event", "event", "event", "zoomed", "resized", "misfit", "misfit", "misfit", "refusal", "withdrawal"}).Draw(w.t, "what"); what {
	case "event", "zoomed", "resized":
		name := what
		if what == "event" {
			name = rapid.SampledFrom([]string{"focus_lost", "hidden", "visible", "reloaded", "escape"}).Draw(w.t, "name")
		}
		if err := w.try(run.Record{Kind: run.KindEvent, Event: &run.Event{Name: name}}); (err == nil) != began {
			w.t.Fatalf("event %s at step %s: %v", name, run.StepKindNames[step.Kind], err)
		}
		after := w.run.Next().Kind
		// Recalibration is asked for while something is left to show, and only then.
		if order := slices.Index(recalibrated, step.Kind); order >= 0 {
			want := step.Kind
			switch {
			case name == "zoomed":
				want = run.StepCard
			case name == "resized" && order > 1:
				want = run.StepDisplayCheck
			}
			if after != want {
				w.t.Fatalf("%s at step %s leads to %s", name, run.StepKindNames[step.Kind], run.StepKindNames[after])
			}
		} else if after != step.Kind {
			w.t.Fatalf("%s at step %s leads to %s", name, run.StepKindNames[step.Kind], run.StepKindNames[after])
		}
	case "refusal":
		err := w.try(run.Record{Kind: run.KindRefusal, Refusal: &run.Refusal{Step: run.StepKindNames[step.Kind], Reason: run.ReasonUnsuitable}})
		if fits := began && step.Kind != run.StepDone; (err == nil) != fits {
			w.t.Fatalf("a refusal at step %s: %v", run.StepKindNames[step.Kind], err)
		}
	case "withdrawal":
		if err := w.try(run.Record{Kind: run.KindWithdrawal}); (err == nil) != began {
			w.t.Fatalf("a withdrawal at step %s: %v", run.StepKindNames[step.Kind], err)
		}
	default:
		w.misfit(step)
	}
}

// recalibrated are the steps at which another zoom breaks the calibration.
var recalibrated = []run.StepKind{
	run.StepCard, run.StepDistance, run.StepDisplayCheck, run.StepInstructions, run.StepTrial, run.StepBreak,
}

// misfit offers a record that must be refused and must change nothing.
func (w *walker) misfit(step run.Step) {
	before := wire(w.t, step.Encode(w.study))
	var rec run.Record
	rec.Sequence = w.run.Sequence() + 1
	switch rapid.IntRange(0, 2).Draw(w.t, "misfit") {
	case 0: // another kind
		k := rapid.SampledFrom([]run.StepKind{
			run.StepConsent, run.StepScreening, run.StepCard, run.StepDistance, run.StepDisplayCheck,
			run.StepInstructions, run.StepBreak, run.StepQuestions, run.StepDebrief,
		}).Draw(w.t, "kind")
		if k == step.Kind {
			return
		}
		rec = w.answer(k)
		rec.Sequence = w.run.Sequence() + 1
	case 1: // out of sequence
		if step.Kind == run.StepTrial || step.Kind >= run.StepDone {
			return
		}
		rec = w.answer(step.Kind)
		rec.Sequence = w.run.Sequence() + rapid.SampledFrom([]int{-1, 0, 2, 7}).Draw(w.t, "sequence")
	default: // a changed trial
		if step.Kind != run.StepTrial {
			return
		}
		rec = w.trial(w.choice(step.Trial, true), "")
		rec.Sequence = w.run.Sequence() + 1
		names := make([]string, 0, len(trialChanges))
		for name := range trialChanges {
			names = append(names, name)
		}
		slices.Sort(names)
		trialChanges[rapid.SampledFrom(names).Draw(w.t, "change")](rec.Trial)
	}
	if err := w.run.Apply(&rec); err == nil {
		w.t.Fatalf("at step %s: %s", run.StepKindNames[step.Kind], wire(w.t, rec.Encode()))
	}
	if after := wire(w.t, w.run.Next().Encode(w.study)); after != before {
		w.t.Fatalf("a refused record changed the run:\n%s\n%s", before, after)
	}
}

// trialChanges each make a trial that was not planned.
var trialChanges = map[string]func(*run.TrialRecord){
	"number":        func(r *run.TrialRecord) { r.Trial++ },
	"block":         func(r *run.TrialRecord) { r.Block += "x" },
	"task":          func(r *run.TrialRecord) { r.Task = "other" },
	"display":       func(r *run.TrialRecord) { r.Display = "other" },
	"condition":     func(r *run.TrialRecord) { r.Condition += "x" },
	"track":         func(r *run.TrialRecord) { r.Track++ },
	"practice":      func(r *run.TrialRecord) { r.Practice = !r.Practice },
	"catch":         func(r *run.TrialRecord) { r.Catch = !r.Catch },
	"level":         func(r *run.TrialRecord) { r.Level = 0.123 },
	"value":         func(r *run.TrialRecord) { r.Values = append([]float64{r.Values[0] + 1}, r.Values[1:]...) },
	"key":           func(r *run.TrialRecord) { r.Keys = append([]string{"x"}, r.Keys[1:]...) },
	"fewer values":  func(r *run.TrialRecord) { r.Keys, r.Values = r.Keys[1:], r.Values[1:] },
	"refresh":       func(r *run.TrialRecord) { r.RefreshMs *= 1.001 },
	"fixation":      func(r *run.TrialRecord) { r.FixationSteps++ },
	"stimulus":      func(r *run.TrialRecord) { r.StimulusSteps-- },
	"correct":       func(r *run.TrialRecord) { r.Correct = 0 },
	"not marked":    func(r *run.TrialRecord) { r.Correct = -1 },
	"other choice":  func(r *run.TrialRecord) { r.Response = map[string]string{"left": "right", "right": "left"}[r.Response] },
	"no choice":     func(r *run.TrialRecord) { r.Response, r.Correct = "up", 0 },
	"interrupted":   func(r *run.TrialRecord) { r.Interrupted = "hidden" }, // but marked
	"dropped":       func(r *run.TrialRecord) { r.Dropped = 0 },
	"dropped steps": func(r *run.TrialRecord) { r.Steps = []int{1, 1, 1} },
}

func TestEachTrialChangeIsRefused(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	for name, change := range trialChanges {
		p := begin(t, s, run.Assignment{Seed: 4})
		p.untilBlock("tracks")
		rec := p.trial(p.choice(p.run.Next().Trial, true), "")
		rec.Sequence = p.run.Sequence() + 1
		changed := *rec.Trial
		change(&changed)
		if err := p.run.Apply(&run.Record{Sequence: rec.Sequence, Kind: run.KindTrial, Trial: &changed}); err == nil || !strings.Contains(err.Error(), "trial ") {
			t.Errorf("%s: %v", name, err)
		}
		p.apply(rec)
	}
}

func (w *walker) invariants() {
	step := w.run.Next()
	if again := w.run.Next(); wire(w.t, again.Encode(w.study)) != wire(w.t, step.Encode(w.study)) {
		w.t.Fatal("asking twice gives another step")
	}
	if w.run.Sequence() != len(w.records) {
		w.t.Fatalf("sequence %d after %d records", w.run.Sequence(), len(w.records))
	}
	if step.Kind == run.StepRefused || step.Kind == run.StepWithdrawn {
		return
	}
	if step.Progress < w.progress || step.Progress > 1 {
		w.t.Fatalf("step %s: progress went from %g to %g", run.StepKindNames[step.Kind], w.progress, step.Progress)
	}
	w.progress = step.Progress
	if step.Kind == run.StepTrial && (len(w.records) == 0 || w.records[0].Kind != run.KindConsent) {
		w.t.Fatal("a trial without consent")
	}
}

// throughBundle is the study as the browser's engine has it.
func throughBundle(t *testing.T, s *study.Study) *study.Study {
	t.Helper()
	tree, err := value.ParseJSON([]byte(wire(t, s.Encode())))
	if err != nil {
		t.Fatal(err)
	}
	again, problems := study.Decode(tree)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return again
}

// reload applies all records to a new run of the study as a bundle holds it,
// through their wire form.
func (w *walker) reload() {
	again, err := run.New(w.canonical, w.assignment)
	if err != nil {
		w.t.Fatal(err)
	}
	for i := range w.records {
		rec, err := decode(wire(w.t, w.records[i].Encode()))
		if err != nil {
			w.t.Fatal(err)
		}
		if err := again.Apply(rec); err != nil {
			w.t.Fatalf("record %d was taken once, but not again: %v", i+1, err)
		}
	}
	a, b := wire(w.t, w.run.Next().Encode(w.study)), wire(w.t, again.Next().Encode(w.study))
	if a != b {
		w.t.Fatalf("after a reload the next step is\n%s\nnot\n%s", b, a)
	}
	w.sameFrames(again)
}

// sameFrames shows the next trial in both runs.
func (w *walker) sameFrames(again *run.Run) {
	if w.run.Next().Kind != run.StepTrial {
		return
	}
	var digests [2]string
	for i, r := range []*run.Run{w.run, again} {
		r.BeginTrial()
		for _, n := range []int{0, 1, 3, 1} {
			r.Frame(n)
		}
		digests[i] = r.Digest()
	}
	if digests[0] != digests[1] {
		w.t.Fatal("after a reload the next trial has other frames")
	}
}
