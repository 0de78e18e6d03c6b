package run_test

import (
	"encoding/json"
	"math"
	"os"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"distal/experiments/run"
	"distal/experiments/study"
)

// The whole way of a run, step by step.
func TestStepsInOrder(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 5})
	var got []string
	for {
		step := p.run.Next()
		name := run.StepKindNames[step.Kind]
		if step.Kind == run.StepTrial || step.Kind == run.StepBreak {
			name += " " + step.Block
		}
		if len(got) == 0 || got[len(got)-1] != name {
			got = append(got, name)
		}
		if step.Kind == run.StepDone {
			break
		}
		if step.Kind == run.StepTrial {
			p.apply(p.trial(p.choice(step.Trial, true), ""))
		} else {
			p.apply(p.answer(step.Kind))
		}
	}
	// The 24 trials of block "tracks" and its catch trials have breaks after every 7.
	tracks := "trial tracks|break tracks|"
	want := "consent|screening|card|distance|display_check|instructions|break practice|trial practice|break tracks|" +
		strings.Repeat(tracks, strings.Count(strings.Join(got, "|"), "trial tracks")-1) + "trial tracks|" +
		"break fixed|trial fixed|break short|trial short|questions|debrief|done"
	if diff := cmp.Diff(strings.Split(want, "|"), got); diff != "" {
		t.Error(diff)
	}
	if n := strings.Count(strings.Join(got, "|"), "trial tracks"); n < 4 {
		t.Errorf("%d stretches of trials between breaks, want 4 or more", n)
	}
}

// The printed designs of 2 to 10 treatments, and what they are for: every
// treatment stands in every place equally often and follows every other equally often.
func TestWilliams(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../testdata/williams_designs.json")
	if err != nil {
		t.Fatal(err)
	}
	var published struct {
		Designs []struct {
			Treatments      int
			EachOrderedPair int `json:"each_ordered_pair"`
			Design          [][]int
		}
	}
	if err := json.Unmarshal(text, &published); err != nil {
		t.Fatal(err)
	}
	if len(published.Designs) < 5 {
		t.Fatalf("only %d designs", len(published.Designs))
	}
	for _, d := range published.Designs {
		got := run.Williams(d.Treatments)
		if diff := cmp.Diff(d.Design, got); diff != "" {
			t.Errorf("%d treatments: %s", d.Treatments, diff)
		}
		pairs, places := map[[2]int]int{}, map[[2]int]int{}
		for _, row := range got {
			for i, x := range row {
				places[[2]int{i, x}]++
				if i > 0 {
					pairs[[2]int{row[i-1], x}]++
				}
			}
		}
		n := d.Treatments
		for a := range n {
			for b := range n {
				if a != b && pairs[[2]int{a, b}] != d.EachOrderedPair {
					t.Errorf("%d treatments: %d follows %d %d times", n, b, a, pairs[[2]int{a, b}])
				}
				if places[[2]int{a, b}] != len(got)/n {
					t.Errorf("%d treatments: %d stands in place %d %d times", n, b, a, places[[2]int{a, b}])
				}
			}
		}
	}
	if run.Williams(0) != nil || !cmp.Equal(run.Williams(1), [][]int{{0}}) {
		t.Error("no and one treatment")
	}
}

// Practice stays where it is; the three measurement blocks go through the six
// rows of the square; other methods keep or shuffle them.
func TestBlockOrder(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	want := [][]int{{0, 1, 2, 3}, {0, 2, 3, 1}, {0, 3, 1, 2}, {0, 3, 2, 1}, {0, 1, 3, 2}, {0, 2, 1, 3}, {0, 1, 2, 3}}
	for order, w := range want {
		if got := run.BlockOrder(s, run.Assignment{Order: order}); !cmp.Equal(got, w) {
			t.Errorf("order %d: %v, want %v", order, got, w)
		}
	}
	written := changed(t, "latin_square", "as_written")
	if got := run.BlockOrder(written, run.Assignment{Order: 3, Seed: 9}); !cmp.Equal(got, []int{0, 1, 2, 3}) {
		t.Errorf("as written: %v", got)
	}
	shuffled := changed(t, "latin_square", "shuffled")
	counts := map[[4]int]int{}
	const runs = 6000
	for seed := range uint64(runs) {
		counts[[4]int(run.BlockOrder(shuffled, run.Assignment{Seed: seed}))]++
	}
	// Six orders of 1000 expected runs each, five standard deviations of the binomial.
	tolerance := 5 * math.Sqrt(runs/6.0*5/6)
	if len(counts) != 6 {
		t.Errorf("%d orders", len(counts))
	}
	for order, n := range counts {
		if order[0] != 0 || math.Abs(float64(n)-runs/6.0) > tolerance {
			t.Errorf("order %v came %d times", order, n)
		}
	}
}

