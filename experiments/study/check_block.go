package study

import (
	"math"
	"strings"

	"distal/experiments/display"
)

// Limits of a block, so that every combination can be checked and each track
// has a random stream of its own.
const (
	maxCombinations = 10_000
	maxTracks       = 200
)

func (c *checker) blocks() {
	if c.has("blocks") && len(c.s.Blocks) == 0 && !c.broken("blocks") {
		c.fail("at least one block is needed", "blocks")
		return
	}
	measures := false
	for i := range c.s.Blocks {
		b := &c.s.Blocks[i]
		measures = measures || b.Kind == Measurement
		for j := range i {
			if c.s.Blocks[j].Name == b.Name && b.Name != "" {
				c.fail("two blocks have the name "+quote(b.Name), "blocks", i, "name")
				break
			}
		}
		if !c.broken("blocks[" + formatNumber(float64(i+1)) + "]") {
			c.block(i, b)
		}
	}
	if !measures && len(c.s.Blocks) > 0 && !c.broken("blocks") {
		c.warn("no block is of kind measurement: all of them are practice", "blocks")
	}
}

func (c *checker) block(i int, b *Block) {
	c.sentences(b.Message, "blocks", i, "message")
	c.criterion(i, b)
	if b.Catch.Every == 1 {
		c.fail("every: 1 would make all trials catch trials: 2 or more, or 0 for none", "blocks", i, "catch", "every")
	}
	for j := range b.Conditions {
		for k := range j {
			if b.Conditions[k].Name == b.Conditions[j].Name {
				c.fail("two conditions have the name "+quote(b.Conditions[j].Name), "blocks", i, "conditions", j, "name")
				break
			}
		}
	}
	c.trialCount(i, b)
	d := c.s.displayOf(b.Task)
	if d == nil || d.Kind == nil {
		return
	}
	if b.Catch.Every > 0 && len(b.Catch.Set) == 0 {
		c.fail("catch trials need values that make them easy, e.g. set: {coherence: 1}", "blocks", i, "catch")
	}
	task := &c.s.Tasks[b.Task]
	if b.Procedure >= 0 && !c.broken("procedures."+c.s.Procedures[b.Procedure].Name) {
		c.blockProcedure(b, d, task)
	}
	c.decidedOnce(i, b)
	c.judged(i, b, task)
	if !c.broken("tasks."+task.Name) && !c.broken("displays."+d.Name) {
		c.combinations(i, b, d, task)
	}
}

func (c *checker) criterion(i int, b *Block) {
	p := b.Practice
	switch {
	case p.Correct > p.Window:
		c.fail("more right answers are asked for than the window has trials", "blocks", i, "criterion", "correct")
	case p.Window > p.MaxTrials && p.MaxTrials > 0:
		c.fail("the window is longer than max_trials, so the criterion can never be met", "blocks", i, "criterion", "window")
	case p.Otherwise == EndRun && p.Correct == 0:
		c.fail("without a number of right answers (correct) the criterion is never met, and every run would end here", "blocks", i, "criterion", "otherwise")
	case p.Correct > 0 && p.MaxTrials == 0:
		c.fail("give max_trials: practice must end even if the criterion is not met", "blocks", i, "criterion")
	case p.MaxTrials > 0 && b.Kind != Practice:
		c.fail("a criterion belongs to practice: write kind: practice, or leave it out", "blocks", i, "criterion")
	}
}

// trialCount checks that one thing says how many trials there are.
func (c *checker) trialCount(i int, b *Block) {
	limited := b.Practice.MaxTrials > 0
	switch {
	case b.Procedure < 0 && b.Trials == 0 && !limited:
		c.fail("give procedure, trials, or (in practice) criterion.max_trials: nothing says how many trials there are", "blocks", i)
	case b.Procedure >= 0 && b.Trials > 0:
		c.fail("procedure "+c.s.Procedures[b.Procedure].Name+" ends the block: leave trials out", "blocks", i, "trials")
	case b.Trials > 0 && limited:
		c.fail("criterion.max_trials ends the block: leave trials out", "blocks", i, "trials")
	}
	if b.Procedure < 0 && len(b.Conditions) > 0 {
		c.fail("conditions are tracks of a procedure, and this block has none: use balance for values that alternate", "blocks", i, "conditions")
	}
	if b.Procedure >= 0 {
		if n := max(1, len(b.Conditions)) * c.s.Procedures[b.Procedure].Interleave; n > maxTracks {
			c.fail(formatNumber(float64(n))+" tracks (conditions × interleave) are too many: at most "+formatNumber(maxTracks), "blocks", i, "procedure")
		}
	}
}

