package run

import (
	"math"

	"distal/experiments/display"
	"distal/experiments/exact"
	"distal/experiments/study"
)

// stage shows the current trial: displays, list and digest. Nothing here allocates
// after the first trial of a task.
type stage struct {
	displays []display.Display
	list     *display.List
	plan     *TrialPlan
	mark     study.FixationMark
	frame    int // of the stimulus, in refresh intervals
	began    bool
	study    *study.Study
	seed     uint64
	interval int            // the presentation that is shown
	own      display.Values // of a display that is adjusted
	suffix   string         // of the names of truths
	hash     uint64
	keys     []string
	truths   []float64
	add      func(string, float64)
}

func (s *stage) open(st *study.Study) {
	s.study = st
	s.displays = make([]display.Display, len(st.Displays))
	for i := range st.Displays {
		s.displays[i] = st.Displays[i].Kind.New(st.Displays[i].Values)
	}
	dots, patches, batches := 0, 0, 0
	for i := range st.Tasks {
		d, p, b := s.displays[st.Tasks[i].Display].Size()
		for _, k := range st.Tasks[i].Beside {
			d1, p1, b1 := s.displays[k].Size()
			d, p, b = d+d1, p+p1, b+b1
		}
		dots, patches, batches = max(dots, d), max(patches, p), max(batches, b)
	}
	s.list = display.NewList(dots+1, patches, batches+1)
	s.add = func(name string, x float64) {
		s.keys, s.truths = append(s.keys, name+s.suffix), append(s.truths, x)
	}
}

// BeginTrial prepares the trial that Next planned; false if the next step is none.
func (r *Run) BeginTrial() bool {
	step := r.Next()
	if step.Kind != StepTrial {
		return false
	}
	r.show.seed = r.assignment.Seed
	r.show.begin(step.Trial)
	return true
}

func (s *stage) begin(p *TrialPlan) {
	task := &s.study.Tasks[p.Task]
	s.plan, s.frame, s.began = p, 0, false
	s.mark = task.FixationMark
	s.hash = offset64
	s.keys, s.truths = nil, nil
	s.own = p.values
	if task.Answer.By == study.ByAdjustment {
		s.own = p.values.Clone()
		s.own[s.adjusted()][0] = p.Start
	}
	for k := max(len(p.Order), 1) - 1; k >= 0; k-- {
		s.present(k)
		s.suffix = ""
		if k > 0 {
			s.suffix = "_2"
		}
		s.displays[p.Display].Truths(s.add)
	}
	for _, b := range task.Beside {
		s.suffix = "_" + s.study.Displays[b].Name
		s.displays[b].Truths(s.add)
	}
}

// present prepares presentation k of the trial. Each display has streams of its own.
func (s *stage) present(k int) {
	p := s.plan
	s.interval = k
	values := s.own
	if len(p.Order) > 0 && !p.Order[k] {
		values = p.reference
	}
	s.prepare(p.Display, 0, values, k)
	for i, b := range s.study.Tasks[p.Task].Beside {
		s.prepare(b, i+1, p.beside[i], 2*i+2+k)
	}
}

// prepare begins display d, which is number n of the task's.
func (s *stage) prepare(d, n int, values display.Values, place int) {
	spec := &s.study.Displays[d]
	if len(s.plan.Places) > 0 {
		spec = &s.study.Displays[s.plan.Places[n]]
	}
	s.displays[d].Begin(display.Trial{
		Values: values, Seed: s.seed, Number: uint32(s.plan.Number), IntervalMs: s.plan.RefreshMs, XDeg: spec.XDeg, YDeg: spec.YDeg, Place: uint32(place),
	})
}

// adjusted is the index of the parameter that the trial's task has adjusted.
func (s *stage) adjusted() int {
	return s.study.Displays[s.plan.Display].Kind.Index(s.study.Tasks[s.plan.Task].Answer.Parameter)
}

