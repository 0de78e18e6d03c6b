package run

import (
	"errors"
	"math"
	"strconv"
	"strings"

	"distal/experiments/value"
)

// Limits of what a record may hold.
const (
	maxFrames = 100_000 // refresh intervals of one stimulus: 7 minutes at 240 Hz
	maxList   = 1000
	maxString = 20_000
)

// DecodeRecord reads one record in its wire form. Unknown keys, wrong types and
// values out of range are errors that name the key.
func DecodeRecord(v value.Value) (*Record, error) {
	if v.Kind != value.Mapping {
		return nil, errors.New("a record is a JSON object")
	}
	f := &fields{v: v}
	r := &Record{Sequence: f.whole("sequence"), AtMs: f.number("at_ms"), Bundle: f.text("bundle")}
	name := f.text("kind")
	r.Kind = Kind(indexOf(KindNames, name))
	if f.err == nil && r.Kind < 0 {
		return nil, errors.New("kind " + strconv.Quote(name) + " is not known")
	}
	if f.err == nil && r.Sequence < 1 {
		return nil, errors.New("sequence must be 1 or more")
	}
	f.content(r)
	f.strict()
	if f.err != nil {
		return nil, f.err
	}
	return r, nil
}

func indexOf(list []string, s string) int {
	for i := range list {
		if list[i] == s {
			return i
		}
	}
	return -1
}

// content reads what belongs to the record's kind.
func (f *fields) content(r *Record) {
	switch r.Kind {
	case KindConsent:
		r.Consent = &Consent{f.text("text_digest"), f.text("text_version"), f.text("language"), f.whole("items")}
	case KindScreening:
		s := &Screening{CautionsRead: f.flag("cautions_read"), AgeYears: f.whole("age_years")}
		for _, m := range f.mapping("answers") {
			if m.Value.Kind != value.Boolean {
				f.fail("answers." + m.Key + " must be true or false")
			}
			s.Names, s.Yes = append(s.Names, m.Key), append(s.Yes, m.Value.Bool)
		}
		r.Screening = s
	case KindCard:
		r.Card = &Card{
			f.numbers("widths_css_px"), f.positive("device_pixel_ratio"), f.whole("screen_width_css_px"), f.whole("screen_height_css_px"),
			f.positive("css_px_per_mm"), f.number("sd_css_px_per_mm"), f.whole("attempts"),
		}
	case KindDistance:
		r.Distance = &Distance{f.text("method"), f.numbers("offsets_mm"), f.text("eye"), f.positive("distance_mm"), f.number("sd_mm")}
	case KindDisplayCheck:
		r.Check = &DisplayCheck{
			f.positive("refresh_ms"), f.number("jitter_ms"), f.number("dropped_percent"), f.whole("frames"),
			f.positive("width_deg"), f.positive("height_deg"), f.whole("canvas_width_px"), f.whole("canvas_height_px"),
			f.positive("device_pixel_ratio"), f.flag("float_target"), f.text("renderer"), f.flag("cross_origin_isolated"),
		}
	case KindTrial:
		r.Trial = f.trial()
	case KindEvent:
		r.Event = &Event{f.text("name"), f.text("detail")}
	case KindAnswers:
		r.Answers = f.answers()
	case KindRefusal:
		r.Refusal = &Refusal{f.text("step"), f.text("reason"), f.text("detail")}
	}
}

