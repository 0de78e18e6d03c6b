package fidelity

import (
	"bytes"
	"errors"
	"fmt"

	"distal/experiments/display"
)

// Case is a picture with a name.
type Case struct {
	Name string
	List *display.List
}

// PatchCases has every carrier, window, kind of edge and mode.
func PatchCases() []Case {
	var cases []Case
	carriers := []string{"plain", "sine", "square", "missing fundamental"}
	windows := []string{"disc", "rectangle", "Gaussian", "surround", "rectangular surround"}
	for carrier, carrierName := range carriers {
		for window, windowName := range windows {
			for mode, modeName := range []string{"added", "covering"} {
				for _, ramp := range []float32{0, 0.8} {
					l := display.NewList(1, 2, 3)
					l.AddDot(display.Dot{XDeg: 1, YDeg: 1, DiameterDeg: 1.5, Contrast: -0.6})
					l.AddPatch(display.Patch{
						XDeg: 0.3, YDeg: -0.4, WidthDeg: 6, HeightDeg: 4, OrientationDeg: 25, SpatialFrequencyCPD: 0.7, PhaseRad: 0.5,
						Contrast: 0.6, RampDeg: ramp, Carrier: float32(carrier), Window: float32(window), Mode: float32(mode),
					})
					l.AddDot(display.Dot{XDeg: -1, YDeg: 0.5, DiameterDeg: 0.07, Contrast: 1})
					cases = append(cases, Case{fmt.Sprintf("%s carrier in a %s, %s, ramp %v°", carrierName, windowName, modeName, ramp), l})
				}
			}
		}
	}
	return cases
}

// DisplayCases has a frame in the middle of a trial of every kind of display with its defaults.
func DisplayCases() []Case {
	var cases []Case
	for _, k := range display.Kinds() {
		v := k.Defaults()
		d := k.New(v)
		l := display.NewList(d.Size())
		d.Begin(display.Trial{Values: v, Seed: 11, Number: 3, IntervalMs: 1000.0 / 60})
		d.Step(0, l)
		l.Reset()
		d.Step(20, l)
		cases = append(cases, Case{"display " + k.Name, l})
	}
	return cases
}

// ContextLoss takes the drawing context away and gives it back, and checks
// that the picture drawn afterwards is the one before.
func (b *Bench) ContextLoss(s Setup) error {
	l := display.NewList(1, 0, 1)
	l.AddDot(display.Dot{DiameterDeg: 2, Contrast: 1})
	if _, err := b.Screen(s); err != nil {
		return err
	}
	before, err := b.Grey(l)
	if err != nil {
		return err
	}
	var seen bool
	if err := b.call(&seen, "loseContext"); err != nil {
		return err
	}
	if !seen {
		return errors.New("the renderer does not see that its context is lost")
	}
	after, err := b.Grey(l)
	if err != nil {
		return err
	}
	if !bytes.Equal(before, after) {
		return errors.New("after the context was restored another picture is drawn")
	}
	return nil
}
