package run

import (
	"math"
	"strconv"

	"distal/experiments/exact"
	"distal/experiments/random"
	"distal/experiments/study"
	"distal/experiments/value"
)

// maxAdjustments is the most changes of one setting.
const maxAdjustments = 20_000

// present decides what the two intervals of a trial are, where an adjustment
// begins, and which answer is right.
func (r *Run) present(p *TrialPlan, task *study.Task) {
	s := random.NewSub(r.assignment.Seed, uint32(p.Number), random.PurposeOrder, 1)
	switch task.Intervals.Design {
	case study.TwoInterval:
		second := s.Intn(2) == 1
		p.Order = []bool{!second, second}
	case study.SameDifferent:
		p.Order = []bool{s.Intn(2) == 1, s.Intn(2) == 1}
	case study.Reminder:
		p.Order = []bool{false, true}
	}
	d := &r.study.Displays[task.Display]
	if len(p.Order) > 0 {
		p.reference = p.values.Clone()
		for _, set := range task.Intervals.Reference {
			p.reference[d.Kind.Index(set.Key)][0] = set.Value
		}
	}
	for _, b := range task.Beside {
		p.beside = append(p.beside, r.baseValues(b))
	}
	p.Start = start(&task.Answer, &s)
	if b := &r.study.Blocks[p.Block]; task.Answer.By == study.ByAdjustment && p.Track >= 0 && r.study.Procedures[b.Procedure].Parameter == task.Answer.Parameter {
		p.Start = max(task.Answer.Min, min(task.Answer.Max, p.Level)) // the procedure says where it begins
	}
	if task.ShufflePlaces {
		p.Places = make([]int, len(task.Beside)+1)
		s.Perm(p.Places)
		for i, k := range p.Places {
			if p.Places[i] = task.Display; k > 0 {
				p.Places[i] = task.Beside[k-1]
			}
		}
	}
	p.CorrectChoice = task.RightAnswer(d, p.values, p.Order, r.placeName(p))
	p.Feedback = p.Feedback && (p.CorrectChoice >= 0 || task.Answer.By == study.ByChoice && len(p.Order) == 0)
}

// start draws where needle or setting stand at first.
func start(a *study.Answer, s *random.Stream) float64 {
	u := s.Float64()
	switch {
	case a.By == study.ByDial:
		return math.Floor(360 * u)
	case a.By != study.ByAdjustment:
		return math.NaN()
	case a.Scale == study.LogScale:
		return max(a.Min, min(a.Max, float64(a.Min*exact.Pow(a.Max/a.Min, u))))
	}
	return max(a.Min, min(a.Max, a.Min+float64((a.Max-a.Min)*u)))
}

// placeName is the display at whose place the trial's display stands, "" where it has its own.
func (r *Run) placeName(p *TrialPlan) string {
	if len(p.Places) == 0 {
		return ""
	}
	return r.study.Displays[p.Places[0]].Name
}

// orderText names what each interval is.
func orderText(order []bool) string {
	text := ""
	for i, test := range order {
		if i > 0 {
			text += " "
		}
		if test {
			text += "test"
		} else {
			text += "reference"
		}
	}
	return text
}

// complete computes what follows from plan and measurement, and says what
// cannot have been measured, "" if nothing.
func (g *Given) complete(r *Run, p *TrialPlan, t *TrialRecord) string {
	task := &r.study.Tasks[p.Task]
	a := &task.Answer
	nan := math.NaN()
	g.Start, g.ErrorDeg, g.Setting, g.HeldMs, g.FirstHeldMs = p.Start, nan, nan, nan, nan
	answered := t.Response != ""
	pointed := answered && a.By == study.ByDial
	if !pointed && !math.IsNaN(g.ResponseDeg) || pointed && !(g.ResponseDeg >= 0 && g.ResponseDeg < 360) {
		return "response_deg is not the direction of an answer"
	}
	if deg, known := r.Target(p); pointed && known {
		g.ErrorDeg = turned(g.ResponseDeg - deg)
	}
	if bad := g.adjustments(a, len(t.Steps)); bad != "" {
		return bad
	}
	if answered && a.By == study.ByAdjustment {
		g.Setting = p.Start
		if n := len(g.AdjustValues); n > 0 {
			g.Setting = g.AdjustValues[n-1]
		}
	}
	if a.By != study.ByHolding && len(g.HeldFromMs)+len(g.HeldToMs) > 0 || !g.held(answered && a.By == study.ByHolding) {
		return "the times of holding are not those of an answer"
	}
	asked := answered && task.Confidence.Steps > 0
	sure := g.Confidence >= 1 && g.Confidence <= float64(task.Confidence.Steps) && g.Confidence == math.Floor(g.Confidence) && g.SureMs >= 0
	if asked && !sure || !asked && !(math.IsNaN(g.Confidence) && math.IsNaN(g.SureMs)) {
		return "the confidence is not one of the task's"
	}
	return ""
}

