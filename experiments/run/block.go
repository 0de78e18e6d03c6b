package run

import (
	"math"

	"distal/experiments/display"
	"distal/experiments/exact"
	"distal/experiments/procedure"
	"distal/experiments/random"
	"distal/experiments/study"
	"distal/experiments/visual"
)

// block is the state of one block of a run.
type block struct {
	index  int // in the study
	tracks []*track
	queue  []int // crossings to come outside a track: practice, fixed and catch trials

	trials      int // that count, catch trials not included
	shown       int // all but interrupted ones
	lastCatch   bool
	results     []bool // practice: right or wrong, the last ones
	introShown  bool
	sinceBreak  int
	missedInRow int
	breakDue    bool
	repeated    int // trials repeated because a frame was dropped
}

// track is one procedure with its condition.
type track struct {
	procedure procedure.Procedure
	condition *study.Condition // nil where there are none
	queue     []int
}

// openBlock starts block index of the study.
func (r *Run) openBlock(index int) *block {
	spec := &r.study.Blocks[index]
	b := &block{index: index}
	if spec.Procedure < 0 {
		return b
	}
	p := &r.study.Procedures[spec.Procedure]
	conditions := make([]*study.Condition, 0, len(spec.Conditions))
	for i := range spec.Conditions {
		conditions = append(conditions, &spec.Conditions[i])
	}
	if len(conditions) == 0 {
		conditions = append(conditions, nil)
	}
	for _, condition := range conditions {
		for range max(1, p.Interleave) {
			sub := uint32(index)<<8 | uint32(len(b.tracks))
			stream := random.NewSub(r.assignment.Seed, 0, random.PurposeProcedure, sub)
			b.tracks = append(b.tracks, &track{procedure: procedure.New(p.Spec, stream), condition: condition})
		}
	}
	return b
}

// ended tells whether no trial of the block is left.
func (b *block) ended(r *Run) bool {
	spec := &r.study.Blocks[b.index]
	if spec.Kind == study.Practice && spec.Practice.MaxTrials > 0 {
		return b.criterionMet(spec) || b.trials >= spec.Practice.MaxTrials
	}
	if spec.Procedure < 0 {
		return b.trials >= spec.Trials
	}
	for _, t := range b.tracks {
		if _, more := t.procedure.Next(); more {
			return false
		}
	}
	return true
}

func (b *block) criterionMet(spec *study.Block) bool {
	c := spec.Practice
	if c.Correct == 0 || len(b.results) < max(c.Window, 1) {
		return false
	}
	right := 0
	for _, ok := range b.results[len(b.results)-c.Window:] {
		if ok {
			right++
		}
	}
	return right >= c.Correct
}

// progress is the share of the block that is done.
func (b *block) progress(r *Run) float64 {
	spec := &r.study.Blocks[b.index]
	if len(b.tracks) == 0 {
		return min(1, float64(b.trials)/float64(max(1, spec.Trials)))
	}
	sum := 0.0
	for _, t := range b.tracks {
		sum += t.procedure.Progress()
	}
	return sum / float64(len(b.tracks))
}

// plan decides the next trial of the block. Every decision has a stream of its
// own, keyed by the trial's number, so that it depends on nothing but records.
func (b *block) plan(r *Run) *TrialPlan {
	spec := &r.study.Blocks[b.index]
	task := &r.study.Tasks[spec.Task]
	number := uint32(r.number)
	p := &TrialPlan{
		Block: b.index, Number: r.number, Track: -1, Task: spec.Task, Display: task.Display,
		Practice: spec.Kind == study.Practice, Level: math.NaN(), RefreshMs: r.check.RefreshMs,
	}
	p.Feedback = task.Feedback == study.AlwaysRightOr || task.Feedback == study.PracticeOnly && p.Practice
	r.frames(p, task)

	p.values = r.baseValues(task.Display)
	p.set(r, spec.Fixed)
	p.Catch = b.drawCatch(r, spec)
	order := random.New(r.assignment.Seed, number, random.PurposeOrder)
	queue := &b.queue
	if len(b.tracks) > 0 && !p.Catch {
		p.Track = b.drawTrack(&order)
		t := b.tracks[p.Track]
		queue = &t.queue
		if t.condition != nil {
			p.Condition = t.condition.Name
			p.set(r, t.condition.Set)
		}
	}
	if len(*queue) == 0 {
		shuffled := make([]int, study.Crossings(spec.Balance))
		order.Perm(shuffled)
		*queue = shuffled
	}
	p.set(r, study.Crossing(spec.Balance, (*queue)[0]))
	switch {
	case p.Catch:
		p.set(r, spec.Catch.Set)
	case p.Track >= 0:
		p.setLevel(r, spec, b.tracks[p.Track].procedure)
	}
	r.present(p, task)
	return p
}