func TestAssignmentRefused(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	for _, a := range []run.Assignment{{Group: -1}, {Group: 2}, {Order: -1}} {
		if _, err := run.New(s, a); err == nil {
			t.Errorf("%+v was accepted", a)
		}
	}
}

// The group's settings reach the display: contrast of every dot.
func TestGroupSettings(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	for group, want := range []float32{0.5, 0.9} {
		p := begin(t, s, run.Assignment{Seed: 1, Group: group})
		plan := p.untilKind(run.StepTrial).Trial
		p.run.BeginTrial()
		p.run.Frame(0)
		l := p.run.Frame(plan.StimulusFrames / 2) // past the ramp
		if got := l.Dots[0].Contrast; got != want {
			t.Errorf("group %d: contrast %g, want %g", group, got, want)
		}
	}
}

// collect takes n runs of right answers through block name and gives its plans.
func collect(t *testing.T, s *study.Study, name string, runs int, visit func(seed uint64, plans []run.TrialPlan)) {
	t.Helper()
	for seed := range uint64(runs) {
		p := begin(t, s, run.Assignment{Seed: seed * 0x9E3779B97F4A7C15})
		var plans []run.TrialPlan
		p.untilBlock(name)
		p.until(func(step run.Step) bool {
			if step.Kind == run.StepTrial && step.Block == name {
				plans = append(plans, *step.Trial)
			}
			return step.Kind != run.StepTrial && step.Kind != run.StepBreak || step.Block != name
		})
		visit(seed, plans)
	}
}

func settingOf(p *run.TrialPlan, key string) float64 {
	for i := range p.Keys {
		if p.Keys[i] == key {
			return p.Values[i]
		}
	}
	return math.NaN()
}

// In each track every combination of balanced values comes once before any
// comes again; the tracks alternate at random and end after their trials.
func TestBalanceAndInterleaving(t *testing.T) {
	t.Parallel()
	s := readStudy(t, motley)
	first := map[int]int{}
	const runs = 200
	collect(t, s, "tracks", runs, func(seed uint64, plans []run.TrialPlan) {
		perTrack := map[int]int{}
		seen := map[int]map[[2]float64]int{}
		for i := range plans {
			p := &plans[i]
			if p.Catch {
				continue
			}
			if perTrack[p.Track] == 0 && len(perTrack) == 0 {
				first[p.Track]++
			}
			if want := []string{"thin", "thin", "dense", "dense"}[p.Track]; p.Condition != want {
				t.Fatalf("track %d has condition %q", p.Track, p.Condition)
			}
			if want := map[string]float64{"thin": 0.4, "dense": 1}[p.Condition]; settingOf(p, "density_per_deg2") != want {
				t.Fatalf("condition %s: density %g", p.Condition, settingOf(p, "density_per_deg2"))
			}
			if settingOf(p, "coherence") != p.Level {
				t.Fatalf("the level %g is not in the display's values", p.Level)
			}
			if perTrack[p.Track]%4 == 0 {
				seen[p.Track] = map[[2]float64]int{}
			}
			cell := [2]float64{settingOf(p, "direction_deg"), settingOf(p, "polarity")}
			if seen[p.Track][cell]++; seen[p.Track][cell] > 1 {
				t.Fatalf("seed %d, trial %d: %v came twice in one cycle", seed, p.Number, cell)
			}
			perTrack[p.Track]++
		}
		for track := range 4 {
			if perTrack[track] != 6 {
				t.Fatalf("seed %d: track %d has %d trials, want 6", seed, track, perTrack[track])
			}
		}
	})
	// Each of four tracks begins a quarter of the runs, five standard deviations of the binomial.
	for track := range 4 {
		if n := float64(first[track]); math.Abs(n-runs/4) > 5*math.Sqrt(runs*3/16.0) {
			t.Errorf("track %d came first in %g of %d runs", track, n, runs)
		}
	}
}

