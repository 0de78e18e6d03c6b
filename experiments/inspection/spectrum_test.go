package inspection

import (
	"math"
	"testing"

	"distal/experiments/display"
)

// drifting is a sinusoid of 2 c/deg that moves at a speed, 64 columns over 4°, 48 frames at 60 Hz.
func drifting(speedDegPerSec float64) SpaceTime {
	p := SpaceTime{StepDeg: 1.0 / 16, IntervalMs: 1000.0 / 60}
	for n := range 48 {
		row := make([]float64, 64)
		for i := range row {
			row[i] = 1 + 0.5*math.Sin(2*math.Pi*2*(float64(i)*p.StepDeg-speedDegPerSec*float64(n)/60))
		}
		p.Light = append(p.Light, row)
	}
	return p
}

// A drifting sinusoid peaks at its own frequency and speed; past half a period a
// frame (15 deg/s here) at the speed of its alias: v − refresh/f.
func TestSpectrumPeaksAtTheVelocity(t *testing.T) {
	t.Parallel()
	for speed, want := range map[float64]float64{2.5: 2.5, -5: -5, 10: 10, 20: -10, 25: -5} {
		got, ok := SpectrumPeak(drifting(speed))
		if !ok || math.Abs(got.FrequencyCPD-2) > 1e-9 || math.Abs(got.SpeedDegPerSec-want) > 1e-9 || got.ShareOfVariance < 0.99 {
			t.Errorf("%g deg/s: %+v, %v", speed, got, ok)
		}
	}
	if peak, ok := SpectrumPeak(SpaceTime{Light: [][]float64{{1, 1}, {1, 1}}, StepDeg: 1, IntervalMs: 1}); ok {
		t.Errorf("an even field peaks at %+v", peak)
	}
}

func TestGreyLevels(t *testing.T) {
	t.Parallel()
	if n, c := GreyLevels([]uint8{0, 255, 255, 0, 128}); n != 3 || c != 1 {
		t.Errorf("%d levels, contrast %g", n, c)
	}
	if n, c := GreyLevels([]uint8{188, 188}); n != 1 || c != 0 {
		t.Errorf("%d levels, contrast %g", n, c)
	}
}

// Just below and just above each limit of striped patterns.
func TestStripes(t *testing.T) {
	t.Parallel()
	screen := NewScreen(30, 20, 10, 0.5)
	const hz60 = 1000.0 / 60
	judge := func(pairs, share, durationMs, contrast float64, reversing bool) Stripes {
		c := NewStripeCheck(screen)
		side := math.Sqrt(share * screen.area())
		l := display.NewList(0, 1, 1)
		for i := 0; float64(i)*hz60 < durationMs-1e-6; i++ {
			phase := 0.3 * float64(i)
			if reversing && i%10 >= 5 {
				phase = -phase
			}
			l.Reset()
			l.AddPatch(display.Patch{
				WidthDeg: float32(side), HeightDeg: float32(side), SpatialFrequencyCPD: float32(pairs / side), PhaseRad: float32(phase),
				Contrast: float32(contrast), Carrier: display.CarrierSine, Window: display.WindowRect,
			})
			c.Add(l, float64(i)*hz60)
		}
		return c.Verdict(hz60)
	}
	for _, c := range []struct {
		name                               string
		pairs, share, durationMs, contrast float64
		reversing, exceeds                 bool
	}{
		{"eight pairs drifting", 7.9, 0.5, 1000, 0.9, false, false},
		{"more than eight pairs drifting", 8.1, 0.5, 1000, 0.9, false, true},
		{"five pairs reversing", 4.9, 0.5, 1000, 0.9, true, false},
		{"more than five pairs reversing", 5.1, 0.5, 1000, 0.9, true, true},
		{"a quarter of the screen", 20, 0.24, 1000, 0.9, true, false},
		{"more than a quarter of the screen", 20, 0.26, 1000, 0.9, true, true},
		{"half a second", 20, 0.5, 499, 0.9, true, false},
		{"more than half a second", 20, 0.5, 520, 0.9, true, true},
	} {
		if got := judge(c.pairs, c.share, c.durationMs, c.contrast, c.reversing); got.Exceeds() != c.exceeds || got.Reverses != c.reversing {
			t.Errorf("%s: %v", c.name, got)
		}
	}
	dim := NewScreen(30, 20, 10, 0.1) // bright stripes of 0.1 × 1.9 × 250 = 47.5 cd/m²
	screen = dim
	if got := judge(20, 0.5, 1000, 0.9, true); got.Exceeds() {
		t.Errorf("dim stripes: %v", got)
	}
	if got := judge(20, 0.5, 1000, 1, true); got.Exceeds() { // 50 is not above 50
		t.Errorf("stripes of 50 cd/m²: %v", got)
	}
}