// Adjust sets what the participant adjusts, from the next frame on. Settings out
// of range, and those of other trials, change nothing.
func (r *Run) Adjust(x float64) {
	s := &r.show
	if s.plan == nil {
		return
	}
	a := &s.study.Tasks[s.plan.Task].Answer
	if a.By != study.ByAdjustment || !(x >= a.Min && x <= a.Max) {
		return
	}
	i := s.adjusted()
	d := s.displays[s.plan.Display]
	if c, ok := d.(display.Changer); ok && c.Change(i, x) {
		return
	}
	// It goes on as if it had had this setting from onset.
	s.own[i][0] = x
	s.prepare(s.plan.Display, 0, s.own, 0)
	if s.began {
		d.Step(0, s.list)
		s.list.Reset()
		d.Step(s.frame, s.list)
	}
}

// FixationList is what the fixation phase shows: the mark alone.
func (r *Run) FixationList() *display.List {
	s := &r.show
	s.list.Reset()
	s.addMark()
	return s.list
}

func (s *stage) addMark() {
	if s.mark.Shown {
		s.list.AddDot(display.Dot{DiameterDeg: float32(s.mark.DiameterDeg), Contrast: float32(s.mark.Contrast)})
	}
}

// Frame advances the stimulus by n refresh intervals since the last presented
// frame and gives what to show; the first call of a trial ignores n and gives the onset
// frame. nil if no trial has begun. The list is valid until the next call.
func (r *Run) Frame(n int) *display.List {
	s := &r.show
	if s.plan == nil {
		return nil
	}
	if !s.began {
		n, s.began = 0, true
	}
	s.frame += n
	s.list.Reset()
	if len(s.plan.Order) > 0 && s.interval == 0 && s.inInterval() >= s.plan.intervalFrames+s.plan.gapFrames {
		s.present(1)
		n = s.inInterval()
		if n > 0 {
			s.step(0)
			s.list.Reset()
		}
	}
	if len(s.plan.Order) == 0 || s.inInterval() < s.plan.intervalFrames {
		s.step(n)
		s.ramp()
	}
	s.addMark()
	s.digest()
	return s.list
}

// inInterval is the refresh interval since the presentation began.
func (s *stage) inInterval() int {
	return s.frame - s.interval*(s.plan.intervalFrames+s.plan.gapFrames)
}

func (s *stage) step(n int) {
	s.displays[s.plan.Display].Step(n, s.list)
	for _, b := range s.study.Tasks[s.plan.Task].Beside {
		s.displays[b].Step(n, s.list)
	}
}

// ramp scales contrasts with raised-cosine onset and offset ramps.
func (s *stage) ramp() {
	ramp := s.plan.RampFrames
	if ramp == 0 {
		return
	}
	at := min(s.inInterval(), s.plan.intervalFrames-1-s.inInterval())
	if at >= ramp {
		return
	}
	gain := float32(0.5 * (1 - exact.Cos(exact.Pi*(float64(max(at, 0))+0.5)/float64(ramp))))
	for i := range s.list.Dots {
		s.list.Dots[i].Contrast = float32(s.list.Dots[i].Contrast * gain)
	}
	for i := range s.list.Patches {
		s.list.Patches[i].Contrast = float32(s.list.Patches[i].Contrast * gain)
	}
}

// FNV-1a, 64 bits (Fowler, Noll and Vo; RFC 9923), here over 32-bit words
// instead of bytes.
const (
	offset64 = 14695981039346656037
	prime64  = 1099511628211
)

func (s *stage) word(w uint32) { s.hash = (s.hash ^ uint64(w)) * prime64 }

// digest adds the frame to the trial's digest: the refresh interval that it is
// shown in, the numbers of dots and patches, then the IEEE 754 words of all of
// them in order.
func (s *stage) digest() {
	s.word(uint32(s.frame))
	s.word(uint32(len(s.list.Dots)))
	s.word(uint32(len(s.list.Patches)))
	for i := range s.list.Dots {
		d := &s.list.Dots[i]
		s.word(math.Float32bits(d.XDeg))
		s.word(math.Float32bits(d.YDeg))
		s.word(math.Float32bits(d.DiameterDeg))
		s.word(math.Float32bits(d.Contrast))
	}
	for i := range s.list.Patches {
		p := &s.list.Patches[i]
		for _, x := range [...]float32{
			p.XDeg, p.YDeg, p.WidthDeg, p.HeightDeg, p.OrientationDeg, p.SpatialFrequencyCPD,
			p.PhaseRad, p.Contrast, p.RampDeg, p.Carrier, p.Window, p.Mode,
		} {
			s.word(math.Float32bits(x))
		}
	}
}