// One trial in four is a catch trial in the long run, never two in a row, never
// among the first two, and where depends on the seed.
func TestCatchTrials(t *testing.T) {
	t.Parallel()
	s := changed(t, "max_trials: 6", "max_trials: 100", "break_every: 7", "break_every: 0")
	catch, all := 0, 0
	patterns := map[string]bool{}
	collect(t, s, "tracks", 20, func(seed uint64, plans []run.TrialPlan) {
		var pattern strings.Builder
		for i := range plans {
			all++
			if !plans[i].Catch {
				pattern.WriteByte('.')
				continue
			}
			pattern.WriteByte('C')
			catch++
			if i < 2 || plans[i-1].Catch {
				t.Fatalf("seed %d: a catch trial at place %d", seed, i+1)
			}
			if settingOf(&plans[i], "coherence") != 1 || !math.IsNaN(plans[i].Level) || plans[i].Track != -1 {
				t.Fatalf("seed %d: catch trial %+v", seed, plans[i])
			}
		}
		patterns[pattern.String()] = true
	})
	// Gaps between catch trials are 1 + a geometric number with q = 1/3: mean 4 and variance
	// (1−q)/q² = 6: the count over n trials has variance n·6/4³ (renewal
	// theory). The late start costs less than one catch trial in each of the 20 runs.
	n := float64(all)
	tolerance := float64(5*math.Sqrt(n*6/64)) + 20
	if got := float64(catch); math.Abs(got-n/4) > tolerance {
		t.Errorf("%g catch trials in %g, want a quarter ± %g", got, n, tolerance)
	}
	if len(patterns) != 20 {
		t.Errorf("%d patterns in 20 seeds", len(patterns))
	}
}

// Practice ends at the criterion, or as the study says after its last trial.
func TestPractice(t *testing.T) {
	t.Parallel()
	practise := func(s *study.Study, answers string) (*person, run.Step) {
		p := begin(t, s, run.Assignment{Seed: 3})
		p.untilKind(run.StepTrial)
		for _, a := range answers {
			step := p.run.Next()
			if step.Kind != run.StepTrial || step.Block != "practice" {
				t.Fatalf("practice ended before answer %q of %s", a, answers)
			}
			if !step.Trial.Practice || !step.Trial.Feedback {
				t.Fatal("a practice trial without feedback")
			}
			p.apply(p.trial(p.choice(step.Trial, a == '+'), ""))
		}
		return p, p.run.Next()
	}
	s := readStudy(t, motley)
	goOn := changed(t, "otherwise: end", "otherwise: go_on")
	for _, c := range []struct {
		name    string
		study   *study.Study
		answers string
		want    run.StepKind
		block   string
	}{
		{"at the first possible trial", s, "++++", run.StepBreak, "tracks"},
		{"three of the last four", s, "-+-++", run.StepBreak, "tracks"},
		{"not yet", s, "+-+-", run.StepTrial, "practice"},
		{"never", s, "-+-+-+-+", run.StepRefused, ""},
		{"never, but going on", goOn, "-+-+-+-+", run.StepBreak, "tracks"},
	} {
		p, step := practise(c.study, c.answers)
		if step.Kind != c.want || step.Block != c.block {
			t.Errorf("%s: %s %s", c.name, run.StepKindNames[step.Kind], step.Block)
		}
		if c.want != run.StepRefused {
			continue
		}
		if step.Code != run.ReasonPractice {
			t.Errorf("refused because of %q", step.Code)
		}
		p.apply(run.Record{Kind: run.KindRefusal, Refusal: &run.Refusal{Step: "trial", Reason: run.ReasonPractice}})
		if again := p.run.Next(); again.Kind != run.StepRefused {
			t.Errorf("after the refusal: %s", run.StepKindNames[again.Kind])
		}
	}
}

// An interrupted trial is asked again under the next number: the same level and
// values, other dots, and it moves neither procedure nor progress.
func TestInterruptedTrialIsAskedAgain(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 11})
	for range 40 {
		before := p.run.Next()
		if before.Kind != run.StepTrial {
			p.until(func(s run.Step) bool { return s.Kind == run.StepTrial || s.Kind == run.StepDone })
			continue
		}
		first := p.trial(p.choice(before.Trial, false), "hidden")
		if first.Trial.Correct != -1 {
			t.Fatal("an interrupted trial was marked")
		}
		p.apply(first)
		after := p.run.Next()
		if after.Trial == nil || after.Trial.Number != before.Trial.Number+1 || after.Progress != before.Progress {
			t.Fatalf("after trial %d: %+v", before.Trial.Number, after)
		}
		a, b := *before.Trial, *after.Trial
		if math.Float64bits(a.Level) != math.Float64bits(b.Level) || !cmp.Equal(a.Keys, b.Keys) || !cmp.Equal(a.Values, b.Values) ||
			a.Catch != b.Catch || a.Condition != b.Condition || a.Track != b.Track || a.CorrectChoice != b.CorrectChoice {
			t.Fatalf("another trial was asked: %+v, then %+v", a, b)
		}
		second := p.trial(p.choice(after.Trial, true), "")
		if second.Trial.Digest == first.Trial.Digest {
			t.Fatal("the same dots came again")
		}
		p.apply(second)
	}
}