func (f *fields) trial() *TrialRecord {
	t := &TrialRecord{
		Block: f.text("block"), Trial: f.whole("trial"), Track: f.whole("track"),
		Practice: f.flag("practice"), Catch: f.flag("catch"), Task: f.text("task"), Display: f.text("display"),
		Condition: f.text("condition"), Level: f.numberOrNull("level"),
		Response: f.textOrNull("response"), Correct: f.correct("correct"), ResponseMs: f.numberOrNull("rt_ms"),
		Input: f.text("input"), OnsetMs: f.numberOrNull("onset_ms"), OffsetMs: f.numberOrNull("offset_ms"),
		RefreshMs: f.positive("refresh_ms"), FixationSteps: f.whole("fixation_frames"), StimulusSteps: f.whole("stimulus_frames"),
		IntervalsMs: f.numbers("intervals_ms"), Dropped: f.whole("dropped_frames"), JitterMs: f.numberOrNull("jitter_ms"),
		Digest: f.text("digest"), Interrupted: f.text("interrupted"),
	}
	steps, err := DecodeSteps(f.text("frame_steps"))
	if err != nil {
		f.fail("frame_steps: " + err.Error())
	}
	t.Steps = steps
	t.Keys, t.Values = f.numberMap("values")
	t.TruthKeys, t.Truths = f.numberMap("truths")
	if _, ok := f.v.Get("interval_order"); ok {
		t.Order = f.text("interval_order")
	}
	t.InputDelayMs = f.optional("input_delay_ms")
	if _, ok := f.v.Get("place"); ok {
		t.Place = f.text("place")
	}
	t.Given = f.given(true)
	return t
}

func (f *fields) answers() *Answers {
	a := &Answers{}
	for _, m := range f.mapping("answers") {
		var x Answer
		switch m.Value.Kind {
		case value.Null:
			x.Null = true
		case value.Text:
			x.IsText, x.Text = true, m.Value.Str
		case value.Numeric:
			x.Number = m.Value.Num
		case value.Boolean:
			x.IsBool = true
			if m.Value.Bool {
				x.Number = 1
			}
		default:
			f.fail("answers." + m.Key + " must be text, a number, true, false or null")
		}
		a.Names, a.Values = append(a.Names, m.Key), append(a.Values, x)
	}
	return a
}

// fields reads the members of one mapping and keeps the first error.
type fields struct {
	v     value.Value
	asked []string
	err   error
}

func (f *fields) fail(message string) {
	if f.err == nil {
		f.err = errors.New(message)
	}
}

func (f *fields) get(key string, kind value.Kind) value.Value {
	f.asked = append(f.asked, key)
	v, ok := f.v.Get(key)
	switch {
	case !ok:
		f.fail(key + " is missing")
	case v.Kind != kind:
		f.fail(key + " must be " + value.KindNames[kind] + ", not " + value.KindNames[v.Kind])
	}
	return v
}

func (f *fields) number(key string) float64 { return f.get(key, value.Numeric).Num }

func (f *fields) positive(key string) float64 {
	x := f.number(key)
	if f.err == nil && !(x > 0) {
		f.fail(key + " must be above 0")
	}
	return x
}

func (f *fields) isNull(key string) bool {
	v, ok := f.v.Get(key)
	if ok && v.Kind == value.Null {
		f.asked = append(f.asked, key)
		return true
	}
	return false
}

func (f *fields) numberOrNull(key string) float64 {
	if f.isNull(key) {
		return math.NaN()
	}
	return f.number(key)
}

// optional is a number above 0, or 0 where it is left out.
func (f *fields) optional(key string) float64 {
	if _, ok := f.v.Get(key); !ok {
		return 0
	}
	return f.positive(key)
}

func (f *fields) textOrNull(key string) string {
	if f.isNull(key) {
		return ""
	}
	return f.text(key)
}

func (f *fields) correct(key string) int {
	if f.isNull(key) {
		return -1
	}
	if f.flag(key) {
		return 1
	}
	return 0
}

func (f *fields) whole(key string) int {
	x := f.number(key)
	if f.err == nil && (x != math.Floor(x) || math.Abs(x) > 1e9) {
		f.fail(key + " must be a whole number")
		return 0
	}
	return int(x)
}

func (f *fields) text(key string) string {
	s := f.get(key, value.Text).Str
	if len(s) > maxString {
		f.fail(key + " is too long")
	}
	return s
}

func (f *fields) flag(key string) bool { return f.get(key, value.Boolean).Bool }

func (f *fields) numbers(key string) []float64 {
	v := f.get(key, value.Sequence)
	if len(v.Items) > maxFrames {
		f.fail(key + " has too many numbers")
		return nil
	}
	list := make([]float64, 0, len(v.Items))
	for i := range v.Items {
		if v.Items[i].Kind != value.Numeric {
			f.fail(key + " must hold numbers")
			return nil
		}
		list = append(list, v.Items[i].Num)
	}
	return list
}

