package study

import (
	"distal/experiments/display"
	"distal/experiments/procedure"
)

// answering checks what a task has besides one display and choices.
func (c *checker) answering(t *Task) {
	for i, b := range t.Beside {
		if b == t.Display {
			c.fail("display "+c.s.Displays[b].Name+" is the task's own: declare a second display for the place beside it", "tasks", t.Name, "beside", i)
		}
		for _, other := range t.Beside[:i] {
			if other == b {
				c.fail("display "+c.s.Displays[b].Name+" stands twice", "tasks", t.Name, "beside", i)
			}
		}
	}
	c.places(t)
	c.intervals(t)
	c.meanings(t)
	c.answer(t)
	switch {
	case t.Confidence.Steps == 1:
		c.fail("a scale has 2 to 6 steps, or 0 where it is not shown", "tasks", t.Name, "confidence", "steps")
	case t.Confidence.Steps > 0 && len(t.Confidence.Ask) == 0:
		c.fail("give the question that is asked, e.g. ask: How sure are you?", "tasks", t.Name, "confidence")
	}
	c.sentences(t.Confidence.Ask, "tasks", t.Name, "confidence", "ask")
	c.sentences(t.Confidence.LowEnd, "tasks", t.Name, "confidence", "low_end")
	c.sentences(t.Confidence.HighEnd, "tasks", t.Name, "confidence", "high_end")
}

// places checks that each place that the task's display can have is said by one choice.
func (c *checker) places(t *Task) {
	if t.ShufflePlaces && len(t.Beside) == 0 {
		c.fail("one display alone has no place to change with: name others in beside", "tasks", t.Name, "shuffle_places")
	}
	said := map[string]int{}
	for i := range t.Choices {
		ch := &t.Choices[i]
		if ch.At == "" {
			continue
		}
		said[ch.At]++
		known := false
		for _, d := range append([]int{t.Display}, t.Beside...) {
			known = known || d >= 0 && d < len(c.s.Displays) && c.s.Displays[d].Name == ch.At
		}
		switch {
		case !t.ShufflePlaces:
			c.fail("displays keep their places unless the task says shuffle_places: true", "tasks", t.Name, "choices", ch.Name, "at")
		case !known || said[ch.At] > 1:
			c.fail("each display of the task is named by one choice, and "+quote(ch.At)+" is not", "tasks", t.Name, "choices", ch.Name, "at")
		case len(ch.Correct) > 0 || ch.Means != NoMeaning:
			c.fail("the place decides what is right: leave right_when and means out", "tasks", t.Name, "choices", ch.Name)
		}
	}
	if len(said) > 0 && len(said) != len(t.Beside)+1 {
		c.fail("each place needs a choice that names its display in at", "tasks", t.Name, "choices")
	}
}

func (c *checker) intervals(t *Task) {
	i := &t.Intervals
	if i.Design == OneInterval {
		return
	}
	if len(i.Reference) == 0 {
		c.fail("give what the reference differs in, e.g. reference: {coherence: 0}: otherwise both intervals are the same", "tasks", t.Name, "intervals")
	}
	total := float64(2*t.StimulusMs) + i.GapMs
	switch {
	case t.RespondDuring:
		c.fail("with two intervals an answer counts after the second: leave respond_during out", "tasks", t.Name, "respond_during")
	case t.ResponseWindowMs > 0 && t.ResponseWindowMs < total:
		c.fail("the response window ends before the second interval does, after "+formatNumber(total)+" ms", "tasks", t.Name, "response_window_ms")
	}
	d := c.displayOfTask(t)
	if d == nil || i.Compare == "" {
		return
	}
	if j := d.Kind.Index(i.Compare); j < 0 || d.Kind.Params[j].Type != display.Number && d.Kind.Params[j].Type != display.Integer {
		c.fail("display "+d.Name+" has no number called "+quote(i.Compare), "tasks", t.Name, "intervals", "compare")
	}
}

// displayOfTask is the display of a task, nil while it is not known.
func (c *checker) displayOfTask(t *Task) *DisplaySpec {
	if t.Display < 0 || t.Display >= len(c.s.Displays) || c.s.Displays[t.Display].Kind == nil {
		return nil
	}
	return &c.s.Displays[t.Display]
}

