package study

import (
	"math"
	"strconv"
	"strings"

	"distal/experiments/display"
	"distal/experiments/procedure"
	"distal/experiments/value"
)

// Decode reads a study from a value tree: a study file's (with positions) or a
// bundle's canonical one. All problems are reported at once. The study is only
// to be used when the problems have not Failed.
func Decode(v value.Value) (*Study, Problems) {
	var problems Problems
	s := &Study{}
	if v.Kind != value.Mapping {
		return s, Problems{{Pos: v.Pos, Message: "a study file is a group of keys: about, texts, displays, tasks, blocks, …"}}
	}
	c := &codec{mode: reading, in: v, problems: &problems, language: firstLanguage(v)}
	walkStudy(c, s)
	c.finish()
	if checking {
		check(s, v, &problems)
		problems = problems.InOrder()
	}
	return s, problems
}

// Encode gives the canonical tree of s, with every default explicit.
func (s *Study) Encode() value.Value {
	c := &codec{mode: writing}
	walkStudy(c, s)
	return value.Object(c.out...)
}

// firstLanguage looks ahead, since plain sentences are in the first language.
func firstLanguage(v value.Value) string {
	if about, ok := v.Get("about"); ok {
		if list, ok := about.Get("languages"); ok {
			if list.Kind == value.Text {
				return list.Str
			}
			if len(list.Items) > 0 {
				return list.Items[0].Str
			}
		}
	}
	return "en"
}

var inf = math.Inf(1)

func walkStudy(c *codec, s *Study) {
	c.whole("distal", &s.Format, num{Min: 1, Max: FormatVersion, Required: true,
		Beyond: "this is a format that a later version of the program reads; this one reads format " + strconv.Itoa(FormatVersion)},
		"version of the study file's format: 1")
	c.group("about", true, "what the study is and who answers for it", func(c *codec) { walkAbout(c, &s.About) })
	c.group("participants", false, "who may take part", func(c *codec) { walkParticipants(c, &s.Participants) })
	namedBy(c, "texts", &s.Texts, func(t *TextSet) *string { return &t.Language }, checkLanguage, true,
		"the Markdown texts of each language; in a study file give folder and version instead", walkTexts)
	c.group("screen", false, "what the participant's screen must manage", func(c *codec) { walkScreen(c, &s.Screen) })
	named(c, "displays", &s.Displays, func(d *DisplaySpec) *string { return &d.Name }, true, "the displays by name", walkDisplay)
	named(c, "tasks", &s.Tasks, func(t *Task) *string { return &t.Name }, true, "what participants do in a trial",
		func(c *codec, t *Task) { walkTask(c, t, s) })
	named(c, "procedures", &s.Procedures, func(p *ProcedureSpec) *string { return &p.Name }, false,
		"how levels are chosen", walkProcedure)
	listed(c, "blocks", &s.Blocks, true, "the parts of a run", func(c *codec, b *Block) { walkBlock(c, b, s) })
	listed(c, "groups", &s.Groups, false, "between-subject groups", func(c *codec, g *Group) { walkGroup(c, g, s) })
	c.group("orders", false, "order of the measurement blocks", func(c *codec) {
		oneOf(c, "method", &s.Orders.Method, OrderNames, AsWritten, false, "latin_square is Williams' (1949) balanced square")
	})
	named(c, "questions", &s.Questions, func(q *Question) *string { return &q.Name }, false, "asked after the trials", walkQuestion)
	listed(c, "exclusions", &s.Exclusions, false, "rules that exclude runs", walkExclusion)
	c.group("quota", false, "how many runs are wanted", func(c *codec) {
		c.whole("runs", &s.Quota.Runs, num{Min: 0, Max: 100000}, "valid runs wanted, 0: no limit")
	})
	c.group("return", false, "where participants go at the end", func(c *codec) {
		c.text("url", &s.Return.URL, word{MaxLength: 2000, Check: checkURL}, "https address; {code} becomes the completion code")
	})
}

func checkURL(s string) string {
	if strings.HasPrefix(s, "https://") && !strings.ContainsAny(s, " \t\n<>\"") {
		return ""
	}
	return "an address that begins with https:// is expected"
}