func (f *fields) mapping(key string) []value.Member {
	v := f.get(key, value.Mapping)
	if len(v.Members) > maxList {
		f.fail(key + " has too many keys")
		return nil
	}
	return v.Members
}

func (f *fields) numberMap(key string) (keys []string, numbers []float64) {
	for _, m := range f.mapping(key) {
		if m.Value.Kind != value.Numeric {
			f.fail(key + "." + m.Key + " must be a number")
		}
		keys, numbers = append(keys, m.Key), append(numbers, m.Value.Num)
	}
	return keys, numbers
}

func (f *fields) strict() {
	for _, m := range f.v.Members {
		if indexOf(f.asked, m.Key) < 0 {
			f.fail("key " + strconv.Quote(m.Key) + " is not known in this kind of record")
			return
		}
	}
}

// Encode gives the wire form of r.
func (r *Record) Encode() value.Value {
	o := &object{}
	o.number("sequence", float64(r.Sequence)).text("kind", KindNames[r.Kind]).number("at_ms", r.AtMs).text("bundle", r.Bundle)
	switch r.Kind {
	case KindConsent:
		o.text("text_digest", r.Consent.TextDigest).text("text_version", r.Consent.Version).
			text("language", r.Consent.Language).number("items", float64(r.Consent.Items))
	case KindScreening:
		var answers []value.Member
		for i, name := range r.Screening.Names {
			answers = append(answers, value.Member{Key: name, Value: value.Bool(r.Screening.Yes[i])})
		}
		o.flag("cautions_read", r.Screening.CautionsRead).number("age_years", float64(r.Screening.AgeYears)).
			put("answers", value.Object(answers...))
	case KindCard:
		c := r.Card
		o.put("widths_css_px", value.Numbers(c.WidthsCSSPx)).number("device_pixel_ratio", c.PixelRatio).
			number("screen_width_css_px", float64(c.ScreenWidthPx)).number("screen_height_css_px", float64(c.ScreenHeightPx)).
			number("css_px_per_mm", c.PxPerMm).number("sd_css_px_per_mm", c.SDPxPerMm).number("attempts", float64(c.Attempts))
	case KindDistance:
		d := r.Distance
		o.text("method", d.Method).put("offsets_mm", value.Numbers(d.OffsetsMm)).text("eye", d.Eye).
			number("distance_mm", d.DistanceMm).number("sd_mm", d.SDMm)
	case KindDisplayCheck:
		c := r.Check
		o.number("refresh_ms", c.RefreshMs).number("jitter_ms", c.JitterMs).number("dropped_percent", c.DroppedPercent).
			number("frames", float64(c.Frames)).number("width_deg", c.WidthDeg).number("height_deg", c.HeightDeg).
			number("canvas_width_px", float64(c.CanvasWidthPx)).number("canvas_height_px", float64(c.CanvasHeightPx)).
			number("device_pixel_ratio", c.PixelRatio).flag("float_target", c.FloatTarget).
			text("renderer", c.Renderer).flag("cross_origin_isolated", c.CrossOriginIsol)
	case KindTrial:
		o.trial(r.Trial)
	case KindEvent:
		o.text("name", r.Event.Name).text("detail", r.Event.Detail)
	case KindAnswers:
		o.answers(r.Answers)
	case KindRefusal:
		o.text("step", r.Refusal.Step).text("reason", r.Refusal.Reason).text("detail", r.Refusal.Detail)
	}
	return value.Object(o.members...)
}

// object collects members.
type object struct{ members []value.Member }

func (o *object) put(key string, v value.Value) *object {
	o.members = append(o.members, value.Member{Key: key, Value: v})
	return o
}

func (o *object) text(key, s string) *object { return o.put(key, value.String(s)) }

func (o *object) flag(key string, b bool) *object { return o.put(key, value.Bool(b)) }

// number writes NaN as null, and infinities too, for which JSON has no number.
func (o *object) number(key string, x float64) *object {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return o.put(key, value.Value{})
	}
	return o.put(key, value.Number(x))
}

