package inspecting

import (
	"bytes"
	"context"
	"errors"
	"math"
	"strings"
	"testing"

	"distal/experiments/library"
	"distal/experiments/study"
)

func read(t *testing.T, name string) *study.Study {
	t.Helper()
	s, problems := library.Read(name)
	if problems.Failed() {
		t.Fatal(problems)
	}
	return s
}

func inspect(t *testing.T, s *study.Study, levels int) *Inspection {
	t.Helper()
	told := 0.0
	in, err := Inspect(context.Background(), s, Settings{RefreshHz: []float64{60}, PxPerDeg: 20, Levels: levels, Seeds: 3}, func(share float64) { told = share })
	if err != nil || told != 1 {
		t.Fatalf("%v, %g done", err, told)
	}
	return in
}

// The physical signal of a coherence study grows with the level and points along
// the direction.
func TestSignalGrowsWithCoherence(t *testing.T) {
	t.Parallel()
	in := inspect(t, read(t, "motion-coherence"), 3)
	levels := in.Findings[0].Rates[0].Levels
	if levels[0].Energy > 0.2 || levels[2].Energy < 0.3 || levels[1].Energy > levels[2].Energy || levels[2].Detector <= levels[0].Detector {
		t.Errorf("%+v", levels)
	}
	if speed := levels[2].Peak.SpeedDegPerSec; math.Abs(speed-5) > 1.5 { // of the study; the bins are 1/0.4 s and 1/8 deg wide
		t.Errorf("the spectrum peaks at %g deg/s, the dots move at 5", speed)
	}
	var page bytes.Buffer
	if err := in.Write(&page); err != nil {
		t.Fatal(err)
	}
	for _, part := range []string{"data:image/png;base64,", "data:image/gif;base64,", "<svg", "coherence"} {
		if !strings.Contains(page.String(), part) {
			t.Errorf("the page has no %s", part)
		}
	}
}

// A grating's contrast is what it is asked to be, and its signal points the way it drifts.
func TestGratingReachesItsContrast(t *testing.T) {
	t.Parallel()
	in := inspect(t, read(t, "grating-direction"), 2)
	r := in.Findings[0].Rates[0]
	top := r.Levels[len(r.Levels)-1]
	if top.Energy < 0.3 || math.Abs(top.Contrast-top.Level) > 0.05 {
		t.Errorf("%+v", top)
	}
}

// Flicker of a large field is held back, with approval it is not; every study of
// the library can be launched.
func TestHazards(t *testing.T) {
	t.Parallel()
	for _, name := range library.Names() {
		s := read(t, name)
		if hazard, err := Hazards(context.Background(), s); err != nil || hazard != "" {
			t.Errorf("%s: %q, %v", name, hazard, err)
		}
	}
	dots := read(t, "motion-coherence")
	dots.Tasks[0].StimulusMs = 2500
	if hazard, err := Hazards(context.Background(), dots); err != nil || hazard != "" {
		t.Errorf("dots for 2.5 s: %q, %v", hazard, err)
	}
	s := read(t, "grating-direction")
	d := &s.Displays[s.Tasks[s.Blocks[len(s.Blocks)-1].Task].Display]
	flicker(t, s)
	hazard, err := Hazards(context.Background(), s)
	if err != nil || !strings.Contains(hazard, "flashes") {
		t.Errorf("display %s flickers: %q, %v", d.Name, hazard, err)
	}
	in := inspect(t, s, 2)
	var page bytes.Buffer
	if err := in.Write(&page); err != nil || !strings.Contains(page.String(), "Held back from launch") || strings.Contains(page.String(), "data:image/gif") {
		t.Errorf("the page of a flickering study: %v", err)
	}
}

// flicker makes the gratings of a study large, coarse and counterphase at 8 Hz for a second.
func flicker(t *testing.T, s *study.Study) {
	t.Helper()
	for i := range s.Tasks {
		s.Tasks[i].StimulusMs = 1500
	}
	for i := range s.Displays {
		d := &s.Displays[i]
		set := func(key string, x float64) {
			k := d.Kind.Index(key)
			if k < 0 {
				t.Fatalf("%s has no %s", d.Kind.Name, key)
			}
			d.Values[k] = []float64{x}
		}
		set("spatial_frequency_cpd", 0.05)
		set("temporal_frequency_hz", 8)
		set("motion", 1)
		set("phase_deg", 90)
		set("width_deg", 14)
		set("height_deg", 14)
	}
	for i := range s.Blocks {
		s.Blocks[i].Balance = nil
	}
}

func TestSettingsAreChecked(t *testing.T) {
	t.Parallel()
	s := read(t, "motion-coherence")
	for name, change := range map[string]func(*Settings){
		"refresh": func(o *Settings) { o.RefreshHz = []float64{5} }, "no refresh": func(o *Settings) { o.RefreshHz = nil },
		"pixels": func(o *Settings) { o.PxPerDeg = math.NaN() }, "levels": func(o *Settings) { o.Levels = 0 },
	} {
		o := Usual()
		change(&o)
		if _, err := Inspect(context.Background(), s, o, nil); err == nil {
			t.Errorf("%s is accepted", name)
		}
	}
	stopped, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := Inspect(stopped, s, Usual(), nil); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}
