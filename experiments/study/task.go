package study

import (
	"distal/experiments/display"
	"distal/experiments/value"
)

// Intervals says how a trial is made of two presentations one after the other.
type Intervals struct {
	Design    Design
	GapMs     float64   // fixation mark alone between the intervals
	Reference []Setting // what differs in the interval without the signal
	Compare   string    // parameter whose higher value decides first or second, more or less; "": the signal decides
}

// Design is how many presentations a trial has and which is which.
type Design int

// Designs, named in study files as in DesignNames. In a same/different trial
// each interval is the reference or the test with equal probability, so that
// the four pairs are equally likely (Macmillan NA, Creelman CD 2005, Detection
// Theory, 2nd ed., chapter 9). A reminder is a reference that always comes first
// (the same, chapter 7).
const (
	OneInterval Design = iota
	TwoInterval
	SameDifferent
	Reminder
)

// DesignNames are the names in study files, indexed by Design.
var DesignNames = []string{"one", "two_interval", "same_different", "reminder"}

// Meaning is what a choice says about the intervals.
type Meaning int

// Meanings, named in study files as in MeaningNames.
const (
	NoMeaning Meaning = iota
	First
	Second
	Same
	Different
	More // the test has the higher value of Intervals.Compare
	Less
)

// MeaningNames are the names in study files, indexed by Meaning.
var MeaningNames = []string{"none", "first", "second", "same", "different", "more", "less"}

// Answer is how a participant answers, where it is not by choice.
type Answer struct {
	By        AnswerKind
	Parameter string // dial: the direction asked for, "" if none is right; adjustment: what is adjusted
	Min, Max  float64
	Scale     Scale
	Coarse    float64 // a key's step: log10 units, or the parameter's unit
	Fine      float64 // with the shift key
	Keys      []string
}

// Scale is the axis of an adjustment.
type Scale int

// Scales, named in study files as in ScaleNames.
const (
	LinearScale Scale = iota
	LogScale
)

// ScaleNames are the names in study files, indexed by Scale.
var ScaleNames = []string{"linear", "log10"}

// AnswerKind is a way to answer.
type AnswerKind int

// Ways to answer, named in study files as in AnswerNames.
const (
	ByChoice     AnswerKind = iota
	ByDial                  // points in a direction
	ByAdjustment            // changes the display while it is shown
	ByHolding               // holds a key as long as something is seen
)

// AnswerNames are the names in study files, indexed by AnswerKind.
var AnswerNames = []string{"choice", "dial", "adjustment", "hold"}

// Said is what stands as the response of an answer that is no choice.
var Said = []string{"", "pointed", "set", "held"}

// Confidence is a scale shown after the answer, 0 steps where there is none.
type Confidence struct {
	Steps   int
	Ask     []LocalText
	LowEnd  []LocalText
	HighEnd []LocalText
}

// walkAnswering walks what a task has besides one display and choices.
func walkAnswering(c *codec, t *Task, s *Study, d *DisplaySpec) {
	c.rare(len(t.Beside) == 0, func() { walkBeside(c, t, s) })
	c.rare(!t.ShufflePlaces, func() {
		c.flag("shuffle_places", &t.ShufflePlaces, false, "the task's display and those beside it change places at random in each trial")
	})
	c.rare(t.Intervals.Design == OneInterval, func() {
		c.group("intervals", false, "two presentations one after the other, stimulus_ms each", func(c *codec) {
			i := &t.Intervals
			oneOf(c, "design", &i.Design, DesignNames, OneInterval, false, "two_interval: reference and test in random order; same_different: each is either; reminder: the reference comes first")
			c.number("gap_ms", &i.GapMs, num{Min: 0, Max: 60000, Default: 500}, "fixation mark alone between the intervals")
			c.settings("reference", &i.Reference, d, "parameter values of the reference, the others are those of the test")
			c.text("compare", &i.Compare, word{}, "parameter whose higher value makes first or second, more or less right; without it first and second mean the interval with the test")
		})
	})
	c.rare(t.Answer.By == ByChoice, func() { walkAnswer(c, &t.Answer) })
	c.rare(t.Confidence.Steps == 0, func() {
		c.group("confidence", false, "a scale after the answer", func(c *codec) {
			q := &t.Confidence
			c.whole("steps", &q.Steps, num{Min: 0, Max: 6}, "steps of the scale, 2 to 6; 0: not asked")
			c.sentence("ask", &q.Ask, false, "the question, e.g. How sure are you?")
			c.sentence("low_end", &q.LowEnd, false, "label of the low end")
			c.sentence("high_end", &q.HighEnd, false, "label of the high end")
		})
	})
}