func walkAbout(c *codec, a *About) {
	c.text("name", &a.Name, word{Required: true, Check: checkIdentifier}, "identifier of the study")
	c.text("title", &a.Title, word{Required: true}, "title that participants read")
	c.sentence("title_in", &a.TitleIn, false, "the title in each language, where participants do not all read title")
	c.text("investigator", &a.Investigator, word{Required: true}, "who answers for the study")
	c.text("contact", &a.Contact, word{Required: true}, "e-mail address or telephone number")
	c.text("institution", &a.Institution, word{}, "university, institute or company")
	c.text("ethics_id", &a.EthicsID, word{}, "reference of the responsible ethics board")
	c.words("languages", &a.Languages, checkLanguage, "BCP 47 codes; the first is the default")
	if c.mode == reading && len(a.Languages) == 0 {
		a.Languages = []string{"en"}
	}
	c.number("minutes", &a.Minutes, num{Min: 0.5, Max: 240, Required: true}, "expected duration in minutes")
	c.text("description", &a.Description, word{MaxLength: 4000}, "for colleagues")
	c.text("licence", &a.Licence, word{}, "licence of the data")
	c.text("flash_approval", &a.FlashApproval, word{MaxLength: 2000},
		"name and justification where frames exceed the flash thresholds of WCAG 2.3.1")
}

// checkLanguage accepts the shape of BCP 47 tags (RFC 5646): a language of two
// or three letters and further parts after hyphens.
func checkLanguage(s string) string {
	parts := strings.Split(s, "-")
	for i, part := range parts {
		for j := 0; j < len(part); j++ {
			c := part[j]
			letter := c >= 'a' && c <= 'z' || i > 0 && c >= 'A' && c <= 'Z'
			if !letter && (i == 0 || c < '0' || c > '9') {
				return quote(s) + " is not a language: write a code such as en, de or pt-BR"
			}
		}
		if n := len(part); n < 2 || n > 8 || i == 0 && n > 3 {
			return quote(s) + " is not a language: write a code such as en, de or pt-BR"
		}
	}
	return ""
}

// ValidLanguage tells whether s has the shape of a language code.
func ValidLanguage(s string) bool { return checkLanguage(s) == "" }

func walkParticipants(c *codec, p *Participants) {
	c.whole("min_age_years", &p.MinAgeYears, num{Min: 0, Max: 120, Default: 18}, "youngest age")
	c.whole("max_age_years", &p.MaxAgeYears, num{Min: 0, Max: 120}, "oldest age, 0: no limit")
	c.text("payment", &p.Payment, word{MaxLength: 500}, "what participants are told about payment")
	named(c, "screening", &p.Screening, func(q *ScreeningQuestion) *string { return &q.Name }, false,
		"yes/no questions before any display", func(c *codec, q *ScreeningQuestion) {
			c.sentence("ask", &q.Ask, true, "the question")
			c.flag("admits", &q.Admits, false, "the answer that lets the participant go on (true: yes)")
		})
}

func walkTexts(c *codec, t *TextSet) {
	long := word{Required: true, MaxLength: 100_000}
	c.text("version", &t.Version, word{Required: true}, "version of the consent text, e.g. its date")
	c.text("information", &t.Information, long, "what participants are told (Markdown)")
	c.text("consent", &t.Consent, long, "what is agreed to (Markdown); list items become boxes to tick")
	c.text("instructions", &t.Instructions, long, "Markdown")
	c.text("debrief", &t.Debrief, long, "Markdown")
}