func (c *checker) blockProcedure(b *Block, d *DisplaySpec, task *Task) {
	p := &c.s.Procedures[b.Procedure]
	j := d.Kind.Index(p.Parameter)
	if j < 0 {
		message := "display " + d.Name + " of block " + b.Name + " has no parameter " + quote(p.Parameter)
		if near := nearest(p.Parameter, d.parameterNames()); near != "" {
			message += ": did you mean " + near + "?"
		}
		c.fail(message, "procedures", p.Name, "parameter")
		return
	}
	param := &d.Kind.Params[j]
	if param.Type == display.Choice || param.Type == display.Boolean {
		c.fail(p.Parameter+" is not a number, so a procedure cannot vary it", "procedures", p.Name, "parameter")
		return
	}
	c.levelsShown(d, param, p.Name, "min", p.Min)
	c.levelsShown(d, param, p.Name, "max", p.Max)
	c.secondParameter(d, p)
	if n := len(task.Choices); p.Method.Bayesian() && n > 1 && math.Abs(p.Guess-1/float64(n)) > 1e-3 {
		c.warn("guess is "+formatNumber(p.Guess)+", but the task has "+formatNumber(float64(n))+
			" choices: guessing is right in "+formatNumber(1/float64(n)), "procedures", p.Name, "guess")
	}
}

// levelsShown checks that the display can show level x of a procedure.
func (c *checker) levelsShown(d *DisplaySpec, param *display.Param, name, key string, x float64) {
	if x < param.Min || x > param.Max {
		c.fail(param.Key+" of display "+d.Name+" can only be "+rangeText(param.Min, param.Max), "procedures", name, key)
	}
}

func (c *checker) secondParameter(d *DisplaySpec, p *ProcedureSpec) {
	if p.Second == "" {
		return
	}
	j := d.Kind.Index(p.Second)
	if j < 0 || d.Kind.Params[j].Type == display.Choice || d.Kind.Params[j].Type == display.Boolean {
		c.fail("display "+d.Name+" has no number "+quote(p.Second), "procedures", p.Name, "second_parameter")
		return
	}
	for _, x := range p.SecondLevels {
		c.levelsShown(d, &d.Kind.Params[j], p.Name, "second_levels", x)
	}
}

func (d *DisplaySpec) parameterNames() []string {
	return namesOf(d.Kind.Params, func(p *display.Param) string { return p.Key })
}

// decidedOnce checks that balance, the procedure and fixed values each decide
// about parameters of their own.
func (c *checker) decidedOnce(i int, b *Block) {
	owner := map[string]string{}
	if b.Procedure >= 0 {
		p := &c.s.Procedures[b.Procedure]
		owner[p.Parameter] = "procedure " + p.Name + " chooses it"
		if p.Second != "" {
			owner[p.Second] = owner[p.Parameter]
		}
	}
	claim := func(list []Setting, keys ...any) {
		for _, s := range list {
			if who, taken := owner[s.Key]; taken {
				c.fail(s.Key+" cannot be set here: "+who, append(append([]any{"blocks", i}, keys...), s.Key)...)
			}
		}
	}
	for _, balanced := range b.Balance {
		claim([]Setting{{Key: balanced.Key}}, "balance")
		owner[balanced.Key] = "balance gives it its values in turn"
	}
	claim(b.Fixed, "set")
	for j := range b.Conditions {
		claim(b.Conditions[j].Set, "conditions", j, "set")
	}
}