func walkAnswer(c *codec, a *Answer) {
	c.group("answer", false, "how participants answer where it is not by choice", func(c *codec) {
		oneOf(c, "by", &a.By, AnswerNames, ByChoice, false, "dial: points in a direction; adjustment: changes the display while it is shown; hold: holds a key while something is seen")
		c.text("parameter", &a.Parameter, word{}, "dial: parameter with the direction that is right; adjustment: the parameter adjusted")
		c.number("min", &a.Min, num{Min: -inf, Max: inf}, "adjustment: lowest setting")
		c.number("max", &a.Max, num{Min: -inf, Max: inf, Default: 360}, "adjustment: highest setting")
		oneOf(c, "scale", &a.Scale, ScaleNames, LinearScale, false, "adjustment: axis of the steps and of the random start")
		c.number("coarse", &a.Coarse, num{Min: 0, Max: inf, Default: 10}, "step of an arrow key: deg on the dial; log10 units or the parameter's unit")
		c.number("fine", &a.Fine, num{Min: 0, Max: inf, Default: 1}, "the same with the shift key held")
		c.words("keys", &a.Keys, nil, "hold: KeyboardEvent code values, without them Space")
	})
	if c.mode == reading && len(a.Keys) == 0 {
		a.Keys = []string{"Space"}
	}
}

func walkBeside(c *codec, t *Task, s *Study) {
	names := make([]string, len(t.Beside))
	for i, b := range t.Beside {
		names[i] = s.Displays[b].Name
	}
	c.words("beside", &names, nil, "names of displays shown at the same time, each at its own place")
	if c.mode != reading {
		return
	}
	v, _ := c.in.Get("beside")
	for _, name := range names {
		v.Kind, v.Str = value.Text, name
		if k := c.index("beside", v, s.displayNames()); k >= 0 {
			t.Beside = append(t.Beside, k)
		}
	}
}

// RightAnswer is the index of the choice that is right, −1 if none is. test are the
// values of the trial, order tells for each interval whether it shows them, place
// is the name of the display at whose place they are shown, "" where places stay.
func (t *Task) RightAnswer(d *DisplaySpec, test display.Values, order []bool, place string) int {
	for i := range t.Choices {
		if place != "" && t.Choices[i].At == place {
			return i
		}
	}
	means := t.meaning(d, test, order)
	if means == NoMeaning {
		return t.RightChoice(d, test)
	}
	for i := range t.Choices {
		if t.Choices[i].Means == means {
			return i
		}
	}
	return -1
}

// meaning is what the right answer says, NoMeaning where the display's values
// decide or, in a comparison, where both intervals are equal.
func (t *Task) meaning(d *DisplaySpec, test display.Values, order []bool) Meaning {
	if len(order) < 2 {
		return NoMeaning
	}
	if t.Intervals.Design == SameDifferent {
		if order[0] == order[1] {
			return Same
		}
		return Different
	}
	second := order[1]
	if i := d.Kind.Index(t.Intervals.Compare); i >= 0 {
		reference := test.Num(i)
		for _, s := range t.Intervals.Reference {
			if s.Key == t.Intervals.Compare {
				reference = s.Value
			}
		}
		switch x := test.Num(i); {
		case x == reference:
			return NoMeaning
		case x < reference:
			second = !second
		}
		if t.Intervals.Design == Reminder {
			if second {
				return More
			}
			return Less
		}
	} else if t.Intervals.Design == Reminder {
		return NoMeaning
	}
	if second {
		return Second
	}
	return First
}
