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
	hash     uint64
	keys     []string
	truths   []float64
	add      func(string, float64)
}

func (s *stage) open(st *study.Study) {
	s.displays = make([]display.Display, len(st.Displays))
	dots, patches, batches := 0, 0, 0
	for i := range st.Displays {
		s.displays[i] = st.Displays[i].Kind.New(st.Displays[i].Values)
		d, p, b := s.displays[i].Size()
		dots, patches, batches = max(dots, d), max(patches, p), max(batches, b)
	}
	s.list = display.NewList(dots+1, patches, batches+1)
	s.add = func(name string, x float64) {
		s.keys, s.truths = append(s.keys, name), append(s.truths, x)
	}
}

// BeginTrial prepares the trial that Next planned; false if the next step is none.
func (r *Run) BeginTrial() bool {
	step := r.Next()
	if step.Kind != StepTrial {
		return false
	}
	r.show.begin(r.study, r.assignment.Seed, step.Trial)
	return true
}

func (s *stage) begin(st *study.Study, seed uint64, p *TrialPlan) {
	spec := &st.Displays[p.Display]
	s.plan, s.frame, s.began = p, 0, false
	s.mark = st.Tasks[p.Task].FixationMark
	s.hash = offset64
	s.keys, s.truths = nil, nil
	s.displays[p.Display].Begin(display.Trial{
		Values: p.values, Seed: seed, Number: uint32(p.Number), IntervalMs: p.RefreshMs, XDeg: spec.XDeg, YDeg: spec.YDeg,
	})
	s.displays[p.Display].Truths(s.add)
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
	s.displays[s.plan.Display].Step(n, s.list)
	s.ramp()
	s.addMark()
	s.digest()
	return s.list
}

// ramp scales contrasts with raised-cosine onset and offset ramps.
func (s *stage) ramp() {
	ramp := s.plan.RampFrames
	if ramp == 0 {
		return
	}
	at := min(s.frame, s.plan.StimulusFrames-1-s.frame)
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
	Response    string // name of the choice, "" if none came in time
	ResponseMs  float64
	Input       string
	OnsetMs     float64
	OffsetMs    float64
	Steps       []int
	IntervalsMs []float64
	Interrupted string
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
		Response: m.Response, Correct: rightness(task, p, m.Response, m.Interrupted), ResponseMs: m.ResponseMs, Input: m.Input,
		OnsetMs: m.OnsetMs, OffsetMs: m.OffsetMs, RefreshMs: p.RefreshMs,
		FixationSteps: p.FixationFrames, StimulusSteps: p.StimulusFrames,
		Steps: m.Steps, IntervalsMs: m.IntervalsMs, Digest: r.Digest(), Interrupted: m.Interrupted,
	}
	if m.Response == "" {
		t.ResponseMs = math.NaN()
	}
	t.Dropped = dropped(m.Steps)
	if t.Interrupted == "" && r.block.repeats(spec, t.Dropped) {
		t.Interrupted, t.Correct = DroppedFrame, -1
	}
	t.JitterMs = jitter(m.Steps, m.IntervalsMs)
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
	for i := range t.Steps {
		if i == 0 {
			r.Frame(0)
			continue
		}
		r.Frame(t.Steps[i-1])
	}
	return r.Digest()
}
