package export

import (
	"math"

	"distal/experiments/run"
	"distal/experiments/visual"
)

// scale is how large a degree was on the screen of a run, and how well that is known.
type scale struct {
	pxPerDeg  float64 // device pixels of the degree about the line of sight
	sizeShare float64 // standard error of the screen's density, as a share of it
	share     float64 // standard error of every degree of the run, as a share of it
}

// scaleOf works out the scale of the last calibration; all is NaN before there is one.
//
//	px/deg = 2 D tan(0.5 deg) · density
//	(se(px/deg) ÷ (px/deg))² = (se(density) ÷ density)² + (se(D) ÷ D)²
//
// Density and distance are taken as independent. A blind-spot distance is
// proportional to an offset that was measured in millimetres of the same card,
// so that this is the larger, cautious figure. The error of the distance
// holds the spread of blind spots from eye to eye, that of the density the settings
// alone (sd ÷ √n); a first-order propagation (JCGM 100:2008, Evaluation of
// measurement data, equation 10).
func scaleOf(card *run.Card, d *run.Distance) scale {
	nan := math.NaN()
	s := scale{nan, nan, nan}
	if card != nil && len(card.WidthsCSSPx) > 1 {
		s.sizeShare = card.SDPxPerMm / card.PxPerMm / math.Sqrt(float64(len(card.WidthsCSSPx)))
	}
	if card == nil || d == nil {
		return s
	}
	s.pxPerDeg = visual.OffsetMm(0.5, d.DistanceMm) * 2 * card.PxPerMm * card.PixelRatio
	s.share = math.Hypot(s.sizeShare, d.SDMm/d.DistanceMm)
	return s
}

func scaleColumns() []column[runRow] {
	of := func(pick func(scale) float64) func(runRow) string {
		return func(r runRow) string {
			var card *run.Card
			var d *run.Distance
			if c := r.c[run.KindCard]; c != nil {
				card = c.Card
			}
			if c := r.c[run.KindDistance]; c != nil {
				d = c.Distance
			}
			return number(pick(scaleOf(card, d)))
		}
	}
	return []column[runRow]{
		{"css_px_per_mm_se", "px/mm", "standard error of css_px_per_mm: standard deviation of the settings ÷ √n", "not reached, or one setting only", func(r runRow) string {
			if c := r.c[run.KindCard]; c != nil {
				return number(c.Card.PxPerMm * scaleOf(c.Card, nil).sizeShare)
			}
			return ""
		}},
		{"px_per_deg", "px/deg", "device pixels of the degree about the line of sight, 2 D tan(0.5 deg) × density, last calibration", "not reached", of(func(s scale) float64 { return s.pxPerDeg })},
		{"px_per_deg_se", "px/deg", "standard error of px_per_deg, from the errors of size and distance", "not reached, or one setting only", of(func(s scale) float64 { return s.pxPerDeg * s.share })},
		{"degree_se_percent", "%", "standard error of every length, speed and place in degrees of this run, from the errors of size and distance", "not reached, or one setting only", of(func(s scale) float64 { return 100 * s.share })},
	}
}
