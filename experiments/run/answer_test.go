package run_test

import (
	"math"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/replay"
	"distal/experiments/run"
	"distal/experiments/study"
	"distal/experiments/value"
)

// choicesOf is the text that the variants below replace in the motley study.
const choicesOf = `      left: {keys: [ArrowLeft], label: {en: Left}, right_when: {direction_deg: 180}}
      right: {keys: [ArrowRight], label: {en: Right}, right_when: {direction_deg: 0}}
`

func pair(design, more, a, b string) []string {
	return []string{
		"    stimulus_ms: 200\n", "    stimulus_ms: 200\n    intervals: {design: " + design + ", gap_ms: 100, " + more + "}\n",
		choicesOf, "      a: {keys: [ArrowLeft], label: {en: A}, " + a + "}\n      b: {keys: [ArrowRight], label: {en: B}, " + b + "}\n",
	}
}

// without gives the motley study with another way to answer, and blocks that
// need no right answers.
func without(answer string) []string {
	return []string{
		"    feedback: practice\n    choices:\n" + choicesOf, "    answer: {" + answer + "}\n",
		"    criterion: {correct: 3, window: 4, max_trials: 8, otherwise: end}\n", "    trials: 4\n",
		"    procedure: track\n    balance: {polarity: [light, dark], direction_deg: [0, 180]}\n", "    trials: 8\n    balance: {direction_deg: [30, 200]}\n",
		"    conditions:\n      - {name: thin, set: {density_per_deg2: 0.4}}\n      - {name: dense, set: {density_per_deg2: 1}}\n    catch: {every: 4, set: {coherence: 1}}\n", "",
		"    procedure: short\n", "    trials: 5\n",
	}
}

// variants are the motley study with each way to answer.
func variants(t testing.TB) map[string]*study.Study {
	t.Helper()
	sure := []string{"    fixation_ms: 300\n", "    fixation_ms: 300\n    confidence: {steps: 4, ask: {en: How sure?}}\n"}
	beside := []string{
		"tasks:\n", "  other: {kind: grating, x_deg: -2, width_deg: 3, height_deg: 3}\ntasks:\n",
		"    fixation_ms: 300\n", "    fixation_ms: 300\n    beside: [other]\n",
	}
	long := []string{"    stimulus_ms: 200\n", "    stimulus_ms: 900\n"}
	return map[string]*study.Study{
		"two_interval": changed(t, append(pair("two_interval", "reference: {coherence: 0}", "means: first", "means: second"), sure...)...),
		"compared":     changed(t, pair("two_interval", "reference: {speed_deg_per_s: 6}, compare: speed_deg_per_s", "means: first", "means: second")...),
		"same":         changed(t, pair("same_different", "reference: {speed_deg_per_s: 8}", "means: same", "means: different")...),
		"reminder":     changed(t, pair("reminder", "reference: {coherence: 0}", "right_when: {direction_deg: 0}", "right_when: {direction_deg: 180}")...),
		"less":         changed(t, pair("reminder", "reference: {speed_deg_per_s: 6}, compare: speed_deg_per_s", "means: more", "means: less")...),
		"places": changed(t, append(slices.Clone(beside[:2]), "    fixation_ms: 300\n", "    fixation_ms: 300\n    beside: [other]\n    shuffle_places: true\n",
			choicesOf, "      a: {keys: [ArrowLeft], label: {en: A}, at: field}\n      b: {keys: [ArrowRight], label: {en: B}, at: other}\n")...),
		"dial":       changed(t, append(without("by: dial, parameter: direction_deg"), sure...)...),
		"adjustment": changed(t, append(append(without("by: adjustment, parameter: speed_deg_per_s, min: 1, max: 20, scale: log10, coarse: 0.1, fine: 0.02"), long...), beside...)...),
		"restarted":  changed(t, append(without("by: adjustment, parameter: lifetime_ms, min: 50, max: 500, coarse: 20, fine: 5"), long...)...),
		"hold":       changed(t, append(append(without("by: hold"), long...), sure...)...),
	}
}

