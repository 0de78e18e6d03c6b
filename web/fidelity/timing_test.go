package fidelity_test

import (
	"math"
	"testing"

	"distal/web/fidelity"
)

const refresh = 1000.0 / 60

// check compares the record of a trial with what the observer read from the
// canvas. How fast the machine is does not matter.
func check(t *testing.T, h fidelity.Hold, m *fidelity.Marked) {
	t.Helper()
	shown, steps := m.Shown(), m.Measurement.FrameSteps
	if m.Measurement.Interrupted != "" || len(shown) == 0 || len(shown) != len(steps) || len(steps) != len(m.Measurement.IntervalsMs) {
		t.Fatalf("%+v: observer saw %d frames, the record has %d steps: %+v", h, len(shown), len(steps), m.Measurement)
	}
	at := 0
	for i, s := range shown {
		if s.Place != at {
			t.Errorf("%+v: frame %d shows interval %d, recorded %d", h, i, s.Place, at)
		}
		// The recorded time lies between when the browser says the frame was due and when it was ready.
		recorded := *m.Measurement.OnsetMs + float64(at)*refresh
		if recorded < s.FrameMs-0.5*refresh || recorded > s.AtMs+0.5*refresh {
			t.Errorf("%+v: frame %d was due at %.2f and ready at %.2f ms, recorded at %.2f", h, i, s.FrameMs, s.AtMs, recorded)
		}
		if m.HeldUntilMs > 0 && s.AtMs > m.HeldUntilMs && recorded < m.HeldUntilMs-1.5*refresh {
			t.Errorf("%+v: frame %d is dated %.2f ms, but the page hung until %.2f", h, i, recorded, m.HeldUntilMs)
		}
		at += steps[i]
	}
	intervals, _ := m.Recorded()
	if duration := *m.Measurement.OffsetMs - *m.Measurement.OnsetMs; math.Abs(duration-float64(intervals)*refresh) > 0.5*refresh {
		t.Errorf("%+v: %d intervals recorded, offset after %.2f ms", h, intervals, duration)
	}
	if last := steps[len(steps)-1]; intervals < h.StimulusFrames || intervals-last >= h.StimulusFrames {
		t.Errorf("%+v: steps %v do not end the stimulus at its plan", h, steps)
	}
}

// What is recorded is what an observer of the canvas saw, frame by frame.
func TestRecorderAgreesWithObserver(t *testing.T) {
	b := open(t)
	for _, frames := range []int{1, 2, 3, 6, 12, 60} {
		h := fidelity.Hold{StimulusFrames: frames, RefreshMs: refresh}
		m, err := b.RunMarked(h)
		if err != nil {
			t.Fatal(err)
		}
		check(t, h, &m)
		intervals, dropped := m.Recorded()
		t.Logf("%d planned: %d intervals, %d dropped", frames, intervals, dropped)
	}
}

// A task that holds the page up is in the record as the refreshes that passed,
// and the disc afterwards is where the time says.
func TestHeldUpFrames(t *testing.T) {
	b := open(t)
	for _, hold := range []float64{30, 80, 200} {
		h := fidelity.Hold{StimulusFrames: 30, RefreshMs: refresh, HoldMs: hold, HoldAfter: 5}
		m, err := b.RunMarked(h)
		if err != nil {
			t.Fatal(err)
		}
		if held := m.HeldUntilMs - m.HeldFromMs; held < hold {
			t.Fatalf("the page was held up for %.1f ms only", held)
		}
		check(t, h, &m)
		intervals, dropped := m.Recorded()
		if least := int(hold/refresh) - 1; dropped < least {
			t.Errorf("%v ms: %d dropped, at least %d are", hold, dropped, least)
		}
		t.Logf("%v ms: %d intervals, %d dropped", hold, intervals, dropped)
	}
}

// A key pressed at a known time gives the time since the recorded onset.
func TestResponseTimes(t *testing.T) {
	b := open(t)
	for _, after := range []float64{150, 263, 401} {
		h := fidelity.Hold{StimulusFrames: 3, RefreshMs: refresh, AnswerAfterMs: after}
		m, err := b.RunMarked(h)
		if err != nil {
			t.Fatal(err)
		}
		check(t, h, &m)
		if m.Measurement.RTMs == nil || m.Measurement.Response == nil || *m.Measurement.Response != "yes" {
			t.Fatalf("%+v: no answer: %+v", h, m.Measurement)
		}
		if got, want := *m.Measurement.RTMs, m.PressedAtMs-*m.Measurement.OnsetMs; math.Abs(got-want) > 2 {
			t.Errorf("pressed %.2f ms after the recorded onset, recorded as %.2f", want, got)
		}
		t.Logf("response after %.2f ms, %.2f after the frame with the onset was ready", *m.Measurement.RTMs, m.PressedAtMs-m.Shown()[0].AtMs)
	}
}

// A study of dots and one of patches come to a trial in the browser and have its frames drawn.
func TestFrameCost(t *testing.T) {
	b := open(t)
	for _, name := range []string{"motion-coherence", "grating-direction"} {
		c, err := b.FrameCost(name, 12)
		if err != nil {
			t.Fatal(err)
		}
		if len(c.MainMs) != 12 || c.Dots+c.Patches == 0 {
			t.Errorf("%s: %d frames, %d dots, %d patches", name, len(c.MainMs), c.Dots, c.Patches)
		}
		t.Logf("%s: %d dots, %d patches, main thread %.2f ms, raster %.1f ms (medians)", name, c.Dots, c.Patches, fidelity.Quantile(c.MainMs, 0.5), fidelity.Quantile(c.RasterMs, 0.5))
	}
}