func walkScreen(c *codec, s *Screen) {
	c.number("min_refresh_hz", &s.MinRefreshHz, num{Min: 20, Max: 500, Default: 50}, "slowest refresh rate")
	c.number("max_refresh_hz", &s.MaxRefreshHz, num{Min: 0, Max: 1000}, "fastest refresh rate, 0: no limit")
	c.number("min_width_deg", &s.MinWidthDeg, num{Min: 1, Max: 120, Default: 12}, "visible field needed at the viewing distance")
	c.number("min_height_deg", &s.MinHeightDeg, num{Min: 1, Max: 120, Default: 10}, "visible field needed at the viewing distance")
	c.number("max_jitter_ms", &s.MaxJitterMs, num{Min: 0.1, Max: 50, Default: 4}, "largest standard deviation of the frame intervals")
	c.number("max_dropped_percent", &s.MaxDroppedPercent, num{Min: 0, Max: 100, Default: 10}, "most late frames in the display check")
	oneOf(c, "distance_method", &s.Distance, DistanceNames, BlindSpot, false, "how the viewing distance is found")
	c.number("stated_distance_mm", &s.StatedDistanceMm, num{Min: 150, Max: 6000, Default: 570}, "distance that participants are asked to keep")
	c.number("min_distance_mm", &s.MinDistanceMm, num{Min: 100, Max: 6000, Default: 250}, "nearest accepted distance")
	c.number("max_distance_mm", &s.MaxDistanceMm, num{Min: 100, Max: 6000, Default: 1200}, "farthest accepted distance")
	c.whole("distance_repeats", &s.DistanceRepeats, num{Min: 1, Max: 20, Default: 5}, "settings of the blind-spot method")
	c.whole("card_repeats", &s.CardRepeats, num{Min: 1, Max: 10, Default: 3}, "settings of the card")
	c.number("max_card_spread", &s.MaxCardSpread, num{Min: 0.001, Max: 1, Default: 0.05}, "largest accepted (max − min) ÷ mean of the card settings")
	c.number("max_distance_spread", &s.MaxDistanceSpread, num{Min: 0.01, Max: 1, Default: 0.25}, "largest accepted standard deviation ÷ mean of the distance settings")
	c.number("background_fraction", &s.BackgroundFraction, num{Min: 0.05, Max: 0.95, Default: 0.5}, "mean luminance as a fraction of white")
	c.flag("fullscreen", &s.Fullscreen, true, "ask for full screen")
	c.flag("float_target", &s.FloatTarget, false, "refuse browsers that blend light in steps of 8 bits only")
}

func walkDisplayPlace(c *codec, d *DisplaySpec) {
	c.number("x_deg", &d.XDeg, num{Min: -60, Max: 60}, "centre, to the right of fixation")
	c.number("y_deg", &d.YDeg, num{Min: -60, Max: 60}, "centre, above fixation")
}

func walkDisplay(c *codec, d *DisplaySpec) {
	walkDisplayPlace(c, d)
	switch c.mode {
	case describing:
		return
	case writing:
		c.put("kind", value.String(d.Kind.Name))
		for i := range d.Kind.Params {
			c.put(d.Kind.Params[i].Key, encodeParam(&d.Kind.Params[i], d.Values[i]))
		}
		return
	}
	v, ok := c.take("kind", true)
	if !ok {
		c.knowAll()
		return
	}
	var names []string
	for _, k := range display.Kinds() {
		names = append(names, k.Name)
	}
	i := c.index("kind", v, names)
	if i < 0 {
		c.knowAll()
		return
	}
	d.Kind = display.Kinds()[i]
	d.Values = d.Kind.Defaults()
	for j := range d.Kind.Params {
		p := &d.Kind.Params[j]
		if v, ok := c.take(p.Key, p.Required); ok {
			if values, ok := c.param(p, p.Key, v); ok {
				d.Values[j] = values
			}
		} else if d.Values[j] == nil {
			d.Values[j] = []float64{0}
		}
	}
}

// knowAll keeps other keys from being reported where the kind is not known.
func (c *codec) knowAll() {
	for _, m := range c.in.Members {
		c.known = append(c.known, m.Key)
	}
}

// param reads the value of a display parameter.
func (c *codec) param(p *display.Param, key string, v value.Value) ([]float64, bool) {
	switch p.Type {
	case display.Choice:
		i := c.index(key, v, p.Options)
		return []float64{float64(i)}, i >= 0
	case display.Boolean:
		if v.Kind != value.Boolean {
			c.problem(key, v, "true or false is expected, not "+value.KindNames[v.Kind])
			return nil, false
		}
		if v.Bool {
			return []float64{1}, true
		}
		return []float64{0}, true
	}
	rule := num{Min: p.Min, Max: p.Max, Whole: p.Type == display.Integer}
	if p.MaxCount <= 1 {
		x := math.NaN()
		c.readNumber(key, v, &x, rule)
		return []float64{x}, !math.IsNaN(x)
	}
	items := c.items(key, v)
	if len(items) == 0 || len(items) > p.MaxCount {
		c.problem(key, v, "from 1 to "+formatNumber(float64(p.MaxCount))+" numbers are expected")
		return nil, false
	}
	var list []float64
	for _, item := range items {
		x := math.NaN()
		c.readNumber(key, item, &x, rule)
		if math.IsNaN(x) {
			return nil, false
		}
		list = append(list, x)
	}
	return list, true
}

