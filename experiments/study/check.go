package study

import (
	"math"
	"strconv"
	"strings"

	"distal/experiments/display"
	"distal/experiments/procedure"
	"distal/experiments/value"
)

// checker finds contradictions between values that are each in range.
type checker struct {
	s        *Study
	root     value.Value
	reading  Problems // found while reading: what they are about is not checked further
	problems *Problems
}

func check(s *Study, root value.Value, problems *Problems) {
	c := &checker{s, root, *problems, problems}
	c.about()
	c.screen()
	c.displays()
	c.tasks()
	c.procedures()
	c.blocks()
	c.groups()
	c.orders()
	for i := range s.Questions {
		c.question(&s.Questions[i])
	}
}

// broken tells whether reading the thing at path, a part of it or what it is
// part of found a problem.
func (c *checker) broken(path string) bool {
	for i := range c.reading {
		if p := c.reading[i].Path; p != "" && (within(p, path) || within(path, p)) {
			return true
		}
	}
	return false
}

// within tells whether path is outer or a part of it.
func within(path, outer string) bool {
	rest, ok := strings.CutPrefix(path, outer)
	return ok && (rest == "" || rest[0] == '.' || rest[0] == '[')
}

// fail reports a contradiction at the place that keys lead to: texts are
// mapping keys, numbers list indices.
func (c *checker) fail(message string, keys ...any) { c.report(false, message, keys) }

// warn reports something worth a second look.
func (c *checker) warn(message string, keys ...any) { c.report(true, message, keys) }

func (c *checker) report(warning bool, message string, keys []any) {
	p := Problem{Message: message, Warning: warning}
	v := c.root
	for _, k := range keys {
		switch k := k.(type) {
		case string:
			if p.Path != "" {
				p.Path += "."
			}
			p.Path += k
			for _, m := range v.Members {
				if m.Key != k {
					continue
				}
				v = m.Value
				p.Pos, p.Offending = v.Pos, v.Raw
				if v.Kind >= value.Sequence {
					p.Pos, p.Offending = m.KeyPos, m.Key
				}
				break
			}
		case int:
			p.Path += "[" + strconv.Itoa(k+1) + "]"
			if k < len(v.Items) {
				v = v.Items[k]
				p.Pos, p.Offending = v.Pos, v.Raw
			}
		}
	}
	if p.Pos.Line == 0 {
		p.Pos = c.root.Pos
	}
	*c.problems = append(*c.problems, p)
}

func (c *checker) about() {
	c.sentences(c.s.About.TitleIn, "about", "title_in")
	for i, language := range c.s.About.Languages {
		if contains(c.s.About.Languages[:i], language) {
			c.fail("language "+quote(language)+" stands twice", "about", "languages", i)
		}
		found := false
		for j := range c.s.Texts {
			found = found || c.s.Texts[j].Language == language
		}
		if !found && !c.broken("texts") && c.has("texts") {
			c.fail("there are no texts in language "+quote(language), "about", "languages", i)
		}
	}
	for i := range c.s.Texts {
		language := c.s.Texts[i].Language
		if !c.broken("texts."+language) && len(Statements(c.s.Texts[i].Consent)) == 0 {
			c.fail("the consent text of language "+quote(language)+
				" has no statements: write each as a list item (a line that begins with \"- \")", "texts")
		}
	}
	p := c.s.Participants
	if p.MaxAgeYears > 0 && p.MaxAgeYears < p.MinAgeYears && !c.broken("participants") {
		c.fail("max_age_years is below min_age_years", "participants", "max_age_years")
	}
	for i := range p.Screening {
		c.sentences(p.Screening[i].Ask, "participants", "screening", p.Screening[i].Name, "ask")
	}
}

func (c *checker) has(key string) bool {
	_, ok := c.root.Get(key)
	return ok
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
	if c.broken("screen") {
		return
	}
	s := c.s.Screen
	if s.MaxRefreshHz > 0 && s.MaxRefreshHz < s.MinRefreshHz {
		c.fail("max_refresh_hz is below min_refresh_hz", "screen", "max_refresh_hz")
	}
	if s.MinDistanceMm >= s.MaxDistanceMm {
		c.fail("min_distance_mm must be below max_distance_mm", "screen", "min_distance_mm")
	}
	if s.Distance == StatedDistance && (s.StatedDistanceMm < s.MinDistanceMm || s.StatedDistanceMm > s.MaxDistanceMm) {
		c.fail("the stated distance is outside min_distance_mm to max_distance_mm", "screen", "stated_distance_mm")
	}
}

