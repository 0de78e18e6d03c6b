package fidelity_test

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"

	"distal/experiments/display"
	"distal/web/fidelity"
)

func open(t *testing.T) *fidelity.Bench {
	t.Helper()
	b, err := fidelity.Open(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(b.Close)
	return b
}

// A degree is where the exact projection puts it, whatever the pixel ratio:
// centroids and edges of discs of 1° within half a device pixel.
func TestGridOfDiscs(t *testing.T) {
	b := open(t)
	for _, ratio := range fidelity.PixelRatios {
		discs, canvas, _, err := b.Grid(ratio)
		if err != nil {
			t.Fatal(err)
		}
		if canvas.Width != int(640*ratio) || canvas.Height != int(400*ratio) || !canvas.FloatTarget {
			t.Errorf("pixel ratio %v: canvas %+v", ratio, canvas)
		}
		worst := 0.0
		for _, d := range discs {
			worst = max(worst, d.Worst())
			if d.Worst() > 0.5 {
				t.Errorf("pixel ratio %v: disc at (%v°, %v°) is off by (%.3f, %.3f) px, its edges by %.3f px", ratio, d.XDeg, d.YDeg, d.ErrorX, d.ErrorY, d.EdgeError)
			}
		}
		t.Logf("pixel ratio %v: worst of %d discs %.3f px", ratio, len(discs), worst)
	}
}

// The browser composes the canvas pixel by pixel: the page in device pixels is
// what was read back, also where the window is no whole number of CSS pixels.
func TestCanvasIsNotScaled(t *testing.T) {
	for _, c := range []struct {
		ratio float64
		width int
	}{{1.25, 603}, {1.5, 603}} {
		b, err := fidelity.OpenScaled(context.Background(), c.ratio, c.width, 433)
		if err != nil {
			t.Fatal(err)
		}
		different, canvas, err := b.Composed(1000)
		b.Close()
		if err != nil {
			t.Fatal(err)
		}
		if canvas.PixelRatio != c.ratio || canvas.Width < int(c.ratio*500) {
			t.Errorf("pixel ratio %v, window of %d: canvas %+v", c.ratio, c.width, canvas)
		}
		if different > 0 {
			t.Errorf("pixel ratio %v, window of %d CSS px: %d of %d × %d pixels are not the canvas's", c.ratio, c.width, different, canvas.Width, canvas.Height)
		}
	}
}

// A disc moved by 10 arcsec at 60 px a degree moves by 10 ± 1 arcsec, with its
// total luminance within 0.5 %, in the linear-light target and on the screen.
func TestShiftOfTenArcsec(t *testing.T) {
	b := open(t)
	for _, c := range []struct{ diameterDeg, xDeg float64 }{{1, 0}, {1, 1.2}, {0.1, 0.5}} {
		shifts, err := b.Shifts(c.diameterDeg, c.xDeg)
		if err != nil {
			t.Fatal(err)
		}
		for i, s := range shifts[1:] {
			before := shifts[i]
			if step := s.FloatArcsec - before.FloatArcsec; math.Abs(step-10) > 1 {
				t.Errorf("%v° at %v°: from %v to %v arcsec the disc moves by %.2f in linear light", c.diameterDeg, c.xDeg, before.AskedArcsec, s.AskedArcsec, step)
			}
			if step := s.ScreenArcsec - before.ScreenArcsec; math.Abs(step-10) > 1 {
				t.Errorf("%v° at %v°: from %v to %v arcsec the disc moves by %.2f on the screen", c.diameterDeg, c.xDeg, before.AskedArcsec, s.AskedArcsec, step)
			}
			if math.Abs(s.FloatTotal-1) > 0.005 || math.Abs(s.ScreenTotal-1) > 0.005 {
				t.Errorf("%v° at %v°, moved by %v arcsec: total light %.4f and %.4f", c.diameterDeg, c.xDeg, s.AskedArcsec, s.FloatTotal, s.ScreenTotal)
			}
		}
		last := shifts[len(shifts)-1]
		t.Logf("%v° at %v°, asked %v arcsec: %.3f in linear light, %.3f on the screen, light %.5f and %.5f", c.diameterDeg, c.xDeg, last.AskedArcsec, last.FloatArcsec, last.ScreenArcsec, last.FloatTotal, last.ScreenTotal)
	}
}

// Contrasts below one grey level are right on average: within 2 % of the
// contrast or 0.02 % absolute, for a standard and for a measured display.
func TestContrastRamp(t *testing.T) {
	b := open(t)
	for _, gamma := range []float64{0, 1.8, 2.4} {
		levels, err := b.Ramp(gamma)
		if err != nil {
			t.Fatal(err)
		}
		for _, l := range levels {
			if tolerance := max(0.02*math.Abs(l.Asked), 0.0002); math.Abs(l.Shown-l.Asked) > tolerance {
				t.Errorf("exponent %v: contrast %.4f is shown as %.5f", gamma, l.Asked, l.Shown)
			}
		}
		t.Logf("exponent %v: 0.1 %% is %.4f %%, 1 %% is %.4f %%", gamma, 100*levels[0].Shown, 100*levels[6].Shown)
	}
}

// What the browser draws is what the reference raster draws: within one grey
// level at 99.5 % of the pixels, for every carrier, window, edge and mode and a
// frame of every display.
func TestBrowserAgreesWithRaster(t *testing.T) {
	b := open(t)
	s := fidelity.Setup{WidthCSSPx: 200, HeightCSSPx: 160, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.4}
	check := func(name string, s fidelity.Setup, l *display.List) {
		t.Helper()
		a, err := b.Compare(name, s, l)
		if err != nil {
			t.Fatal(err)
		}
		if a.Changed < 50 {
			t.Errorf("%s: only %d pixels are not background", name, a.Changed)
		}
		if a.Share() < 0.995 {
			t.Errorf("%s: %.3f %% of %d pixels agree, worst difference %d", name, 100*a.Share(), a.Pixels, a.Worst)
		}
	}
	for _, c := range fidelity.PatchCases() {
		check(c.Name, s, c.List)
	}
	wide := fidelity.Setup{WidthCSSPx: 400, HeightCSSPx: 300, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.5}
	for _, c := range fidelity.DisplayCases() {
		check(c.Name, wide, c.List)
	}
}

// Where 32-bit targets cannot blend, 16 bits draw the same picture, and where
// there are only 8 bits, which lose what is darker than nothing, it is said.
func TestSmallerTargets(t *testing.T) {
	b := open(t)
	s := fidelity.Setup{WidthCSSPx: 200, HeightCSSPx: 160, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.4}
	for _, c := range []struct {
		withheld, target string
		float            bool
	}{
		{"none", "; 32-bit target", true},
		{"EXT_float_blend", "; 16-bit target", true},
		{"EXT_color_buffer_float", "; 16-bit target", true},
		{"EXT_color_buffer_half_float", "; 8-bit target", false},
	} {
		if err := b.Withhold(c.withheld); err != nil {
			t.Fatal(err)
		}
		canvas, err := b.Screen(s)
		if err != nil {
			t.Fatal(err)
		}
		if canvas.FloatTarget != c.float || !strings.Contains(canvas.Renderer, c.target) {
			t.Errorf("without %s: %+v", c.withheld, canvas)
		}
		worst := 1.0
		for _, p := range fidelity.PatchCases()[20:22] { // a sine that is added
			a, err := b.Compare(p.Name, s, p.List)
			if err != nil {
				t.Fatal(err)
			}
			worst = min(worst, a.Share())
		}
		if same := worst >= 0.995; same != c.float {
			t.Errorf("without %s: %.3f %% of the pixels agree with the reference", c.withheld, 100*worst)
		}
		t.Logf("without %s: %.3f %% of the pixels agree", c.withheld, 100*worst)
	}
}

// A lost drawing context is seen, does no harm while it is away, and a new
// renderer on the restored one draws as before.
func TestContextLoss(t *testing.T) {
	b := open(t)
	s := fidelity.Setup{WidthCSSPx: 100, HeightCSSPx: 80, PixelRatio: 1, PxPerTan: 1000, BackgroundFraction: 0.5}
	if err := b.ContextLoss(s); err != nil {
		t.Fatal(fmt.Errorf("lost and restored: %w", err))
	}
}