func (o *object) numberMap(key string, keys []string, numbers []float64) *object {
	members := make([]value.Member, len(keys))
	for i := range keys {
		members[i] = value.Member{Key: keys[i], Value: value.Number(numbers[i])}
	}
	return o.put(key, value.Object(members...))
}

func (o *object) trial(t *TrialRecord) {
	o.text("block", t.Block).number("trial", float64(t.Trial)).number("track", float64(t.Track)).
		flag("practice", t.Practice).flag("catch", t.Catch).text("task", t.Task).text("display", t.Display).
		text("condition", t.Condition).numberMap("values", t.Keys, t.Values).number("level", t.Level).
		numberMap("truths", t.TruthKeys, t.Truths)
	if t.Response == "" {
		o.put("response", value.Value{})
	} else {
		o.text("response", t.Response)
	}
	if t.Correct < 0 {
		o.put("correct", value.Value{})
	} else {
		o.flag("correct", t.Correct == 1)
	}
	o.number("rt_ms", t.ResponseMs).text("input", t.Input).number("onset_ms", t.OnsetMs).number("offset_ms", t.OffsetMs).
		number("refresh_ms", t.RefreshMs).number("fixation_frames", float64(t.FixationSteps)).
		number("stimulus_frames", float64(t.StimulusSteps)).text("frame_steps", EncodeSteps(t.Steps)).
		put("intervals_ms", value.Numbers(t.IntervalsMs)).number("dropped_frames", float64(t.Dropped)).
		number("jitter_ms", t.JitterMs).text("digest", t.Digest).text("interrupted", t.Interrupted)
	if t.InputDelayMs > 0 {
		o.number("input_delay_ms", t.InputDelayMs)
	}
	if t.Order != "" {
		o.text("interval_order", t.Order)
	}
	if t.Place != "" {
		o.text("place", t.Place)
	}
	if t.Given != nil {
		o.put("given", t.Given.encode())
	}
}

func (o *object) answers(a *Answers) {
	members := make([]value.Member, len(a.Names))
	for i, x := range a.Values {
		v := value.Number(x.Number)
		switch {
		case x.Null:
			v = value.Value{}
		case x.IsText:
			v = value.String(x.Text)
		case x.IsBool:
			v = value.Bool(x.Number != 0)
		}
		members[i] = value.Member{Key: a.Names[i], Value: v}
	}
	o.put("answers", value.Object(members...))
}

// EncodeSteps writes frame steps run-length coded, e.g. "1x29 2 1x10".
func EncodeSteps(steps []int) string {
	var b strings.Builder
	for i := 0; i < len(steps); {
		j := i
		for j < len(steps) && steps[j] == steps[i] {
			j++
		}
		if i > 0 {
			b.WriteByte(' ')
		}
		b.WriteString(strconv.Itoa(steps[i]))
		if j-i > 1 {
			b.WriteByte('x')
			b.WriteString(strconv.Itoa(j - i))
		}
		i = j
	}
	return b.String()
}

// DecodeSteps reads what EncodeSteps wrote. All steps together may pass through
// 100,000 refresh intervals at most, which bounds the work of re-creating them.
func DecodeSteps(s string) ([]int, error) {
	if s == "" {
		return nil, nil
	}
	var steps []int
	total := 0
	for _, part := range strings.Split(s, " ") {
		size, times, repeated := strings.Cut(part, "x")
		step, err := strconv.Atoi(size)
		if err != nil || step < 1 || step > maxFrames {
			return nil, errors.New(strconv.Quote(part) + " is not a step")
		}
		n := 1
		if repeated {
			if n, err = strconv.Atoi(times); err != nil || n < 2 {
				return nil, errors.New(strconv.Quote(part) + " is not a repeated step")
			}
		}
		if n > maxFrames || step*n > maxFrames-total {
			return nil, errors.New("the steps pass through more than " + strconv.Itoa(maxFrames) + " refresh intervals")
		}
		total += step * n
		for range n {
			steps = append(steps, step)
		}
	}
	return steps, nil
}