// combinations checks every combination of values that a trial can have: the
// display must be able to show it, and if the task has right answers, exactly
// one choice must be right. The first problem is enough.
func (c *checker) combinations(i int, b *Block, d *DisplaySpec, task *Task) {
	conditions := b.Conditions
	if len(conditions) == 0 {
		conditions = []Condition{{}}
	}
	n := len(conditions)
	for _, balanced := range b.Balance {
		if n *= len(balanced.Values); n > maxCombinations {
			c.fail("there are more than "+formatNumber(maxCombinations)+" combinations of balanced values and conditions", "blocks", i, "balance")
			return
		}
	}
	levels := c.levels(b, d)
	for _, condition := range conditions {
		for n := range Crossings(b.Balance) {
			crossing := Crossing(b.Balance, n)
			for _, level := range levels {
				if !c.trial(i, d, task, condition.Name, crossing, level, b.Fixed, condition.Set, crossing, level) {
					return
				}
			}
		}
	}
	for n := range Crossings(b.Balance) {
		crossing := Crossing(b.Balance, n)
		if b.Catch.Every > 0 && !c.trial(i, d, task, "catch trials", crossing, nil, b.Fixed, crossing, b.Catch.Set) {
			return
		}
	}
}

// levels are the lowest and the highest level of the block's procedure.
func (c *checker) levels(b *Block, d *DisplaySpec) [][]Setting {
	if b.Procedure < 0 {
		return [][]Setting{nil}
	}
	p := &c.s.Procedures[b.Procedure]
	if d.Kind.Index(p.Parameter) < 0 || c.broken("procedures."+p.Name) {
		return [][]Setting{nil}
	}
	var list [][]Setting
	for _, x := range []float64{p.Min, p.Max} {
		if p.Second == "" || d.Kind.Index(p.Second) < 0 {
			list = append(list, []Setting{{Key: p.Parameter, Value: x}})
			continue
		}
		for _, y := range p.SecondLevels {
			list = append(list, []Setting{{Key: p.Parameter, Value: x}, {Key: p.Second, Value: y}})
		}
	}
	return list
}

// trial checks the display with the settings put in one after the other.
func (c *checker) trial(i int, d *DisplaySpec, task *Task, name string, crossing, level []Setting, settings ...[]Setting) bool {
	values := d.Values.Clone()
	for _, list := range settings {
		for _, s := range list {
			values[d.Kind.Index(s.Key)][0] = s.Value
		}
	}
	fine := true
	right, meant := 0, false
	for j := range task.Choices {
		meant = meant || len(task.Choices[j].Correct) > 0
		if matches(task.Choices[j].Correct, d, values) {
			right++
		}
	}
	if meant && right != 1 {
		fine = false
		how := "no choice is the right one"
		if right > 1 {
			how = "more than one choice is right"
		}
		c.fail(describe(name, crossing, d)+how+": look at right_when of task "+task.Name, "blocks", i, "balance")
	}
	if task.Intervals.Design != OneInterval && c.shows(d) {
		reference := values.Clone()
		for _, s := range task.Intervals.Reference {
			reference[d.Kind.Index(s.Key)][0] = s.Value
		}
		c.possible(d, reference, func(_, message string) {
			fine = false
			c.fail(describe(name, crossing, d)+"the reference: "+message, "tasks", task.Name, "intervals", "reference")
		})
	}
	if c.shows(d) {
		c.possible(d, values, func(key, message string) {
			fine = false
			if key != "" {
				message = key + ": " + message
			}
			c.fail(describe(name, append(crossing, level...), d)+message, "blocks", i)
		})
	}
	return fine
}

// shows tells whether the display is possible as it is written, before any
// block changes it: otherwise that was reported.
func (c *checker) shows(d *DisplaySpec) bool {
	for _, p := range *c.problems {
		if !p.Warning && within(p.Path, "displays."+d.Name) {
			return false
		}
	}
	return true
}

// describe begins a sentence about the trials of a condition with some values.
func describe(condition string, list []Setting, d *DisplaySpec) string {
	var parts []string
	if condition != "" {
		parts = append(parts, condition)
	}
	for _, setting := range list {
		p := &d.Kind.Params[d.Kind.Index(setting.Key)]
		text := formatNumber(setting.Value)
		if p.Type == display.Choice {
			text = p.Options[int(setting.Value)]
		}
		parts = append(parts, setting.Key+" = "+text)
	}
	if len(parts) == 0 {
		return ""
	}
	return "for " + strings.Join(parts, ", ") + ": "
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