func (c *checker) displays() {
	used := make([]bool, len(c.s.Displays))
	for i := range c.s.Tasks {
		if d := c.s.Tasks[i].Display; d >= 0 && d < len(used) {
			used[d] = true
		}
		for _, d := range c.s.Tasks[i].Beside {
			used[d] = true
		}
	}
	for i := range c.s.Displays {
		d := &c.s.Displays[i]
		if c.broken("displays."+d.Name) || d.Kind == nil {
			continue
		}
		c.possible(d, d.Values, func(key, message string) {
			if key == "" {
				c.fail(message, "displays", d.Name)
				return
			}
			c.fail(message, "displays", d.Name, key)
		})
		if !used[i] && !c.broken("tasks") {
			c.warn("no task shows this display", "displays", d.Name)
		}
	}
}

// possible reports what the display cannot show of values, or the screen not
// hold; key is "" where it is about the display as a whole.
func (c *checker) possible(d *DisplaySpec, values display.Values, problem func(key, message string)) {
	if d.Kind.Check != nil {
		d.Kind.Check(values, problem)
	}
	if d.Kind.Extent == nil || c.broken("screen") {
		return
	}
	width, height := d.Kind.Extent(values)
	if w := width + float64(2*math.Abs(d.XDeg)); w > c.s.Screen.MinWidthDeg+1e-9 {
		problem("", "display "+d.Name+" is "+formatNumber(w)+" deg wide about fixation, but the screen only has to manage "+
			formatNumber(c.s.Screen.MinWidthDeg)+": raise screen.min_width_deg")
	}
	if h := height + float64(2*math.Abs(d.YDeg)); h > c.s.Screen.MinHeightDeg+1e-9 {
		problem("", "display "+d.Name+" is "+formatNumber(h)+" deg high about fixation, but the screen only has to manage "+
			formatNumber(c.s.Screen.MinHeightDeg)+": raise screen.min_height_deg")
	}
}

func (c *checker) tasks() {
	used := make([]bool, len(c.s.Tasks))
	for i := range c.s.Blocks {
		if t := c.s.Blocks[i].Task; t >= 0 && t < len(used) {
			used[t] = true
		}
	}
	for i := range c.s.Tasks {
		t := &c.s.Tasks[i]
		if !c.broken("tasks." + t.Name) {
			c.task(t)
		}
		if !used[i] && !c.broken("blocks") {
			c.warn("no block uses this task", "tasks", t.Name)
		}
	}
}

func (c *checker) task(t *Task) {
	if 2*t.RampMs > t.StimulusMs {
		c.fail("the ramps at onset and offset are longer than the stimulus: at most half of stimulus_ms is possible", "tasks", t.Name, "ramp_ms")
	}
	if t.ResponseWindowMs > 0 && t.ResponseWindowMs < t.StimulusMs && !t.RespondDuring {
		c.fail("the response window ends before the stimulus does, so nobody can answer: make it longer than stimulus_ms or set respond_during", "tasks", t.Name, "response_window_ms")
	}
	c.answering(t)
	taken := map[string]string{"Escape": "stopping a display"}
	for i := range t.Choices {
		ch := &t.Choices[i]
		for j, k := range ch.Keys {
			if bad := checkKey(k); bad != "" {
				c.fail(bad, "tasks", t.Name, "choices", ch.Name, "keys", j)
			} else if other, ok := taken[k]; ok {
				c.fail("the key "+k+" is already used for "+other, "tasks", t.Name, "choices", ch.Name, "keys", j)
			}
			taken[k] = ch.Name
		}
		c.sentences(ch.Label, "tasks", t.Name, "choices", ch.Name, "label")
	}
	c.sentences(t.Prompt, "tasks", t.Name, "prompt")
}

