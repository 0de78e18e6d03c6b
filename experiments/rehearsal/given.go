package rehearsal

import (
	"math"

	"distal/experiments/exact"
	"distal/experiments/run"
	"distal/experiments/study"
)

// How simulated observers answer where it is not by choice (not estimates of people).
const (
	pointingSDDeg   = 12.0
	settingSDLog10  = 0.06 // of an adjustment, on a log10 scale
	settingSDShare  = 0.05 // of its range, on a linear one
	adjustmentSteps = 6
	adjustmentMs    = 3000.0
)

// given makes up what an answer consists of besides a choice, nil if nothing. An
// adjustment ends the stimulus: its later frames are cut off.
func (w *walk) given(p *run.TrialPlan, task *study.Task, m *run.Measurement) *run.Given {
	nan := math.NaN()
	g := &run.Given{ResponseDeg: nan, Confidence: nan, SureMs: nan}
	switch task.Answer.By {
	case study.ByDial:
		g.ResponseDeg = w.point(p, task)
	case study.ByAdjustment:
		frames := min(len(m.Steps), max(1, int(adjustmentMs/p.RefreshMs)))
		m.Steps, m.IntervalsMs = m.Steps[:frames], m.IntervalsMs[:frames]
		w.adjust(g, p, &task.Answer, frames)
	case study.ByHolding:
		whole := 0.0
		for _, d := range m.IntervalsMs {
			whole += d
		}
		from := round2(whole * (0.1 + float64(0.1*w.answer.Float64())))
		g.HeldFromMs, g.HeldToMs = []float64{from}, []float64{round2(from + float64((whole-from)*(0.3+float64(0.5*w.answer.Float64()))))}
	default:
		if task.Confidence.Steps == 0 {
			return nil
		}
	}
	if task.Confidence.Steps > 0 {
		g.Confidence, g.SureMs = float64(1+w.answer.Intn(task.Confidence.Steps)), round2(300+float64(500*w.answer.Float64()))
	}
	return g
}

// point gives a direction about the right one, or any in lapses and where none is right.
func (w *walk) point(p *run.TrialPlan, task *study.Task) float64 {
	noise, lapse := pointingSDDeg*w.answer.Normal(), w.answer.Float64() < w.observer.Lapse
	if deg, known := w.run.Target(p); known && !lapse {
		x := deg + noise
		return min(359.99, max(0, round2(x-float64(360*math.Floor(x/360)))))
	}
	return math.Floor(360 * w.answer.Float64())
}

// adjust goes from the start to the observer's match, the threshold, in equal steps.
func (w *walk) adjust(g *run.Given, p *run.TrialPlan, a *study.Answer, frames int) {
	end := w.observer.Threshold
	if a.Scale == study.LogScale {
		end *= exact.Exp10(settingSDLog10 * w.answer.Normal())
	} else {
		end += float64(settingSDShare * (a.Max - a.Min) * w.answer.Normal())
	}
	end = max(a.Min, min(a.Max, end))
	for i := range adjustmentSteps {
		share := float64(i+1) / adjustmentSteps
		frame := math.Floor(share * float64(frames-1))
		x := max(a.Min, min(a.Max, p.Start+float64(share*(end-p.Start))))
		g.AdjustFrames, g.AdjustValues = append(g.AdjustFrames, frame), append(g.AdjustValues, x)
		g.AdjustMs = append(g.AdjustMs, round2(frame*p.RefreshMs))
	}
}