// Without an answer nothing is known: the procedure stays at its level; three
// in a row bring a break. In a catch trial no answer is a wrong one.
func TestMissedTrials(t *testing.T) {
	t.Parallel()
	p := begin(t, changed(t, "break_every: 7", "break_every: 0"), run.Assignment{Seed: 21})
	p.untilBlock("tracks")
	levels := map[int]float64{}
	missed, breaks, caught := 0, 0, 0
	for range 60 {
		step := p.run.Next()
		if step.Kind == run.StepBreak {
			if missed != 3 {
				t.Fatalf("a break after %d missed trials", missed)
			}
			missed = 0
			breaks++
			p.apply(run.Record{Kind: run.KindBreak})
			continue
		}
		if missed == 3 {
			t.Fatal("no break after three missed trials")
		}
		rec := p.trial("", "")
		missed++
		switch {
		case step.Trial.Catch:
			caught++
			if rec.Trial.Correct != 0 {
				t.Fatal("a missed catch trial is wrong")
			}
		default:
			if rec.Trial.Correct != -1 || !math.IsNaN(rec.Trial.ResponseMs) {
				t.Fatalf("a missed trial: %+v", rec.Trial)
			}
			if old, ok := levels[step.Trial.Track]; ok && old != step.Trial.Level {
				t.Fatalf("track %d went from %g to %g without an answer", step.Trial.Track, old, step.Trial.Level)
			}
			levels[step.Trial.Track] = step.Trial.Level
		}
		p.apply(rec)
	}
	if breaks < 3 || caught < 3 || len(levels) != 4 {
		t.Errorf("%d breaks, %d catch trials, %d tracks", breaks, caught, len(levels))
	}
}

// An answer ends the row of missed trials.
func TestAnswersEndTheRowOfMissedTrials(t *testing.T) {
	t.Parallel()
	p := begin(t, changed(t, "break_every: 7", "break_every: 0"), run.Assignment{Seed: 22})
	p.untilBlock("tracks")
	for i := range 12 {
		step := p.run.Next()
		if step.Kind != run.StepTrial {
			t.Fatalf("%s before trial %d", run.StepKindNames[step.Kind], i+1)
		}
		response := ""
		if i%3 == 2 {
			response = p.choice(step.Trial, false)
		}
		p.apply(p.trial(response, ""))
	}
}

// Catch trials come on top of a block's trials.
func TestCatchTrialsDoNotCount(t *testing.T) {
	t.Parallel()
	catch := 0
	collect(t, readStudy(t, motley), "fixed", 20, func(seed uint64, plans []run.TrialPlan) {
		counted := 0
		for i := range plans {
			if plans[i].Catch {
				catch++
			} else {
				counted++
			}
		}
		if counted != 8 {
			t.Errorf("seed %d: %d trials, want 8", seed, counted)
		}
	})
	if catch < 20 {
		t.Errorf("%d catch trials in 20 runs", catch)
	}
}

// Each track of constant stimuli has an order of its own, and shows each level equally often.
func TestConstantStimuli(t *testing.T) {
	t.Parallel()
	s := changed(t, `    method: quest_plus
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
`, `    method: constant
    parameter: coherence
    min: 0.05
    max: 1
    levels: [0.1, 0.2, 0.4, 0.8]
    repetitions: 5
    interleave: 2
`)
	collect(t, s, "short", 4, func(seed uint64, plans []run.TrialPlan) {
		var orders [2][]float64
		for i := range plans {
			orders[plans[i].Track] = append(orders[plans[i].Track], plans[i].Level)
		}
		if cmp.Equal(orders[0], orders[1]) {
			t.Errorf("seed %d: both tracks have the order %v", seed, orders[0])
		}
		for track, order := range orders {
			counts := map[float64]int{}
			for _, level := range order {
				counts[level]++
			}
			if !cmp.Equal(counts, map[float64]int{0.1: 5, 0.2: 5, 0.4: 5, 0.8: 5}) {
				t.Errorf("seed %d, track %d: %v", seed, track, counts)
			}
		}
	})
}

