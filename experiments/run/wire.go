package run

import (
	"errors"
	"math"
	"strconv"

	"distal/experiments/study"
	"distal/experiments/value"
	"distal/experiments/visual"
)

// Encode gives the wire form of a step: names instead of indices.
func (s Step) Encode(st *study.Study) value.Value {
	o := &object{}
	o.text("step", StepKindNames[s.Kind]).number("progress", s.Progress).text("block", s.Block).
		number("index", float64(s.Index)).text("code", s.Code)
	if s.Trial == nil {
		return value.Object(o.put("trial", value.Value{}).members...)
	}
	p := s.Trial
	t := &object{}
	if !math.IsNaN(p.Start) {
		t.number("start", p.Start)
	}
	t.text("block", st.Blocks[p.Block].Name).number("number", float64(p.Number)).flag("practice", p.Practice).flag("catch", p.Catch).
		text("task", st.Tasks[p.Task].Name).text("display", st.Displays[p.Display].Name).text("condition", p.Condition).
		number("level", p.Level).numberMap("values", p.Keys, p.Values).
		number("correct_choice", float64(p.CorrectChoice)).number("fixation_frames", float64(p.FixationFrames)).
		number("stimulus_frames", float64(p.StimulusFrames)).number("ramp_frames", float64(p.RampFrames)).
		number("refresh_ms", p.RefreshMs).flag("feedback", p.Feedback)
	return value.Object(o.put("trial", value.Object(t.members...)).members...)
}

// DecodeMeasurement reads what the browser measured in a trial.
func DecodeMeasurement(v value.Value) (Measurement, error) {
	f := &fields{v: v}
	m := Measurement{
		Response: f.textOrNull("response"), ResponseMs: f.numberOrNull("rt_ms"), Input: f.text("input"),
		OnsetMs: f.numberOrNull("onset_ms"), OffsetMs: f.numberOrNull("offset_ms"),
		IntervalsMs: f.numbers("intervals_ms"), Interrupted: f.text("interrupted"),
	}
	total := 0.0
	for _, x := range f.numbers("frame_steps") {
		total += x
		if !(x >= 1) || total > maxFrames || x != math.Floor(x) {
			f.fail("frame_steps must be whole numbers from 1, " + strconv.Itoa(maxFrames) + " in all at most")
			break
		}
		m.Steps = append(m.Steps, int(x))
	}
	m.InputDelayMs = f.optional("input_delay_ms")
	m.Given = f.given(false)
	f.strict()
	return m, f.err
}

// Calibrate computes what calibration settings mean. The request names what it
// is about in "of":
//
//	card      widths_css_px, device_pixel_ratio            → css_px_per_mm, sd_css_px_per_mm
//	distance  offsets_mm (blind spot; none: stated)        → distance_mm, sd_mm
//	refresh   intervals_ms                                 → refresh_ms, jitter_ms, dropped_percent, frames
//	field     width_mm, height_mm, distance_mm             → width_deg, height_deg
//	check     a display_check record's content             → accepted, reason
//
// card and distance also give accepted and reason, "" where accepted.
func Calibrate(s *study.Study, v value.Value) (value.Value, error) {
	f := &fields{v: v}
	o := &object{}
	switch of := f.text("of"); of {
	case "card":
		calibrateCard(s, f, o)
	case "distance":
		calibrateDistance(s, f, o)
	case "refresh":
		r := visual.MeasureRefresh(f.numbers("intervals_ms"))
		o.number("refresh_ms", r.IntervalMs).number("jitter_ms", r.JitterMs).
			number("dropped_percent", r.DroppedPercent).number("frames", float64(r.Frames))
	case "field":
		width, height, distance := f.positive("width_mm"), f.positive("height_mm"), f.positive("distance_mm")
		o.number("width_deg", visual.SizeDeg(width, distance)).number("height_deg", visual.SizeDeg(height, distance))
	case "check":
		rec := Record{Kind: KindDisplayCheck}
		f.content(&rec)
		if f.err == nil {
			accept(o, CheckDisplay(s, rec.Check))
		}
	default:
		f.fail("of must be card, distance, refresh, field or check")
	}
	if f.err != nil {
		return value.Value{}, errors.New("calibration: " + f.err.Error())
	}
	return value.Object(o.members...), nil
}

func accept(o *object, reason string) { o.flag("accepted", reason == "").text("reason", reason) }

func calibrateCard(s *study.Study, f *fields, o *object) {
	c := &Card{WidthsCSSPx: f.numbers("widths_css_px"), PixelRatio: f.positive("device_pixel_ratio")}
	if f.err != nil {
		return
	}
	mean, sd := visual.MeanSD(c.WidthsCSSPx)
	c.PxPerMm = mean / visual.CardWidthMm
	o.number("css_px_per_mm", c.PxPerMm).number("sd_css_px_per_mm", sd/visual.CardWidthMm)
	accept(o, CheckCard(s, c))
}

func calibrateDistance(s *study.Study, f *fields, o *object) {
	d := &Distance{Method: study.DistanceNames[s.Screen.Distance], OffsetsMm: f.numbers("offsets_mm")}
	if f.err != nil {
		return
	}
	if s.Screen.Distance == study.StatedDistance {
		d.DistanceMm, d.SDMm = s.Screen.StatedDistanceMm, float64(statedSpread*s.Screen.StatedDistanceMm)
	} else {
		// One setting with a wandering eye does not move the median.
		offset := visual.Median(append([]float64(nil), d.OffsetsMm...))
		_, sd := visual.MeanSD(d.OffsetsMm)
		var eye float64
		d.DistanceMm, eye = visual.BlindSpotDistance(offset)
		// Eye-to-eye spread and the settings' own standard error add as variances.
		own := d.DistanceMm * sd / offset * medianError / math.Sqrt(float64(max(len(d.OffsetsMm), 1)))
		d.SDMm = math.Sqrt(float64(eye*eye) + float64(own*own))
	}
	o.number("distance_mm", d.DistanceMm).number("sd_mm", d.SDMm)
	accept(o, CheckDistance(s, d))
}

// medianError is the standard error of a median in standard errors of the
// mean, for a large normal sample, √(π/2) (Kenney JF, Keeping ES 1962,
// Mathematics of Statistics, part 1, 3rd ed., p. 211: from memory); above that of few settings, so on the careful side.
const medianError = 1.2533141373155003

// statedSpread is how well people keep a stated distance, as a share of it
// (common practice, no source).
const statedSpread = 0.1
