package visual_test

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"distal/experiments/random"
	"distal/experiments/visual"
)

// Frame durations and counts by arithmetic. The table gives ties (50 ms at
// 90 Hz are 4.5 frames) to the even number, Frames to the longer duration.
func TestFrameDurations(t *testing.T) {
	t.Parallel()
	rows := table(t, "frame_durations.csv")
	if len(rows) < 9 {
		t.Fatalf("%d rows", len(rows))
	}
	for _, row := range rows {
		interval := 1000 / row["refresh_hz"]
		if math.Abs(interval-row["frame_ms"]) > 1e-6 || math.Abs(visual.LateFactor*interval-row["late_frame_limit_1p5_ms"]) > 1e-5 {
			t.Errorf("%v Hz: %v ms", row["refresh_hz"], interval)
		}
		for ms, key := range map[float64]string{50: "frames_50ms", 100: "frames_100ms", 200: "frames_200ms", 500: "frames_500ms", 1000: "frames_1000ms"} {
			want := int(row[key])
			if exact := ms * row["refresh_hz"] / 1000; exact-math.Floor(exact) == 0.5 {
				want = int(exact + 0.5)
			}
			if got := visual.Frames(ms, interval); got != want {
				t.Errorf("%v ms at %v Hz: %d frames, want %d", ms, row["refresh_hz"], got, want)
			}
		}
	}
	if visual.Frames(0, 16) != 0 || visual.Frames(1, 16) != 1 {
		t.Error("nothing takes no frame, anything at least one")
	}
}

// clock gives intervals between frames of a screen as a page reads them: time
// in steps of grainMs, jitter of the stamps, and a share of missed refreshes.
func clock(s *random.Stream, n int, refreshMs, grainMs, jitterMs, missed float64) []float64 {
	list := make([]float64, n)
	at, last := 0.0, 0.0
	for i := range list {
		at += refreshMs
		for s.Float64() < missed {
			at += refreshMs
		}
		stamp := math.Floor((at+jitterMs*s.Normal())/grainMs) * grainMs
		list[i] = stamp - last
		last = stamp
	}
	return list[1:]
}

// Stamps are coarsened to 0.1 ms, or 0.005 ms where the page is isolated (W3C
// High Resolution Time, coarsen time), with a jitter of 0.1 ms; 240 frames
// must tell 59.94 from 60 Hz, which differ by 0.0167 ms a frame.
func TestMeasureRefresh(t *testing.T) {
	t.Parallel()
	s := random.New(5, 0, random.PurposeScreen)
	for _, hz := range []float64{59.94, 60, 75, 90, 100, 120, 144, 165, 240} {
		for _, grain := range []float64{0.1, 0.005} {
			for range 20 {
				r := visual.MeasureRefresh(clock(&s, 241, 1000/hz, grain, 0.1, 0.03))
				if math.Abs(r.IntervalMs-1000/hz) > 0.008 {
					t.Errorf("%v Hz in steps of %v ms: interval %v, want %v", hz, grain, r.IntervalMs, 1000/hz)
				}
				// Differences of two jittered stamps: √2 × 0.1 ms; 0.04 from rounding.
				if r.JitterMs < 0.11 || r.JitterMs > 0.2 {
					t.Errorf("%v Hz: jitter %v ms", hz, r.JitterMs)
				}
			}
		}
	}
}

func TestDroppedFrames(t *testing.T) {
	t.Parallel()
	intervals := make([]float64, 100)
	for i := range intervals {
		intervals[i] = 1000.0 / 60
	}
	intervals[10] *= 2
	intervals[50] *= 4
	r := visual.MeasureRefresh(intervals)
	// 104 refreshes passed, 4 of them without a new frame.
	if want := 100 * 4.0 / 104; math.Abs(r.DroppedPercent-want) > 1e-9 || r.Frames != 100 {
		t.Errorf("%v %% dropped of %d, want %v", r.DroppedPercent, r.Frames, want)
	}
	for i, tt := range []struct {
		delta float64
		steps int
	}{{10, 1}, {1.49 * 10, 1}, {1.51 * 10, 2}, {30, 3}, {0.1, 1}, {0, 1}} {
		if got := visual.Steps(tt.delta, 10); got != tt.steps {
			t.Errorf("case %d: %d steps, want %d", i, got, tt.steps)
		}
	}
	for _, few := range [][]float64{nil, intervals[:9], make([]float64, 20)} {
		if r := visual.MeasureRefresh(few); !math.IsNaN(r.IntervalMs) || !math.IsNaN(r.DroppedPercent) {
			t.Errorf("from %d intervals: %+v", len(few), r)
		}
	}
}

// Linear values and relative luminance (0.2126 R + 0.7152 G + 0.0722 B) of 8-bit
// sRGB values, IEC 61966-2-1 and the definition of relative luminance in WCAG 2.2; eight digits.
func TestSRGB(t *testing.T) {
	t.Parallel()
	const tol = 1e-7
	for _, row := range table(t, "srgb_luminance.csv") {
		r, g, b := visual.LinearFromSRGB(row["r"]/255), visual.LinearFromSRGB(row["g"]/255), visual.LinearFromSRGB(row["b"]/255)
		if math.Abs(r-row["linear_r"]) > tol {
			t.Errorf("%v: linear %v, want %v", row["r"], r, row["linear_r"])
		}
		if got := 0.2126*r + 0.7152*g + 0.0722*b; math.Abs(got-row["relative_luminance"]) > tol {
			t.Errorf("%v %v %v: luminance %v, want %v", row["r"], row["g"], row["b"], got, row["relative_luminance"])
		}
	}
	for v := range 256 {
		if got := 255 * visual.SRGBFromLinear(visual.LinearFromSRGB(float64(v)/255)); math.Abs(got-float64(v)) > 1e-5 {
			t.Errorf("%d came back as %v", v, got)
		}
	}
	rapid.Check(t, func(t *rapid.T) {
		a, b := rapid.Float64Range(0, 1).Draw(t, "a"), rapid.Float64Range(0, 1).Draw(t, "b")
		if a+1e-6 < b && visual.LinearFromSRGB(a) >= visual.LinearFromSRGB(b) {
			t.Fatalf("not rising from %v to %v", a, b)
		}
	})
}
