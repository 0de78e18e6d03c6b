package main

import (
	"context"
	"strings"
	"testing"

	"distal/experiments/library"
	"distal/experiments/study"
)

// A study that flickers is not launched without somebody's justification.
func TestFlickerIsHeldBack(t *testing.T) {
	l := startLab(t, "motion-coherence")
	s, problems := library.Read("grating-direction")
	if problems.Failed() {
		t.Fatal(problems)
	}
	d := &s.Displays[0]
	for key, x := range map[string]float64{"spatial_frequency_cpd": 0.05, "temporal_frequency_hz": 8, "motion": 1, "phase_deg": 90, "width_deg": 14, "height_deg": 14} {
		d.Values[d.Kind.Index(key)] = []float64{x}
	}
	for i := range s.Tasks {
		s.Tasks[i].StimulusMs = 1500
	}
	launch := func(s *study.Study) error {
		_, err := l.app.workspace.Launch(context.Background(), l.id, l.admin, s)
		return err
	}
	if err := launch(s); err == nil || !strings.Contains(err.Error(), "held back") || !strings.Contains(err.Error(), "WCAG 2.3.1") {
		t.Errorf("without approval: %v", err)
	}
	s.About.FlashApproval = "Dr Imke Sandvoort: the flicker is what is studied, in adults who were asked about seizures"
	if err := launch(s); err != nil {
		t.Errorf("with approval: %v", err)
	}
}