// Digest is the digest of the stimulus frames shown so far, as 16 hexadecimal digits.
func (r *Run) Digest() string {
	const hex = "0123456789abcdef"
	var b [16]byte
	for i := range b {
		b[i] = hex[r.show.hash>>(60-4*i)&15]
	}
	return string(b[:])
}

// Measurement is what the browser measured in a trial.
type Measurement struct {
	Response     string // name of the choice, "" if none came in time
	ResponseMs   float64
	InputDelayMs float64 // 0 if not told
	Input        string
	OnsetMs      float64
	OffsetMs     float64
	Steps        []int
	IntervalsMs  []float64
	Interrupted  string
	Given        *Given // of answers that are more than a choice
}

// FinishTrial joins the plan with what was measured to the trial's record; nil
// if no trial has begun.
func (r *Run) FinishTrial(m Measurement) *TrialRecord {
	p := r.show.plan
	if p == nil {
		return nil
	}
	spec := &r.study.Blocks[p.Block]
	task := &r.study.Tasks[p.Task]
	t := &TrialRecord{
		Block: spec.Name, Trial: p.Number, Track: p.Track, Practice: p.Practice, Catch: p.Catch,
		Task: task.Name, Display: r.study.Displays[p.Display].Name, Condition: p.Condition,
		Keys: p.Keys, Values: p.Values, Level: p.Level, TruthKeys: r.show.keys, Truths: r.show.truths,
		Response: m.Response, Correct: rightness(task, p, m.Response, m.Interrupted), ResponseMs: m.ResponseMs, Input: m.Input, InputDelayMs: m.InputDelayMs,
		OnsetMs: m.OnsetMs, OffsetMs: m.OffsetMs, RefreshMs: p.RefreshMs,
		FixationSteps: p.FixationFrames, StimulusSteps: p.StimulusFrames,
		Steps: m.Steps, IntervalsMs: m.IntervalsMs, Digest: r.Digest(), Interrupted: m.Interrupted,
		Order: orderText(p.Order), Place: r.placeName(p), Given: m.Given,
	}
	if m.Response == "" {
		t.ResponseMs = math.NaN()
	}
	t.Dropped = dropped(m.Steps)
	if t.Interrupted == "" && r.block.repeats(spec, t.Dropped) {
		t.Interrupted, t.Correct = DroppedFrame, -1
	}
	t.JitterMs = jitter(m.Steps, m.IntervalsMs)
	if t.Given != nil {
		t.Given.complete(r, p, t) // what does not fit is refused with the record
	}
	return t
}

// dropped is the number of refreshes without a frame of their own.
func dropped(steps []int) int {
	n := 0
	for _, step := range steps {
		n += step - 1
	}
	return n
}

// jitter is the standard deviation of the intervals that were not late.
func jitter(steps []int, intervalsMs []float64) float64 {
	n, sum, square := 0.0, 0.0, 0.0
	for i, d := range intervalsMs {
		if i < len(steps) && steps[i] == 1 {
			n++
			sum += d
		}
	}
	if n < 2 {
		return math.NaN()
	}
	mean := sum / n
	for i, d := range intervalsMs {
		if i < len(steps) && steps[i] == 1 {
			square += float64((d - mean) * (d - mean))
		}
	}
	return math.Sqrt(square / (n - 1))
}

// SameTruths tells whether t reports what the display of the trial shown last reports, bit for bit.
func (r *Run) SameTruths(t *TrialRecord) bool {
	if len(t.TruthKeys) != len(r.show.keys) {
		return false
	}
	for i, key := range r.show.keys {
		j := indexOf(t.TruthKeys, key)
		if j < 0 || !sameNumber(t.Truths[j], r.show.truths[i]) {
			return false
		}
	}
	return true
}

// Redraw re-creates a recorded trial's frames and gives the digest that it must have.
func (r *Run) Redraw(t *TrialRecord) string {
	if !r.BeginTrial() {
		return ""
	}
	next := 0
	for i := range t.Steps {
		for ; t.Given != nil && next < len(t.Given.AdjustFrames) && t.Given.AdjustFrames[next] <= float64(i); next++ {
			r.Adjust(t.Given.AdjustValues[next])
		}
		r.Frame(t.Steps[max(i-1, 0)]) // the first ignores it
	}
	return r.Digest()
}