func encodeParam(p *display.Param, x []float64) value.Value {
	switch {
	case p.Type == display.Choice:
		return value.String(p.Options[int(x[0])])
	case p.Type == display.Boolean:
		return value.Bool(x[0] != 0)
	case p.MaxCount > 1:
		return value.Numbers(x)
	}
	return value.Number(x[0])
}

// single is p as a setting gives it: one value, the first of a list.
func single(p *display.Param) *display.Param {
	one := *p
	one.MaxCount = 1
	return &one
}

// settings walks parameter values of display d (nil: unknown, all keys are refused).
func (c *codec) settings(key string, list *[]Setting, d *DisplaySpec, doc string) {
	switch c.mode {
	case writing:
		var members []value.Member
		for _, s := range *list {
			p := &d.Kind.Params[d.Kind.Index(s.Key)]
			members = append(members, value.Member{Key: s.Key, Value: encodeParam(single(p), []float64{s.Value})})
		}
		c.put(key, value.Object(members...))
	case describing:
		c.schema.settings(key, false, doc)
	case reading:
		v, ok := c.take(key, false)
		if !ok || d == nil {
			return
		}
		if v.Kind != value.Mapping {
			c.problem(key, v, "parameters with a value each are expected, not "+value.KindNames[v.Kind])
			return
		}
		for _, m := range v.Members {
			if p := c.paramOf(key, m.Key, m.KeyPos, m.Value, d); p != nil {
				if x, ok := c.param(single(p), key+"."+m.Key, m.Value); ok {
					*list = append(*list, Setting{Key: m.Key, Value: x[0]})
				}
			}
		}
		// The order of keys means nothing, and canonical members are sorted:
		// sorted lists make the study of a file and of its bundle the same.
		sortBy(*list, func(s *Setting) string { return s.Key })
	}
}

// paramOf finds the parameter called name, reporting unknown ones.
func (c *codec) paramOf(key, name string, pos value.Pos, v value.Value, d *DisplaySpec) *display.Param {
	if d.Kind == nil {
		return nil
	}
	if i := d.Kind.Index(name); i >= 0 {
		return &d.Kind.Params[i]
	}
	message := "display " + d.Name + " has no parameter " + quote(name)
	if checking {
		known := d.parameterNames()
		if wrong, _ := wrongUnit(name, known, v.Num, v.Kind == value.Numeric); wrong != "" {
			message = wrong
		} else if near := nearest(name, known); near != "" {
			message += ": did you mean " + near + "?"
		}
	}
	c.problem(key+"."+name, value.Value{Pos: pos, Raw: name}, message)
	return nil
}

// reference walks the name of something declared above; n is its index, −1 if absent.
func (c *codec) reference(key string, n *int, names []string, required bool, doc string) {
	switch c.mode {
	case writing:
		if *n >= 0 && *n < len(names) {
			c.put(key, value.String(names[*n]))
		}
	case describing:
		c.schema.text(key, word{Required: required}, doc)
	case reading:
		*n = -1
		if v, ok := c.take(key, required); ok {
			*n = c.index(key, v, names)
		}
	}
}

func namesOf[T any](list []T, name func(*T) string) []string {
	names := make([]string, len(list))
	for i := range list {
		names[i] = name(&list[i])
	}
	return names
}

func (s *Study) displayNames() []string {
	return namesOf(s.Displays, func(d *DisplaySpec) string { return d.Name })
}

func (s *Study) taskNames() []string { return namesOf(s.Tasks, func(t *Task) string { return t.Name }) }

func (s *Study) procedureNames() []string {
	return namesOf(s.Procedures, func(p *ProcedureSpec) string { return p.Name })
}