func nothing() *run.Given {
	return &run.Given{ResponseDeg: math.NaN(), Confidence: math.NaN(), SureMs: math.NaN()}
}

// measure makes up a measurement of the planned trial.
func (p *person) measure(t *rapid.T, plan *run.TrialPlan) run.Measurement {
	task := &p.study.Tasks[plan.Task]
	m := run.Measurement{Response: study.Said[task.Answer.By], ResponseMs: 480, Input: "keyboard", OnsetMs: 100, OffsetMs: 900}
	for left := plan.StimulusFrames; left > 0; {
		step := min(left, rapid.SampledFrom([]int{1, 1, 1, 2, 5}).Draw(t, "step"))
		m.Steps, m.IntervalsMs = append(m.Steps, step), append(m.IntervalsMs, 16.7*float64(step))
		left -= step
	}
	g := nothing()
	switch task.Answer.By {
	case study.ByChoice:
		m.Response = rapid.SampledFrom([]string{task.Choices[0].Name, task.Choices[1].Name, ""}).Draw(t, "response")
	case study.ByDial:
		g.ResponseDeg = float64(rapid.IntRange(0, 3599).Draw(t, "deg")) / 10
	case study.ByAdjustment:
		at := 0
		for range rapid.IntRange(0, 5).Draw(t, "changes") {
			at = rapid.IntRange(at, len(m.Steps)).Draw(t, "frame")
			g.AdjustFrames, g.AdjustMs = append(g.AdjustFrames, float64(at)), append(g.AdjustMs, 16.7*float64(at))
			g.AdjustValues = append(g.AdjustValues, rapid.Float64Range(task.Answer.Min, task.Answer.Max).Draw(t, "setting"))
		}
	case study.ByHolding:
		g.HeldFromMs, g.HeldToMs = []float64{100, 400}, []float64{250, rapid.Float64Range(400, 900).Draw(t, "to")}
	}
	if task.Confidence.Steps > 0 && m.Response != "" {
		g.Confidence, g.SureMs = float64(rapid.IntRange(1, 4).Draw(t, "sure")), 700
	}
	if task.Confidence.Steps > 0 || task.Answer.By != study.ByChoice {
		m.Given = g
	}
	return m
}

// show takes the trial as the browser does: each change before the frame that shows it.
func (p *person) show(m run.Measurement) run.Record {
	p.run.BeginTrial()
	for i := range m.Steps {
		if m.Given != nil {
			for k, at := range m.Given.AdjustFrames {
				if int(at) == i {
					p.run.Adjust(m.Given.AdjustValues[k])
				}
			}
		}
		p.run.Frame(m.Steps[max(i-1, 0)])
	}
	return run.Record{Kind: run.KindTrial, Trial: p.run.FinishTrial(m)}
}

// Whole runs with every way to answer go through the bundle's form of the study
// and the records' wire form, and replay agrees in every trial.
func TestEveryWayToAnswerReplays(t *testing.T) {
	t.Parallel()
	for name, s := range variants(t) {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			s := throughBundle(t, s)
			rapid.Check(t, func(rt *rapid.T) {
				a := run.Assignment{Seed: rapid.Uint64().Draw(rt, "seed")}
				p := begin(t, s, a)
				p.t = rt
				for trials := 0; trials < 6; {
					step := p.run.Next()
					if step.Kind != run.StepTrial {
						p.apply(p.answer(step.Kind))
						continue
					}
					trials++
					rec := p.show(p.measure(rt, step.Trial))
					rec.Sequence, rec.Bundle = p.run.Sequence()+1, "b"
					text := wire(rt, rec.Encode())
					again, err := decode(text)
					if err != nil {
						rt.Fatalf("%v: %s", err, text)
					}
					if second := wire(rt, again.Encode()); second != text {
						rt.Fatalf("the wire form changes:\n%s\n%s", text, second)
					}
					p.apply(*again)
				}
				if report := replay.Verify(s, a, p.records); !report.OK() || report.Trials != 6 {
					rt.Fatalf("%+v", report)
				}
			})
		})
	}
}

