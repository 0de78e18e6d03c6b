package inspection

import (
	"fmt"
	"math"

	"distal/experiments/display"
)

// Limits of striped patterns. A pattern is restricted where it lasts over half a
// second, covers more than a quarter of the screen and its bright stripes exceed 50
// cd/m² (Wilkins A, Emmett J, Harding G 2005, Epilepsia 46:1212–1218); then at most
// five light–dark pairs may be seen if the stripes change direction, oscillate, flash or
// reverse, and eight if they stand still or drift smoothly one way (Harding G,
// Wilkins AJ, Erba G, Barkley GL, Fisher RS 2005, Epilepsia 46:1423–1425).
const (
	stripesLongMs    = 500.0
	stripesShare     = 0.25
	stripesBright    = 50.0 // cd/m²
	stripesReversing = 5.0
	stripesSteady    = 8.0
	// WhiteCdPerM2 is the luminance of white that is assumed of a participant's screen:
	// common practice, no source.
	WhiteCdPerM2 = 250.0
)

// Stripes is the largest striped pattern of a trial.
type Stripes struct {
	Pairs      float64 // light–dark pairs across the pattern
	Share      float64 // of the screen
	DurationMs float64
	Reverses   bool    // changes direction, oscillates or changes its polarity
	CdPerM2    float64 // of the bright stripes
	Limit      float64 // pairs allowed, +Inf where the pattern is not restricted
}

// Exceeds tells whether there are more pairs than are allowed.
func (s Stripes) Exceeds() bool { return s.Pairs > s.Limit }

// String says what was found.
func (s Stripes) String() string {
	if s.Pairs == 0 {
		return "no striped pattern"
	}
	limit := "not restricted"
	if !math.IsInf(s.Limit, 1) {
		limit = fmt.Sprintf("%g allowed", s.Limit)
	}
	return fmt.Sprintf("%.1f light–dark pairs over %.0f %% of the screen for %.1f s, bright stripes %.0f cd/m²: %s", s.Pairs, 100*s.Share, s.DurationMs/1000, s.CdPerM2, limit)
}

// StripeCheck follows the patches of a trial's frames. Every patch is judged by
// itself.
type StripeCheck struct {
	screen  Screen
	started bool
	frames  []patchTrack
	firstMs float64
	lastMs  float64
}

type patchTrack struct {
	patch    display.Patch
	turn     float64 // last change of phase that was not 0
	reverses bool
	contrast float64 // largest
}

// NewStripeCheck begins a check on a screen.
func NewStripeCheck(s Screen) *StripeCheck { return &StripeCheck{screen: s} }

// Add takes the next frame, shown atMs.
func (c *StripeCheck) Add(l *display.List, atMs float64) {
	if !c.started {
		c.firstMs, c.started = atMs, true
	}
	c.lastMs = atMs
	for i := range l.Patches {
		p := l.Patches[i]
		if i >= len(c.frames) {
			c.frames = append(c.frames, patchTrack{patch: p})
		}
		t := &c.frames[i]
		turn := math.Remainder(float64(p.PhaseRad-t.patch.PhaseRad), 2*math.Pi)
		if math.Abs(turn) > 1e-6 {
			t.reverses = t.reverses || turn*t.turn < 0
			t.turn = turn
		}
		t.reverses = t.reverses || float64(p.Contrast)*float64(t.patch.Contrast) < 0 || p.OrientationDeg != t.patch.OrientationDeg
		t.contrast = math.Max(t.contrast, math.Abs(float64(p.Contrast)))
		t.patch = p
	}
}

// Verdict is the pattern with the most pairs against its limit.
func (c *StripeCheck) Verdict(intervalMs float64) Stripes {
	var worst Stripes
	for i := range c.frames {
		t := &c.frames[i]
		p := &t.patch
		if p.Carrier == display.CarrierPlain || p.SpatialFrequencyCPD <= 0 || t.contrast == 0 {
			continue
		}
		width, height := float64(p.WidthDeg), float64(p.HeightDeg)
		s := Stripes{DurationMs: c.lastMs - c.firstMs + intervalMs, Reverses: t.reverses, Limit: math.Inf(1)}
		sin, cos := math.Sincos(radians(float64(p.OrientationDeg)))
		across := math.Min(math.Hypot(width*cos, height*sin), math.Max(width, height))
		s.Pairs = across * float64(p.SpatialFrequencyCPD)
		area := width * height
		if p.Window == display.WindowDisc {
			area *= math.Pi / 4
		}
		s.Share = area / c.screen.area()
		s.CdPerM2 = WhiteCdPerM2 * math.Min(1, c.screen.BackgroundFraction*(1+t.contrast))
		if s.DurationMs > stripesLongMs+1e-6 && s.Share > stripesShare && s.CdPerM2 > stripesBright {
			s.Limit = stripesSteady
			if s.Reverses {
				s.Limit = stripesReversing
			}
		}
		if s.Exceeds() && !worst.Exceeds() || s.Exceeds() == worst.Exceeds() && s.Pairs > worst.Pairs {
			worst = s
		}
	}
	return worst
}

// area is that of the screen in square degrees at its centre's scale.
func (s *Screen) area() float64 {
	k := s.PxPerTan * math.Pi / 180
	return float64(s.WidthPx) / k * float64(s.HeightPx) / k
}