// frames converts the task's durations to refresh intervals.
func (r *Run) frames(p *TrialPlan, task *study.Task) {
	jitter := random.New(r.assignment.Seed, uint32(p.Number), random.PurposeJitter)
	fixationMs := task.FixationMs + float64(task.FixationJitterMs*jitter.Float64())
	p.FixationFrames = visual.Frames(fixationMs, p.RefreshMs)
	p.StimulusFrames = visual.Frames(task.StimulusMs, p.RefreshMs)
	p.intervalFrames = p.StimulusFrames
	p.RampFrames = min(visual.Frames(task.RampMs, p.RefreshMs), p.StimulusFrames/2)
	if task.Intervals.Design != study.OneInterval {
		p.gapFrames = visual.Frames(task.Intervals.GapMs, p.RefreshMs)
		p.StimulusFrames += p.gapFrames + p.intervalFrames
	}
}

// drawCatch decides whether the trial is a catch trial: one in Every on
// average, never two in a row nor among the first two trials of a block.
func (b *block) drawCatch(r *Run, spec *study.Block) bool {
	if spec.Catch.Every < 2 || b.shown < 2 || b.lastCatch {
		return false
	}
	s := random.New(r.assignment.Seed, uint32(r.number), random.PurposeCatch)
	return s.Float64()*float64(spec.Catch.Every-1) < 1
}

// drawTrack picks one of the tracks that go on, all equally likely.
func (b *block) drawTrack(order *random.Stream) int {
	going := 0
	for _, t := range b.tracks {
		if _, more := t.procedure.Next(); more {
			going++
		}
	}
	k := order.Intn(max(going, 1))
	for i, t := range b.tracks {
		if _, more := t.procedure.Next(); more {
			if k == 0 {
				return i
			}
			k--
		}
	}
	return 0
}

// set puts values in and notes that the trial set them.
func (p *TrialPlan) set(r *Run, list []study.Setting) {
	kind := r.study.Displays[p.Display].Kind
	for _, s := range list {
		p.values[kind.Index(s.Key)][0] = s.Value
		p.note(s.Key, s.Value)
	}
}

func (p *TrialPlan) note(key string, x float64) {
	for i := range p.Keys {
		if p.Keys[i] == key {
			p.Values[i] = x
			return
		}
	}
	p.Keys, p.Values = append(p.Keys, key), append(p.Values, x)
}

// setLevel puts the procedure's level in. Whole-number parameters show the
// nearest whole number, which is then the level.
func (p *TrialPlan) setLevel(r *Run, spec *study.Block, proc procedure.Procedure) {
	levels, _ := proc.Next()
	s := &r.study.Procedures[spec.Procedure]
	kind := r.study.Displays[p.Display].Kind
	for n, key := range []string{s.Parameter, s.Second}[:len(levels)] {
		i, x := kind.Index(key), levels[n]
		if kind.Params[i].Type == display.Integer {
			x = exact.Round(x)
		}
		p.values[i][0] = x
		p.note(key, x)
		if n == 0 {
			p.Level = x
		}
	}
}

// record takes the outcome of the trial that was planned.
func (b *block) record(r *Run, p *TrialPlan, t *TrialRecord) {
	if t.Interrupted != "" && t.Interrupted != DroppedFrame {
		return
	}
	b.shown++
	b.sinceBreak++
	b.lastCatch = p.Catch
	if t.Interrupted != "" {
		b.postpone(p)
		return
	}
	if t.Response == "" && (p.CorrectChoice >= 0 || r.study.Tasks[p.Task].Answer.By != study.ByChoice) {
		// Without an answer nothing is known: the same level comes again.
		b.missedInRow++
		if b.missedInRow >= 3 {
			b.breakDue, b.missedInRow = true, 0
		}
		if p.Catch {
			b.pop(p)
		}
		return
	}
	b.missedInRow = 0
	b.pop(p)
	spec := &r.study.Blocks[b.index]
	if p.Practice {
		b.results = append(b.results, t.Correct == 1)
	}
	if p.Catch {
		return
	}
	b.trials++
	if p.Track >= 0 {
		proc := b.tracks[p.Track].procedure
		if set, ok := proc.(procedure.Setter); ok && t.Given != nil {
			set.Set(t.Given.Setting)
		}
		proc.Record(max(t.Correct, 0))
		r.decider = proc
	}
	if spec.BreakEvery > 0 && b.sinceBreak >= spec.BreakEvery {
		b.breakDue = true
	}
}

// queueOf is the list of crossings that the trial was taken from.
func (b *block) queueOf(p *TrialPlan) *[]int {
	if p.Track >= 0 {
		return &b.tracks[p.Track].queue
	}
	return &b.queue
}

// pop removes the crossing that the trial used.
func (b *block) pop(p *TrialPlan) {
	if queue := b.queueOf(p); len(*queue) > 0 {
		*queue = (*queue)[1:]
	}
}

// repeats tells whether a trial with so many dropped frames is to be repeated.
func (b *block) repeats(spec *study.Block, dropped int) bool {
	return dropped > 0 && b.repeated < spec.RepeatDropped
}

// postpone has the trial come again later: what it used goes to the end.
func (b *block) postpone(p *TrialPlan) {
	b.repeated++
	if queue := b.queueOf(p); len(*queue) > 0 {
		*queue = append((*queue)[1:], (*queue)[0])
	}
	if p.Track < 0 {
		return
	}
	if later, ok := b.tracks[p.Track].procedure.(procedure.Postponer); ok {
		later.Postpone()
	}
}