// displayOf is the display of a task, nil while it is not known.
func (s *Study) displayOf(task int) *DisplaySpec {
	if task < 0 || task >= len(s.Tasks) {
		return nil
	}
	d := s.Tasks[task].Display
	if d < 0 || d >= len(s.Displays) {
		return nil
	}
	return &s.Displays[d]
}

func walkTask(c *codec, t *Task, s *Study) {
	c.reference("display", &t.Display, s.displayNames(), true, "name of the display that is shown")
	c.number("fixation_ms", &t.FixationMs, num{Min: 0, Max: 10000, Default: 500}, "fixation mark alone before the stimulus")
	c.number("fixation_jitter_ms", &t.FixationJitterMs, num{Min: 0, Max: 5000}, "a uniform random time up to this is added to fixation_ms")
	c.number("stimulus_ms", &t.StimulusMs, num{Min: 1, Max: 600000, Required: true}, "duration of the stimulus")
	c.number("ramp_ms", &t.RampMs, num{Min: 0, Max: 5000}, "raised-cosine contrast ramps at onset and offset, inside stimulus_ms")
	c.number("response_window_ms", &t.ResponseWindowMs, num{Min: 0, Max: 600000, Default: 5000}, "from stimulus onset; 0: no limit")
	c.flag("respond_during", &t.RespondDuring, false, "responses count while the stimulus is shown, and end it")
	c.number("intertrial_ms", &t.IntertrialMs, num{Min: 0, Max: 10000, Default: 500}, "blank time after the response")
	c.group("fixation_mark", false, "the mark to look at", func(c *codec) {
		c.flag("shown", &t.FixationMark.Shown, true, "the mark is shown, before and during the stimulus")
		c.number("diameter_deg", &t.FixationMark.DiameterDeg, num{Min: 0.05, Max: 3, Default: 0.3}, "diameter of the mark")
		c.number("contrast", &t.FixationMark.Contrast, num{Min: -1, Max: 1, Default: -1}, "Weber contrast, −1 is black")
	})
	var d *DisplaySpec
	if t.Display >= 0 && t.Display < len(s.Displays) {
		d = &s.Displays[t.Display]
	}
	walkAnswering(c, t, s, d)
	named(c, "choices", &t.Choices, func(ch *Choice) *string { return &ch.Name }, c.mode == reading && t.Answer.By == ByChoice, "the response alternatives",
		func(c *codec, ch *Choice) {
			c.words("keys", &ch.Keys, nil, "KeyboardEvent code values, e.g. ArrowLeft, KeyF, Space")
			c.sentence("label", &ch.Label, true, "what the button says")
			c.settings("right_when", &ch.Correct, d, "display parameter values for which this is the right answer")
			c.rare(ch.Means == NoMeaning, func() {
				oneOf(c, "means", &ch.Means, MeaningNames, NoMeaning, false, "what the answer says about the intervals, and so when it is right")
			})
			c.rare(ch.At == "", func() {
				c.text("at", &ch.At, word{}, "name of the display at whose place the task's display is, if this is the right answer")
			})
		})
	oneOf(c, "feedback", &t.Feedback, FeedbackNames, PracticeOnly, false, "right or wrong after the response")
	c.sentence("prompt", &t.Prompt, false, "the question under the display, e.g. Which way did most dots move?")
}

