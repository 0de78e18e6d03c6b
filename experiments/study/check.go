package study

import (
	"math"

	"distal/experiments/display"
	"distal/experiments/procedure"
	"distal/experiments/value"
)

// checker finds contradictions between values that are each in range.
type checker struct {
	s        *Study
	root     value.Value
	problems *Problems
}

func check(s *Study, root value.Value, problems *Problems) {
	c := &checker{s, root, problems}
	c.about()
	c.screen()
	for i := range s.Displays {
		c.display(&s.Displays[i])
	}
	for i := range s.Tasks {
		c.task(&s.Tasks[i])
	}
	for i := range s.Procedures {
		c.procedure(&s.Procedures[i])
	}
	names := map[string]bool{}
	for i := range s.Blocks {
		c.block(i, &s.Blocks[i])
		if names[s.Blocks[i].Name] {
			c.report(false, "two blocks have the name "+quote(s.Blocks[i].Name), "blocks", i, "name")
		}
		names[s.Blocks[i].Name] = true
	}
	for i := range s.Questions {
		c.question(&s.Questions[i])
	}
}

// report adds a problem at the place that keys lead to: texts are mapping keys, numbers list indices.
func (c *checker) report(warning bool, message string, keys ...any) {
	v, path := c.root, ""
	for _, k := range keys {
		switch k := k.(type) {
		case string:
			if path != "" {
				path += "."
			}
			path += k
			if next, ok := v.Get(k); ok {
				v = next
			}
		case int:
			path += "[" + formatNumber(float64(k+1)) + "]"
			if k < len(v.Items) {
				v = v.Items[k]
			}
		}
	}
	*c.problems = append(*c.problems, Problem{Pos: v.Pos, Path: path, Offending: v.Raw, Message: message, Warning: warning})
}

func (c *checker) about() {
	for _, language := range c.s.About.Languages {
		found := false
		for i := range c.s.Texts {
			found = found || c.s.Texts[i].Language == language
		}
		if !found {
			c.report(false, "there are no texts in language "+quote(language), "about", "languages")
		}
	}
	for i := range c.s.Texts {
		if len(Statements(c.s.Texts[i].Consent)) == 0 {
			c.report(false, "the consent text of language "+quote(c.s.Texts[i].Language)+
				" has no statements: write each as a list item (a line that begins with \"- \")", "texts")
		}
	}
	p := c.s.Participants
	if p.MaxAgeYears > 0 && p.MaxAgeYears < p.MinAgeYears {
		c.report(false, "max_age_years is below min_age_years", "participants", "max_age_years")
	}
}

// Statements are the list items of a consent text: what participants tick.
func Statements(markdown string) []string {
	var items []string
	start := 0
	for i := 0; i <= len(markdown); i++ {
		if i < len(markdown) && markdown[i] != '\n' {
			continue
		}
		line := markdown[start:i]
		start = i + 1
		if len(line) > 2 && (line[0] == '-' || line[0] == '*') && line[1] == ' ' {
			items = append(items, line[2:])
		}
	}
	return items
}

func (c *checker) screen() {
	s := c.s.Screen
	if s.MaxRefreshHz > 0 && s.MaxRefreshHz < s.MinRefreshHz {
		c.report(false, "max_refresh_hz is below min_refresh_hz", "screen", "max_refresh_hz")
	}
	if s.MinDistanceMm >= s.MaxDistanceMm {
		c.report(false, "min_distance_mm must be below max_distance_mm", "screen", "min_distance_mm")
	}
	if s.Distance == StatedDistance && (s.StatedDistanceMm < s.MinDistanceMm || s.StatedDistanceMm > s.MaxDistanceMm) {
		c.report(false, "the stated distance is outside min_distance_mm to max_distance_mm", "screen", "stated_distance_mm")
	}
}

