package inspection

import (
	"fmt"
	"math"
	"slices"

	"distal/experiments/display"
)

// MaxSpeed is the speed in deg/s below which a pattern of a spatial frequency
// moves less than half a period a frame: refresh/(2 f). At the limit it is a
// counterphase flicker, beyond it seems to move the other way.
func MaxSpeed(frequencyCPD, refreshHz float64) float64 { return refreshHz / (2 * frequencyCPD) }

// Limits of what a person or screen can resolve.
const (
	smallestStepDeg = 10.0 / 3600 // smallest displacement seen beside a reference (common practice, no source)
	fewestPixels    = 2.0         // across an element (common practice, no source)
)

// Warning is one doubt about a display on a screen.
type Warning struct {
	Code string // aliasing, jump, small_step, small_element or large_field
	Text string // what and how much, in physical units
}

// Sampling is how a trial's motion is cut into frames.
type Sampling struct {
	// StepPeriods is the largest displacement of a grating between frames, in periods.
	StepPeriods float64
	// StepDeg is the median displacement of dots that moves between frames, 0 without any.
	StepDeg float64
	// SpacingDeg is the mean distance to the nearest dot were all placed at random, 1/(2 √density).
	SpacingDeg float64
	// ElementPx is the smallest element in pixels.
	ElementPx float64
	Warnings  []Warning
}

// fine is into how many steps a refresh interval is divided to follow a phase
// that may turn by more than half a period in it.
const fine = 16

// MeasureSampling shows n frames of a trial of a display and reports how its motion is
// sampled on a screen. v must have passed the kind's checks; t.Values is set to v.
func MeasureSampling(k *display.Kind, v display.Values, t display.Trial, s Screen, n int) Sampling {
	t.Values = v
	m := Sampling{StepPeriods: phaseStep(k, v, t, n), ElementPx: math.Inf(1)}
	d := k.New(v)
	now, before := display.NewList(d.Size()), display.NewList(d.Size())
	d.Begin(t)
	var steps []float64
	for i := range n {
		now.Reset()
		d.Step(min(i, 1), now)
		if i > 0 {
			steps = appendSteps(steps, before, now)
		}
		m.elements(now, s)
		now, before = before, now
	}
	if len(steps) > 0 {
		slices.Sort(steps)
		m.StepDeg = steps[len(steps)/2]
	}
	width, height := k.Extent(v)
	if dots := len(before.Dots); dots > 1 {
		m.SpacingDeg = 0.5 / math.Sqrt(float64(dots)/(width*height))
	}
	m.warn(width, height, s)
	return m
}

// phaseStep is the largest turn of any patch's phase in a refresh interval, in periods.
func phaseStep(k *display.Kind, v display.Values, t display.Trial, n int) float64 {
	t.IntervalMs /= fine
	d := k.New(v)
	now, before := display.NewList(d.Size()), display.NewList(d.Size())
	d.Begin(t)
	largest := 0.0
	var turned []float64
	for i := range n*fine + 1 {
		now.Reset()
		d.Step(min(i, 1), now)
		if len(turned) != len(now.Patches) || (i-1)%fine == 0 {
			turned = make([]float64, len(now.Patches))
		}
		if i > 0 && len(before.Patches) == len(now.Patches) {
			for j := range now.Patches {
				if now.Patches[j].Carrier != display.CarrierPlain {
					turned[j] += math.Remainder(float64(now.Patches[j].PhaseRad)-float64(before.Patches[j].PhaseRad), 2*math.Pi) / (2 * math.Pi)
					largest = max(largest, math.Abs(turned[j]))
				}
			}
		}
		now, before = before, now
	}
	return largest
}

// appendSteps adds how far every dot moved, by its place in the list, where two frames hold as many.
func appendSteps(steps []float64, a, b *display.List) []float64 {
	if len(a.Dots) != len(b.Dots) {
		return steps
	}
	for i := range a.Dots {
		if step := math.Hypot(float64(b.Dots[i].XDeg-a.Dots[i].XDeg), float64(b.Dots[i].YDeg-a.Dots[i].YDeg)); step > 0 {
			steps = append(steps, step)
		}
	}
	return steps
}

func (m *Sampling) elements(l *display.List, s Screen) {
	pxPerDeg := s.PxPerTan * math.Pi / 180
	for _, d := range l.Dots {
		m.ElementPx = min(m.ElementPx, float64(d.DiameterDeg)*pxPerDeg)
	}
	for _, p := range l.Patches {
		if p.Carrier != display.CarrierPlain && p.SpatialFrequencyCPD > 0 {
			m.ElementPx = min(m.ElementPx, pxPerDeg/(2*float64(p.SpatialFrequencyCPD))) // a bar is half a period
		} else if p.Window == display.WindowRect {
			m.ElementPx = min(m.ElementPx, float64(min(p.WidthDeg, p.HeightDeg))*pxPerDeg)
		}
	}
}

func (m *Sampling) warn(width, height float64, s Screen) {
	add := func(code, format string, args ...any) {
		m.Warnings = append(m.Warnings, Warning{code, fmt.Sprintf(format, args...)})
	}
	if m.StepPeriods >= 0.5-1e-6 {
		add("aliasing", "the pattern moves %.2f periods a frame: from half a period on its direction is ambiguous or reversed", m.StepPeriods)
	}
	if m.SpacingDeg > 0 && m.StepDeg > m.SpacingDeg {
		add("jump", "dots move %.2f deg a frame and are %.2f deg apart: which dot went where is ambiguous", m.StepDeg, m.SpacingDeg)
	}
	if m.StepDeg > 0 && m.StepDeg < smallestStepDeg {
		add("small_step", "dots move %.1f arcsec a frame, near the smallest displacement that people see", 3600*m.StepDeg)
	}
	if m.ElementPx < fewestPixels {
		add("small_element", "the smallest element is %.2f pixels", m.ElementPx)
	}
	x, _ := s.Degrees(s.WidthPx-1, 0)
	_, y := s.Degrees(0, 0)
	if width > 2*x || height > 2*y {
		add("large_field", "the display covers %.1f × %.1f deg, the screen %.1f × %.1f deg", width, height, 2*x, 2*y)
	}
}
