package inspection_test

import (
	"encoding/json"
	"os"
	"testing"

	"distal/experiments/inspection"
	"distal/experiments/visual"
)

// Pairs of colours on either side of every threshold.
func TestFlashPairs(t *testing.T) {
	t.Parallel()
	text, err := os.ReadFile("../../testdata/flash_pairs.json")
	if err != nil {
		t.Fatal(err)
	}
	var file struct {
		Pairs []struct {
			A, B    [3]uint8
			General bool
			Red     *bool    `json:"red_uv"`
			Apart   *float64 `json:"duv"`
			LumA    float64  `json:"lum_a"`
		}
	}
	if err := json.Unmarshal(text, &file); err != nil || len(file.Pairs) < 10 {
		t.Fatal(err, len(file.Pairs))
	}
	linear := func(c [3]uint8) (out [3]float64) {
		for i, v := range c {
			out[i] = visual.LinearFromSRGB(float64(v) / 255)
		}
		return out
	}
	for _, p := range file.Pairs {
		a, b := inspection.Luminance(p.A[0], p.A[1], p.A[2]), inspection.Luminance(p.B[0], p.B[1], p.B[2])
		if got := inspection.GeneralFlash(a, b); got != p.General || a-p.LumA > 1e-9 || p.LumA-a > 1e-9 {
			t.Errorf("%v to %v: general flash %v, luminance %v", p.A, p.B, got, a)
		}
		if p.Red == nil { // one is black: its chromaticity is not defined
			continue
		}
		if got := inspection.RedFlash(linear(p.A), linear(p.B)); got != *p.Red {
			t.Errorf("%v to %v: red flash %v", p.A, p.B, got)
		}
	}
	if !inspection.RedFlash([3]float64{1, 0, 0}, [3]float64{}) {
		t.Error("saturated red to black counts as a red flash")
	}
}

// flicker checks a disc of the given diameter on a screen of 16 × 12 degrees
// that alternates between two lights, at 60 Hz.
func flicker(diameterDeg float64, a, b float32, changesPerSecond float64, seconds float64) inspection.FlashVerdict {
	s := inspection.NewScreen(16, 12, 8, 0.5)
	c := inspection.NewFlashCheck(s)
	light := make([]float32, s.WidthPx*s.HeightPx)
	for n := range int(seconds * 60) {
		level := a
		if int(float64(n)*changesPerSecond/60)%2 == 1 {
			level = b
		}
		for j := range s.HeightPx {
			for i := range s.WidthPx {
				x, y := s.Degrees(i, j)
				light[j*s.WidthPx+i] = 1
				if 4*(x*x+y*y) <= diameterDeg*diameterDeg {
					light[j*s.WidthPx+i] = level
				}
			}
		}
		c.Add(light, float64(n)*1000/60)
	}
	return c.Verdict()
}

// Just below and just above each threshold of WCAG 2.3.1: three flashes a
// second are six changes, a tenth of white, a darker state of 0.80, and a quarter of 10°.
func TestFlashThresholds(t *testing.T) {
	t.Parallel()
	// Light is in units of the background, which is half of white.
	tests := []struct {
		name     string
		diameter float64
		a, b     float32
		changes  float64 // a second
		passes   bool
	}{
		{"SixChanges", 9, 0, 2, 6, true},
		{"SevenChanges", 9, 0, 2, 7.5, false},
		{"ChangeBelowATenth", 9, 1, 1.19, 12, true},
		{"ChangeAboveATenth", 9, 1, 1.21, 12, false},
		{"DarkerAboveEightTenths", 9, 1.61, 2, 12, true},
		{"DarkerBelowEightTenths", 9, 1.59, 2, 12, false},
		// A disc of 5° is a quarter of one of 10°.
		{"SmallArea", 4.8, 0, 2, 12, true},
		{"LargeArea", 5.2, 0, 2, 12, false},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			t.Parallel()
			if got := flicker(tt.diameter, tt.a, tt.b, tt.changes, 2); got.Passes != tt.passes {
				t.Errorf("passes %v: %+v", got.Passes, got)
			}
		})
	}
}

// Steps that add up to a tenth of white are one change, as the criterion has it.
func TestFlashAddsSlowChanges(t *testing.T) {
	t.Parallel()
	s := inspection.NewScreen(16, 12, 8, 0.5)
	c := inspection.NewFlashCheck(s)
	light := make([]float32, s.WidthPx*s.HeightPx)
	for n := range 120 {
		level := 1 + 0.3*float32(min(n%12, 12-n%12))/6 // 5 rises and 5 falls a second, in steps of 0.025 of white
		for i := range light {
			light[i] = level
		}
		c.Add(light, float64(n)*1000/60)
	}
	if v := c.Verdict(); v.Passes || v.Transitions < 9 {
		t.Errorf("%+v", v)
	}
}

// Dots that pass every place many times a second, never a quarter of the field at
// once, are no flash; the same light as one flicker of the field is.
func TestMovingDotsAreNoFlash(t *testing.T) {
	t.Parallel()
	s := inspection.NewScreen(12, 12, 8, 0.5)
	dots, field := inspection.NewFlashCheck(s), inspection.NewFlashCheck(s)
	light := make([]float32, s.WidthPx*s.HeightPx)
	for i := range 120 {
		for k := range light {
			light[k] = 1
			if (k+i)%16 == 0 { // a sixteenth of the places is bright in every frame
				light[k] = 2
			}
		}
		dots.Add(light, float64(i)*1000/60)
		for k := range light {
			light[k] = 1
			if i%16 == 0 {
				light[k] = 2
			}
		}
		field.Add(light, float64(i)*1000/60)
	}
	if v := dots.Verdict(); v.Transitions <= 6 || !v.Passes {
		t.Errorf("the dots: %+v", v)
	}
	if v := field.Verdict(); v.Passes || v.WorstShare < 0.9 {
		t.Errorf("the flickering field: %+v", v)
	}
}