// What a measurement looks like on the wire is what a page sends.
func TestMeasurementOfGiven(t *testing.T) {
	t.Parallel()
	tree, err := value.ParseJSON([]byte(`{"response":"pointed","rt_ms":1,"input":"touch","onset_ms":1,"offset_ms":2,"frame_steps":[1],"intervals_ms":[16.7],"interrupted":"",
		"given":{"response_deg":12.5,"confidence":null,"confidence_rt_ms":null,"adjust_frames":[],"adjust_values":[],"adjust_ms":[],"held_from_ms":[],"held_to_ms":[]}}`))
	if err != nil {
		t.Fatal(err)
	}
	m, err := run.DecodeMeasurement(tree)
	if err != nil || m.Given == nil || m.Given.ResponseDeg != 12.5 || !math.IsNaN(m.Given.Confidence) {
		t.Fatalf("%+v, %v", m.Given, err)
	}
}

// The order of the intervals, drawn from the trial's seed, decides what is right.
func TestIntervals(t *testing.T) {
	t.Parallel()
	all := variants(t)
	// Sorted by the order that was drawn: what must be right. The speed is 5,
	// references to compare with are faster.
	want := map[string]map[string]string{
		"two_interval": {"test reference": "a", "reference test": "b"},
		"compared":     {"test reference": "b", "reference test": "a"},
		"same":         {"test test": "a", "reference reference": "a", "test reference": "b", "reference test": "b"},
		"less":         {"reference test": "b"},
	}
	for name, right := range want {
		counts := map[string]int{}
		for seed := range uint64(40) {
			p := begin(t, all[name], run.Assignment{Seed: seed})
			plan := p.untilKind(run.StepTrial).Trial
			for range 5 {
				m := run.Measurement{Response: "a", Steps: []int{1}, IntervalsMs: []float64{16.7}}
				if name == "two_interval" {
					m.Given = nothing()
					m.Given.Confidence, m.Given.SureMs = 2, 300
				}
				rec := p.show(m)
				counts[rec.Trial.Order]++
				if got := p.study.Tasks[plan.Task].Choices[plan.CorrectChoice].Name; got != right[rec.Trial.Order] {
					t.Fatalf("%s: %s is right in %q, want %q", name, got, rec.Trial.Order, right[rec.Trial.Order])
				}
				p.apply(rec)
				plan = p.until(func(s run.Step) bool { return s.Kind != run.StepBreak }).Trial
			}
		}
		// 200 draws of a fair coin, or of four pairs: the limits are five standard deviations.
		mean := 200 / float64(len(right))
		limit := 5 * math.Sqrt(mean*(1-1/float64(len(right))))
		for order := range right {
			if n := float64(counts[order]); math.Abs(n-mean) > limit {
				t.Errorf("%s: %q came %v times of 200", name, order, n)
			}
		}
		if len(counts) != len(right) {
			t.Errorf("%s: %v", name, counts)
		}
	}
}

// Frames of an interval show its own values; between the intervals there is the mark alone.
func TestFramesOfIntervals(t *testing.T) {
	t.Parallel()
	p := begin(t, variants(t)["two_interval"], run.Assignment{Seed: 3})
	plan := p.untilKind(run.StepTrial).Trial
	if plan.StimulusFrames != 12+6+12 {
		t.Fatalf("%d frames", plan.StimulusFrames)
	}
	p.run.BeginTrial()
	var dots []int
	var firsts []float32
	for i := range plan.StimulusFrames {
		l := p.run.Frame(1)
		dots = append(dots, len(l.Dots))
		if i == 0 || i == 18 {
			firsts = append(firsts, l.Dots[0].XDeg)
		}
	}
	full := dots[0]
	for i, n := range dots {
		if gap := i >= 12 && i < 18; gap && n != 1 || !gap && n != full {
			t.Errorf("frame %d: %d dots", i, n)
		}
	}
	if full < 10 || firsts[0] == firsts[1] {
		t.Errorf("%d dots, both intervals begin at %v", full, firsts)
	}
}

