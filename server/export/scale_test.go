package export

import (
	"math"
	"testing"

	"distal/experiments/run"
)

// A screen of 4 CSS px/mm at pixel ratio 2 seen from 570 mm: the degree is
// 9.948629 mm (R: 2*570*tan(pi/360)), or 79.58903 device px. Errors of 0.02 ÷ √4 ÷ 4 = 0.25 % and
// 34.2 ÷ 570 = 6 % make √(0.0025² + 0.06²) = 6.005206 %.
func TestScaleOf(t *testing.T) {
	t.Parallel()
	card := &run.Card{WidthsCSSPx: []float64{340, 342, 343, 345}, PixelRatio: 2, PxPerMm: 4, SDPxPerMm: 0.02}
	distance := &run.Distance{DistanceMm: 570, SDMm: 34.2}
	s := scaleOf(card, distance)
	near := func(name string, got, want, within float64) {
		if !(math.Abs(got-want) <= within) {
			t.Errorf("%s: %v, want %v", name, got, want)
		}
	}
	near("px/deg", s.pxPerDeg, 79.58903, 1e-5)
	near("size", s.sizeShare, 0.0025, 1e-15)
	near("share", 100*s.share, 6.005206, 1e-5)

	if s := scaleOf(nil, nil); !math.IsNaN(s.pxPerDeg) || !math.IsNaN(s.share) {
		t.Errorf("without a calibration: %+v", s)
	}
	card.WidthsCSSPx = card.WidthsCSSPx[:1]
	if s := scaleOf(card, distance); !(s.pxPerDeg > 0) || !math.IsNaN(s.share) {
		t.Errorf("of one setting the spread is unknown: %+v", s)
	}
	for _, c := range scaleColumns() {
		if got := c.of(runRow{}); got != "" {
			t.Errorf("%s of a run without a calibration: %q", c.name, got)
		}
	}
}