// Target is the direction that is right on the trial's dial, false where none is.
func (r *Run) Target(p *TrialPlan) (deg float64, known bool) {
	a := &r.study.Tasks[p.Task].Answer
	if a.By != study.ByDial || a.Parameter == "" {
		return 0, false
	}
	return p.values.Num(r.study.Displays[p.Display].Kind.Index(a.Parameter)), true
}

// turned is an angle above −180 to 180 deg.
func turned(deg float64) float64 { return deg - float64(360*math.Ceil((deg-180)/360)) }

// adjustments says what is wrong with the changes of a setting.
func (g *Given) adjustments(a *study.Answer, frames int) string {
	n := len(g.AdjustFrames)
	if len(g.AdjustValues) != n || len(g.AdjustMs) != n || n > maxAdjustments || n > 0 && a.By != study.ByAdjustment {
		return "the adjustments are not those of an answer"
	}
	before := 0.0
	for i, at := range g.AdjustFrames {
		if x := g.AdjustValues[i]; !(at >= before && at <= float64(frames) && at == math.Floor(at) && x >= a.Min && x <= a.Max) {
			return "adjustment " + strconv.Itoa(i+1) + " is out of order or range"
		}
		before = at
	}
	return ""
}

// held sums the times of holding; false if they are not one after the other.
func (g *Given) held(answered bool) bool {
	if len(g.HeldFromMs) != len(g.HeldToMs) {
		return false
	}
	before, sum, first := 0.0, 0.0, 0.0
	for i, from := range g.HeldFromMs {
		to := g.HeldToMs[i]
		if !(from >= before && to >= from) {
			return false
		}
		if before = to; i == 0 {
			first = to - from
		}
		sum += to - from
	}
	if answered {
		g.HeldMs, g.FirstHeldMs = sum, first
	}
	return true
}

// compareGiven says how what was given differs from what it must be, "" if it does not.
func (r *Run) compareGiven(p *TrialPlan, t *TrialRecord) string {
	task := &r.study.Tasks[p.Task]
	if needed := task.Answer.By != study.ByChoice || task.Confidence.Steps > 0; needed != (t.Given != nil) {
		return "what was given does not belong to the task"
	}
	if t.Given == nil {
		return ""
	}
	g := *t.Given
	if bad := g.complete(r, p, t); bad != "" {
		return bad
	}
	was, is := t.Given.computed(), g.computed()
	for i := range was {
		if !sameNumber(*was[i], *is[i]) {
			return givenKeys[i] + " differs"
		}
	}
	return ""
}

// givenKeys are the numbers of an answer on the wire: what follows from the
// others, then what was measured.
var givenKeys = []string{"error_deg", "start", "setting", "held_ms", "first_held_ms", "response_deg", "confidence", "confidence_rt_ms"}

const givenComputed = 5

// computed are the numbers of givenKeys that follow from others.
func (g *Given) computed() []*float64 { return g.numbers()[:givenComputed] }

func (g *Given) numbers() []*float64 {
	return []*float64{&g.ErrorDeg, &g.Start, &g.Setting, &g.HeldMs, &g.FirstHeldMs, &g.ResponseDeg, &g.Confidence, &g.SureMs}
}

// givenLists are the lists of an answer on the wire.
var givenLists = []string{"adjust_frames", "adjust_values", "adjust_ms", "held_from_ms", "held_to_ms"}

func (g *Given) lists() []*[]float64 {
	return []*[]float64{&g.AdjustFrames, &g.AdjustValues, &g.AdjustMs, &g.HeldFromMs, &g.HeldToMs}
}

func (g *Given) encode() value.Value {
	o := &object{}
	for i, x := range g.numbers() {
		o.number(givenKeys[i], *x)
	}
	for i, list := range g.lists() {
		o.put(givenLists[i], value.Numbers(*list))
	}
	return value.Object(o.members...)
}

// given reads what was given, nil where there is nothing; of a measurement only
// what is measured.
func (f *fields) given(record bool) *Given {
	if _, ok := f.v.Get("given"); !ok {
		return nil
	}
	inner := &fields{v: f.get("given", value.Mapping)}
	g := &Given{}
	for i, x := range g.numbers() {
		if record || i >= givenComputed {
			*x = inner.numberOrNull(givenKeys[i])
		}
	}
	for i, list := range g.lists() {
		*list = inner.numbers(givenLists[i])
	}
	inner.strict()
	if inner.err != nil {
		f.fail("given: " + inner.err.Error())
	}
	return g
}