// Displays change places at random, and the place of the task's own decides what is right.
func TestPlaces(t *testing.T) {
	t.Parallel()
	s := variants(t)["places"]
	own := 0
	for seed := range uint64(100) {
		p := begin(t, s, run.Assignment{Seed: seed})
		plan := p.untilKind(run.StepTrial).Trial
		p.run.BeginTrial()
		l := p.run.Frame(0)
		x := 0.0 // of the dots but the last, which is the fixation mark
		for _, d := range l.Dots[:len(l.Dots)-1] {
			x += float64(d.XDeg) / float64(len(l.Dots)-1)
		}
		place, dots, grating := []string{"a", "b"}[plan.CorrectChoice], 0.0, float32(-2)
		if place == "a" {
			own++
		} else {
			dots, grating = -2, 0
		}
		// The mean of 14 dots within a circle of radius 3 has a standard deviation of 0.4.
		if math.Abs(x-dots) > 1.9 || l.Patches[0].XDeg != grating {
			t.Fatalf("seed %d: %s is right, dots about %v, grating at %v", seed, place, x, l.Patches[0].XDeg)
		}
		rec := p.trial("a", "")
		if rec.Trial.Place != map[string]string{"a": "field", "b": "other"}[place] {
			t.Fatalf("place %q", rec.Trial.Place)
		}
		changed := *rec.Trial
		changed.Place = map[string]string{"field": "other", "other": "field"}[changed.Place]
		if err := p.try(run.Record{Kind: run.KindTrial, Trial: &changed}); err == nil {
			t.Error("another place was accepted")
		}
	}
	if own < 25 || own > 75 { // five standard deviations
		t.Errorf("%d of 100 at its own place", own)
	}
}

// A late frame across the gap shows what would have been shown without it.
func TestLateFramesInIntervals(t *testing.T) {
	t.Parallel()
	for _, name := range []string{"two_interval", "same", "reminder"} {
		frame := func(steps ...int) string {
			p := begin(t, variants(t)[name], run.Assignment{Seed: 9})
			p.untilKind(run.StepTrial)
			p.run.BeginTrial()
			var text string
			p.run.Frame(0)
			for _, n := range steps {
				var b strings.Builder
				for _, d := range p.run.Frame(n).Dots {
					b.WriteString(wire(t, value.Numbers([]float64{float64(d.XDeg), float64(d.YDeg), float64(d.Contrast)})))
				}
				text = b.String()
			}
			return text
		}
		want := frame(slices.Repeat([]int{1}, 24)...)
		for _, steps := range [][]int{{24}, {11, 13}, {14, 10}, {18, 6}, {17, 2, 5}, {19, 5}} {
			if got := frame(steps...); got != want {
				t.Errorf("%s: after steps %v frame 24 differs", name, steps)
			}
		}
	}
}