// sentences checks that a sentence that is given is there in every language.
func (c *checker) sentences(list []LocalText, keys ...any) {
	if len(list) == 0 || len(c.s.About.Languages) == 0 || c.broken("about.languages") {
		return
	}
	for _, language := range c.s.About.Languages {
		if Localised(list, language) == "" {
			c.fail("there is no text in language "+quote(language), keys...)
		}
	}
	for i := range list {
		if language := list[i].Language; !contains(c.s.About.Languages, language) {
			c.fail("language "+quote(language)+" is not among about.languages", append(keys, language)...)
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

func (c *checker) procedures() {
	used := make([]bool, len(c.s.Procedures))
	for i := range c.s.Blocks {
		if p := c.s.Blocks[i].Procedure; p >= 0 && p < len(used) {
			used[p] = true
		}
	}
	for i := range c.s.Procedures {
		p := &c.s.Procedures[i]
		if !c.broken("procedures." + p.Name) {
			for _, problem := range procedure.Check(p.Spec) {
				c.fail(problem.Message, "procedures", p.Name, problem.Key)
			}
		}
		if !used[i] && !c.broken("blocks") {
			c.warn("no block uses this procedure", "procedures", p.Name)
		}
	}
}

func (c *checker) groups() {
	for i := range c.s.Groups {
		g := &c.s.Groups[i]
		for j := range i {
			if c.s.Groups[j].Name == g.Name {
				c.fail("two groups have the name "+quote(g.Name), "groups", i, "name")
				break
			}
		}
		if c.broken("groups") {
			continue
		}
		for k := range c.s.Displays {
			c.groupDisplay(i, g, k)
		}
	}
}

// groupDisplay checks display k as group i sees it.
func (c *checker) groupDisplay(i int, g *Group, k int) {
	d := &c.s.Displays[k]
	if d.Kind == nil || c.broken("displays."+d.Name) {
		return
	}
	values, changed := d.Values.Clone(), false
	for j, set := range g.Set {
		if set.Display != k {
			continue
		}
		values[d.Kind.Index(set.Key)][0] = set.Value
		changed = true
		for n := range c.s.Blocks {
			b := &c.s.Blocks[n]
			if b.Procedure >= 0 && c.s.displayOf(b.Task) == d && c.s.Procedures[b.Procedure].Parameter == set.Key {
				c.fail("procedure "+c.s.Procedures[b.Procedure].Name+" chooses "+set.Key+" in block "+b.Name+
					", so the group's value would not be used", "groups", i, "set", j, "values", set.Key)
			}
		}
	}
	if changed && c.shows(d) {
		c.possible(d, values, func(_, message string) { c.fail("for group "+g.Name+": "+message, "groups", i, "set") })
	}
}

func (c *checker) orders() {
	measurements := 0
	for i := range c.s.Blocks {
		if c.s.Blocks[i].Kind == Measurement {
			measurements++
		}
	}
	if c.s.Orders.Method != AsWritten && measurements == 1 && !c.broken("blocks") {
		c.warn("there is one measurement block, so there is nothing to order", "orders", "method")
	}
}

func (c *checker) question(q *Question) {
	if c.broken("questions." + q.Name) {
		return
	}
	switch q.Type {
	case ChoiceQuestion:
		if len(q.Options) < 2 {
			c.fail("a choice needs at least two options", "questions", q.Name)
		}
	case NumberQuestion, ScaleQuestion:
		if q.Min >= q.Max {
			c.fail("min must be below max", "questions", q.Name, "min")
		} else if q.Type == ScaleQuestion && (q.Max-q.Min > 100 || q.Min != math.Floor(q.Min) || q.Max != math.Floor(q.Max)) {
			c.fail("a scale goes from one whole number to another, in at most 100 steps", "questions", q.Name, "max")
		}
	}
	c.sentences(q.Ask, "questions", q.Name, "ask")
	for i := range q.Options {
		c.sentences(q.Options[i].Label, "questions", q.Name, "options", q.Options[i].Name, "label")
	}
	c.sentences(q.LowEnd, "questions", q.Name, "low_end")
	c.sentences(q.HighEnd, "questions", q.Name, "high_end")
}