func (c *checker) display(d *DisplaySpec) {
	if d.Kind.Check != nil {
		d.Kind.Check(d.Values, func(key, message string) { c.report(false, message, "displays", d.Name, key) })
	}
	if d.Kind.Extent == nil {
		return
	}
	width, height := d.Kind.Extent(d.Values)
	if w := width + float64(2*math.Abs(d.XDeg)); w > c.s.Screen.MinWidthDeg+1e-9 {
		c.report(false, "display "+d.Name+" is "+formatNumber(w)+" deg wide about fixation, but the screen only has to manage "+
			formatNumber(c.s.Screen.MinWidthDeg)+": raise screen.min_width_deg", "displays", d.Name)
	}
	if h := height + float64(2*math.Abs(d.YDeg)); h > c.s.Screen.MinHeightDeg+1e-9 {
		c.report(false, "display "+d.Name+" is "+formatNumber(h)+" deg high about fixation, but the screen only has to manage "+
			formatNumber(c.s.Screen.MinHeightDeg)+": raise screen.min_height_deg", "displays", d.Name)
	}
}

func (c *checker) task(t *Task) {
	if 2*t.RampMs > t.StimulusMs {
		c.report(false, "the ramps at onset and offset are longer than the stimulus: at most half of stimulus_ms is possible", "tasks", t.Name, "ramp_ms")
	}
	if t.ResponseWindowMs > 0 && t.ResponseWindowMs < t.StimulusMs && !t.RespondDuring {
		c.report(false, "the response window ends before the stimulus does, so nobody can answer: make it longer than stimulus_ms or set respond_during", "tasks", t.Name, "response_window_ms")
	}
	if len(t.Choices) < 2 {
		c.report(false, "at least two choices are needed", "tasks", t.Name, "choices")
	}
	keys := map[string]string{"Escape": "stopping a display"}
	for i := range t.Choices {
		ch := &t.Choices[i]
		for _, k := range ch.Keys {
			if other, taken := keys[k]; taken {
				c.report(false, "the key "+k+" is already used for "+other, "tasks", t.Name, "choices", ch.Name, "keys")
			}
			keys[k] = ch.Name
		}
		c.sentences(ch.Label, "tasks", t.Name, "choices", ch.Name, "label")
	}
}

func (c *checker) sentences(list []LocalText, keys ...any) {
	for _, language := range c.s.About.Languages {
		if Localised(list, language) == "" {
			c.report(false, "there is no text in language "+quote(language), keys...)
		}
	}
}

// Localised is the text in the language, "" if there is none.
func Localised(list []LocalText, language string) string {
	for i := range list {
		if list[i].Language == language {
			return list[i].Text
		}
	}
	return ""
}

func (c *checker) procedure(p *ProcedureSpec) {
	for _, problem := range procedure.Check(p.Spec) {
		c.report(false, problem.Message, "procedures", p.Name, problem.Key)
	}
}

func (c *checker) block(i int, b *Block) {
	d := c.s.displayOf(b.Task)
	if d == nil {
		return
	}
	task := &c.s.Tasks[b.Task]
	if b.Procedure >= 0 {
		c.blockProcedure(i, b, d, task)
	} else if b.Trials == 0 && b.Practice.MaxTrials == 0 {
		c.report(false, "give procedure, trials, or (in practice) criterion.max_trials: nothing says how many trials there are", "blocks", i)
	}
	if b.Practice.Correct > b.Practice.Window {
		c.report(false, "more right answers are asked for than the window has trials", "blocks", i, "criterion", "correct")
	}
	if b.Practice.Window > b.Practice.MaxTrials && b.Practice.MaxTrials > 0 {
		c.report(false, "the window is longer than max_trials, so the criterion can never be met", "blocks", i, "criterion", "window")
	}
	if b.Catch.Every == 1 {
		c.report(false, "every: 1 would make all trials catch trials: 2 or more, or 0 for none", "blocks", i, "catch", "every")
	}
	if b.Catch.Every > 0 && len(b.Catch.Set) == 0 {
		c.report(false, "catch trials need values that make them easy, e.g. set: {coherence: 1}", "blocks", i, "catch")
	}
	c.reachable(i, b, d, task)
}