// A change goes on from what was shown: no dot jumps, and from then on they are as fast as set.
func TestAdjustmentIsShown(t *testing.T) {
	t.Parallel()
	s := changed(t, append(without("by: adjustment, parameter: speed_deg_per_s, min: 1, max: 20"), "    coherence: 0.5\n", "    coherence: 0.5\n    signal_dots: same\n",
		"    set: {coherence: 1}\n", "    set: {coherence: 1, aperture: rectangle}\n")...)
	p := begin(t, s, run.Assignment{Seed: 5})
	plan := p.untilKind(run.StepTrial).Trial
	p.run.BeginTrial()
	distance := func() float64 {
		before := p.run.Frame(1).Dots[0].XDeg
		return math.Abs(float64(p.run.Frame(1).Dots[0].XDeg - before))
	}
	moved := func(speed float64) float64 { return speed * plan.RefreshMs / 1000 * math.Abs(math.Cos(30*math.Pi/180)) }
	if d, want := distance(), plan.Start/1000*plan.RefreshMs; d > want*1.0001 {
		t.Errorf("at the start the dot moves %v in a frame, at most %v", d, want)
	}
	p.run.Adjust(12)
	for range 3 {
		d := distance()
		if want := 12 * plan.RefreshMs / 1000; d > want*1.001 || d < 0.9*min(moved(12), want*math.Abs(math.Cos(200*math.Pi/180))) {
			t.Errorf("the dot moves %v in a frame, want %v", d, want)
		}
	}
	p.run.Adjust(400) // out of range: nothing changes
	if d := distance(); d > 12*plan.RefreshMs/1000*1.001 {
		t.Errorf("a setting out of range was shown: %v", d)
	}
}

// What a record says of an answer must follow from plan and measurement.
func TestGivenRefused(t *testing.T) {
	t.Parallel()
	all := variants(t)
	nan := math.NaN()
	for name, c := range map[string]struct {
		variant string
		change  func(*run.TrialRecord)
		want    string
	}{
		"no direction":            {"dial", func(r *run.TrialRecord) { r.Given.ResponseDeg = 360 }, "response_deg"},
		"another error":           {"dial", func(r *run.TrialRecord) { r.Given.ErrorDeg++ }, "error_deg"},
		"another start":           {"dial", func(r *run.TrialRecord) { r.Given.Start++ }, "start"},
		"nothing given":           {"dial", func(r *run.TrialRecord) { r.Given = nil }, "given"},
		"a word of its own":       {"dial", func(r *run.TrialRecord) { r.Response = "left" }, "choice"},
		"no confidence":           {"dial", func(r *run.TrialRecord) { r.Given.Confidence = nan }, "confidence"},
		"beyond the scale":        {"dial", func(r *run.TrialRecord) { r.Given.Confidence = 5 }, "confidence"},
		"held on a dial":          {"dial", func(r *run.TrialRecord) { r.Given.HeldFromMs, r.Given.HeldToMs = []float64{1}, []float64{2} }, "holding"},
		"another setting":         {"adjustment", func(r *run.TrialRecord) { r.Given.Setting++ }, "setting"},
		"a setting out of range":  {"adjustment", func(r *run.TrialRecord) { r.Given.AdjustValues[0] = 21 }, "adjustment 1"},
		"a frame before":          {"adjustment", func(r *run.TrialRecord) { r.Given.AdjustFrames[1] = 0 }, "adjustment 2"},
		"a frame never shown":     {"adjustment", func(r *run.TrialRecord) { r.Given.AdjustFrames[1] = 9 }, "adjustment 2"},
		"half an adjustment":      {"adjustment", func(r *run.TrialRecord) { r.Given.AdjustMs = nil }, "adjustments"},
		"a sum of its own":        {"hold", func(r *run.TrialRecord) { r.Given.HeldMs++ }, "held_ms"},
		"let go before":           {"hold", func(r *run.TrialRecord) { r.Given.HeldToMs[0] = 0 }, "holding"},
		"another order":           {"same", func(r *run.TrialRecord) { r.Order = "test" }, "order"},
		"confidence without need": {"same", func(r *run.TrialRecord) { r.Given = nothing() }, "given"},
	} {
		t.Run(name, func(t *testing.T) {
			t.Parallel()
			p := begin(t, all[c.variant], run.Assignment{Seed: 2})
			p.untilKind(run.StepTrial)
			m := run.Measurement{Response: map[string]string{"dial": "pointed", "adjustment": "set", "hold": "held", "same": "a"}[c.variant], Steps: []int{1, 1, 1, 1}, IntervalsMs: []float64{16, 17, 16, 17}}
			if c.variant != "same" {
				m.Given = nothing()
			}
			switch c.variant {
			case "dial":
				m.Given.ResponseDeg, m.Given.Confidence, m.Given.SureMs = 100, 2, 500
			case "adjustment":
				m.Given.AdjustFrames, m.Given.AdjustValues, m.Given.AdjustMs = []float64{1, 3}, []float64{4, 5}, []float64{10, 40}
			case "hold":
				m.Given.HeldFromMs, m.Given.HeldToMs, m.Given.Confidence, m.Given.SureMs = []float64{10}, []float64{50}, 1, 9
			}
			rec := p.show(m)
			if c.variant == "hold" && (rec.Trial.Given.HeldMs != 40 || rec.Trial.Given.FirstHeldMs != 40) {
				t.Fatalf("%+v", rec.Trial.Given)
			}
			c.change(rec.Trial)
			if err := p.try(rec); err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%v, want a message about %q", err, c.want)
			}
		})
	}
}