// meanings checks that each thing that can be right about the intervals is said by one choice.
func (c *checker) meanings(t *Task) {
	var needed []Meaning
	switch {
	case t.Intervals.Design == TwoInterval:
		needed = []Meaning{First, Second}
	case t.Intervals.Design == SameDifferent:
		needed = []Meaning{Same, Different}
	case t.Intervals.Design == Reminder && t.Intervals.Compare != "":
		needed = []Meaning{More, Less}
	}
	count := make([]int, len(MeaningNames))
	for i := range t.Choices {
		ch := &t.Choices[i]
		count[ch.Means]++
		fits := ch.Means == NoMeaning
		for _, m := range needed {
			fits = fits || m == ch.Means
		}
		if !fits {
			c.fail("means: "+MeaningNames[ch.Means]+" does not fit the task's intervals", "tasks", t.Name, "choices", ch.Name, "means")
		}
		if len(needed) > 0 && len(ch.Correct) > 0 {
			c.fail("the intervals decide what is right: leave right_when out", "tasks", t.Name, "choices", ch.Name, "right_when")
		}
	}
	for _, m := range needed {
		if count[m] != 1 {
			c.fail("exactly one choice must say means: "+MeaningNames[m], "tasks", t.Name, "choices")
		}
	}
}

func (c *checker) answer(t *Task) {
	a := &t.Answer
	if a.By == ByChoice {
		if len(t.Choices) < 2 {
			c.fail("at least two choices are needed", "tasks", t.Name, "choices")
		}
		return
	}
	if len(t.Choices) > 0 {
		c.fail("there is nothing to choose where the answer is given by "+AnswerNames[a.By]+": leave choices out", "tasks", t.Name, "choices")
	}
	if a.By != ByDial && t.Intervals.Design != OneInterval {
		c.fail("an answer by "+AnswerNames[a.By]+" is given while the display is shown: leave intervals out", "tasks", t.Name, "intervals")
	}
	for j, k := range a.Keys {
		if bad := checkKey(k); bad != "" || k == "Escape" {
			c.fail(k+" cannot be held: "+bad, "tasks", t.Name, "answer", "keys", j)
		}
	}
	if d := c.displayOfTask(t); d != nil && a.By != ByHolding {
		c.answerParameter(t, d)
	}
}

func (c *checker) answerParameter(t *Task, d *DisplaySpec) {
	a := &t.Answer
	j := d.Kind.Index(a.Parameter)
	switch {
	case !(a.Fine > 0 && a.Coarse >= a.Fine):
		c.fail("steps must be above 0, and coarse ones not smaller than fine ones", "tasks", t.Name, "answer", "coarse")
	case a.By == ByDial && (a.Parameter == "" || j >= 0 && d.Kind.Params[j].Circular):
	case a.By == ByDial:
		c.fail("display "+d.Name+" has no direction called "+quote(a.Parameter), "tasks", t.Name, "answer", "parameter")
	case j < 0 || d.Kind.Params[j].Type != display.Number || d.Kind.Params[j].MaxCount > 1:
		c.fail("display "+d.Name+" has no single number "+quote(a.Parameter)+" that could be adjusted", "tasks", t.Name, "answer", "parameter")
	case !(a.Min < a.Max) || a.Min < d.Kind.Params[j].Min || a.Max > d.Kind.Params[j].Max:
		c.fail("give min and max of the setting: "+a.Parameter+" can be "+rangeText(d.Kind.Params[j].Min, d.Kind.Params[j].Max), "tasks", t.Name, "answer", "min")
	case a.Scale == LogScale && !(a.Min > 0):
		c.fail("on a log10 scale the lowest setting must be above 0", "tasks", t.Name, "answer", "min")
	}
}

// judged checks that a block's procedure gets from the task what it decides by.
func (c *checker) judged(i int, b *Block, t *Task) {
	var method procedure.Method = -1
	name := ""
	if b.Procedure >= 0 {
		p := &c.s.Procedures[b.Procedure]
		method, name = p.Method, p.Name
		if method == procedure.Adjustment && (t.Answer.By != ByAdjustment || t.Answer.Parameter != p.Parameter) {
			c.fail("procedure "+name+" begins adjustments of "+p.Parameter+": the task needs answer: {by: adjustment, parameter: "+p.Parameter+", …}", "blocks", i, "procedure")
		}
	}
	if t.Answer.By == ByChoice {
		return
	}
	if b.Practice.Correct > 0 {
		c.fail("no answer by "+AnswerNames[t.Answer.By]+" is right or wrong, so the criterion can never be met: give trials instead", "blocks", i, "criterion")
	}
	if method >= 0 && method != procedure.Constant && method != procedure.Adjustment {
		c.fail("procedure "+name+" needs right and wrong answers, and an answer by "+AnswerNames[t.Answer.By]+" is neither", "blocks", i, "procedure")
	}
}