func walkProcedure(c *codec, p *ProcedureSpec) {
	oneOf(c, "method", &p.Method, procedure.MethodNames, procedure.QuestPlus, true, "how levels are chosen; quest_plus, quest, psi and psi_marginal are the Bayesian methods")
	c.text("parameter", &p.Parameter, word{Required: true}, "the display parameter that is varied")
	oneOf(c, "scale", &p.Scale, procedure.ScaleNames, procedure.Log10, false, "axis of the levels")
	c.number("min", &p.Min, num{Min: -inf, Max: inf, Required: true}, "lowest level, in the parameter's unit")
	c.number("max", &p.Max, num{Min: -inf, Max: inf, Required: true}, "highest level")
	c.whole("min_trials", &p.MinTrials, num{Min: 0, Max: 100000}, "trials before the procedure may end")
	c.whole("max_trials", &p.MaxTrials, num{Min: 1, Max: 100000, Default: 80}, "trials after which it ends")
	c.whole("interleave", &p.Interleave, num{Min: 1, Max: 8, Default: 1}, "independent copies in random alternation")
	c.numbers("levels", &p.Levels, num{Min: -inf, Max: inf}, "constant: the levels")
	c.whole("repetitions", &p.Repetition, num{Min: 0, Max: 10000}, "constant: trials per level")
	c.number("start", &p.Start, num{Min: -inf, Max: inf}, "staircase: first level")
	c.whole("down", &p.Down, num{Min: 1, Max: 10, Default: 2}, "staircase: right answers in a row before it gets harder")
	c.whole("up", &p.Up, num{Min: 1, Max: 10, Default: 1}, "staircase: wrong answers in a row before it gets easier")
	c.numbers("steps", &p.StepsUp, num{Min: 0, Max: inf}, "staircase: step towards easier until each reversal, the last stays; log10 units or the parameter's unit; limits: the step, one number")
	c.number("step_ratio", &p.StepRatio, num{Min: 0.01, Max: 100, Default: 1}, "staircase: step towards harder ÷ step towards easier (García-Pérez 1998)")
	c.whole("reversals", &p.Reversals, num{Min: 0, Max: 1000}, "staircase: ends after so many, 0: after max_trials; limits: number of series")
	c.whole("discard", &p.Discard, num{Min: 0, Max: 1000, Default: 2}, "staircase: reversals left out of the estimate")
	c.whole("easier_is", &p.EasierIs, num{Min: -1, Max: 1, Default: 1}, "+1: a higher level is easier, −1: a lower one")
	c.number("threshold_min", &p.ThresholdMin, num{Min: -inf, Max: inf, Default: 0}, "Bayesian methods: lowest threshold considered, 0: min")
	c.number("threshold_max", &p.ThresholdMax, num{Min: -inf, Max: inf, Default: 0}, "Bayesian methods: highest threshold considered, 0: max")
	c.whole("threshold_count", &p.ThresholdCount, num{Min: 2, Max: 400, Default: 80}, "Bayesian methods: thresholds considered, evenly on the scale")
	oneOf(c, "prior", &p.Prior, procedure.PriorNames, usualPrior(p.Method), false, "Bayesian methods: how likely the thresholds are beforehand: middle is even over the middle half of the range and a twentieth of that outside, raised_cosine ten times as likely in the middle as at the ends; usual for quest is normal, for psi and psi_marginal uniform")
	c.rare(p.Prior != procedure.Normal, func() {
		c.number("prior_mean", &p.PriorMean, num{Min: -inf, Max: inf}, "prior normal: the likeliest threshold, 0: the middle of the range")
		c.number("prior_sd_log10", &p.PriorSDLog10, num{Min: 0.01, Max: 10, Default: 0.5}, "prior normal: standard deviation of log10 threshold")
	})
	c.numbers("slopes", &p.Slopes, num{Min: 0.01, Max: 100}, "Bayesian methods: Weibull slopes considered, equally likely")
	c.numbers("lapses", &p.Lapses, num{Min: 0, Max: 0.5}, "Bayesian methods: lapse rates considered, equally likely")
	c.number("guess", &p.Guess, num{Min: 0, Max: 0.9, Default: 0.5}, "proportion correct by guessing")
	c.whole("level_count", &p.LevelCount, num{Min: 2, Max: 400, Default: 60}, "Bayesian methods: levels from min to max, evenly on the scale")
	c.number("stop_sd_log10", &p.StopSDLog10, num{Min: 0, Max: 2}, "Bayesian methods: ends when the posterior sd of the threshold is below, 0: never")
	c.flag("nuisance", &p.Nuisance, true, "quest_plus: slope and lapse are integrated out (Prins 2013)")
	c.rare(p.Place == procedure.Own, func() {
		oneOf(c, "place", &p.Place, procedure.PlaceNames, procedure.Own, false, "Bayesian methods: rule by which the level is chosen: least expected entropy or variance, or where a trial tells most if the threshold is the posterior's mode, mean or median; own is the published rule of the method")
	})
	c.rare(!p.KeepSlope, func() {
		c.flag("keep_slope", &p.KeepSlope, false, "psi_marginal: the slope is of interest too, only the lapse rate is integrated out")
	})
	c.rare(p.StopEntropyBits == 0, func() {
		c.number("stop_entropy_bits", &p.StopEntropyBits, num{Min: 0, Max: 20}, "Bayesian methods: ends when the entropy of the threshold's posterior is below, 0: never")
	})
	c.rare(p.Second == "", func() {
		c.text("second_parameter", &p.Second, word{}, "Bayesian methods: another display parameter, of which each level is considered with each level of the first")
		c.numbers("second_levels", &p.SecondLevels, num{Min: 1e-9, Max: inf}, "levels of second_parameter")
		c.numbers("gradients", &p.Gradients, num{Min: -10, Max: 10}, "change of log10 threshold for each log10 unit of second_parameter: those considered, equally likely")
	})
	if c.mode == reading {
		fillProcedure(&p.Spec)
	}
}