// The procedure of adjustment says where each trial begins and gets its setting.
func TestAdjustmentProcedure(t *testing.T) {
	t.Parallel()
	list := without("by: adjustment, parameter: coherence, min: 0.01, max: 1, scale: log10, coarse: 0.1, fine: 0.02")
	for i := 0; i < len(list); i += 2 {
		if list[i] == "    procedure: short\n" {
			list[i+1] = list[i]
		}
	}
	list = append(list, "    method: quest_plus\n", "    method: adjustment\n", "    max_trials: 5\n", "    max_trials: 4\n")
	s := changed(t, list...)
	for seed := range uint64(5) {
		p := begin(t, s, run.Assignment{Seed: seed})
		low, high, settings := 0, 0, 0
		for step := p.run.Next(); step.Kind != run.StepDone; step = p.run.Next() {
			if step.Kind != run.StepTrial {
				p.apply(p.answer(step.Kind))
				continue
			}
			m := run.Measurement{Response: "set", Steps: []int{1, 1}, IntervalsMs: []float64{16, 17}, Given: nothing()}
			m.Given.AdjustFrames, m.Given.AdjustValues, m.Given.AdjustMs = []float64{1}, []float64{0.3}, []float64{20}
			rec := p.show(m)
			if step.Block == "short" {
				if settings++; rec.Trial.Given.Start != rec.Trial.Level {
					t.Fatalf("the setting begins at %v, the procedure says %v", rec.Trial.Given.Start, rec.Trial.Level)
				}
				if rec.Trial.Level < math.Sqrt(0.05) { // the middle of 0.05 to 1 on a log axis
					low++
				} else {
					high++
				}
			}
			p.apply(rec)
		}
		if settings != 4 || low != 2 || high != 2 {
			t.Errorf("seed %d: %d settings, %d begun low, %d high", seed, settings, low, high)
		}
		if report := replay.Verify(s, run.Assignment{Seed: seed}, p.records); !report.OK() {
			t.Errorf("%+v", report)
		}
	}
}

// Errors of pointing are signed, counter-clockwise, and go the short way round.
func TestPointingError(t *testing.T) {
	t.Parallel()
	s := variants(t)["dial"]
	p := begin(t, s, run.Assignment{Seed: 2})
	target := settingOf(p.untilKind(run.StepTrial).Trial, "direction_deg")
	for _, c := range []struct{ off, want float64 }{{0, 0}, {10, 10}, {-25, -25}, {180, 180}, {181, -179}, {-180, 180}} {
		m := run.Measurement{Response: "pointed", Steps: []int{1}, IntervalsMs: []float64{16}, Given: nothing()}
		m.Given.ResponseDeg = math.Mod(target+c.off+720, 360)
		m.Given.Confidence, m.Given.SureMs = 1, 1
		if got := p.show(m).Trial.Given.ErrorDeg; got != c.want {
			t.Errorf("%v deg from %v: error %v, want %v", c.off, target, got, c.want)
		}
	}
}