// Breaks come after so many shown trials, never at the end of a block.
func TestBreaks(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 8})
	p.untilBlock("tracks")
	shown := 0
	p.until(func(step run.Step) bool {
		switch {
		case step.Block != "tracks":
			return true
		case step.Kind == run.StepTrial:
			shown++
			// A catch trial never ends a stretch, so one more can come.
			if shown > 8 {
				t.Fatalf("%d trials without a break", shown)
			}
		case step.Kind == run.StepBreak:
			if shown != 7 && shown != 8 {
				t.Fatalf("a break after %d trials", shown)
			}
			shown = 0
		}
		return false
	})
	if shown == 0 {
		t.Error("the block ended with a break")
	}
}

// Durations become the nearest number of refresh intervals of this screen.
func TestFrames(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		hz             float64
		stimulus, ramp int
	}{{60, 12, 3}, {59.94, 12, 3}, {75, 15, 4}, {120, 24, 6}, {144, 29, 7}} {
		p := begin(t, readStudy(t, motley), run.Assignment{Seed: 2})
		p.untilKind(run.StepDisplayCheck)
		check := goodCheck()
		check.RefreshMs = 1000 / c.hz
		p.apply(run.Record{Kind: run.KindDisplayCheck, Check: check})
		plan := p.untilKind(run.StepTrial).Trial
		if plan.StimulusFrames != c.stimulus || plan.RampFrames != c.ramp || plan.RefreshMs != 1000/c.hz {
			t.Errorf("%g Hz: %+v", c.hz, plan)
		}
		// Fixation: 300 ms and a uniform share of 200 ms.
		if ms := float64(plan.FixationFrames) * plan.RefreshMs; ms < 300-plan.RefreshMs/2 || ms > 500+plan.RefreshMs/2 {
			t.Errorf("%g Hz: fixation of %g ms", c.hz, ms)
		}
	}
}

// A screen that changes in the middle of a trial: the trial is asked again with
// the refresh intervals of the screen as it is now.
func TestScreenChangesDuringTrial(t *testing.T) {
	t.Parallel()
	for _, event := range []string{"resized", "zoomed"} {
		p := begin(t, readStudy(t, motley), run.Assignment{Seed: 23})
		before := *p.untilBlock("tracks")
		p.apply(p.trial("", event))
		p.apply(run.Record{Kind: run.KindEvent, Event: &run.Event{Name: event}})
		want := []run.StepKind{run.StepDisplayCheck}
		if event == "zoomed" {
			want = []run.StepKind{run.StepCard, run.StepDistance, run.StepDisplayCheck}
		}
		for _, k := range want {
			if step := p.run.Next(); step.Kind != k {
				t.Fatalf("%s: %s, want %s", event, run.StepKindNames[step.Kind], run.StepKindNames[k])
			}
			rec := p.answer(k)
			if k == run.StepDisplayCheck {
				rec.Check.RefreshMs = 1000.0 / 120
			}
			p.apply(rec)
		}
		after := p.run.Next().Trial
		if after == nil || after.Number != before.Number+1 || after.Level != before.Level ||
			after.RefreshMs != 1000.0/120 || after.StimulusFrames != 24 || after.RampFrames != 6 {
			t.Errorf("%s: %+v, before it %+v", event, after, before)
		}
	}
}

// Once nothing is left to show, another zoom asks for no calibration.
func TestScreenChangesAfterTheLastTrial(t *testing.T) {
	t.Parallel()
	p := begin(t, readStudy(t, motley), run.Assignment{Seed: 24})
	for _, k := range []run.StepKind{run.StepQuestions, run.StepDebrief, run.StepDone} {
		p.untilKind(k)
		for _, event := range []string{"zoomed", "resized"} {
			p.apply(run.Record{Kind: run.KindEvent, Event: &run.Event{Name: event}})
			if step := p.run.Next(); step.Kind != k || step.Progress != 1 {
				t.Errorf("%s: %s with progress %g, want %s", event, run.StepKindNames[step.Kind], step.Progress, run.StepKindNames[k])
			}
		}
	}
}
