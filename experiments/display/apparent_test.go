package display

import (
	"math"
	"testing"
)

// show gives the dots of each of n frames.
func show(d Display, n int) [][]Dot {
	l := NewList(d.Size())
	var out [][]Dot
	for i := range n {
		l.Reset()
		d.Step(min(i, 1), l)
		out = append(out, append([]Dot(nil), l.Dots...))
	}
	return out
}

// Two strokes of 100 ms with 50 ms between them at 60 Hz: 6 frames shown, 3 empty.
func TestTwoStrokes(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(apparentKind, map[int]float64{apparentLength: 3, apparentFlash: 100, apparentGap: 50}, 1, 1000.0/60)
	for i, dots := range show(d, 36) {
		stroke, within := i/9, i%9
		if within >= 6 {
			if len(dots) != 0 {
				t.Fatalf("frame %d is not empty", i)
			}
			continue
		}
		want := float32(-1.5)
		if stroke%2 == 1 {
			want = 1.5
		}
		if len(dots) != 1 || dots[0].XDeg != want || dots[0].YDeg != 0 {
			t.Fatalf("frame %d: %v, want x = %v", i, dots, want)
		}
	}
	got := map[string]float64{}
	d.Truths(func(name string, x float64) { got[name] = x })
	if math.Abs(got["onset_asynchrony_ms"]-150) > 1e-9 || math.Abs(got["speed_deg_per_s"]-20) > 1e-9 {
		t.Errorf("truths %v, want 150 ms and 3 deg / 0.15 s", got)
	}
}

// Sampled and smooth motion follow the same path: at each flash's onset both are at the same place.
func TestSampledAndSmoothAgree(t *testing.T) {
	t.Parallel()
	for _, order := range []float64{orderBackAndForth, orderOnce} {
		set := map[int]float64{apparentStations: 5, apparentLength: 8, apparentOrder: order, apparentDirection: 60, apparentFlash: 50, apparentGap: 50}
		sampled, _ := openDisplay(apparentKind, set, 1, 1000.0/60)
		set[apparentSmooth] = 1
		smooth, _ := openDisplay(apparentKind, set, 1, 1000.0/60)
		a, b := show(sampled, 30), show(smooth, 30)
		for i := 0; i < 30; i += 6 {
			if len(a[i]) != 1 || math.Hypot(float64(a[i][0].XDeg-b[i][0].XDeg), float64(a[i][0].YDeg-b[i][0].YDeg)) > 1e-6 {
				t.Fatalf("order %v, frame %d: %v and %v", order, i, a[i], b[i])
			}
		}
		for i := 1; i < 24; i++ {
			step := math.Hypot(float64(b[i][0].XDeg-b[i-1][0].XDeg), float64(b[i][0].YDeg-b[i-1][0].YDeg))
			if math.Abs(step-2.0/6) > 1e-5 {
				t.Fatalf("order %v, frame %d: smooth step %v, want 2 deg in 6 frames", order, i, step)
			}
		}
	}
}

// The quartet shows its diagonals in turn, with the aspect ratio asked for.
func TestQuartet(t *testing.T) {
	t.Parallel()
	d, _ := openDisplay(apparentKind, map[int]float64{apparentArrangement: 1, apparentWidth: 2, apparentRatio: 1.5, apparentFlash: 100, apparentGap: 0}, 8, 1000.0/60)
	f := show(d, 12)
	for i, dots := range f {
		if len(dots) != 2 {
			t.Fatalf("frame %d: %d discs", i, len(dots))
		}
		if dx, dy := dots[1].XDeg-dots[0].XDeg, dots[1].YDeg-dots[0].YDeg; dx != 2 || dy != 3 && dy != -3 {
			t.Fatalf("frame %d: discs are (%v, %v) apart", i, dx, dy)
		}
	}
	if f[0][0].YDeg != -f[6][0].YDeg || f[0][0].YDeg != f[5][0].YDeg {
		t.Error("the diagonals do not take turns")
	}
}

// A line at 45° that moves to the right: what shows at right angles is slower by
// √½ and 45° off (the construction of Adelson and Movshon 1982).
func TestOpeningTruths(t *testing.T) {
	t.Parallel()
	for _, tt := range []struct{ orientation, direction, normal, speed float64 }{
		{135, 0, 45, 4 * math.Sqrt2 / 2}, {45, 0, -45, 4 * math.Sqrt2 / 2}, {90, 0, 0, 4}, {90, 180, -180, 4}, {30, 90, 120, 4 * math.Cos(math.Pi/6)},
	} {
		d, _ := openDisplay(openingKind, map[int]float64{openingOrientation: tt.orientation, openingDirection: tt.direction, openingSpeed: 4}, 1, 10)
		got := map[string]float64{}
		d.Truths(func(name string, x float64) { got[name] = x })
		if math.Abs(math.Remainder(got["normal_direction_deg"]-tt.normal, 360)) > 1e-9 || math.Abs(got["normal_speed_deg_per_s"]-tt.speed) > 1e-9 {
			t.Errorf("%+v: %v", tt, got)
		}
	}
}

// Every contour moves past the opening's middle with the normal speed: the line
// and edge by their place along the normal, the grating by its phase.
func TestOpeningMovesWithTheNormalSpeed(t *testing.T) {
	t.Parallel()
	for contour := range 3 {
		d, _ := openDisplay(openingKind, map[int]float64{
			openingContour: float64(contour), openingOrientation: 120, openingDirection: 10, openingSpeed: 3, openingFrequency: 0.5,
		}, 1, 1000.0/60)
		o := d.(*opening)
		sin, cos := math.Sincos(o.normalDeg * math.Pi / 180)
		place := func(p Patch) float64 {
			along := float64(p.XDeg)*cos + float64(p.YDeg)*sin
			switch contour {
			case contourEdge:
				return along + float64(p.WidthDeg)/2
			case contourGrating:
				return -float64(p.PhaseRad) / (2 * math.Pi * 0.5)
			}
			return along
		}
		l := NewList(o.Size())
		o.Step(0, l)
		before := place(l.Patches[0])
		for n := range 50 {
			l.Reset()
			o.Step(1, l)
			now := place(l.Patches[0])
			step := now - before
			if contour == contourGrating {
				step = math.Remainder(step, 2) // a period is 2 deg
			}
			if math.Abs(step-o.normalSpeed/60) > 1e-5 {
				t.Fatalf("contour %d, frame %d: step %v, want %v", contour, n, step, o.normalSpeed/60)
			}
			before = now
		}
		if l.Patches[1].Window != WindowSurround || l.Patches[1].Mode != PatchCover {
			t.Errorf("the surround is %+v", l.Patches[1])
		}
	}
}