// usualPrior is the prior of thresholds where a study names none.
func usualPrior(m procedure.Method) procedure.Prior {
	switch m {
	case procedure.Quest:
		return procedure.Normal
	case procedure.Psi, procedure.PsiMarginal:
		return procedure.Uniform
	}
	return procedure.Middle
}

// fillProcedure puts in defaults that depend on other keys.
func fillProcedure(p *procedure.Spec) {
	if p.ThresholdMin == 0 && p.ThresholdMax == 0 {
		p.ThresholdMin, p.ThresholdMax = p.Min, p.Max
	}
	p.FillModel()
	if len(p.StepsUp) == 0 {
		p.StepsUp = []float64{0.2, 0.1}
		if p.Method == procedure.Limits {
			p.StepsUp = p.StepsUp[1:]
		}
	}
	if p.Start == 0 {
		p.Start = p.Max
		if p.EasierIs < 0 {
			p.Start = p.Min
		}
	}
}

func walkBlock(c *codec, b *Block, s *Study) {
	c.text("name", &b.Name, word{Required: true, Check: checkIdentifier}, "name of the block in the data")
	oneOf(c, "kind", &b.Kind, BlockKindNames, Measurement, false, "practice or measurement")
	c.reference("task", &b.Task, s.taskNames(), true, "name of the task")
	c.reference("procedure", &b.Procedure, s.procedureNames(), false, "name of the procedure that chooses levels")
	d := s.displayOf(b.Task)
	walkBalance(c, b, d)
	listed(c, "conditions", &b.Conditions, false, "one track of the procedure for each", func(c *codec, condition *Condition) {
		c.text("name", &condition.Name, word{Required: true, Check: checkIdentifier}, "name of the condition in the data")
		c.settings("set", &condition.Set, d, "parameter values of the condition")
	})
	c.whole("trials", &b.Trials, num{Min: 0, Max: 100000}, "number of trials of a block without procedure")
	c.settings("set", &b.Fixed, d, "parameter values of the whole block")
	c.group("catch", false, "trials that everybody should get right", func(c *codec) {
		c.whole("every", &b.Catch.Every, num{Min: 0, Max: 1000}, "one in so many trials on average, 0: none")
		c.settings("set", &b.Catch.Set, d, "parameter values of catch trials, e.g. coherence: 1")
	})
	c.group("criterion", false, "practice ends when it is met", func(c *codec) {
		c.whole("correct", &b.Practice.Correct, num{Min: 0, Max: 1000}, "right answers needed …")
		c.whole("window", &b.Practice.Window, num{Min: 0, Max: 1000}, "… among the last so many trials")
		c.whole("max_trials", &b.Practice.MaxTrials, num{Min: 0, Max: 10000}, "practice trials at most")
		oneOf(c, "otherwise", &b.Practice.Otherwise, AfterPracticeNames, GoOn, false, "what happens if it is not met")
	})
	c.whole("break_every", &b.BreakEvery, num{Min: 0, Max: 10000}, "a break after so many trials, 0: none inside the block")
	c.whole("repeat_dropped", &b.RepeatDropped, num{Min: 0, Max: 10000}, "trials with a dropped stimulus frame that are repeated at the end of the block, at most; 0: none")
	c.sentence("message", &b.Message, false, "shown before the block")
}