func (c *checker) blockProcedure(i int, b *Block, d *DisplaySpec, task *Task) {
	p := &c.s.Procedures[b.Procedure]
	j := d.Kind.Index(p.Parameter)
	if j < 0 {
		c.report(false, "procedure "+p.Name+" varies "+quote(p.Parameter)+", which display "+d.Name+" does not have", "blocks", i, "procedure")
		return
	}
	param := &d.Kind.Params[j]
	if param.Type == display.Choice || param.Type == display.Boolean {
		c.report(false, "procedure "+p.Name+" varies "+p.Parameter+", which is not a number", "blocks", i, "procedure")
		return
	}
	if p.Min < param.Min || p.Max > param.Max {
		c.report(false, "procedure "+p.Name+" goes from "+formatNumber(p.Min)+" to "+formatNumber(p.Max)+", but "+
			p.Parameter+" of display "+d.Name+" can only be "+rangeText(param.Min, param.Max), "blocks", i, "procedure")
	}
	if n := len(task.Choices); p.Method == procedure.QuestPlus && n > 0 && math.Abs(p.Guess-1/float64(n)) > 1e-3 {
		c.report(true, "guess is "+formatNumber(p.Guess)+", but the task has "+formatNumber(float64(n))+
			" choices: guessing is right in "+formatNumber(1/float64(n)), "procedures", p.Name, "guess")
	}
}

// reachable checks that every combination of balanced values has exactly one right answer.
func (c *checker) reachable(i int, b *Block, d *DisplaySpec, task *Task) {
	values := d.Values.Clone()
	apply := func(list []Setting) {
		for _, s := range list {
			values[d.Kind.Index(s.Key)] = []float64{s.Value}
		}
	}
	apply(b.Fixed)
	conditions := b.Conditions
	if len(conditions) == 0 {
		conditions = []Condition{{}}
	}
	for _, condition := range conditions {
		apply(condition.Set)
		for n := range Crossings(b.Balance) {
			apply(Crossing(b.Balance, n))
			right, meant := 0, false
			for j := range task.Choices {
				meant = meant || len(task.Choices[j].Correct) > 0
				if matches(task.Choices[j].Correct, d, values) {
					right++
				}
			}
			if meant && right != 1 {
				what := "no choice is the right one"
				if right > 1 {
					what = "more than one choice is right"
				}
				c.report(false, "for "+describe(Crossing(b.Balance, n), d)+what+": look at right_when of task "+task.Name, "blocks", i)
				return
			}
		}
	}
}

func describe(list []Setting, d *DisplaySpec) string {
	s := ""
	for _, setting := range list {
		p := &d.Kind.Params[d.Kind.Index(setting.Key)]
		text := formatNumber(setting.Value)
		if p.Type == display.Choice {
			text = p.Options[int(setting.Value)]
		}
		s += setting.Key + " = " + text + " "
	}
	return s
}

// matches tells whether all settings equal the values; no settings match nothing.
func matches(list []Setting, d *DisplaySpec, values display.Values) bool {
	for _, s := range list {
		if i := d.Kind.Index(s.Key); i < 0 || values.Num(i) != s.Value {
			return false
		}
	}
	return len(list) > 0
}

// RightChoice is the index of the right choice for the values, −1 if none is.
func (t *Task) RightChoice(d *DisplaySpec, values display.Values) int {
	for i := range t.Choices {
		if matches(t.Choices[i].Correct, d, values) {
			return i
		}
	}
	return -1
}

// Crossings is the number of combinations of balanced values, at least 1.
func Crossings(list []Balanced) int {
	n := 1
	for i := range list {
		n *= len(list[i].Values)
	}
	return n
}

// Crossing is combination n of balanced values, the first parameter varying fastest.
func Crossing(list []Balanced, n int) []Setting {
	settings := make([]Setting, len(list))
	for i := range list {
		k := len(list[i].Values)
		settings[i] = Setting{Key: list[i].Key, Value: list[i].Values[n%k]}
		n /= k
	}
	return settings
}

func (c *checker) question(q *Question) {
	switch q.Type {
	case ChoiceQuestion:
		if len(q.Options) < 2 {
			c.report(false, "a choice needs at least two options", "questions", q.Name)
		}
	case NumberQuestion, ScaleQuestion:
		if q.Min >= q.Max {
			c.report(false, "min must be below max", "questions", q.Name)
		}
		if q.Type == ScaleQuestion && (q.Max-q.Min > 100 || q.Min != math.Floor(q.Min) || q.Max != math.Floor(q.Max)) {
			c.report(false, "a scale goes from one whole number to another, in at most 100 steps", "questions", q.Name)
		}
	}
	c.sentences(q.Ask, "questions", q.Name, "ask")
}