// walkBalance walks parameters with the values that they take equally often.
func walkBalance(c *codec, b *Block, d *DisplaySpec) {
	const key, doc = "balance", "parameters with the values that they take equally often, fully crossed"
	switch c.mode {
	case describing:
		c.schema.settings(key, true, doc)
	case writing:
		var members []value.Member
		for _, balanced := range b.Balance {
			p := &d.Kind.Params[d.Kind.Index(balanced.Key)]
			items := make([]value.Value, len(balanced.Values))
			for i, x := range balanced.Values {
				items[i] = encodeParam(single(p), []float64{x})
			}
			members = append(members, value.Member{Key: balanced.Key, Value: value.List(items...)})
		}
		c.put(key, value.Object(members...))
	case reading:
		v, ok := c.take(key, false)
		if !ok || d == nil {
			return
		}
		if v.Kind != value.Mapping {
			c.problem(key, v, "parameters with a list of values each are expected, not "+value.KindNames[v.Kind])
			return
		}
		for _, m := range v.Members {
			p := c.paramOf(key, m.Key, m.KeyPos, m.Value, d)
			if p == nil {
				continue
			}
			balanced := Balanced{Key: m.Key}
			for _, item := range c.items(key+"."+m.Key, m.Value) {
				if x, ok := c.param(single(p), key+"."+m.Key, item); ok {
					balanced.Values = append(balanced.Values, x[0])
				}
			}
			if len(balanced.Values) == 0 {
				c.problem(key+"."+m.Key, m.Value, "a list of values is expected, e.g. [0, 180]")
				continue
			}
			b.Balance = append(b.Balance, balanced)
		}
		sortBy(b.Balance, func(b *Balanced) string { return b.Key })
	}
}

func walkGroup(c *codec, g *Group, s *Study) {
	c.text("name", &g.Name, word{Required: true, Check: checkIdentifier}, "name of the group in the data")
	c.whole("weight", &g.Weight, num{Min: 1, Max: 1000, Default: 1}, "share of participants")
	listed(c, "set", &g.Set, false, "what differs for the group", func(c *codec, set *GroupSetting) {
		c.reference("display", &set.Display, s.displayNames(), true, "name of the display that differs")
		var d *DisplaySpec
		if set.Display >= 0 && set.Display < len(s.Displays) {
			d = &s.Displays[set.Display]
		}
		list := []Setting{}
		if c.mode == writing {
			list = []Setting{set.Setting}
		}
		c.settings("values", &list, d, "one parameter with its value")
		if c.mode != reading {
			return
		}
		if given, _ := c.in.Get("values"); len(given.Members) != 1 {
			c.problem("values", value.Value{Pos: c.keyPosOf("values"), Raw: "values"}, "exactly one parameter is expected: use one entry for each")
		} else if len(list) == 1 {
			set.Setting = list[0]
		}
	})
}

func walkQuestion(c *codec, q *Question) {
	oneOf(c, "type", &q.Type, QuestionTypeNames, TextQuestion, true, "type of the answer")
	c.sentence("ask", &q.Ask, true, "the question")
	named(c, "options", &q.Options, func(o *Option) *string { return &o.Name }, false, "of a choice",
		func(c *codec, o *Option) { c.sentence("label", &o.Label, true, "what the option says") })
	c.number("min", &q.Min, num{Min: -inf, Max: inf}, "of a number or scale")
	c.number("max", &q.Max, num{Min: -inf, Max: inf}, "of a number or scale")
	c.text("unit", &q.Unit, word{}, "of a number")
	c.sentence("low_end", &q.LowEnd, false, "label of a scale's low end")
	c.sentence("high_end", &q.HighEnd, false, "label of a scale's high end")
	c.flag("optional", &q.Optional, false, "may be left out")
}

func walkExclusion(c *codec, e *ExclusionRule) {
	c.text("name", &e.Name, word{Required: true, Check: checkIdentifier}, "name of the rule in the ledger of exclusions")
	c.text("when", &e.When, word{Required: true, MaxLength: 1000}, "Common Expression Language over the measures of a run, e.g. catch_accuracy < 0.8")
	c.text("reason", &e.Reason, word{MaxLength: 500}, "in plain words")
}
